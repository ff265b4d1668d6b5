"""Normal distributions cut at a bound: held to scipy where it holds, to 60-digit arithmetic beyond."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from soffit.errors import EstimationError
from soffit.judge.truncated import TruncatedNormal


def one(centre: float, error: float, bound: float) -> TruncatedNormal:
    return TruncatedNormal(np.array([centre]), np.array([error]), np.array([bound]))


def exact(centre: float, error: float, bound: float, value: float) -> tuple[float, float, float, float]:
    """Mean, standard deviation, log mass and probability below `value` by the textbook formulas, in many digits."""
    with mpmath.workdps(40 + int(0.22 * ((bound + abs(centre)) / error) ** 2)):
        m, s, b = (mpmath.mpf(v) for v in (centre, error, bound))
        low, high = (-b - m) / s, (b - m) / s

        def below(x):
            return mpmath.erfc(-x / mpmath.sqrt(2)) / 2

        def density(x):
            return mpmath.exp(-x * x / 2) / mpmath.sqrt(2 * mpmath.pi)

        mass = below(high) - below(low)
        shift = (density(low) - density(high)) / mass
        variance = s**2 * (1 + (low * density(low) - high * density(high)) / mass - shift**2)
        share = (below((mpmath.mpf(value) - m) / s) - below(low)) / mass
        return float(m + s * shift), float(mpmath.sqrt(variance)), float(mpmath.log(mass)), float(share)


@pytest.mark.parametrize(
    ("centre", "error", "bound"),
    [
        (0.01, 0.002, 0.012),
        (0.0, 1.0, 2.0),
        (3.0, 0.5, 0.2),
        (-0.01, 0.01, 0.05),
        (40.5, 1.0, 0.5),  # forty standard deviations outside
        (-41.0, 1.0, 1.0),
        (40.0, 1.0, 0.001),  # and a bound that is narrow there
        (5.0, 1.0, 1e-6),
        (12.0, 1.0, 15.0),
    ],
)
def test_equals_the_textbook_formulas_in_many_digits(centre: float, error: float, bound: float) -> None:
    law = one(centre, error, bound)
    for probability in (0.025, 0.975):
        quantile = law.quantile(probability)[0]
        mean, spread, log_mass, share = exact(centre, error, bound, quantile)
        # A value held as a floating number beside its bound is known to about 1e-16 of the bound.
        held = 1e-15 * bound / law.spread[0]
        assert share == pytest.approx(probability, rel=1e-11, abs=held)
    # A mean near zero is known to the bound's own digits, from which it is measured.
    assert law.mean[0] == pytest.approx(mean, rel=1e-12, abs=1e-14 * bound)
    assert law.spread[0] == pytest.approx(spread, rel=1e-11)
    assert law.log_mass[0] == pytest.approx(log_mass, rel=1e-12, abs=1e-13)


@given(centre=st.floats(-3, 3), error=st.floats(0.3, 3.0), bound=st.floats(0.1, 4.0), p=st.floats(0.01, 0.99))
@settings(max_examples=60, deadline=None)
def test_equals_scipy_near_the_bounds(centre: float, error: float, bound: float, p: float) -> None:
    law = one(centre, error, bound)
    reference = stats.truncnorm((-bound - centre) / error, (bound - centre) / error, centre, error)
    assert law.mean[0] == pytest.approx(reference.mean(), rel=1e-8, abs=1e-9)
    assert law.spread[0] == pytest.approx(reference.std(), rel=1e-6)
    assert law.quantile(p)[0] == pytest.approx(reference.ppf(p), rel=1e-7, abs=1e-8)


@given(centre=st.floats(-1e6, 1e6), error=st.floats(1e-6, 1e3), bound=st.floats(0, 1e6))
@settings(max_examples=150, deadline=None)
def test_everything_stays_within_the_bounds_and_in_order(centre: float, error: float, bound: float) -> None:
    law = one(centre, error, bound)
    low, middle, high = (law.quantile(p)[0] for p in (0.025, 0.5, 0.975))
    assert -bound <= low <= middle <= high <= bound
    assert -bound <= law.mean[0] <= bound
    assert 0.0 <= law.spread[0] <= error * (1 + 1e-9)
    assert law.log_mass[0] <= 0.0


@given(centre=st.floats(0, 60), bound=st.floats(1e-3, 10))
@settings(max_examples=40, deadline=None)
def test_the_sign_of_an_estimate_only_turns_it_round(centre: float, bound: float) -> None:
    up, down = one(centre, 1.0, bound), one(-centre, 1.0, bound)
    assert up.mean[0] == pytest.approx(-down.mean[0], rel=1e-13, abs=1e-15 * bound)
    assert up.quantile(0.1)[0] == pytest.approx(-down.quantile(0.9)[0], rel=1e-12, abs=1e-13)


def test_limits() -> None:
    law = TruncatedNormal(
        np.array([3.0, 3.0, 0.5, 1.0, np.nan, 2.0]),
        np.array([0.0, 1.0, 0.0, 1.0, 1.0, 1.0]),
        np.array([1.0, 0.0, 1.0, np.inf, 1.0, np.nan]),
    )
    # No error: the estimate, brought within its bound. No room: zero. No bound: the normal itself.
    np.testing.assert_array_equal(law.mean, [1.0, 0.0, 0.5, 1.0, np.nan, np.nan])
    np.testing.assert_array_equal(law.spread, [0.0, 0.0, 0.0, 1.0, np.nan, np.nan])
    np.testing.assert_array_equal(law.log_mass, [-np.inf, -np.inf, 0.0, 0.0, np.nan, np.nan])
    np.testing.assert_allclose(law.quantile(0.975)[[0, 1, 2]], [1.0, 0.0, 0.5])
    assert law.quantile(0.975)[3] == pytest.approx(1.0 + stats.norm.ppf(0.975))


def test_bounds_far_away_change_nothing() -> None:
    law = one(0.3, 1.0, 1e12)
    assert law.mean[0] == 0.3
    assert law.quantile(0.025)[0] == pytest.approx(0.3 + stats.norm.ppf(0.025), rel=1e-12)


def test_elements_do_not_disturb_each_other() -> None:
    rng = np.random.default_rng(4)
    centre, error, bound = rng.normal(0, 5, 40), rng.uniform(0.1, 2, 40), rng.uniform(0, 3, 40)
    together = TruncatedNormal(centre, error, bound)
    alone = [one(*values) for values in zip(centre, error, bound, strict=True)]
    np.testing.assert_allclose(together.quantile(0.2), [law.quantile(0.2)[0] for law in alone], rtol=1e-12)
    np.testing.assert_allclose(together.mean, [law.mean[0] for law in alone], rtol=1e-13)


def test_refusals() -> None:
    with pytest.raises(EstimationError, match="negative"):
        one(0.0, -1.0, 1.0)
    with pytest.raises(EstimationError, match="one error and one bound"):
        TruncatedNormal(np.zeros(2), np.ones(3), np.ones(2))
