"""Noncentral t and F: tails against 30-digit integration and central cases, inversions against their definition."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from soffit.errors import InputError
from soffit.estimate.noncentral import (
    ncf_cdf,
    ncf_interval,
    ncf_lambda_at,
    ncf_sf,
    nct_abs_sf,
    nct_cdf,
    nct_interval,
    nct_sf,
)
from soffit.estimate.regression import regress

# t, df, noncentrality, the smaller tail, its probability: E[Φ(a W + b)] by mpmath.quad at 30 digits (see
# _by_integration below, which recomputes a few of them). Independent computation, evidence A.
TAILS = [
    (0.7, 5, 0, "sf", 0.257574474157408),
    (0.7, 5, 6, "cdf", 9.96155046903045e-8),
    (2.5, 5, 1.5, "sf", 0.24524375649159),
    (2.5, 5, 38, "cdf", 5.8929621935239e-137),
    (8, 5, 1.5, "sf", 0.00435633049755278),
    (8, 5, 38, "cdf", 4.80313734787665e-21),
    (60, 5, 0, "sf", 1.21681887949919e-8),
    (60, 5, 1.5, "sf", 2.43025516434137e-7),
    (60, 5, 6, "sf", 3.74662998571439e-5),
    (60, 5, 38, "sf", 0.152007370640217),
    (60, 5, 100, "cdf", 0.01642205836946),
    (0.7, 20, 1.5, "cdf", 0.210739319706997),
    (2.5, 20, 0, "sf", 0.0106167727195662),
    (2.5, 20, 6, "cdf", 0.000530484771630658),
    (8, 20, 0, "sf", 5.82831413574426e-8),
    (8, 20, 6, "sf", 0.117324707805226),
    (60, 20, 0, "sf", 2.34032579967847e-24),
    (60, 20, 6, "sf", 9.53106388652731e-16),
    (60, 20, 100, "cdf", 3.63491146463078e-5),
    (0.7, 57, 1.5, "cdf", 0.21146391410863),
    (2.5, 57, 0, "sf", 0.0076605685509736),
    (2.5, 57, 6, "cdf", 0.000316699668533819),
    (8, 57, 0, "sf", 3.43627401624187e-11),
    (8, 57, 6, "sf", 0.0571836820792647),
    (60, 57, 0, "sf", 1.65095299779895e-53),
    (60, 57, 6, "sf", 2.17624527221616e-37),
    (60, 57, 100, "cdf", 3.00465056714635e-11),
    (0.7, 240, 1.5, "cdf", 0.211762446363459),
    (2.5, 240, 0, "sf", 0.00654393938657984),
    (2.5, 240, 6, "cdf", 0.000250781983015169),
    (8, 240, 0, "sf", 2.64684599294354e-14),
    (8, 240, 6, "sf", 0.0306217153960198),
    (60, 240, 0, "sf", 8.50842040401821e-147),
    (60, 240, 6, "sf", 1.38410224402552e-111),
    (60, 240, 100, "cdf", 3.63446890188456e-38),
    (0.7, 817, 1.5, "cdf", 0.211828095107865),
    (2.5, 817, 0, "sf", 0.00630717058324456),
    (2.5, 817, 6, "cdf", 0.000237849199293969),
    (8, 817, 0, "sf", 2.12613670864074e-15),
    (8, 817, 6, "sf", 0.0250187905278503),
    (60, 817, 6, "sf", 3.52803584660399e-239),
    (60, 817, 100, "cdf", 6.91763018046876e-102),
    (0.7, 5000, 1.5, "cdf", 0.211850937310718),
    (2.5, 5000, 0, "sf", 0.00622555809986057),
    (2.5, 5000, 6, "cdf", 0.000233475721647112),
    (8, 5000, 0, "sf", 7.66993594345773e-16),
    (8, 5000, 6, "sf", 0.0231178781298428),
    (60, 5000, 38, "sf", 2.46393347658824e-80),
    (0.7, 20000, 0, "sf", 0.241967723195148),
    (0.7, 20000, 6, "cdf", 5.79088610520756e-8),
    (2.5, 20000, 1.5, "sf", 0.158681717837333),
    (2.5, 20000, 38, "cdf", 2.70933613135902e-276),
    (8, 20000, 1.5, "sf", 4.15971499921828e-11),
    (8, 20000, 38, "cdf", 1.00611101087075e-197),
    (60, 20000, 38, "sf", 6.03806191915105e-99),
]

# F, df1, df2, noncentrality, upper and lower tail: Poisson mixture by mpmath at 60 digits. Evidence A.
F_TAILS = [
    (2.5, 5, 100, 5, 0.290496744305078, 0.709503255694922),
    (1.0, 3, 36, 12.5, 0.985075007276322, 0.0149249927236782),
    (6.0, 12, 800, 30, 0.0157248046272459, 0.984275195372754),
    (0.2, 25, 300, 60, 1.0, 1.13647475759252e-16),
    (12.0, 1, 15, 40, 0.992828251329863, 0.00717174867013683),
    (3.3, 400, 60, 200, 0.000149011417045906, 0.999850988582954),
]


def _by_integration(t: float, df: int, delta: float, tail: str) -> float:
    slope, start = (-t, delta) if tail == "sf" else (t, -delta)
    half = mpmath.mpf(df) / 2
    constant = mpmath.log(2) + half * mpmath.log(half) - mpmath.loggamma(half)

    def integrand(w: mpmath.mpf) -> mpmath.mpf:
        density = mpmath.exp(constant + (df - 1) * mpmath.log(w) - half * w * w)
        return density * mpmath.ncdf(slope * w + start)

    spread = 1 / np.sqrt(2 * df)
    edges = [max(1 + k * spread, 1e-12) for k in range(-30, 31, 2)]
    # The quadrature stops at an absolute error of 1e-30: good for tails that are not deep.
    with mpmath.workdps(30):
        return float(mpmath.quad(integrand, sorted({1e-12, *edges}), maxdegree=6))


@pytest.mark.parametrize(("t", "df", "delta", "tail", "expected"), TAILS)
def test_noncentral_t_tails_keep_their_digits(
    t: float, df: int, delta: float, tail: str, expected: float
) -> None:
    value = (nct_sf if tail == "sf" else nct_cdf)(t, df, delta)
    np.testing.assert_allclose(value, expected, rtol=1e-10)


@pytest.mark.parametrize(("t", "df", "delta", "tail"), [(2.5, 57, 6.0, "cdf"), (8.0, 817, 1.5, "sf")])
def test_typed_in_tails_are_reproducible(t: float, df: int, delta: float, tail: str) -> None:
    value = (nct_sf if tail == "sf" else nct_cdf)(t, df, delta)
    np.testing.assert_allclose(value, _by_integration(t, df, delta, tail), rtol=1e-10)


def test_central_t_is_student() -> None:
    t, df = np.meshgrid([-60.0, -8.0, -1.0, 0.0, 2.0, 40.0], [1.0, 2.0, 5.0, 60.0, 817.0, 20000.0])
    np.testing.assert_allclose(nct_sf(t, df, 0.0), stats.t.sf(t, df), rtol=2e-10)


def test_many_at_once_equal_one_at_a_time() -> None:
    rng = np.random.default_rng(3)
    t, df, delta = rng.normal(0, 4, 60), rng.integers(1, 400, 60), rng.normal(0, 4, 60)
    each = [float(nct_sf(*row)) for row in zip(t, df, delta, strict=True)]
    np.testing.assert_allclose(nct_sf(t, df, delta), each, rtol=1e-13)


@settings(deadline=None)
@given(t=st.floats(-60, 60), df=st.integers(1, 20000), delta=st.floats(-100, 100))
def test_tails_add_up_and_mirror(t: float, df: int, delta: float) -> None:
    upper, lower = float(nct_sf(t, df, delta)), float(nct_cdf(t, df, delta))
    assert upper + lower == pytest.approx(1.0, abs=1e-12)
    assert lower == pytest.approx(float(nct_sf(-t, df, -delta)), rel=1e-12, abs=1e-300)
    both = float(nct_abs_sf(t, df, delta))
    assert both == pytest.approx(float(nct_sf(abs(t), df, delta) + nct_cdf(-abs(t), df, delta)), rel=1e-12)


@pytest.mark.parametrize("df", [1, 2, 5, 57, 240, 817, 5000, 20000])
@pytest.mark.parametrize("level", [0.5, 0.9, 0.95, 0.999])
def test_interval_bounds_meet_their_tails(df: int, level: float) -> None:
    t = np.array([-60.0, -8.0, -2.0, 0.0, 0.5, 2.83, 8.0, 60.0, 200.0])
    low, high = nct_interval(t, df, level)
    np.testing.assert_allclose(nct_sf(t, df, low), (1 - level) / 2, rtol=1e-8)
    np.testing.assert_allclose(nct_cdf(t, df, high), (1 - level) / 2, rtol=1e-8)
    assert (low < t).all()
    assert (t < high).all()


def test_interval_takes_own_degrees_of_freedom() -> None:
    t, df = np.array([1.0, 3.0, -2.0]), np.array([20.0, 57.0, 240.0])
    low, high = nct_interval(t, df, 0.9)
    for i in range(3):
        one = nct_interval(t[i], df[i], 0.9)
        np.testing.assert_allclose([low[i], high[i]], [float(one[0]), float(one[1])], rtol=1e-10)


@pytest.mark.simulation
def test_interval_of_the_appraisal_ratio_covers() -> None:
    # t = AR·√(T/(1 + θ̂f²)) is noncentral t with T − K − 1 df: 6,000 assets on the same two factors, short sample.
    rng = np.random.default_rng(21)
    T, N, truth = 24, 6000, 0.35
    factors = rng.normal(0.2, 1.0, (T, 2))
    returns = truth + factors @ rng.normal(1.0, 0.5, (2, N)) + rng.standard_normal((T, N))
    fit = regress(returns, factors)
    low, high = (bound / fit.t_scale for bound in nct_interval(fit.classical_t, fit.fit.df, 0.9))
    error = np.sqrt(0.05 * 0.95 / N)
    assert abs((truth < low).mean() - 0.05) < 3.3 * error
    assert abs((truth > high).mean() - 0.05) < 3.3 * error


def test_missing_and_infinite_ratios() -> None:
    low, high = nct_interval([np.nan, np.inf, -np.inf], 10, 0.95)
    np.testing.assert_array_equal(low, [np.nan, np.inf, -np.inf])
    np.testing.assert_array_equal(high, [np.nan, np.inf, -np.inf])
    np.testing.assert_array_equal(
        nct_sf([np.nan, np.inf, -np.inf, 1.0], 10, [0, 0, 0, np.inf]), [np.nan, 0, 1, 1]
    )


@pytest.mark.parametrize(("F", "dfn", "dfd", "shift", "upper", "lower"), F_TAILS)
def test_noncentral_f_tails(F: float, dfn: int, dfd: int, shift: float, upper: float, lower: float) -> None:
    np.testing.assert_allclose(ncf_sf(F, dfn, dfd, shift), upper, rtol=1e-11)
    np.testing.assert_allclose(ncf_cdf(F, dfn, dfd, shift), lower, rtol=1e-11)


def test_central_f_and_many_noncentralities() -> None:
    for F, dfn, dfd in [(0.0, 5, 100), (2.2, 25, 300), (9.0, 3, 20)]:
        np.testing.assert_allclose(ncf_sf(F, dfn, dfd, 0.0), stats.f.sf(F, dfn, dfd), rtol=1e-12)
    shifts = np.linspace(0.0, 400.0, 41)
    curve = ncf_sf(2.2, 25, 300, shifts)
    assert curve.shape == shifts.shape
    assert (np.diff(curve) >= -1e-14).all()
    # scipy 1.17 gives a negative probability at a noncentrality of exactly zero: compared above it.
    np.testing.assert_allclose(curve[1:], stats.ncf.sf(2.2, 25, 300, shifts[1:]), rtol=1e-9)


def test_squared_noncentral_t_is_noncentral_f() -> None:
    for t, df, delta in [(2.0, 57, 1.3), (5.0, 240, 3.0), (0.3, 10, 2.0)]:
        np.testing.assert_allclose(nct_abs_sf(t, df, delta), ncf_sf(t * t, 1, df, delta**2), rtol=1e-10)


@settings(deadline=None, max_examples=40)
@given(
    F=st.floats(0.01, 60),
    dfn=st.integers(1, 60),
    dfd=st.integers(2, 1000),
    level=st.sampled_from([0.8, 0.9, 0.95, 0.99]),
)
def test_f_interval_bounds_meet_their_tails(F: float, dfn: int, dfd: int, level: float) -> None:
    low, high = ncf_interval(F, dfn, dfd, level)
    tail = (1 - level) / 2
    assert 0.0 <= low <= high
    if low > 0:
        assert float(ncf_sf(F, dfn, dfd, low)) == pytest.approx(tail, rel=1e-8)
    else:
        assert stats.f.sf(F, dfn, dfd) >= tail * (1 - 1e-9)
    if high > 0:
        assert float(ncf_cdf(F, dfn, dfd, high)) == pytest.approx(tail, rel=1e-8)
    else:
        assert stats.f.cdf(F, dfn, dfd) <= tail * (1 + 1e-9)


def test_f_of_zero_leaves_only_zero() -> None:
    assert ncf_interval(0.0, 5, 100, 0.95) == (0.0, 0.0)
    assert ncf_lambda_at(0.0, 5, 100, 0.05) == 0.0


def test_lambda_grows_with_the_probability() -> None:
    points = [ncf_lambda_at(3.0, 10, 100, p) for p in (0.0005, 0.002, 0.05, 0.5, 0.95)]
    assert points[0] == 0.0  # the central tail, 0.0024, is above it already
    assert points[1] == 0.0
    assert 0.0 < points[2] < points[3] < points[4]


@pytest.mark.parametrize(
    "call",
    [
        lambda: nct_sf(1.0, 0.5, 0.0),
        lambda: nct_interval(1.0, 10, 1.0),
        lambda: nct_interval(1.0, np.nan, 0.95),
        lambda: ncf_sf(-1.0, 2, 3, 0.0),
        lambda: ncf_sf(1.0, 0, 3, 0.0),
        lambda: ncf_sf(1.0, 2, 3, [-1.0]),
        lambda: ncf_sf(np.nan, 2, 3, 0.0),
        lambda: ncf_interval(1.0, 2, 3, 0.0),
        lambda: ncf_lambda_at(1.0, 2, 3, 1.0),
    ],
)
def test_arguments_out_of_range_are_refused(call: object) -> None:
    with pytest.raises(InputError, match="Allowed:"):
        call()  # type: ignore[operator]
