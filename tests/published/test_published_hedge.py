"""Hedges and the active book against published and independently computed values.

Evidence grades: A, printed number or other software, seen; B, printed number recalled from memory and reproduced.
"""

from __future__ import annotations

from datetime import date
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from soffit.hedge.book import make_book, with_market
from soffit.hedge.ticket import Instrument, Order, hedge_ticket
from soffit.hedge.weights import hedge_ratios
from soffit.study import Study


def _order(notional: float, ratio: float, instrument: Instrument) -> Order:
    made = hedge_ticket(
        ["asset"],
        np.array([notional]),
        np.array([[ratio]]),
        ["leg"],
        [instrument],
        as_of=date(2024, 1, 2),
        estimated_through=date(2024, 1, 1),
        longest_age=31,
    )
    return made.orders[0]


def test_jet_fuel_hedged_with_heating_oil(checks_data: Path) -> None:
    # Hull, Options, Futures and Other Derivatives, Table 3.2 and Example 3.3. Evidence A (h* and 37.03 from memory).
    frame = pd.read_csv(checks_data / "hull_jet_fuel.csv")
    spot, futures = frame[["d_spot"]].to_numpy(), frame[["d_futures"]].to_numpy()
    hedge = hedge_ratios(spot, futures)
    assert hedge.ratios[0, 0] == pytest.approx(0.7777, abs=6e-5)
    assert hedge.effectiveness[0] == pytest.approx(0.862, abs=6e-4)
    # Units of 2,000,000 gallons against contracts of 42,000: both at one dollar a gallon.
    order = _order(2_000_000, hedge.ratios[0, 0], Instrument("heating oil", 1.0, 42_000.0))
    assert -order.exact == pytest.approx(37.03, abs=6e-3)
    assert (order.side, order.contracts) == ("Sell", -37.0)


def test_index_hedge_and_tailing_the_hedge() -> None:
    # Hull: V_A 5,050,000, futures 1,010, multiplier 250, beta 1.5: 30 contracts. Evidence B.
    index = _order(5_050_000, 1.5, Instrument("index future", 1_010.0, 250.0))
    assert index.exact == pytest.approx(-30.0, abs=1e-9)
    assert index.residual == pytest.approx(0.0, abs=1e-6)
    # Tailing: V_A = 1.94 · 2,000,000, V_F = 1.99 · 42,000 = 83,580, h* = 0.7777: 36.10 contracts. Evidence B.
    oil = Instrument("heating oil", 1.99, 42_000.0)
    assert oil.contract_value == pytest.approx(83_580.0)
    assert -_order(1.94 * 2_000_000, 0.7777, oil).exact == pytest.approx(36.10, abs=6e-3)


def test_hedged_industry_of_the_sixties(french: pd.DataFrame) -> None:
    # R lm on BusEq - RF against MktRF, 1960 to 1969. Evidence A.
    part = french.loc["1960-01":"1969-12"]
    asset, market = (part["BusEq"] - part["RF"]).to_numpy()[:, None], part[["MktRF"]].to_numpy()
    hedge = hedge_ratios(asset, market)
    hedged = asset[:, 0] - market[:, 0] * hedge.ratios[0, 0]
    np.testing.assert_allclose(hedge.ratios[0], [1.19022536693311], rtol=1e-9)
    np.testing.assert_allclose(hedge.mean[0], 0.00279289742726448, rtol=1e-9)
    np.testing.assert_allclose(hedge.volatility[0], 0.0272637133491322, rtol=1e-9)
    np.testing.assert_allclose(hedge.effectiveness[0], 0.719904730333721, rtol=1e-9)
    np.testing.assert_allclose(hedged.mean(), 0.00279289742726448, rtol=1e-9)
    np.testing.assert_allclose(hedged.std(ddof=1), 0.0271489182567468, rtol=1e-9)
    # The same through the study, whose table is annual.
    study = Study.open(part[["BusEq", "RF"]], part[["MktRF"]], risk_free="RF")
    row = study.hedge().table.loc["BusEq"]
    np.testing.assert_allclose(row["ratio MktRF"], 1.19022536693311, rtol=1e-9)
    np.testing.assert_allclose(row["alpha"], 0.00279289742726448 * 12, rtol=1e-9)
    np.testing.assert_allclose(row["volatility"], 0.0272637133491322 * np.sqrt(12), rtol=1e-9)
    np.testing.assert_allclose(row["effectiveness"], 0.719904730333721, rtol=1e-9)


def test_active_portfolio_of_three_stocks() -> None:
    # Bodie, Kane, Marcus, Investments (6th ed.), chapter 27; S also from the tangency portfolio directly. Evidence B.
    alpha, beta = np.array([0.07, -0.05, 0.03]), np.array([1.6, 1.0, 0.5])
    book = make_book(alpha, np.diag([0.45, 0.32, 0.26]) ** 2, theta2=(0.08 / 0.2) ** 2)
    mix = with_market(book, beta, 0.08, 0.2)
    weights = book.scaled_to_one
    assert isinstance(weights, np.ndarray)
    np.testing.assert_allclose(weights, [1.1477, -1.6212, 1.4735], atol=6e-5)
    got = [mix.alpha, mix.beta, mix.sigma, mix.initial, mix.weight, mix.sharpe, mix.m2]
    np.testing.assert_allclose(got, [0.2056, 0.9519, 0.8262, 0.1506, 0.1495, 0.4711, 0.0142], atol=6e-5)
    assert book.sharpe == pytest.approx(0.4710893788, abs=1e-9)
    assert mix.sharpe == pytest.approx(0.4710893788, abs=1e-9)
    # The joint ceiling turned around: S² - S_m² = α'Σ⁻¹α.
    assert book.best_squared == pytest.approx(0.0619252, abs=1e-7)
