"""Exhibits of Sharpe ratios, many alphas and factor sets: what is drawn and said is what was computed."""

from __future__ import annotations

import numpy as np
import pytest

from soffit.demo import demo_study
from soffit.judge.multiplicity import Adjustment
from soffit.present.exhibits import build
from soffit.present.exhibits.sharpe_ratios import gap_exhibit
from soffit.present.plain import cells
from soffit.present.sources import SOURCES
from soffit.present.spec import FigureSpec, Line, Mark, NumberForm, Points, Role, Rule, Segments
from soffit.present.wording import show
from soffit.study import Study


@pytest.fixture(scope="module")
def study() -> Study:
    return demo_study().changed(trials=40, bootstrap_draws=199)


def _marks(figure: FigureSpec) -> dict[str, Mark]:
    return {mark.key: mark for mark in figure.marks}


def test_sharpe_figure_draws_each_interval(study: Study) -> None:
    found, exhibit = study.sharpe_ratios(), build("sharpe-ratios", study)
    marks = _marks(exhibit.figures[0])
    points, intervals = marks["ratios"], marks["intervals"]
    assert isinstance(points, Points)
    assert isinstance(intervals, Segments)
    table = found.table.loc[list(points.names)]
    assert list(points.names) == list(found.table["sharpe"].sort_values(kind="stable").index)
    np.testing.assert_allclose(points.x, table["sharpe"])
    np.testing.assert_allclose(intervals.low, table["low"])
    np.testing.assert_allclose(intervals.high, table["high"])
    assert [role is Role.FACTORS for role in points.roles] == list(table["role"] == "factor")
    together, ceiling = marks["factors"], marks["ceiling"]
    assert isinstance(together, Rule)
    assert isinstance(ceiling, Rule)
    assert together.at == found.factors
    assert ceiling.at == study.settings.ceiling


def test_sharpe_finding_has_the_numbers(study: Study) -> None:
    found, text = study.sharpe_ratios(), build("sharpe-ratios", study).finding.text
    assets = found.table[found.table["role"] == "asset"]
    assert show(found.factors, NumberForm.RATIO) in text
    assert show(found.factors_interval.low, NumberForm.RATIO) in text
    assert f"Of {len(assets)} assets, {int((assets['low'] > 0).sum())} lie above zero" in text
    assert str(assets["sharpe"].idxmax()) in text
    assert "the best of 40 trials" in text
    alone = build("sharpe-ratios", study.changed(assets=("Maple Macro",), trials=1)).finding.text
    assert "The asset's Sharpe ratio of" in alone
    assert "trials" not in alone


def test_one_factor_has_no_rule_of_its_own(study: Study) -> None:
    marks = _marks(build("sharpe-ratios", study.changed(factors=("Equity",))).figures[0])
    assert "factors" not in marks


def test_hurdle_figure_sorts_by_verdict(study: Study) -> None:
    found, exhibit = study.many_alphas(), build("many-alphas", study)
    marks = _marks(exhibit.figures[0])
    strict = marks["after-Holm"]
    assert isinstance(strict, Points)
    assert set(strict.names) == set(found.names(Adjustment.HOLM))
    only = marks["one-at-a-time-only"]
    assert isinstance(only, Points)
    assert set(only.names) == set(found.names()) - set(found.names(Adjustment.HOLM))
    drawn = [mark for mark in marks.values() if isinstance(mark, Points)]
    assert sum(len(mark.names) for mark in drawn) == found.tests.count
    for mark in drawn:
        np.testing.assert_allclose(mark.y, found.table.loc[list(mark.names), "t"].abs())
    step, bonferroni = marks["stepwise"], marks["bonferroni"]
    assert isinstance(step, Line)
    assert isinstance(bonferroni, Rule)
    assert step.y[0] == pytest.approx(bonferroni.at)


def test_many_alphas_finding_counts(study: Study) -> None:
    found, text = study.many_alphas(), build("many-alphas", study).finding.text
    assert f"{len(found.names())} of 14 alphas" in text
    assert "m = 40 tests (14 alphas and 26 unseen trials)" in text
    assert f"|t| = {show(found.hurdle, NumberForm.RATIO)}" in text
    shown = cells(build("many-alphas", study).tables[1])
    by_method = {row[0]: row[2] for row in shown[1:]}
    assert by_method["Holm"] == str(len(found.names(Adjustment.HOLM)))


def test_factor_sets_figures_and_finding(study: Study) -> None:
    found, exhibit = study.factor_sets(), build("factor-sets", study)
    marks = _marks(exhibit.figures[0])
    sharpe = marks["sharpe"]
    assert isinstance(sharpe, Points)
    np.testing.assert_allclose(sharpe.x, found.table["sharpe"].iloc[::-1])
    assert exhibit.figures[0].y.categories == tuple(found.table.index[::-1])
    assert f"'{found.best}' earns the highest Sharpe ratio" in exhibit.finding.text
    assert "barillas-kan-robotti-shanken-2020" not in exhibit.sources
    apart = study.changed(factor_sets={"a": ("Equity", "Carry"), "b": ("Equity", "Trend")})
    other = build("factor-sets", apart)
    assert "barillas-kan-robotti-shanken-2020" in other.sources
    assert "a against b" in [row[0] for row in cells(other.tables[2])]
    one = build("factor-sets", study.changed(factor_sets={"only": ("Equity",)}))
    assert one.finding.text.startswith("The factors 'only' earn a Sharpe ratio of")
    assert len(one.tables) == 2


def test_difference_exhibit(study: Study) -> None:
    exhibit = gap_exhibit(study, "Duration", "Equity")
    gap = study.sharpe_difference("Duration", "Equity")
    assert show(gap.difference, NumberForm.RATIO) in exhibit.finding.text
    assert set(exhibit.sources) <= set(SOURCES)
    assert "199 circular block samples" in exhibit.tables[0].footnote
    same = gap_exhibit(study, "Equity", "Equity")
    assert "cannot be compared" in same.finding.text
    assert same.notes
