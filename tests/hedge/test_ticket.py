"""The ticket: contracts, rounding, margin, staleness and export."""

from __future__ import annotations

import csv
import itertools
from datetime import date
from pathlib import Path
from typing import Any

import numpy as np
import openpyxl
import pytest
from hypothesis import given
from hypothesis import strategies as st

from soffit.errors import EstimationError, InputError, NotApplicableError
from soffit.estimate.statistic import NotApplicable
from soffit.hedge.ticket import Instrument, Rounding, Ticket, hedge_ticket, refuse_stale
from soffit.hedge.ticket_files import spreadsheet_text, write_csv, write_excel

INDEX = Instrument("Index future", 1010.0, 250.0, margin=12_000.0)
VALUE = Instrument("Value basket", 50.0, lot=100.0)


def _ticket(**change: Any) -> Ticket:
    usual: dict[str, Any] = {
        "assets": ["BusEq", "Hlth"],
        "notionals": np.array([5_050_000.0, -1_000_000.0]),
        "ratios": np.array([[1.5, -0.4], [0.8, 0.3]]),
        "legs": ["MktRF", "HML"],
        "instruments": [INDEX, VALUE],
        "as_of": date(2017, 4, 18),
        "estimated_through": date(2017, 3, 31),
        "longest_age": 62,
        "covariance": np.array([[0.002, -0.0003], [-0.0003, 0.001]]),
    }
    return hedge_ticket(**{**usual, **change})


def test_contracts_by_hand() -> None:
    ticket = _ticket()
    first, second = ticket.orders
    # -(5,050,000·1.5 - 1,000,000·0.8) = -6,775,000 of 252,500 each; +(5,050,000·0.4 + 1,000,000·0.3) = 2,320,000.
    assert first.target == pytest.approx(-6_775_000)
    assert first.exact == pytest.approx(-26.8316832)
    assert (first.side, first.contracts) == ("Sell", -27.0)
    assert first.residual == pytest.approx(-27 * 252_500 + 6_775_000)
    assert second.target == pytest.approx(2_320_000)
    assert (second.side, second.contracts) == ("Buy", 46_400.0)
    assert second.residual == pytest.approx(0.0)
    np.testing.assert_allclose(ticket.residual_betas, [-42_500 / 6_050_000, 0.0])
    assert ticket.rounding_volatility == pytest.approx(42_500 / 6_050_000 * np.sqrt(0.002))
    assert ticket.gross_hedge == pytest.approx(27 * 252_500 + 2_320_000)


def test_lots_currencies_and_rounding() -> None:
    abroad = Instrument("Foreign future", 4_000.0, 10.0, lot=5.0, fx=1.25)
    up = _ticket(instruments=[abroad, VALUE])
    # 6,775,000 / (4,000·10·1.25) = 135.5 contracts: 27.1 lots of five.
    assert up.orders[0].exact == pytest.approx(-135.5)
    assert up.orders[0].contracts == -135.0
    down = _ticket(rounding=Rounding.TOWARD_ZERO)
    assert down.orders[0].contracts == -26.0
    halves = _ticket(notionals=np.array([252_500.0, 0.0]), ratios=np.array([[0.5, 0.0], [0.0, 0.0]]))
    assert halves.orders[0].contracts == -1.0  # halves go away from zero
    assert halves.orders[1].side == "No trade"


@given(st.integers(0, 10_000))
def test_least_risk_rounding_beats_every_other_way(seed: int) -> None:
    rng = np.random.default_rng(seed)
    root = rng.normal(size=(3, 3))
    covariance = root @ root.T + 0.01 * np.eye(3)
    instruments = [Instrument(f"F{k}", float(rng.uniform(50, 500)), 50.0) for k in range(3)]
    ratios, notional = rng.normal(size=(1, 3)), 150_000.0

    def risk(residual: np.ndarray) -> float:
        return float(residual @ covariance @ residual)

    made = hedge_ticket(
        ["A"],
        np.array([notional]),
        ratios,
        ["a", "b", "c"],
        instruments,
        as_of=date(2020, 1, 2),
        estimated_through=date(2019, 12, 31),
        longest_age=31,
        covariance=covariance,
        rounding=Rounding.LEAST_RISK,
    )
    chosen = risk(np.array([order.residual for order in made.orders]))
    size = np.array([item.contract_value for item in instruments])
    target = -notional * ratios[0]
    for step in itertools.product((0, 1), repeat=3):
        lots = np.floor(target / size) + step
        assert chosen <= risk(lots * size - target) * (1 + 1e-12)


def test_margin_is_stated_or_said_to_be_missing() -> None:
    partly = _ticket()
    assert isinstance(partly.margin, NotApplicable)
    assert "no margin rate was given" in partly.margin_note
    with pytest.raises(NotApplicableError, match="Margin of Value basket"):
        _ = partly.margin.value
    full = _ticket(instruments=[INDEX, Instrument("Value basket", 50.0, lot=100.0, margin=10.0)])
    assert full.margin == pytest.approx(27 * 12_000 + 46_400 * 10)
    assert "at the stated rates" in full.margin_note
    assert "Variation margin" in full.margin_note


def test_stale_estimates_are_refused_with_the_reason() -> None:
    with pytest.raises(EstimationError) as caught:
        _ticket(as_of=date(2018, 4, 18))
    for words in ("stale", "2017-03-31", "383 days", "2018-04-18", "at most 62 days", "load newer returns"):
        assert words in str(caught.value)
    with pytest.raises(EstimationError, match="use data through 2017-03-31"):
        _ticket(as_of=date(2017, 3, 1))
    refuse_stale(date(2017, 3, 31), date(2017, 6, 1), 62)  # to the day


def test_export_keeps_names_as_text_and_numbers_as_numbers(tmp_path: Path) -> None:
    hostile = Instrument('=HYPERLINK("http://x","y")', 1010.0, 250.0)
    ticket = _ticket(legs=["@SUM(1)", "-HML"], instruments=[hostile, VALUE], assets=["+1+1", "Hlth"])
    with write_csv(ticket, tmp_path / "ticket.csv").open(encoding="utf-8-sig", newline="") as file:
        lines = list(csv.DictReader(file))
    assert [line["Leg"] for line in lines] == ["'@SUM(1)", "'-HML"]
    assert lines[0]["Instrument"] == '\'=HYPERLINK("http://x","y")'
    assert lines[0]["Hedges"] == "'+1+1; Hlth"
    assert float(lines[0]["Target notional"]) == pytest.approx(-6_775_000)  # a negative number stays a number
    assert lines[0]["Initial margin"] == ""
    assert (lines[0]["As of"], lines[0]["Estimated through"]) == ("2017-04-18", "2017-03-31")

    book = openpyxl.load_workbook(write_excel(ticket, tmp_path / "ticket.xlsx"))
    sheet = book["Orders"]
    head = [cell.value for cell in sheet[1]]
    cell = sheet.cell(2, head.index("Instrument") + 1)
    assert (cell.data_type, cell.value) == ("s", hostile.name)  # text, not a formula
    assert sheet.cell(2, head.index("Contracts") + 1).value == 27
    assert sheet.cell(2, head.index("Residual notional") + 1).value == pytest.approx(-42_500)
    notes = {row[0].value: row[1].value for row in book["Notes"].iter_rows()}
    assert notes["+1+1"] == 5_050_000
    assert notes["Initial margin, USD"].startswith("not stated: no margin rate")
    assert "clearing broker" in notes["Margin"]


@pytest.mark.parametrize(
    "name", ["=1", "+1", "-1", "@x", "\tx", "\rx", "\nx", "  =1", "＝1", "＋1", "－1", "＠x"]
)
def test_text_that_would_run_is_disarmed(name: str) -> None:
    assert spreadsheet_text(name) == "'" + name


def test_plain_text_stays() -> None:
    assert [spreadsheet_text(name) for name in ("MktRF", "S&P 500", "a=b", "")] == [
        "MktRF",
        "S&P 500",
        "a=b",
        "",
    ]


def test_bad_tickets_are_refused() -> None:
    for field in ("price", "multiplier", "lot", "fx"):
        with pytest.raises(InputError, match=f"The {field} of 'X' is"):
            Instrument(**{"name": "X", "price": 1.0, field: 0.0})
    with pytest.raises(InputError, match="margin of 'X'"):
        Instrument("X", 1.0, margin=-1.0)
    with pytest.raises(InputError, match="1 instruments for 2 legs"):
        _ticket(instruments=[INDEX])
    with pytest.raises(InputError, match="no notional to hedge"):
        _ticket(notionals=np.zeros(2))
    with pytest.raises(EstimationError, match="'Hlth' has no hedge ratios"):
        _ticket(ratios=np.array([[1.0, 1.0], [np.nan, 1.0]]))
    with pytest.raises(InputError, match="came for 2 assets and 2 legs"):
        _ticket(ratios=np.ones((2, 3)))
    with pytest.raises(InputError, match="covariances of the legs"):
        _ticket(rounding=Rounding.LEAST_RISK, covariance=None)
    with pytest.raises(InputError, match="13 legs are too many"):
        _ticket(
            ratios=np.ones((2, 13)),
            legs=[str(k) for k in range(13)],
            instruments=[INDEX] * 13,
            covariance=np.eye(13),
            rounding=Rounding.LEAST_RISK,
        )
    assert isinstance(_ticket(covariance=None).rounding_volatility, NotApplicable)
