"""Promise against delivery: every number again by a literal loop, and the split of the gap by simulation."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from tests.universes import INDUSTRIES

from soffit.errors import EstimationError
from soffit.estimate.regression import ErrorChoice
from soffit.hedge.delivery import report_walk
from soffit.hedge.walk_forward import WalkForward, WalkSchedule, walk_forward
from soffit.hedge.weights import HedgeRule
from soffit.settings import ErrorType, HedgeBeta, LagRule

FACTORS = ["MktRF", "SMB", "HML", "Mom"]


@pytest.fixture(scope="module")
def industries(french: pd.DataFrame) -> tuple[np.ndarray, np.ndarray]:
    return french[INDUSTRIES].sub(french["RF"], axis=0).to_numpy(), french[FACTORS].to_numpy()


@pytest.fixture(scope="module")
def walk(industries: tuple[np.ndarray, np.ndarray]) -> WalkForward:
    return walk_forward(*industries)


def test_twelve_industries_promise_against_delivery_by_a_loop(
    industries: tuple[np.ndarray, np.ndarray], walk: WalkForward
) -> None:
    # Real data: 1949-01 to 2017-03, 60-month windows, re-estimated monthly. All numbers again, one month at a time.
    returns, factors = industries
    report = report_walk(walk)
    for i in range(0, 12, 4):
        alphas, variances, shares, totals, hedged, estimation = [], [], [], [], [], []
        for t in range(60, len(returns)):
            y, x = returns[t - 60 : t, i], factors[t - 60 : t]
            fit = sm.OLS(y, sm.add_constant(x)).fit()
            alphas.append(fit.params[0])
            variances.append(fit.mse_resid)
            shares.append(fit.ssr / 59)
            totals.append(fit.centered_tss / 59)
            hedged.append(returns[t, i] - fit.params[1:] @ factors[t])
            apart = x - x.mean(axis=0)
            estimation.append(fit.mse_resid * factors[t] @ np.linalg.inv(apart.T @ apart) @ factors[t])
        raw = returns[60:, i]
        got = report.promised
        assert got.alpha[i] == pytest.approx(np.mean(alphas), abs=1e-10)
        assert got.volatility[i] == pytest.approx(np.sqrt(np.mean(variances)), abs=1e-10)
        assert got.effectiveness[i] == pytest.approx(1 - np.mean(shares) / np.mean(totals), abs=1e-10)
        assert got.appraisal[i] == pytest.approx(np.mean(alphas) / np.sqrt(np.mean(variances)), abs=1e-9)
        came = report.delivered
        assert came.mean[i] == pytest.approx(np.mean(hedged), abs=1e-10)
        assert came.volatility[i] == pytest.approx(np.std(hedged, ddof=1), abs=1e-10)
        assert came.effectiveness[i] == pytest.approx(1 - np.var(hedged) / np.var(raw), abs=1e-10)
        assert came.ratio[i] == pytest.approx(np.mean(hedged) / np.std(hedged, ddof=1), abs=1e-9)
        left = sm.OLS(np.array(hedged), sm.add_constant(factors[60:])).fit()
        assert came.alpha[i] == pytest.approx(left.params[0], abs=1e-10)
        assert came.alpha_error[i] == pytest.approx(left.bse[0], abs=1e-10)
        np.testing.assert_allclose(came.beta[i], left.params[1:], atol=1e-10)
        np.testing.assert_allclose(came.beta_error[i], left.bse[1:], atol=1e-10)
        assert came.sigma[i] == pytest.approx(np.sqrt(left.mse_resid), abs=1e-10)
        behind = sm.OLS(raw, sm.add_constant(factors[60:])).fit()
        assert report.hindsight.alpha[i] == pytest.approx(behind.params[0], abs=1e-10)
        assert report.hindsight.effectiveness[i] == pytest.approx(behind.rsquared, abs=1e-10)
        gap = report.gap
        assert gap.promised[i] == pytest.approx(np.mean(variances), abs=1e-12)
        assert gap.estimation[i] == pytest.approx(np.mean(estimation), abs=1e-12)
        blocks = np.array_split(np.arange(len(raw)), len(raw) // 30)
        after, excess = 0.0, 0.0
        for block in blocks:
            inside = sm.OLS(raw[block], sm.add_constant(factors[60:][block])).fit().mse_resid
            spread = ((np.array(hedged) - np.mean(hedged)) ** 2)[block].mean() * len(raw) / (len(raw) - 1)
            after += inside * len(block) / len(raw)
            excess += (spread - np.mean(np.array(estimation)[block]) - inside) * len(block) / len(raw)
        assert gap.residual_risk[i] == pytest.approx(after - np.mean(variances), abs=1e-12)
        assert gap.drift[i] == pytest.approx(excess, abs=1e-12)
        assert gap.blocks[i] == len(blocks)


def test_industries_deliver_less_than_they_promise(walk: WalkForward) -> None:
    # What Dahlgran (2009) and Fama and French (1997) lead one to expect: every industry's hedge removes less variance
    # than its windows promised, and most of the gap beyond estimation error is betas that wander.
    report = report_walk(walk)
    assert (report.delivered.effectiveness < report.promised.effectiveness).all()
    assert (report.gap.estimation > 0).all()
    assert ((report.gap.drift / report.gap.drift_error) > 2).sum() >= 8


@pytest.mark.parametrize(
    "rule",
    [HedgeRule(), HedgeRule(beta=HedgeBeta.VASICEK), HedgeRule(leg_cap=0.6)],
    ids=["plain", "Vasicek", "cap"],
)
@pytest.mark.parametrize("hold", [1, 12])
def test_the_parts_of_the_gap_add_up(
    industries: tuple[np.ndarray, np.ndarray], rule: HedgeRule, hold: int
) -> None:
    gap = report_walk(walk_forward(*industries, rule, WalkSchedule(hold=hold))).gap
    total = gap.promised + gap.residual_risk + gap.estimation + gap.drift + gap.holding + gap.rule
    np.testing.assert_allclose(total, gap.delivered, atol=1e-17)
    assert (gap.rule == 0).all() == rule.is_plain
    assert (gap.holding == 0).all() == (hold == 1)


@pytest.mark.simulation
@pytest.mark.parametrize("wander", [0.0, 0.03])
def test_drift_is_nothing_when_betas_are_constant_and_found_when_they_wander(wander: float) -> None:
    # Own simulation: T = 600, K = 2, 400 assets that share the factors; window 48.
    rng = np.random.default_rng(17)
    T, N = 600, 400
    factors = rng.normal(0.005, 0.04, (T, 2))
    betas = 0.8 + np.cumsum(rng.normal(0, wander, (T, N, 2)), axis=0)
    returns = np.einsum("tnk,tk->tn", betas, factors) + rng.normal(0, 0.03, (T, N))
    gap = report_walk(walk_forward(returns, factors, None, WalkSchedule(window=48))).gap
    error = gap.drift.std() / np.sqrt(N)
    if wander == 0.0:
        assert abs(gap.drift.mean()) < 4 * error
        assert abs(gap.residual_risk.mean()) < 4 * gap.residual_risk.std() / np.sqrt(N)
        # The prediction variance accounts for the whole gap.
        whole = gap.delivered - gap.promised
        assert gap.estimation.mean() == pytest.approx(
            whole.mean(), abs=4 * (whole - gap.estimation).std() / np.sqrt(N)
        )
        # And its standard error is of the right size.
        assert gap.drift_error.mean() == pytest.approx(gap.drift.std(), rel=0.3)
    else:
        assert gap.drift.mean() > 10 * error
        # Half a window of a random walk, 0.03² · 24 · 2 · 0.04² / 3 at least, whatever leaks into residual risk.
        assert gap.drift.mean() > 0.03**2 * 24 * 2 * 0.04**2 / 3


def test_assets_with_their_own_histories_are_reported_as_if_alone(
    industries: tuple[np.ndarray, np.ndarray],
) -> None:
    returns, factors = (values[:240] for values in industries)
    returns = returns.copy()
    returns[:100, 1] = np.nan
    returns[236:, 2] = np.nan
    returns[:, 3] = np.where(np.arange(240) < 239, returns[:, 3], np.nan)
    returns[:178, 4] = np.nan
    report = report_walk(walk_forward(returns, factors))
    assert report.short.tolist() == [False] * 4 + [True] + [False] * 7
    assert report.missing is not None
    assert "1 of 12 assets have fewer than 7 hedged periods" in report.missing.reason
    assert np.isnan(report.delivered.mean[4])
    late = report_walk(walk_forward(returns[100:, 1:2], factors[100:]))
    for name in ("mean", "volatility", "alpha", "sigma", "theta2"):
        own, alone = getattr(report.delivered, name)[1], getattr(late.delivered, name)[0]
        assert own == pytest.approx(alone, abs=1e-13)
    assert report.gap.drift[1] == pytest.approx(late.gap.drift[0], abs=1e-15)
    assert report.delivered.periods.tolist()[:5] == [180, 80, 176, 179, 0]


def test_robust_errors_of_the_residual_exposure(walk: WalkForward) -> None:
    report = report_walk(walk, choice=ErrorChoice(ErrorType.HAC, LagRule.FIXED, 6))
    fit = sm.OLS(walk.hedged[:, 3], sm.add_constant(walk.factors)).fit(
        cov_type="HAC", cov_kwds={"maxlags": 6, "use_correction": True}
    )
    assert report.delivered.alpha_error[3] == pytest.approx(fit.bse[0], rel=1e-9)


def test_too_few_hedged_periods_are_refused_or_leave_the_error_out(
    industries: tuple[np.ndarray, np.ndarray],
) -> None:
    returns, factors = industries
    with pytest.raises(EstimationError, match="No asset has 7 hedged periods"):
        report_walk(walk_forward(returns[:66], factors[:66]))
    brief = report_walk(walk_forward(returns[:100], factors[:100]))
    assert np.isnan(brief.gap.drift_error).all()
    assert np.isfinite(brief.gap.drift).all()
    with pytest.raises(EstimationError, match="Blocks of 4 periods"):
        report_walk(walk_forward(returns[:100], factors[:100]), block=4)
