"""Rolling and expanding regressions against a loop over windows, and against statsmodels."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from statsmodels.regression.rolling import RollingOLS

from soffit.errors import EstimationError
from soffit.estimate.rolling import rolling_betas


def market(seed: int, T: int = 90, N: int = 4, K: int = 2) -> tuple[np.ndarray, np.ndarray]:
    draw = np.random.default_rng(seed)
    F = 0.004 + 0.04 * draw.normal(size=(T, K))
    R = F @ draw.normal(0.8, 0.4, size=(K, N)) + 0.03 * draw.normal(size=(T, N)) + 0.001
    return R, F


def by_loop(R: np.ndarray, F: np.ndarray, start: int, stop: int) -> dict[str, np.ndarray]:
    """Normal equations of one window, asset by asset, as a textbook writes them."""
    y, X = R[start:stop], np.column_stack([np.ones(stop - start), F[start:stop]])
    inverse = np.linalg.inv(X.T @ X)
    rows = []
    for column in y.T:
        b = inverse @ X.T @ column
        e = column - X @ b
        s = np.sqrt(e @ e / (len(column) - X.shape[1]))
        total = column - column.mean()
        rows.append((b[0], b[1:], s, 1 - e @ e / (total @ total), s * np.sqrt(np.diag(inverse))))
    alpha, beta, sigma, r2, errors = (np.array(part) for part in zip(*rows, strict=True))
    return {"alpha": alpha, "beta": beta, "sigma": sigma, "r2": r2, "errors": errors}


@pytest.mark.parametrize("expanding", [False, True])
@pytest.mark.parametrize("step", [1, 7])
@pytest.mark.parametrize("K", [1, 3])
def test_each_window_equals_a_loop(expanding: bool, step: int, K: int) -> None:
    R, F = market(1, K=K)
    got = rolling_betas(R, F, 24, expanding=expanding, step=step)
    assert list(got.ends) == list(range(23, 90, step))
    for w, end in enumerate(got.ends):
        start = 0 if expanding else end - 23
        want = by_loop(R, F, start, end + 1)
        assert got.periods[w] == end + 1 - start
        for name in ("alpha", "beta", "sigma", "r2"):
            assert_allclose(getattr(got, name)[w], want[name], rtol=1e-10, atol=1e-13)
        assert_allclose(got.alpha_error[w], want["errors"][:, 0], rtol=1e-10)
        assert_allclose(got.beta_error[w], want["errors"][:, 1:], rtol=1e-10)
        assert_allclose(got.appraisal[w], want["alpha"] / want["sigma"], rtol=1e-9)


def test_rolling_equals_statsmodels_rolling_ols() -> None:
    """Independent library: statsmodels RollingOLS."""
    R, F = market(2, T=200)
    got = rolling_betas(R, F, 60)
    X = np.column_stack([np.ones(200), F])
    for asset in range(R.shape[1]):
        fit = RollingOLS(R[:, asset], X, window=60).fit()
        assert_allclose(got.alpha[:, asset], fit.params[59:, 0], rtol=1e-8, atol=1e-12)
        assert_allclose(got.beta[:, asset], fit.params[59:, 1:], rtol=1e-8)
        assert_allclose(got.beta_error[:, asset], fit.bse[59:, 1:], rtol=1e-8)


def test_large_means_do_not_cost_digits() -> None:
    """A level a million times the movement: running sums would lose twelve digits, the windows do not."""
    R, F = market(3)
    plain, shifted = rolling_betas(R, F, 30), rolling_betas(R + 1e4, F - 1e4, 30)
    assert_allclose(shifted.beta, plain.beta, rtol=1e-7)
    assert_allclose(shifted.sigma, plain.sigma, rtol=1e-7)


@given(st.integers(0, 10_000), st.floats(0.01, 100.0))
@settings(max_examples=25, deadline=None)
def test_rescaling_a_factor_rescales_its_beta_alone(seed: int, scale: float) -> None:
    R, F = market(seed, T=40)
    plain = rolling_betas(R, F, 20)
    other = rolling_betas(R, F * np.array([scale, 1.0]), 20)
    assert_allclose(other.beta[:, :, 0] * scale, plain.beta[:, :, 0], rtol=1e-9, atol=1e-12)
    assert_allclose(other.beta[:, :, 1], plain.beta[:, :, 1], rtol=1e-9, atol=1e-12)
    assert_allclose(other.sigma, plain.sigma, rtol=1e-9)


@pytest.mark.parametrize("expanding", [False, True])
def test_what_comes_after_a_window_does_not_move_it(expanding: bool) -> None:
    R, F = market(4)
    jumped_r, jumped_f = R.copy(), F.copy()
    jumped_r[70:] += 5.0
    jumped_f[70:] -= 3.0
    before, after = (rolling_betas(r, f, 24, expanding=expanding) for r, f in ((R, F), (jumped_r, jumped_f)))
    early = before.ends < 70
    for name in ("alpha", "beta", "sigma", "r2"):
        assert np.array_equal(getattr(before, name)[early], getattr(after, name)[early])
        assert not np.allclose(getattr(before, name)[~early], getattr(after, name)[~early])


@pytest.mark.parametrize("expanding", [False, True])
def test_a_gap_blanks_the_windows_that_hold_it_and_no_other(expanding: bool) -> None:
    R, F = market(5)
    gappy = R.copy()
    gappy[50, 1] = np.nan
    got, whole = (
        rolling_betas(gappy, F, 24, expanding=expanding),
        rolling_betas(R, F, 24, expanding=expanding),
    )
    holds = (got.ends >= 50) if expanding else (got.ends >= 50) & (got.ends < 74)
    assert np.array_equal(~got.complete[:, 1], holds)
    assert got.complete[:, [0, 2, 3]].all()
    assert np.isnan(got.beta[holds, 1]).all()
    assert np.isnan(got.sigma[holds, 1]).all()
    assert_allclose(got.beta[~holds], whole.beta[~holds])


@pytest.mark.parametrize("expanding", [False, True])
def test_a_replicated_asset_has_no_residual_and_a_still_one_no_r2(expanding: bool) -> None:
    R, F = market(6)
    R[:, 0] = 0.001 + F @ np.array([0.5, 1.5])
    R[:, 1] = 0.003
    got = rolling_betas(R, F, 24, expanding=expanding)
    assert_allclose(got.sigma[:, :2], 0.0, atol=1e-15)
    assert_allclose(got.r2[:, 0], 1.0)
    assert np.isnan(got.r2[:, 1]).all()
    assert (got.sigma[:, 2:] > 0.01).all()


def test_one_asset_no_factor_and_the_whole_sample() -> None:
    R, F = market(7)
    mean = rolling_betas(R[:, :1], F[:, :0], 12)
    assert_allclose(mean.alpha[5, 0], R[5:17, 0].mean())
    assert_allclose(mean.sigma[5, 0], R[5:17, 0].std(ddof=1))
    assert mean.beta.shape == (79, 1, 0)
    assert rolling_betas(R, F, 90).count == 1


def test_refusals_say_what_to_do() -> None:
    R, F = market(8)
    with pytest.raises(EstimationError, match="window of 3 periods"):
        rolling_betas(R, F, 3)
    with pytest.raises(EstimationError, match="window of 91 periods"):
        rolling_betas(R, F, 91)
    with pytest.raises(EstimationError, match="step of 0"):
        rolling_betas(R, F, 24, step=0)
    with pytest.raises(EstimationError, match="same number of rows"):
        rolling_betas(R[1:], F, 24)
    gap = F.copy()
    gap[3, 0] = np.nan
    with pytest.raises(EstimationError, match="factor value is missing"):
        rolling_betas(R, gap, 24)


@pytest.mark.parametrize("expanding", [False, True])
def test_a_factor_that_stands_still_in_one_window_is_named(expanding: bool) -> None:
    R, F = market(9)
    still = F.copy()
    still[:30, 1] = 0.01
    with pytest.raises(EstimationError, match="'SMB' is constant or a combination"):
        rolling_betas(R, still, 24, expanding=expanding, names=("Mkt", "SMB"))
