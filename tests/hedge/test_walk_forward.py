"""The walk-forward hedge against a literal loop, and that it never looks ahead."""

from __future__ import annotations

import itertools

import numpy as np
import pandas as pd
import pytest
from tests.universes import INDUSTRIES

from soffit.errors import EstimationError, SettingError
from soffit.hedge.delivery import report_walk
from soffit.hedge.walk_forward import WalkSchedule, walk_forward
from soffit.hedge.weights import HedgeRule, hedge_ratios
from soffit.settings import HedgeBeta, WindowKind

FACTORS = ["MktRF", "SMB", "HML", "Mom"]


def _french(frame: pd.DataFrame, start: str, end: str, assets: list[str]) -> tuple[np.ndarray, ...]:
    part = frame.loc[start:end]
    return part[assets].sub(part["RF"], axis=0).to_numpy(), part[FACTORS].to_numpy(), part["RF"].to_numpy()


def _slow(
    returns: np.ndarray, factors: np.ndarray, rates: np.ndarray, rule: HedgeRule, when: WalkSchedule
) -> dict[int, dict[str, np.ndarray]]:
    """One period after another: estimate, trade, hold; nothing shared between periods."""
    out: dict[int, dict[str, np.ndarray]] = {}
    end = when.window - 1
    while end + when.lag + 1 < len(returns):
        begin = 0 if when.kind is WindowKind.EXPANDING else end - when.window + 1
        hedge = hedge_ratios(returns[begin : end + 1], factors[begin : end + 1], rule)
        held = hedge.ratios.copy()
        start = end + when.lag + 1
        for row in range(start, min(start + when.hold, len(returns))):
            hedged = np.array(
                [
                    returns[row, i] - sum(held[i, k] * factors[row, k] for k in range(factors.shape[1]))
                    for i in range(returns.shape[1])
                ]
            )
            out[row] = {
                "in_force": held.copy(),
                "hedged": hedged,
                "mean": hedge.mean,
                "variance": hedge.volatility**2,
                "target": hedge.ratios,
            }
            for i, k in itertools.product(range(held.shape[0]), range(held.shape[1])):
                held[i, k] *= (1 + factors[row, k]) / (1 + returns[row, i] + rates[row])
            out[row]["after"] = held.copy()
        end += when.hold
    return out


RULES = [
    HedgeRule(),
    HedgeRule(beta=HedgeBeta.VASICEK),
    HedgeRule(beta=HedgeBeta.DIMSON, dimson_lags=2),
    HedgeRule(beta=HedgeBeta.RIDGE, ridge=0.2),
    HedgeRule(gross_cap=1.0, leg_cap=0.8),
    HedgeRule(leg_costs=(1e-4, 3e-4, 3e-4, 3e-4)),
]


@pytest.mark.parametrize("rule", RULES, ids=["plain", "Vasicek", "Dimson", "ridge", "caps", "legs"])
@pytest.mark.parametrize(
    "when",
    [
        WalkSchedule(),
        WalkSchedule(window=36, hold=5, lag=2),
        WalkSchedule(kind=WindowKind.EXPANDING, window=40, hold=3),
    ],
    ids=["monthly", "held and lagged", "expanding"],
)
def test_walk_equals_a_slow_loop(french: pd.DataFrame, rule: HedgeRule, when: WalkSchedule) -> None:
    returns, factors, rates = _french(french, "1995", "2004-08", INDUSTRIES[:4])
    walk = walk_forward(returns, factors, rule, when, risk_free=rates)
    slow = _slow(returns, factors, rates, rule, when)
    np.testing.assert_array_equal(walk.rows, sorted(slow))
    before: np.ndarray | None = None
    for place, row in enumerate(walk.rows):
        window = walk.held_by[place]
        expected = slow[int(row)]
        np.testing.assert_allclose(walk.in_force[place], expected["in_force"], atol=1e-10)
        np.testing.assert_allclose(walk.hedged[place], expected["hedged"], atol=1e-10)
        np.testing.assert_allclose(walk.promised_mean[window], expected["mean"], atol=1e-10)
        np.testing.assert_allclose(walk.promised_variance[window], expected["variance"], atol=1e-10)
        if row == walk.starts[window]:
            traded = expected["target"] - (0.0 if before is None else before)
            np.testing.assert_allclose(walk.trades[window], np.abs(traded), atol=1e-10)
        before = expected["after"]
    assert before is not None
    np.testing.assert_allclose(walk.closing[-1], before, atol=1e-10)


@pytest.mark.parametrize("rule", RULES, ids=["plain", "Vasicek", "Dimson", "ridge", "caps", "legs"])
@pytest.mark.parametrize("hold", [1, 4])
@pytest.mark.parametrize("lag", [0, 2])
@pytest.mark.parametrize("where", ["returns", "factors"])
def test_no_weight_moves_before_a_planted_jump(
    french: pd.DataFrame, rule: HedgeRule, hold: int, lag: int, where: str
) -> None:
    returns, factors, _ = _french(french, "1995", "2003", INDUSTRIES[:3])
    when = WalkSchedule(window=48, hold=hold, lag=lag)
    calm = walk_forward(returns, factors, rule, when)
    jump = 80
    struck = {"returns": returns.copy(), "factors": factors.copy()}
    struck[where][jump:, 0] += 0.5
    moved = walk_forward(struck["returns"], struck["factors"], rule, when)
    # Windows that end before the jump, and every ratio in force up to the jump's own period, do not move beyond the
    # last bits, which depend on where an array lies in memory; later windows move by far more.
    unseen = calm.ends < jump
    np.testing.assert_allclose(moved.targets[unseen], calm.targets[unseen], rtol=0, atol=1e-13)
    upto = calm.rows <= jump
    np.testing.assert_allclose(moved.in_force[upto], calm.in_force[upto], rtol=0, atol=1e-13)
    assert np.abs(moved.targets[~unseen] - calm.targets[~unseen]).max() > 1e-3
    # And no window reaches the period that it hedges, less the lag.
    np.testing.assert_array_equal(calm.ends[calm.held_by] < calm.rows - lag, True)


def test_a_lag_hedges_with_older_windows(french: pd.DataFrame) -> None:
    returns, factors, _ = _french(french, "1995", "2003", INDUSTRIES[:3])
    prompt, late = walk_forward(returns, factors), walk_forward(returns, factors, None, WalkSchedule(lag=3))
    np.testing.assert_allclose(late.targets, prompt.targets[:-3], rtol=0, atol=1e-13)
    np.testing.assert_array_equal(late.rows, prompt.rows[3:])


def test_one_expanding_window_over_all_but_the_last_period_is_the_full_regression(
    french: pd.DataFrame,
) -> None:
    returns, factors, _ = _french(french, "1995", "2003", INDUSTRIES[:3])
    walk = walk_forward(returns, factors, None, WalkSchedule(WindowKind.EXPANDING, window=len(returns) - 1))
    once = hedge_ratios(returns[:-1], factors[:-1])
    np.testing.assert_allclose(walk.targets[0], once.ratios, atol=1e-12)
    assert walk.rows.tolist() == [len(returns) - 1]


def test_missing_returns_leave_gaps_and_touch_no_other_asset(french: pd.DataFrame) -> None:
    returns, factors, _ = _french(french, "1990", "2003", INDUSTRIES[:3])
    gaps = returns.copy()
    gaps[:30, 1] = np.nan
    gaps[100, 2] = np.nan
    when = WalkSchedule(window=40, hold=3)
    whole, holed = walk_forward(returns, factors, None, when), walk_forward(gaps, factors, None, when)
    np.testing.assert_allclose(holed.hedged[:, 0], whole.hedged[:, 0], rtol=0, atol=1e-14)
    # Asset 1 is hedged once a window lies in its own history, asset 2 not while a window or period has the hole.
    first = int(np.flatnonzero(whole.ends >= 69)[0])
    assert not holed.delivered[whole.held_by < first, 1].any()
    assert holed.delivered[whole.held_by >= first, 1].all()
    np.testing.assert_allclose(holed.targets[first:, 1], whole.targets[first:, 1], rtol=0, atol=1e-13)
    touched = (whole.ends >= 100) & (whole.ends - 39 <= 100)
    assert np.isnan(holed.targets[touched, 2]).all()
    assert np.isfinite(holed.targets[~touched, 2]).all()
    assert not holed.delivered[whole.rows == 100, 2].any()
    # The rest of the holding period in which the return is missing has no ratio to hold.
    block = whole.held_by[whole.rows == 100][0]
    later = (whole.held_by == block) & (whole.rows > 100)
    assert not holed.delivered[later, 2].any()


def test_spanned_asset_promises_and_delivers_nothing_but_alpha() -> None:
    rng = np.random.default_rng(4)
    factors = rng.normal(0, 0.03, (80, 2))
    walk = walk_forward((0.001 + factors @ [1.0, -0.5])[:, None], factors, None, WalkSchedule(window=24))
    np.testing.assert_allclose(walk.hedged, 0.001, atol=1e-14)
    np.testing.assert_allclose(walk.promised_mean, 0.001, atol=1e-14)
    np.testing.assert_allclose(walk.promised_variance, 0.0, atol=1e-25)


def test_without_legs_the_hedged_return_is_the_return() -> None:
    returns = np.random.default_rng(4).normal(0.01, 0.03, (80, 2))
    walk = walk_forward(returns, np.empty((80, 0)), None, WalkSchedule(window=24, hold=3))
    np.testing.assert_array_equal(walk.hedged, returns[24:])
    np.testing.assert_allclose(walk.promised_variance[0], returns[:24].var(axis=0, ddof=1), rtol=1e-12)
    report = report_walk(walk)
    np.testing.assert_allclose(report.delivered.effectiveness, 0.0, atol=1e-15)
    np.testing.assert_allclose(
        report.gap.drift + report.gap.residual_risk + report.gap.promised, report.gap.delivered
    )


def test_bad_input_is_refused_with_the_reason() -> None:
    rng = np.random.default_rng(4)
    returns, factors = rng.normal(0, 0.03, (80, 2)), rng.normal(0, 0.03, (80, 2))
    with pytest.raises(
        EstimationError, match=r"window of 3 periods is too short for 2 hedge legs.*at least 4"
    ):
        walk_forward(returns, factors, None, WalkSchedule(window=3))
    with pytest.raises(EstimationError, match=r"with 2 Dimson lags.*at least 10"):
        walk_forward(
            returns, factors, HedgeRule(beta=HedgeBeta.DIMSON, dimson_lags=2), WalkSchedule(window=9)
        )
    with pytest.raises(EstimationError, match="leaves nothing to hedge after a window of 80"):
        walk_forward(returns, factors, None, WalkSchedule(window=80))
    part = factors.copy()
    part[:25, 1] = np.nan
    with pytest.raises(EstimationError, match="Factor 'Mom' is missing in 25 of 80 periods"):
        walk_forward(returns, part, names=["MktRF", "Mom"])
    still = factors.copy()
    still[10:50, 0] = 0.0
    with pytest.raises(EstimationError, match="'MktRF' is constant"):
        walk_forward(returns, still, None, WalkSchedule(window=24), names=["MktRF", "Mom"])
    lost = returns.copy()
    lost[70, 1] = -1.0
    with pytest.raises(EstimationError, match="Asset 2 loses its whole value in period 71"):
        walk_forward(lost, factors)
    with pytest.raises(EstimationError, match="risk-free returns do not cover"):
        walk_forward(returns, factors, risk_free=np.zeros(79))
    for values in ({"window": 0}, {"hold": 0}, {"lag": -1}):
        with pytest.raises(SettingError, match="periods"):
            WalkSchedule(**values)
