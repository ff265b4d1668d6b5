"""Exhibits: what is drawn and said is what was computed."""

from __future__ import annotations

import numpy as np
import pytest

from soffit.demo import demo_study
from soffit.errors import SettingError
from soffit.present.exhibits import EXHIBITS, build
from soffit.present.exhibits.ceiling import CEILING_STEPS
from soffit.present.plain import cells, table_text
from soffit.present.sources import SOURCES, cite, reference
from soffit.present.spec import Band, Bars, Line, NumberForm, Points, Role, Rule, Segments
from soffit.present.wording import show
from soffit.settings import CeilingForm, Histories
from soffit.study import Study


@pytest.fixture(scope="module")
def study() -> Study:
    return demo_study()


def _mark(figure, key):  # type: ignore[no-untyped-def]
    return next(mark for mark in figure.marks if mark.key == key)


@pytest.mark.parametrize("key", sorted(EXHIBITS))
def test_every_exhibit_is_whole(study: Study, key: str) -> None:
    exhibit = build(key, study)
    assert exhibit.finding.text.endswith(".")
    assert exhibit.sample
    assert set(exhibit.sources) <= set(SOURCES)
    assert len(cite(exhibit.sources)) == len(set(exhibit.sources))
    for figure in exhibit.figures:
        assert figure.alt.endswith(".")
        assert figure.footnote
        assert len({mark.key for mark in figure.marks}) == len(figure.marks)
    for table in exhibit.tables:
        assert all(column.key in table.frame for column in table.columns)
        assert not table.row_forms or len(table.row_forms) == len(table.frame)


def test_unknown_exhibit_and_source_are_refused(study: Study) -> None:
    with pytest.raises(SettingError, match="'ceiling'"):
        build("cieling", study)
    with pytest.raises(SettingError, match="'lo-2002'"):
        reference("lo-2003")


@pytest.mark.parametrize("form", list(CeilingForm))
def test_ceiling_figures_draw_the_verdicts(study: Study, form: CeilingForm) -> None:
    study = study.changed(ceiling=1.4, ceiling_form=form)
    verdict, regression = study.ceiling(), study.regression()
    sigma_figure, r2_figure, p_figure = build("ceiling", study).figures
    points: Points = _mark(sigma_figure, "assets")
    np.testing.assert_allclose(points.x, regression.sigma)
    np.testing.assert_allclose(points.y, regression.alpha)
    words = {Role.INSIDE: "inside", Role.STRADDLES: "straddles", Role.OUTSIDE: "outside"}
    assert [words[role] for role in points.roles] == list(verdict.status)
    band: Band = _mark(sigma_figure, "band")
    room = 1.4 if form is CeilingForm.ALONE else np.sqrt(1.4**2 - study.joint_test().factors_sharpe ** 2)
    np.testing.assert_allclose(band.high, room * band.x, rtol=1e-12)
    np.testing.assert_allclose(band.low, -band.high)
    curve: Line = _mark(r2_figure, "upper")
    np.testing.assert_allclose(curve.y, room * np.sqrt(1 - curve.x), rtol=1e-12)
    ratio: Points = _mark(r2_figure, "assets")
    # α/σ_total against √(1−R²)·S is α against σ·S, so each point lies on the same side in both figures.
    np.testing.assert_allclose(
        np.abs(ratio.y) > room * np.sqrt(1 - ratio.x), np.abs(points.y) > room * points.x
    )
    line: Line = _mark(p_figure, "p")
    np.testing.assert_allclose(line.x, CEILING_STEPS)
    assert np.interp(1.4, line.x, line.y) == pytest.approx(verdict.pvalue, abs=1e-9)
    marker: Rule = _mark(p_figure, "ceiling")
    assert marker.at == 1.4
    assert marker.label == "ceiling 1.40"


def test_ceiling_below_the_factors_draws_an_empty_band(study: Study) -> None:
    exhibit = build("ceiling", study.changed(ceiling=0.3))
    band: Band = _mark(exhibit.figures[0], "band")
    assert (band.high == 0).all()
    points: Points = _mark(exhibit.figures[0], "assets")
    assert Role.MUTED in points.roles
    assert "below what the factors alone earned" in exhibit.finding.text


def test_verdict_table_shows_the_numbers_of_the_result(study: Study) -> None:
    exhibit = build("ceiling", study)
    table, verdict = exhibit.tables[0], study.ceiling()
    head, *rows = cells(table)
    assert head[0] == "Asset"
    by_name = {row[0]: row for row in rows}
    place = head.index("Ceiling needed")
    for name, needed in verdict.needed.items():
        assert by_name[str(name)][place] == show(needed, NumberForm.RATIO)
    assert [row[0] for row in rows] == list(verdict.needed.sort_values(ascending=False, kind="stable").index)


def test_joint_table_has_its_own_form_in_each_row(study: Study) -> None:
    table = build("ceiling", study).tables[1]
    shown = {row[0]: row[1] for row in cells(table)[1:]}
    joint = study.joint_test()
    assert shown[f"GRS, {joint.grs.distribution.label}"] == show(joint.grs.value, NumberForm.STATISTIC)
    assert shown["p-value of zero alphas"] == show(joint.grs.pvalue, NumberForm.PVALUE)


def test_regression_figure_has_one_interval_an_asset(study: Study) -> None:
    figure = build("regression", study).figures[0]
    intervals: Segments = _mark(figure, "intervals")
    points: Points = _mark(figure, "alphas")
    table = study.regression().table.loc[list(points.names)]
    np.testing.assert_allclose(intervals.low, table["alpha_low"])
    np.testing.assert_allclose(intervals.high, table["alpha_high"])
    assert list(points.names) == list(table["alpha"].sort_values().index)


def test_joint_figure_decomposes_the_sharpe_ratio(study: Study) -> None:
    bars: Bars = _mark(build("joint", study).figures[0], "sharpe")
    joint = study.joint_test()
    assert bars.names[-2:] == ("factors together", "factors and assets")
    np.testing.assert_allclose(bars.length[-2:], [joint.factors_sharpe, joint.combined_sharpe])


def test_sample_line_counts_what_is_used(study: Study) -> None:
    common = build("ceiling", study.changed(histories=Histories.COMMON)).sample
    assert "2018-01 to 2024-12" in common
    assert "T = 84 months" in common
    assert "156 months outside the common sample" in common
    assert "t(79)" in common
    assert "T = 84 to 240 months" in build("ceiling", study).sample
    hac = build(
        "regression", study.changed(error_type="HAC", lag_rule="fixed", lags=3, reference="normal")
    ).sample
    assert "Newey–West errors, 3 lags by the rule 'fixed', normal reference" in hac


def test_text_table_lines_up(study: Study) -> None:
    text = table_text(build("ceiling", study).tables[0], most=3).splitlines()
    assert len(text) == 6
    assert text[-1] == "… and 11 more"
    assert len({len(line) for line in text[1:2]}) == 1
