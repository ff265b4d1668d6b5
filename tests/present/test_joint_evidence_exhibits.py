"""Exhibits of the joint test and of the alphas under a ceiling: what is drawn and said is what was computed."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from soffit.demo import demo_study
from soffit.estimate.statistic import NotApplicable
from soffit.judge.wald import OverRejection
from soffit.present.exhibits import build
from soffit.present.plain import cells
from soffit.present.spec import FigureSpec, Line, Mark, NumberForm, Points, Rule, Segments
from soffit.present.wording import show
from soffit.present.wording.alpha_under_ceiling import odds_phrase
from soffit.study import Study


@pytest.fixture(scope="module")
def study() -> Study:
    return demo_study()


@pytest.fixture(scope="module")
def crowd() -> Study:
    rng = np.random.default_rng(5)
    dates = pd.date_range("2019-01-31", periods=48, freq="ME")
    factors = pd.DataFrame(rng.normal(0.005, 0.04, (48, 2)), dates, ["First", "Second"])
    assets = pd.DataFrame(rng.normal(0, 0.03, (48, 60)), dates, [f"Asset {i:02d}" for i in range(60)])
    return Study.open(assets, factors=factors, excess=True)


def mark(figure: FigureSpec, key: str) -> Mark:
    return next(item for item in figure.marks if item.key == key)


def test_statistics_table_has_every_test(study: Study) -> None:
    head, *rows = cells(build("joint", study).tables[0])
    shown = {row[0]: dict(zip(head[1:], row[1:], strict=True)) for row in rows}
    wald, large_n = study.wald(), study.large_n()
    for name, test in (
        ("GRS", study.joint_test().grs),
        ("Wald, classical", wald.classical),
        ("Wald, heteroskedasticity-robust", wald.robust),
        (f"Wald, HAC with {wald.lags} lags", wald.hac),
        ("Large-N, from squared t ratios", large_n.test),
        ("Large-N, thresholded and normal as published", large_n.published),
    ):
        assert shown[name]["Statistic"] == show(test.value, NumberForm.STATISTIC)
        assert shown[name]["p"] == show(test.pvalue, NumberForm.PVALUE)
        assert shown[name]["Distribution"] == test.distribution.label
    assert isinstance(wald.classical_size, OverRejection)
    heading = "Rejects true zeros at nominal 5%"
    assert shown["Wald, classical"][heading] == show(wald.classical_size.actual, NumberForm.SHARE)
    assert shown["GRS"][heading] == "5%"


def test_power_curve_is_the_power(study: Study) -> None:
    study = study.changed(power_sharpe=1.5)
    exhibit = build("joint", study)
    curve = mark(exhibit.figures[1], "power")
    assert isinstance(curve, Line)
    assert np.interp(1.5, curve.x, curve.y) == pytest.approx(study.power().power, abs=1e-9)
    asked = mark(exhibit.figures[1], "against")
    assert isinstance(asked, Rule)
    assert asked.at == 1.5
    assert (
        f"For 80% power against 1.50 a year it needs T = {study.power().periods_needed:,}"
        in exhibit.finding.text
    )
    below = build("joint", study.changed(power_sharpe=0.2)).finding.text
    assert "needs no alpha, since the factors earn" in below


def test_assumptions_are_said_and_tabled(study: Study) -> None:
    exhibit = build("joint", study)
    summary = study.assumptions().summary
    said = next(caution for caution in exhibit.cautions if caution.startswith("Residual checks"))
    assert (
        f"normality for {summary.loc['Jarque-Bera', 'after_holm']} of {len(study.assumptions().table)}"
        in said
    )
    assert exhibit.tables[2].frame is study.assumptions().table
    over = next(caution for caution in exhibit.cautions if "reject too often" in caution)
    assert show(study.wald().classical_size.actual, NumberForm.SHARE) in over


def test_joint_exhibit_without_a_grs_test_rests_on_the_large_n_one(crowd: Study) -> None:
    exhibit = build("joint", crowd)
    assert "The GRS test does not exist for this sample" in exhibit.finding.text
    assert "The large-N test" in exhibit.finding.text
    assert show(crowd.large_n().test.pvalue, NumberForm.PVALUE) in exhibit.finding.text
    assert exhibit.notes
    assert not [item for item in exhibit.figures[1].marks if item.key == "power"]
    assert "does not exist" in cells(exhibit.tables[0])[1][-1]


def test_alphas_figure_sets_shrunk_below_estimated(study: Study) -> None:
    study = study.changed(ceiling=1.3)
    result, figure = study.alpha_under_ceiling(), build("alphas-under-ceiling", study).figures[0]
    before, after = mark(figure, "estimated"), mark(figure, "shrunk")
    span = mark(figure, "shrunk-intervals")
    assert isinstance(before, Points)
    assert isinstance(after, Points)
    assert isinstance(span, Segments)
    np.testing.assert_allclose(before.x, result.table.loc[list(before.names), "alpha"])
    np.testing.assert_allclose(after.x, result.weight * before.x)
    np.testing.assert_allclose(span.low, result.table.loc[list(before.names), "shrunk_low"])
    assert (after.y < before.y).all()
    assert (np.round(after.y) == np.round(before.y)).all()


def test_finding_names_the_largest_alpha_left(study: Study) -> None:
    study = study.changed(ceiling=1.3)
    result, text = study.alpha_under_ceiling(), build("alphas-under-ceiling", study).finding.text
    largest = result.table["shrunk"].abs().idxmax()
    row = result.table.loc[largest]
    assert f"{largest}'s, {show(row['shrunk'], NumberForm.PERCENT)} instead of" in text
    assert show(result.weight, NumberForm.SHARE) in text
    assert odds_phrase(float(result.log_bayes_factors(1.3))) in text


def test_below_and_at_the_factors_no_alpha_may_be_used(study: Study) -> None:
    exhibit = build("alphas-under-ceiling", study.changed(ceiling=0.3))
    assert "no alpha may be used: the factors alone already earn" in exhibit.finding.text
    assert not [item for item in exhibit.figures[0].marks if item.key == "shrunk"]
    assert "raise the ceiling" in exhibit.notes[0]
    at = build("alphas-under-ceiling", study.changed(ceiling=study.joint_test().factors_sharpe))
    assert "leaves no room" in at.finding.text


def test_odds_figure_and_table_agree(study: Study) -> None:
    study = study.changed(ceiling=1.4)
    exhibit, result = build("alphas-under-ceiling", study), study.alpha_under_ceiling()
    curve = mark(exhibit.figures[1], "odds")
    assert isinstance(curve, Line)
    table = exhibit.tables[1].frame
    assert np.interp(1.4, curve.x, curve.y) == pytest.approx(table.loc["1.40", "log10_factor"], abs=1e-9)
    assert table.loc["1.40", "kept"] == pytest.approx(result.weight)
    assert curve.x.min() >= study.joint_test().factors_sharpe
    assert np.isfinite(curve.y).all()


def test_odds_without_a_joint_test(crowd: Study) -> None:
    exhibit = build("alphas-under-ceiling", crowd.changed(ceiling=2.0))
    assert "No odds on zero alphas" in exhibit.finding.text
    assert isinstance(crowd.alpha_under_ceiling().best_supported, NotApplicable)
    assert exhibit.tables[1].frame["log10_factor"].isna().all()
    assert exhibit.tables[1].frame["kept"].notna().any()


@pytest.mark.parametrize(
    ("log_factor", "words"),
    [
        (0.0, "even odds"),
        (np.log(2.5), "2.50 to 1 for zero alphas"),
        (-np.log(40.0), "40 to 1 against zero alphas"),
        (-800.0, "more than 1,000,000 to 1 against zero alphas"),
    ],
)
def test_odds_in_words(log_factor: float, words: str) -> None:
    assert odds_phrase(log_factor) == words
