"""Two-pass prices of risk against literal loops and linearmodels, with invariances and refusals."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from linearmodels.asset_pricing import LinearFactorModel
from linearmodels.panel import FamaMacBeth
from numpy.testing import assert_allclose

from soffit.errors import EstimationError
from soffit.estimate.cross_section import PremiumError, TwoPass, two_pass
from soffit.estimate.statistic import Family, NotApplicable, TestStatistic
from soffit.settings import Reference, SecondPass

FM, NW, SHANKEN, ROBUST = PremiumError


def market(
    seed: int, T: int = 120, N: int = 8, K: int = 2, alpha: float = 0.002
) -> tuple[np.ndarray, np.ndarray]:
    draw = np.random.default_rng(seed)
    F = 0.005 + 0.04 * draw.normal(size=(T, K))
    B = draw.normal(0.9, 0.5, size=(N, K))
    mix = np.eye(N) + 0.3 * draw.normal(size=(N, N))
    R = alpha * draw.normal(size=N) + F @ B.T + 0.03 * draw.normal(size=(T, N)) @ mix
    return R, F


def first_pass(R: np.ndarray, F: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Betas (N, K) and residuals (T, N), asset by asset."""
    X = np.column_stack([np.ones(len(F)), F])
    coefficients = [np.linalg.solve(X.T @ X, X.T @ r) for r in R.T]
    residuals = np.column_stack([r - X @ b for r, b in zip(R.T, coefficients, strict=True)])
    return np.array([b[1:] for b in coefficients]), residuals


def weight_matrix(kind: SecondPass, R: np.ndarray, E: np.ndarray) -> np.ndarray:
    if kind is SecondPass.OLS:
        return np.eye(R.shape[1])
    if kind is SecondPass.WLS:
        return np.diag(1.0 / (E**2).mean(axis=0))
    return np.linalg.inv(np.cov(R.T, bias=True))


def by_loop(
    R: np.ndarray, F: np.ndarray, kind: SecondPass, constant: bool, lags: int
) -> dict[str, np.ndarray]:
    """The whole two-pass estimate as the sources write it, period by period and with every matrix formed."""
    T, N = R.shape
    B, E = first_pass(R, F)
    Z = np.column_stack([np.ones(N), B]) if constant else B
    W = weight_matrix(kind, R, E)
    A = np.linalg.inv(Z.T @ W @ Z) @ Z.T @ W
    slopes = np.array([A @ R[t] for t in range(T)])
    premia = sum(slopes) / T
    fm = sum(np.outer(s - premia, s - premia) for s in slopes) / (T - 1) / T
    nw = sum(np.outer(s - premia, s - premia) for s in slopes) / T
    for j in range(1, lags + 1):
        gamma = sum(np.outer(slopes[t] - premia, slopes[t - j] - premia) for t in range(j, T)) / T
        nw = nw + (1 - j / (lags + 1)) * (gamma + gamma.T)
    sigma, omega = E.T @ E / T, np.cov(F.T, bias=True).reshape(F.shape[1], -1)
    price = premia[int(constant) :]
    c = price @ np.linalg.inv(omega) @ price
    padded = np.zeros_like(fm)
    padded[int(constant) :, int(constant) :] = omega
    shanken = ((1 + c) * A @ sigma @ A.T + padded) / T
    return {
        "premia": premia,
        "slopes": slopes,
        "fm": fm,
        "nw": nw / T,
        "shanken": shanken,
        "errors": R.mean(axis=0) - Z @ premia,
        "c": c,
    }


def covariance(result: TwoPass, kind: PremiumError) -> np.ndarray:
    found = result.covariances[kind]
    assert not isinstance(found, NotApplicable)
    return found


@pytest.mark.parametrize("constant", [True, False])
@pytest.mark.parametrize("kind", list(SecondPass))
@pytest.mark.parametrize("K", [1, 3])
def test_full_sample_betas_equal_a_loop(kind: SecondPass, constant: bool, K: int) -> None:
    R, F = market(1, K=K)
    got, want = two_pass(R, F, second_pass=kind, constant=constant, lags=3), by_loop(R, F, kind, constant, 3)
    assert_allclose(got.premia, want["premia"], rtol=1e-9, atol=1e-14)
    assert_allclose(got.slopes, want["slopes"], rtol=1e-9, atol=1e-13)
    assert_allclose(covariance(got, FM), want["fm"], rtol=1e-9, atol=1e-16)
    assert_allclose(covariance(got, NW), want["nw"], rtol=1e-9, atol=1e-16)
    assert_allclose(covariance(got, SHANKEN), want["shanken"], rtol=1e-9, atol=1e-16)
    assert_allclose(got.pricing_errors, want["errors"], rtol=1e-8, atol=1e-14)
    assert_allclose(got.fitted + got.pricing_errors, R.mean(axis=0), atol=1e-15)
    assert_allclose(got.inflation, want["c"], rtol=1e-9)


@pytest.mark.parametrize("constant", [True, False])
@pytest.mark.parametrize("kind", list(SecondPass))
def test_rolling_betas_equal_a_loop(kind: SecondPass, constant: bool) -> None:
    R, F = market(2)
    got = two_pass(R, F, second_pass=kind, constant=constant, window=40, lags=2)
    slopes, errors = [], []
    for t in range(40, 120):
        past_r, past_f = R[t - 40 : t], F[t - 40 : t]
        B, E = first_pass(past_r, past_f)
        Z = np.column_stack([np.ones(8), B]) if constant else B
        W = weight_matrix(kind, past_r, E)
        slopes.append(np.linalg.inv(Z.T @ W @ Z) @ Z.T @ W @ R[t])
        errors.append(R[t] - Z @ slopes[-1])
    slopes, errors = np.array(slopes), np.array(errors)
    assert got.first == 40
    assert got.periods == 80
    assert_allclose(got.slopes, slopes, rtol=1e-8, atol=1e-12)
    assert_allclose(got.pricing_errors, errors.mean(axis=0), rtol=1e-8, atol=1e-13)
    assert_allclose(covariance(got, FM), np.cov(slopes.T) / 80, rtol=1e-8)
    assert_allclose(got.factor_means, F[40:].mean(axis=0))
    target = R[40:].mean(axis=0)
    total = ((target - target.mean() * constant) ** 2).sum()
    assert_allclose(got.r2_ols, 1 - (errors.mean(axis=0) ** 2).sum() / total, rtol=1e-8)


@pytest.mark.parametrize("kind", list(SecondPass))
def test_rolling_betas_never_see_the_month_they_price_or_later_ones(kind: SecondPass) -> None:
    R, F = market(3)
    jumped = R.copy()
    jumped[90:, 2] += 10.0
    before, after = (two_pass(r, F, second_pass=kind, window=36) for r in (R, jumped))
    assert np.array_equal(before.slopes[: 90 - 36], after.slopes[: 90 - 36])
    # Month 90 itself is priced with betas from before the jump: its own return moves, the weights on it do not.
    spike = R.copy()
    spike[90] += np.linspace(0.0, 1.0, 8)
    twice = R.copy()
    twice[90] += 2 * np.linspace(0.0, 1.0, 8)
    one, two = (
        two_pass(r, F, second_pass=kind, window=36).slopes[54] - before.slopes[54] for r in (spike, twice)
    )
    assert np.abs(one).max() > 0.01
    assert_allclose(two, 2 * one, rtol=1e-9)


@pytest.mark.parametrize("constant", [True, False])
@pytest.mark.parametrize("generalised", [True, False])
def test_premia_equal_linearmodels_two_pass(constant: bool, generalised: bool) -> None:
    """Independent library: linearmodels LinearFactorModel, whose OLS GMM errors are misspecification-robust."""
    R, F = market(4)
    sigma = np.cov(R.T, bias=True) if generalised else None
    kind = SecondPass.GLS if generalised else SecondPass.OLS
    got = two_pass(R, F, second_pass=kind, constant=constant)
    fit = LinearFactorModel(R, F, risk_free=constant, sigma=sigma).fit(debiased=False)
    assert_allclose(got.premia, fit.risk_premia.to_numpy(), rtol=1e-8)
    assert_allclose(got.pricing_errors, fit.alphas.to_numpy(), rtol=1e-7, atol=1e-12)
    assert_allclose(got.first_pass_r2, fit.rsquared, rtol=1e-10)
    if not generalised:
        assert_allclose(got.standard_errors(ROBUST), fit.risk_premia_se.to_numpy(), rtol=1e-7)


@pytest.mark.parametrize("constant", [True, False])
def test_errors_equal_linearmodels_fama_macbeth(constant: bool) -> None:
    """Independent library: linearmodels FamaMacBeth with full-sample betas as regressors."""
    R, F = market(5)
    T, N = R.shape
    B, _ = first_pass(R, F)
    index = pd.MultiIndex.from_product([range(N), range(T)])
    X = pd.DataFrame(np.repeat(B, T, axis=0), index=index, columns=["a", "b"])
    if constant:
        X.insert(0, "const", 1.0)
    model = FamaMacBeth(pd.DataFrame({"y": R.T.ravel()}, index=index), X)
    got = two_pass(R, F, constant=constant, lags=4)
    plain, kernel = model.fit(), model.fit(cov_type="kernel", bandwidth=4, debiased=False)
    assert_allclose(got.premia, plain.params, rtol=1e-8)
    assert_allclose(got.standard_errors(FM), plain.std_errors, rtol=1e-8)
    assert_allclose(got.standard_errors(NW), kernel.std_errors, rtol=1e-8)
    tests = got.tests(FM)
    assert_allclose([t.value for t in tests], plain.tstats, rtol=1e-8)
    assert_allclose([t.pvalue for t in tests], plain.pvalues, rtol=1e-6)
    assert {t.distribution.label for t in tests} == {"t(119)"}


def test_a_traded_factor_among_the_assets_is_priced_at_its_mean_by_gls() -> None:
    """Algebra (Shanken 1992): GLS premia of traded factors that are test assets equal the factor means."""
    R, F = market(6)
    got = two_pass(np.column_stack([R, F]), F, second_pass=SecondPass.GLS, constant=False)
    assert_allclose(got.prices, F.mean(axis=0), rtol=1e-9)
    assert_allclose(got.gaps, 0.0, atol=1e-15)
    assert_allclose(got.standard_errors(FM), F.std(axis=0, ddof=1) / np.sqrt(120), rtol=1e-9)


@pytest.mark.parametrize("kind", list(SecondPass))
def test_gap_between_price_and_factor_mean(kind: SecondPass) -> None:
    R, F = market(7)
    got = two_pass(R, F, second_pass=kind, lags=3)
    series = got.slopes[:, 1:] - F
    assert_allclose(got.gaps, series.mean(axis=0))
    assert_allclose(got.gap_errors(FM), series.std(axis=0, ddof=1) / np.sqrt(120))
    B, E = first_pass(R, F)
    Z, W = np.column_stack([np.ones(8), B]), weight_matrix(kind, R, E)
    A = np.linalg.inv(Z.T @ W @ Z) @ Z.T @ W
    expected = ((1 + got.inflation) * A @ (E.T @ E / 120) @ A.T / 120)[1:, 1:]
    assert_allclose(got.gap_errors(SHANKEN), np.sqrt(np.diag(expected)), rtol=1e-8)
    joint = got.gap_test(SHANKEN)
    assert_allclose(joint.value, got.gaps @ np.linalg.solve(expected, got.gaps), rtol=1e-8)
    assert joint.distribution.df == (2.0,)
    assert_allclose(got.gap_tests(SHANKEN)[0].value, got.gaps[0] / np.sqrt(expected[0, 0]), rtol=1e-8)


@given(st.integers(0, 10_000), st.floats(1e-3, 1e3), st.sampled_from(list(SecondPass)), st.booleans())
@settings(max_examples=40, deadline=None)
def test_rescaling_a_factor_rescales_its_price_and_nothing_else(
    seed: int, scale: float, kind: SecondPass, constant: bool
) -> None:
    R, F = market(seed, T=60)
    plain, other = (
        two_pass(R, f, second_pass=kind, constant=constant) for f in (F, F * np.array([scale, 1.0]))
    )
    unit = np.array([1.0] * constant + [scale, 1.0])
    assert_allclose(other.premia, plain.premia * unit, rtol=1e-6, atol=1e-12)
    for error in PremiumError:
        assert_allclose(other.standard_errors(error), plain.standard_errors(error) * unit, rtol=1e-6)
    assert_allclose(other.pricing_errors, plain.pricing_errors, atol=1e-10)
    assert_allclose(other.pricing_chi2.value, plain.pricing_chi2.value, rtol=1e-6)
    assert_allclose([other.r2_ols, other.r2_gls], [plain.r2_ols, plain.r2_gls], rtol=1e-6)


@given(st.integers(0, 10_000), st.sampled_from(list(SecondPass)))
@settings(max_examples=25, deadline=None)
def test_the_order_of_assets_and_the_unit_of_returns_do_not_matter(seed: int, kind: SecondPass) -> None:
    R, F = market(seed, T=60)
    order = np.random.default_rng(seed).permutation(8)
    plain, other = two_pass(R, F, second_pass=kind), two_pass(R[:, order] * 100, F * 100, second_pass=kind)
    assert_allclose(other.premia, plain.premia * 100, rtol=1e-7, atol=1e-10)
    assert_allclose(other.pricing_errors, plain.pricing_errors[order] * 100, rtol=1e-6, atol=1e-10)
    assert_allclose(other.pricing_f.pvalue, plain.pricing_f.pvalue, rtol=1e-6)
    for error in PremiumError:
        assert_allclose(other.standard_errors(error), plain.standard_errors(error) * 100, rtol=1e-6)


@given(st.integers(0, 10_000))
@settings(max_examples=25, deadline=None)
def test_gls_premia_do_not_depend_on_how_assets_are_packaged(seed: int) -> None:
    R, F = market(seed, T=60)
    mix = np.linalg.qr(np.random.default_rng(seed).normal(size=(8, 8)))[0] + 0.1 * np.eye(8)
    plain, other = (two_pass(r, F, second_pass=SecondPass.GLS, constant=False) for r in (R, R @ mix))
    assert_allclose(other.premia, plain.premia, rtol=1e-6)
    assert_allclose(other.pricing_chi2.value, plain.pricing_chi2.value, rtol=1e-6)


def test_reference_distributions() -> None:
    R, F = market(8)
    got = two_pass(R, F)
    assert all(t.distribution.family is Family.NORMAL for t in got.tests(SHANKEN))
    assert all(t.distribution.df == (119.0,) for t in got.tests(SHANKEN, Reference.STUDENT_T))
    for test, premium, error in zip(got.tests(ROBUST), got.premia, got.standard_errors(ROBUST), strict=True):
        assert isinstance(test, TestStatistic)
        assert_allclose(test.value, premium / error)
    assert got.lags == 4  # floor(4 (120/100)^(2/9))


def test_what_rolling_betas_do_not_have_says_why() -> None:
    R, F = market(9)
    got = two_pass(R, F, window=30)
    for missing in (
        got.pricing_chi2,
        got.pricing_f,
        got.r2_gls,
        got.covariances[SHANKEN],
        got.tests(ROBUST)[0],
    ):
        assert isinstance(missing, NotApplicable)
        assert "full-sample betas" in missing.reason
    assert isinstance(got.gap_test(SHANKEN), NotApplicable)
    assert isinstance(got.standard_errors(SHANKEN), NotApplicable)
    assert isinstance(got.gap_errors(ROBUST), NotApplicable)
    assert isinstance(got.gap_tests(ROBUST)[0], NotApplicable)
    assert isinstance(got.gap_test(NW), TestStatistic)


@pytest.mark.parametrize(("N", "K", "constant"), [(2, 2, True), (1, 2, False), (1, 1, True)])
def test_too_few_assets_are_refused(N: int, K: int, constant: bool) -> None:
    R, F = market(10, N=max(N, 2), K=K)
    with pytest.raises(EstimationError, match="add test assets"):
        two_pass(R[:, :N], F, constant=constant)


def test_as_many_assets_as_premia_fit_exactly() -> None:
    R, F = market(11, N=3)
    got = two_pass(R, F)
    assert_allclose(got.pricing_errors, 0.0, atol=1e-15)
    assert_allclose([got.r2_ols, got.r2_gls], 1.0)
    assert isinstance(got.pricing_chi2, NotApplicable)
    assert "priced exactly" in got.pricing_chi2.reason


def test_one_asset_one_factor_without_constant() -> None:
    R, F = market(12, N=2, K=1)
    got = two_pass(R[:, :1], F, constant=False)
    B, _ = first_pass(R[:, :1], F)
    assert_allclose(got.premia, R[:, 0].mean() / B[0])


def test_more_assets_than_periods() -> None:
    R, F = market(13, T=40, N=60)
    got = two_pass(R, F)
    assert np.isfinite(got.standard_errors(SHANKEN)).all()
    assert np.isfinite(two_pass(R, F, second_pass=SecondPass.WLS).premia).all()
    for missing in (got.r2_gls, got.pricing_chi2):
        assert isinstance(missing, NotApplicable)
        assert "too many for 40 periods" in missing.reason
    with pytest.raises(EstimationError, match="use OLS or WLS, fewer assets"):
        two_pass(R, F, second_pass=SecondPass.GLS)
    with pytest.raises(EstimationError, match="a longer window"):
        two_pass(R[:, :15], F, second_pass=SecondPass.GLS, window=12)


def test_ten_thousand_assets_form_no_square_matrix() -> None:
    draw = np.random.default_rng(14)
    F = 0.04 * draw.normal(size=(60, 2))
    R = F @ draw.normal(1.0, 0.5, size=(2, 10_000)) + 0.1 * draw.normal(size=(60, 10_000))
    got = two_pass(R, F, second_pass=SecondPass.WLS)
    assert np.isfinite(got.standard_errors(ROBUST)).all()
    assert two_pass(R, F, window=30).periods == 30


@pytest.mark.parametrize("window", [None, 30])
def test_betas_that_are_all_alike_name_the_factor(window: int | None) -> None:
    draw = np.random.default_rng(15)
    F = 0.04 * draw.normal(size=(60, 2))
    noise = draw.normal(size=(60, 6))
    R = F @ np.array([draw.normal(1.0, 0.5, 6), np.full(6, 0.7)]) + 0.02 * (
        noise - _explained(noise, F)
    )  # residuals exactly orthogonal to the factors, so the betas on the second are exactly alike
    if window is None:
        with pytest.raises(
            EstimationError, match=r"betas on 'SMB' are the same for every asset.*constant out"
        ):
            two_pass(R, F, names=("Mkt", "SMB"))
        assert np.isfinite(two_pass(R, F, constant=False).premia).all()
    else:
        exact = F @ np.array([draw.normal(1.0, 0.5, 6), np.full(6, 0.7)])
        with pytest.raises(EstimationError, match="in cross-section 1"):
            two_pass(exact, F, window=window)


def _explained(y: np.ndarray, F: np.ndarray) -> np.ndarray:
    X = np.column_stack([np.ones(len(F)), F])
    return X @ np.linalg.lstsq(X, y, rcond=None)[0]


def test_a_replicated_asset_has_no_wls_weight() -> None:
    R, F = market(16)
    R[:, 3] = F @ np.array([0.5, 0.5])
    with pytest.raises(EstimationError, match="Asset 4 is replicated"):
        two_pass(R, F, second_pass=SecondPass.WLS)
    assert np.isfinite(two_pass(R, F, second_pass=SecondPass.GLS).premia).all()


def test_a_repeated_asset_stops_gls_only() -> None:
    R, F = market(17)
    R[:, 3] = R[:, 2]
    with pytest.raises(EstimationError, match="repeats a combination"):
        two_pass(R, F, second_pass=SecondPass.GLS)
    got = two_pass(R, F)
    assert isinstance(got.r2_gls, NotApplicable)
    assert isinstance(got.pricing_chi2, NotApplicable)


def test_other_refusals_say_what_to_do() -> None:
    R, F = market(18)
    with pytest.raises(EstimationError, match="shorter window"):
        two_pass(R, F, window=119)
    with pytest.raises(EstimationError, match="at least one factor"):
        two_pass(R, F[:, :0])
    with pytest.raises(EstimationError, match="same number of rows"):
        two_pass(R[1:], F)
    with pytest.raises(EstimationError, match="'B' is constant or a combination"):
        two_pass(R, F[:, [0, 0]], names=("A", "B"))
    gap = R.copy()
    gap[4, 4] = np.nan
    with pytest.raises(EstimationError, match="missing"):
        two_pass(gap, F)
    with pytest.raises(EstimationError, match="Newey-West lags"):
        two_pass(R, F, lags=120)


def test_mean_returns_that_do_not_differ_leave_no_r2() -> None:
    R, F = market(19)
    same = R - R.mean(axis=0) + 0.004
    got = two_pass(same, F)
    assert isinstance(got.r2_ols, NotApplicable)
    assert isinstance(got.r2_gls, NotApplicable)
    assert two_pass(same, F, constant=False).r2_ols >= 0.0
