"""Cost arithmetic against a case worked by hand, and against a literal loop on real data."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from tests.universes import INDUSTRIES

from soffit.errors import SettingError
from soffit.hedge.costs import CostRates, HedgeCosts, LegKind, hedge_costs
from soffit.hedge.delivery import report_walk
from soffit.hedge.walk_forward import WalkSchedule, walk_forward

# An asset that moves 2 for 1 with its leg and earns 0.001 more a period; three periods of window, four hedged.
LEG = np.array([0.01, -0.02, 0.03, 0.10, -0.05, 0.00, 0.02])
ASSET = 0.001 + 2.0 * LEG


def _by_hand(kind: LegKind, *, short: bool = False, borrowed: float = 0.0) -> HedgeCosts:
    returns, factors = ASSET[:, None], LEG[:, None]
    walk = walk_forward(returns, factors, None, WalkSchedule(window=3))
    np.testing.assert_allclose(walk.targets.ravel(), 2.0, atol=1e-12)
    rates = CostRates(np.array([0.0010]), np.array([0.0020]), 0.0036 / 12, 0.0048 / 12, (kind,), borrowed)
    return hedge_costs(walk, report_walk(walk), rates, short=np.array([short]))


def test_costs_worked_by_hand() -> None:
    cost = _by_hand(LegKind.CASH)
    # Opened at 2; drifts to 2·1.10/1.201, 2·0.95/0.901, 2·1/1.001 and, closed, 2·1.02/1.041:
    # trades 2, 0.168193, 0.108768, 0.001998 and 1.959654; together 4.238613 in four periods.
    trades = [2.0, 2 - 2.2 / 1.201, 1.9 / 0.901 - 2, 2 - 2 / 1.001, 2.04 / 1.041]
    np.testing.assert_allclose(trades, [2.0, 0.168193, 0.108768, 0.001998, 1.959654], atol=5e-7)
    assert cost.turnover[0, 0] == pytest.approx(4.238613 / 4, abs=2e-7)
    assert cost.leg_trading[0, 0] == pytest.approx(0.00105965, abs=5e-9)  # 10 bp of it
    assert cost.asset_trading[0] == pytest.approx(0.0010, abs=1e-15)  # 20 bp twice, over four periods
    assert cost.borrow[0] == pytest.approx(0.0008, abs=1e-15)  # short 2 at 4 bp a period
    assert cost.financing[0] == 0.0
    assert cost.total[0] == pytest.approx(0.00285965, abs=5e-9)
    assert cost.gross_alpha[0] == pytest.approx(0.001, abs=1e-12)
    assert cost.net_alpha[0] == pytest.approx(-0.00185965, abs=5e-9)
    assert cost.break_even_multiple[0] == pytest.approx(0.001 / 0.00285965, rel=1e-5)
    # Asset trading and borrow alone take the alpha: no half-spread breaks even.
    assert np.isnan(cost.break_even_half_spread[0])


@pytest.mark.parametrize(
    ("kind", "short", "borrowed", "borrow", "financing"),
    [
        (LegKind.CASH, False, 0.5, 2 * 0.0004, 0.5 * 0.0003),  # short the leg; half of the asset on credit
        (LegKind.CASH, True, 0.5, 0.0004, 2 * 0.0003),  # short the asset, the leg bought on credit
        (LegKind.LONG_SHORT, False, 0.0, 2 * 0.0004, 0.0),  # the short side of the leg
        (LegKind.LONG_SHORT, True, 0.0, 3 * 0.0004, 0.0),  # and of the asset
        (LegKind.DERIVATIVE, False, 0.0, 0.0, 0.0),
        (LegKind.DERIVATIVE, True, 0.0, 0.0004, 0.0),
    ],
)
def test_carry_by_kind_and_side(
    kind: LegKind, short: bool, borrowed: float, borrow: float, financing: float
) -> None:
    cost = _by_hand(kind, short=short, borrowed=borrowed)
    assert cost.borrow[0] == pytest.approx(borrow, abs=1e-15)
    assert cost.financing[0] == pytest.approx(financing, abs=1e-15)
    assert cost.gross_alpha[0] == pytest.approx(-0.001 if short else 0.001, abs=1e-12)
    assert np.isnan(cost.break_even_multiple[0]) == short


def test_costs_of_the_industries_by_a_loop(french: pd.DataFrame) -> None:
    part = french.loc["1990":"2009"]
    returns = part[INDUSTRIES[:3]].sub(part["RF"], axis=0).to_numpy()
    factors = part[["MktRF", "HML"]].to_numpy()
    rates = CostRates(
        np.array([0.0002, 0.0007]),
        np.array([0.001, 0.002, 0.003]),
        0.00003,
        0.00005,
        (LegKind.CASH, LegKind.LONG_SHORT),
    )
    walk = walk_forward(returns, factors, None, WalkSchedule(hold=6))
    report = report_walk(walk)
    cost = hedge_costs(walk, report, rates)
    for i in range(3):
        paid, units, old = 0.0, np.zeros(2), np.zeros(2)
        for window in range(len(walk.starts)):
            trade = np.abs(walk.targets[window, i] - old)
            units += trade
            old = walk.closing[window, i]
        units += np.abs(old)
        for row in range(len(walk.rows)):
            market, value = walk.in_force[row, i]
            paid += 0.00005 * max(market, 0) + 0.00003 * max(-market, 0) + 0.00005 * abs(value)
        n = len(walk.rows)
        total = units @ [0.0002, 0.0007] / n + paid / n + 2 * rates.asset_half_spreads[i] / n
        assert cost.total[i] == pytest.approx(total, abs=1e-15)
        net = report.delivered.alpha[i] - total
        assert cost.net_alpha[i] == pytest.approx(net, abs=1e-15)
        theta2 = factors[60:].mean(axis=0) @ np.linalg.solve(
            np.cov(factors[60:].T, ddof=0), factors[60:].mean(axis=0)
        )
        assert cost.net_t[i] == pytest.approx(net / report.delivered.sigma[i] * np.sqrt(n / (1 + theta2)))
        if np.isfinite(cost.break_even_half_spread[i]):
            # At the break-even half-spread on both legs the net alpha is zero.
            spread = cost.break_even_half_spread[i]
            again = hedge_costs(
                walk,
                report,
                CostRates(np.full(2, spread), rates.asset_half_spreads, 0.00003, 0.00005, rates.kinds),
            )
            assert again.net_alpha[i] == pytest.approx(0.0, abs=1e-15)
    assert np.isfinite(cost.break_even_half_spread).any()


def test_free_hedges_break_even_at_any_multiple() -> None:
    walk = walk_forward(ASSET[:, None], LEG[:, None], None, WalkSchedule(window=3))
    free = CostRates(np.zeros(1), np.zeros(1), 0.0, 0.0, (LegKind.CASH,))
    cost = hedge_costs(walk, report_walk(walk), free)
    assert cost.total[0] == 0.0
    assert np.isinf(cost.break_even_multiple[0])
    assert cost.break_even_half_spread[0] == pytest.approx(0.001 / (4.238613 / 4), rel=1e-6)


def test_a_hedge_interrupted_by_a_missing_return_is_closed_and_opened_again() -> None:
    returns = np.tile(ASSET, 3)[:, None].copy()
    factors = np.tile(LEG, 3)[:, None]
    walk = walk_forward(returns, factors, None, WalkSchedule(window=3))
    broken = returns.copy()
    broken[10] = np.nan
    holed = walk_forward(broken, factors, None, WalkSchedule(window=3))
    rates = CostRates(np.array([0.001]), np.zeros(1), 0.0, 0.0, (LegKind.CASH,))
    whole, parts = (hedge_costs(w, report_walk(w), rates) for w in (walk, holed))
    # Of 18 periods, those of the hole and of the three windows that contain it go unhedged: some 4 units more traded.
    assert holed.delivered.sum() == 14
    assert parts.turnover[0, 0] * 14 - whole.turnover[0, 0] * 18 == pytest.approx(4.0, abs=0.5)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"leg_half_spreads": np.array([-0.0001])}, "half-spread of hedge leg 1"),
        ({"asset_half_spreads": np.array([np.nan])}, "half-spread of asset 1"),
        ({"financing": -0.001}, "financing spread"),
        ({"borrow": -0.001}, "borrow fee"),
        ({"borrow": float("inf")}, "borrow fee"),
        ({"borrowed": 1.5}, "borrowed share"),
        ({"kinds": ()}, "0 kinds for 1 legs"),
    ],
)
def test_negative_and_missing_costs_are_refused(change: dict[str, object], words: str) -> None:
    usual: dict[str, object] = {
        "leg_half_spreads": np.array([0.0001]),
        "asset_half_spreads": np.array([0.0001]),
        "financing": 0.0,
        "borrow": 0.0,
        "kinds": (LegKind.CASH,),
    }
    with pytest.raises(SettingError, match=words):
        CostRates(**{**usual, **change})  # type: ignore[arg-type]


def test_costs_for_other_legs_or_assets_are_refused() -> None:
    walk = walk_forward(ASSET[:, None], LEG[:, None], None, WalkSchedule(window=3))
    report = report_walk(walk)
    rates = CostRates(np.zeros(2), np.zeros(1), 0.0, 0.0, (LegKind.CASH,) * 2)
    with pytest.raises(SettingError, match="Costs for 2 legs and 1 assets"):
        hedge_costs(walk, report, rates)
    right = CostRates(np.zeros(1), np.zeros(1), 0.0, 0.0, (LegKind.CASH,))
    with pytest.raises(SettingError, match="Sides for 2 assets"):
        hedge_costs(walk, report, right, short=np.array([True, False]))
