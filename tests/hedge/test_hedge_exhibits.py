"""Exhibits of the hedge: what is drawn and said is what was computed."""

from __future__ import annotations

import re
from typing import Any

import numpy as np
import pandas as pd
import pytest
from tests.universes import INDUSTRIES

from soffit.demo import demo_study
from soffit.hedge.ticket import Instrument
from soffit.present.cautions import is_hedge
from soffit.present.exhibits import book as book_page
from soffit.present.exhibits import build, hedge_costs, hedge_walk, mimicking, ticket
from soffit.present.plain import cells
from soffit.present.sources import SOURCES
from soffit.present.spec import Bars, FigureSpec, Line, NumberForm, Points, Rule
from soffit.present.wording import show
from soffit.study import Study

KEYS = ["hedge", "hedge-walk", "hedge-costs", "book"]


@pytest.fixture(scope="module")
def us(french: pd.DataFrame) -> Study:
    factors = french[["MktRF", "SMB", "HML", "Mom"]]
    return Study.open(french[[*INDUSTRIES, "RF"]], factors, risk_free="RF").changed(ceiling=1.3)


def _mark(figure: FigureSpec, key: str) -> Any:
    return next(mark for mark in figure.marks if mark.key == key)


def _figure(exhibit: Any, key: str) -> FigureSpec:
    return next(figure for figure in exhibit.figures if figure.key == key)


@pytest.mark.parametrize("key", KEYS)
@pytest.mark.parametrize(
    "change",
    [
        {},
        {"hedge.beta": "Vasicek", "hedge.hold": 6, "hedge.lag": 1, "hedge.gross_cap": 1.0},
        {"hedge.drop_legs": True, "hedge.window_kind": "expanding"},
        {"hedge.beta": "Dimson", "hedge.leg_cap": 0.9},
        {"hedge.window": 80},
    ],
    ids=["default", "Vasicek", "dropped", "Dimson", "short history"],
)
def test_pages_are_whole_for_every_choice(key: str, change: dict[str, object]) -> None:
    exhibit = build(key, demo_study().changed(change))
    assert is_hedge(exhibit)
    assert exhibit.finding.text.endswith(".")
    assert not re.search(r"\bnan\b", exhibit.finding.text)
    assert set(exhibit.sources) <= set(SOURCES)
    for figure in exhibit.figures:
        assert figure.alt.endswith(".")
        assert not re.search(r"\bnan\b", figure.alt)
        assert len({mark.key for mark in figure.marks}) == len(figure.marks)
    for table in exhibit.tables:
        assert all(column.key in table.frame for column in table.columns)
        assert len(cells(table)) == len(table.frame) + 1


@pytest.mark.parametrize("key", KEYS)
@pytest.mark.parametrize("change", [{"assets": ("Hlth",)}, {"factors": ("MktRF",)}, {"factors": ()}], ids=str)
def test_pages_of_one_asset_one_factor_or_none(us: Study, key: str, change: dict[str, object]) -> None:
    exhibit = build(key, us.changed(change))
    assert exhibit.finding.text.endswith(".")
    assert not re.search(r"\bnan\b", exhibit.finding.text)


def test_finding_of_the_walk_has_the_numbers_of_the_table(us: Study) -> None:
    walk = us.walk_forward()
    text = build("hedge-walk", us).finding.text
    table, gap = walk.table, walk.gap.mean()
    for value in (table["promised_volatility"].mean(), table["volatility"].mean()):
        assert show(value, NumberForm.PERCENT) in text
    for value in (table["promised_effectiveness"].mean(), table["effectiveness"].mean()):
        assert show(value, NumberForm.SHARE) in text
    assert f"estimation error {show(gap['estimation'], NumberForm.SHARE)}" in text
    assert f"betas that moved {show(gap['drift'], NumberForm.SHARE)}" in text
    assert "The widest shortfall is Enrgy's" in text
    held = build("hedge-walk", us.changed({"hedge.hold": 6, "hedge.beta": "ridge"})).finding.text
    assert "ratios that drifted between re-hedges" in held
    assert "the rule beside plain betas" in held


def test_twelve_industries_table_of_promise_and_delivery(us: Study) -> None:
    # 1954-01 to 2017-03 hedged, 60-month windows, monthly. Checked number by number in test_delivery.
    head, *rows = cells(build("hedge-walk", us).tables[0])
    shown = {row[0]: dict(zip(head[1:], row[1:], strict=True)) for row in rows}
    assert list(shown) == INDUSTRIES
    assert shown["Enrgy"]["Vol. promised, a year"] == "11.81%"
    assert shown["Enrgy"]["Effectiveness promised"] == "61%"
    table = us.walk_forward().table
    for name, row in shown.items():
        assert row["Hedged periods"] == "759"
        assert row["t"] == show(float(table.loc[name, "t"]), NumberForm.RATIO)


def test_walk_figures_draw_the_paths(us: Study) -> None:
    walk = us.walk_forward()
    exhibit = hedge_walk.exhibit(us, "Utils")
    lines = _figure(exhibit, "hedge-walk-cumulative")
    path = walk.path("Utils").cumsum()
    for key in ("unhedged", "promised", "delivered"):
        line: Line = _mark(lines, key)
        np.testing.assert_allclose(line.y, path[key])
        assert line.label
    betas = _figure(exhibit, "hedge-walk-residual-beta")
    rolling = walk.residual_betas("Utils")[0]  # type: ignore[index]
    for name in rolling:
        np.testing.assert_allclose(_mark(betas, f"beta {name}").y, rolling[name])
    spread = _figure(exhibit, "hedge-walk-volatility")
    said: Points = _mark(spread, "promised")
    np.testing.assert_allclose(said.x, walk.table.loc[list(said.names), "promised_volatility"])
    bars: Bars = _mark(_figure(exhibit, "hedge-walk-gap"), "parts")
    assert bars.names[0] == "together"
    assert bars.length[0] == pytest.approx(bars.length[1:].sum())
    assert "Dahlgran 2009" in exhibit.cautions[1]
    short = hedge_walk.exhibit(demo_study().changed({"hedge.window": 80}), "Rowan Event")
    assert any("Rolling residual betas of Rowan Event" in note for note in short.notes)


def test_ladder_falls_from_gross_to_net_under_the_ceiling(us: Study) -> None:
    exhibit = hedge_costs.exhibit(us, "Hlth")
    bars: Bars = _mark(exhibit.figures[0], "ladder")
    table = us.costs().table
    assert bars.names[-1] == "gross"
    assert bars.length[-1] == pytest.approx(table.loc["Hlth", "gross_alpha"])
    assert bars.length[0] == pytest.approx(table.loc["Hlth", "net_alpha"])
    rule: Rule = _mark(exhibit.figures[0], "ceiling")
    under = us.costs().under(1.3, us.settings.ceiling_form)
    assert rule.at == pytest.approx(under.loc["Hlth", "bound"])
    assert "(Other)" in exhibit.finding.text
    assert "largest net alpha is Hlth's" in exhibit.finding.text
    below = build("hedge-costs", us.changed(ceiling=0.5))
    assert "below what the factors alone earned" in below.finding.text
    assert all(mark.key != "ceiling" for mark in below.figures[0].marks)
    losing = us.changed(assets=("Durbl", "Manuf"))
    assert "none breaks even" in build("hedge-costs", losing).finding.text


def test_book_page_draws_weights_and_the_way_to_the_ceiling(us: Study) -> None:
    book = us.book()
    exhibit = build("book", us)
    bars: Bars = _mark(exhibit.figures[0], "weights")
    np.testing.assert_allclose(bars.length, book.table.loc[list(bars.names), "weight"])
    path: Line = _mark(exhibit.figures[1], "path")
    assert path.y[0] == pytest.approx(us.joint_test().factors_sharpe)
    assert path.y[-1] == pytest.approx(book.sharpe)
    assert _mark(exhibit.figures[1], "ceiling").at == 1.3
    assert "above the ceiling of 1.30" in exhibit.finding.text
    few = us.book(["NoDur", "Utils"], alphas="shrunk under the ceiling")
    page = book_page.exhibit(us, few)
    assert "One more asset adds most if it is BusEq" in page.finding.text
    assert "pastor-stambaugh-1999" in page.sources
    held = {row[0]: row[1] for row in cells(page.tables[0])[1:]}
    assert held["NoDur"] == "yes"
    assert held["Hlth"] == "no"
    # Costs beyond every alpha leave nothing to hold.
    dear = us.changed({"costs.borrow": 10_000.0}).book(alphas="net of costs")
    assert "the book holds nothing" in book_page.exhibit(us, dear).finding.text


def test_ticket_page(us: Study) -> None:
    legs = {name: Instrument(f"{name} basket", 50.0, margin=5.0) for name in ("MktRF", "SMB", "HML", "Mom")}
    made = us.ticket({"BusEq": 1e6}, legs, as_of="2017-05-15")
    page = ticket.exhibit(us, made)
    assert is_hedge(page)
    assert "estimated through 2017-03-31" in page.finding.text
    head, *rows = cells(page.tables[0])
    assert [row[0] for row in rows] == ["MktRF", "SMB", "HML", "Mom"]
    assert rows[0][head.index("Side")] == "Sell"
    assert rows[0][head.index("Contracts")] == show(-made.orders[0].contracts, NumberForm.COUNT)
    assert any("margin" in caution for caution in page.cautions)


def test_mimicking_page(french: pd.DataFrame) -> None:
    rng = np.random.default_rng(3)
    frame = french.loc["1960":"1999"]
    extra = pd.DataFrame(
        {
            "Macro": 0.4 * frame["MktRF"] + rng.normal(0, 0.04, len(frame)),
            "Noise": rng.normal(0, 0.04, len(frame)),
        },
        index=frame.index,
    )
    returns = frame[INDUSTRIES[:3]].sub(frame["RF"], axis=0)
    study = Study.open(
        returns,
        frame[["MktRF"]].join(extra),
        excess=True,
        roles={"Macro": "non-traded factor", "Noise": "non-traded factor"},
    )
    page = mimicking.exhibit(study, study.mimicking(["MktRF"]))
    assert "does not move with Noise" in page.finding.text
    assert cells(page.tables[0])[1][0] == "Macro"
