"""Noncentral t and noncentral F: tails that stay right far out, and their inversion for exact intervals.

Library routines for the noncentral t lose their digits, or return NaN, at large noncentrality and far in
the tails. Here every tail is a sum or an integral of positive terms, so that small probabilities keep
their relative accuracy: about 1e-10 wherever the probability is above 1e-280.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import optimize, special

from soffit.errors import EstimationError, InputError

__all__ = [
    "ncf_cdf",
    "ncf_interval",
    "ncf_lambda_at",
    "ncf_sf",
    "nct_abs_sf",
    "nct_cdf",
    "nct_interval",
    "nct_sf",
]

Floats = npt.NDArray[np.float64]

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(48)
_DEEP = 1e-6  # below this the range of integration follows the integrand's own peak
_DROP = 60.0  # logs below the peak at which the integrand is left out
_EDGE = 9.0  # standard deviations beyond which the normal distribution function is 0 or 1
_ROUNDS = 60
_CHUNK = 4096  # elements integrated at once: bounds the memory


def nct_sf(t: npt.ArrayLike, df: npt.ArrayLike, delta: npt.ArrayLike) -> Floats:
    """Upper tail of the noncentral t distribution.

    Parameters
    ----------
    t : array_like
        Values.
    df : array_like
        Degrees of freedom, at least 1.
    delta : array_like
        Noncentrality. The three broadcast.

    Returns
    -------
    ndarray
        ``P(T >= t)``; NaN where `t` or `delta` is NaN.

    Raises
    ------
    InputError
        If the degrees of freedom are below 1 or not finite.

    Notes
    -----
    ``T = (Z + δ)/W`` with ``W² ~ χ²(df)/df``, hence ``P(T >= t) = E[Φ(δ − tW)]``: a Gauss-Legendre
    integral over W in three panels, divided where the normal distribution function turns.
    """
    shaped = _broadcast(t, df, delta)
    return _expected_normal(-shaped[0], shaped[2], shaped[1])


def nct_cdf(t: npt.ArrayLike, df: npt.ArrayLike, delta: npt.ArrayLike) -> Floats:
    """Lower tail ``P(T <= t)`` of the noncentral t distribution; see :func:`nct_sf`."""
    shaped = _broadcast(t, df, delta)
    return _expected_normal(shaped[0], -shaped[2], shaped[1])


def nct_abs_sf(t: npt.ArrayLike, df: npt.ArrayLike, delta: npt.ArrayLike) -> Floats:
    """Two-sided tail of the noncentral t distribution.

    Parameters
    ----------
    t, df, delta : array_like
        As in :func:`nct_sf`.

    Returns
    -------
    ndarray
        ``P(|T| >= |t|)``.
    """
    size = np.abs(np.asarray(t, dtype=float))
    return np.minimum(nct_sf(size, df, delta) + nct_cdf(-size, df, delta), 1.0)


def nct_interval(t: npt.ArrayLike, df: npt.ArrayLike, level: float) -> tuple[Floats, Floats]:
    """Exact equal-tailed interval for the noncentrality of a t ratio.

    Parameters
    ----------
    t : array_like
        Observed t ratios; NaN gives NaN, an infinite one infinite bounds.
    df : array_like
        Degrees of freedom, at least 1; broadcasts with `t`.
    level : float
        Coverage.

    Returns
    -------
    low, high : ndarray
        ``P(T >= t)`` is ``(1 − level)/2`` at `low` and ``P(T <= t)`` is that at `high`.

    Raises
    ------
    InputError
        If the level or the degrees of freedom are out of range.
    EstimationError
        If the inversion does not settle.
    """
    tail = _tail(level)
    values, freedom, _ = _broadcast(t, df, 0.0)
    # The lower bound for t is minus the upper bound for −t: one inversion serves both.
    high = _upper_noncentrality(values, freedom, tail)
    low = -_upper_noncentrality(-values, freedom, tail)
    return low, high


def ncf_sf(F: float, dfn: float, dfd: float, noncentrality: npt.ArrayLike) -> Floats:
    """Upper tail of the noncentral F distribution.

    Parameters
    ----------
    F : float
        Value, zero or above.
    dfn, dfd : float
        Degrees of freedom, above zero.
    noncentrality : array_like
        One or many noncentralities, zero or above.

    Returns
    -------
    ndarray
        ``P(F' >= F)``, of the shape of `noncentrality`.

    Raises
    ------
    InputError
        If an argument is out of range or not finite.

    Notes
    -----
    A Poisson mixture of incomplete beta functions (Johnson, Kotz and Balakrishnan 1995, chapter 30).
    """
    return _poisson_mixture(F, dfn, dfd, noncentrality, upper=True)


def ncf_cdf(F: float, dfn: float, dfd: float, noncentrality: npt.ArrayLike) -> Floats:
    """Lower tail ``P(F' <= F)`` of the noncentral F distribution; see :func:`ncf_sf`."""
    return _poisson_mixture(F, dfn, dfd, noncentrality, upper=False)


def ncf_lambda_at(F: float, dfn: float, dfd: float, p: float) -> float:
    """Noncentrality at which the upper tail of the noncentral F reaches a given probability.

    Parameters
    ----------
    F : float
        Observed statistic.
    dfn, dfd : float
        Degrees of freedom.
    p : float
        Probability, strictly between 0 and 1.

    Returns
    -------
    float
        The λ with ``P(F' >= F) = p``; zero where the central tail is at `p` or above it already.

    Raises
    ------
    InputError
        If an argument is out of range.
    """
    if not 0.0 < p < 1.0:
        raise InputError(f"The probability is {p!r}", allowed="a number strictly between 0 and 1")
    # Whichever tail is the smaller keeps the difference accurate.
    by_sf = p <= 0.5

    def gap(noncentrality: float) -> float:
        if by_sf:
            return float(ncf_sf(F, dfn, dfd, noncentrality)) - p
        return (1.0 - p) - float(ncf_cdf(F, dfn, dfd, noncentrality))

    if gap(0.0) >= 0.0:
        return 0.0
    top = max(1.0, dfn * F)
    while gap(top) < 0.0:
        top *= 2.0
    return float(optimize.brentq(gap, 0.0, top, xtol=1e-12 * top, rtol=1e-13))


def ncf_interval(F: float, dfn: float, dfd: float, level: float) -> tuple[float, float]:
    """Exact equal-tailed interval for the noncentrality of an F statistic.

    Parameters
    ----------
    F : float
        Observed statistic, zero or above.
    dfn, dfd : float
        Degrees of freedom.
    level : float
        Coverage.

    Returns
    -------
    low, high : float
        Zero for a bound at which even the central distribution is already too far up: a statistic as
        low as this is unlikely at any noncentrality, and the interval may then be the single point zero.

    Raises
    ------
    InputError
        If an argument is out of range.
    """
    tail = _tail(level)
    return ncf_lambda_at(F, dfn, dfd, tail), ncf_lambda_at(F, dfn, dfd, 1.0 - tail)


def _tail(level: float) -> float:
    if not 0.0 < level < 1.0:
        raise InputError(f"The confidence level is {level!r}", allowed="a number strictly between 0 and 1")
    return 0.5 * (1.0 - level)


def _broadcast(t: npt.ArrayLike, df: npt.ArrayLike, delta: npt.ArrayLike) -> tuple[Floats, Floats, Floats]:
    values, freedom, shift = np.broadcast_arrays(
        np.asarray(t, dtype=float), np.asarray(df, dtype=float), np.asarray(delta, dtype=float)
    )
    if freedom.size and not (np.isfinite(freedom).all() and float(freedom.min()) >= 1.0):
        raise InputError(
            f"The degrees of freedom are {np.unique(freedom)[:3]}",
            allowed="finite numbers, 1 or above",
            remedy="use a longer sample or fewer factors",
        )
    return values, freedom, shift


def _log_constant(df: Floats) -> Floats:
    """Log of the factor of W's density, written so that nothing cancels when df is large."""
    half = 0.5 * df
    series = 1.0 / (12.0 * half) - 1.0 / (360.0 * half**3) + 1.0 / (1260.0 * half**5)
    direct = special.gammaln(half) - (half - 0.5) * np.log(half) + half - 0.5 * np.log(2.0 * np.pi)
    remainder = np.where(half > 30.0, series, direct)
    constant: Floats = np.log(2.0) + 0.5 * np.log(half) - 0.5 * np.log(2.0 * np.pi) - remainder
    return constant


def _log_kernel(w: Floats, df: Floats) -> Floats:
    """Log density of W up to :func:`_log_constant`: ``(df−1) ln w − df (w²−1)/2``."""
    kernel: Floats = special.xlogy(df - 1.0, w) - 0.5 * df * (w - 1.0) * (w + 1.0)
    return kernel


def _expected_normal(a: Floats, b: Floats, df: Floats) -> Floats:
    """``E[Φ(a W + b)]`` with ``W² ~ χ²(df)/df``, elementwise."""
    shape = a.shape
    out = np.full(a.size, np.nan)
    slope, start, freedom = a.ravel(), b.ravel(), df.ravel()
    usable = np.flatnonzero(np.isfinite(slope) & np.isfinite(start))
    for first in range(0, usable.size, _CHUNK):
        part = usable[first : first + _CHUNK]
        low, high = _bulk(freedom[part])
        value = _integrate(slope[part], start[part], freedom[part], low, high)
        deep = np.flatnonzero(value < _DEEP)
        if deep.size:
            chosen = part[deep]
            low, high = _peak(slope[chosen], start[chosen], freedom[chosen])
            value[deep] = _integrate(slope[chosen], start[chosen], freedom[chosen], low, high)
        out[part] = np.clip(value, 0.0, 1.0)
    # An infinite t or noncentrality: Φ is 0 or 1 whatever W is.
    limit = np.isinf(slope) ^ np.isinf(start)
    out[limit] = np.where(np.where(np.isinf(slope), slope, start)[limit] > 0, 1.0, 0.0)
    return out.reshape(shape)


def _bulk(df: Floats) -> tuple[Floats, Floats]:
    """Range that holds W but for a probability of 1e-20 on each side."""
    distinct, place = np.unique(df, return_inverse=True)
    low = np.sqrt(special.gammaincinv(0.5 * distinct, 1e-20) / (0.5 * distinct))
    high = np.sqrt(special.gammainccinv(0.5 * distinct, 1e-20) / (0.5 * distinct))
    return low[place], high[place]


def _integrate(a: Floats, b: Floats, df: Floats, low: Floats, high: Floats) -> Floats:
    out = np.empty_like(a)
    # Where the normal distribution function turns slowly over the range, one panel resolves it.
    gentle = np.abs(a) * (high - low) < 2.0 * _EDGE
    for divided, chosen in ((False, np.flatnonzero(gentle)), (True, np.flatnonzero(~gentle))):
        if chosen.size:
            slope, start, bottom, top = a[chosen], b[chosen], low[chosen], high[chosen]
            edges = np.stack([bottom, top])
            if divided:
                turn, reach = -start / slope, _EDGE / np.abs(slope)
                edges = np.stack([bottom, turn - reach, turn, turn + reach, top]).clip(bottom, top)
            middle, half = 0.5 * (edges[1:] + edges[:-1]), 0.5 * (edges[1:] - edges[:-1])
            w = middle[..., None] + half[..., None] * _NODES
            freedom = df[chosen][:, None]
            density = _log_kernel(w, freedom) + _log_constant(freedom)
            inside = special.log_ndtr(slope[:, None] * w + start[:, None])
            out[chosen] = ((np.exp(density + inside) @ _WEIGHTS) * half).sum(axis=0)
    return out


def _peak(a: Floats, b: Floats, df: Floats) -> tuple[Floats, Floats]:
    """Range in which the integrand, which is log-concave, is within `_DROP` logs of its peak."""

    def log_integrand(w: Floats) -> Floats:
        value: Floats = _log_kernel(w, df) + special.log_ndtr(a * w + b)
        return value

    def slope(w: Floats) -> Floats:
        mills = np.sqrt(2.0 / np.pi) / special.erfcx(-(a * w + b) / np.sqrt(2.0))
        value: Floats = (df - 1.0) / w - df * w + a * mills
        return value

    mode_of_w = np.sqrt((df - 1.0) / df)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        far = np.maximum(mode_of_w, np.where(a > 0, -b / a, 0.0)) + 0.8 * np.abs(a) / df
    near_bound = mode_of_w + np.abs(a) * (0.8 + np.maximum(-b, 0.0)) / df
    low = np.where(a > 0, mode_of_w, 0.0)
    high = np.where(a > 0, np.minimum(far, near_bound), mode_of_w)
    for _ in range(60):
        middle = 0.5 * (low + high)
        rising = slope(np.maximum(middle, 1e-300)) > 0
        low, high = np.where(rising, middle, low), np.where(rising, high, middle)
    peak = np.maximum(0.5 * (low + high), 1e-300)
    floor = log_integrand(peak) - _DROP
    # The second derivative of the log is below −df everywhere, which bounds the width.
    width = np.sqrt(2.0 * _DROP / df)
    bounds = []
    for outer in (np.maximum(peak - width, 0.0), peak + width):
        inside, outside = peak, outer
        for _ in range(16):
            middle = 0.5 * (inside + outside)
            kept = log_integrand(middle) > floor
            inside, outside = np.where(kept, middle, inside), np.where(kept, outside, middle)
        bounds.append(outside)
    return bounds[0], bounds[1]


def _upper_noncentrality(t: Floats, df: Floats, tail: float) -> Floats:
    """δ with ``P(T <= t) = tail``: secant steps on the normal score, which is almost linear in δ."""
    out = t.ravel().copy()
    open_ = np.flatnonzero(np.isfinite(out))
    values, freedom = out[open_].copy(), df.ravel()[open_]
    target = float(special.ndtri(tail))
    # Johnson and Welch (1940): the score falls by about 1/sqrt(1 + t²/(2 df)) a unit of δ.
    spread = np.sqrt(1.0 + values * values / (2.0 * freedom))
    delta, rate = values - target * spread, -1.0 / spread
    low, high = np.full_like(delta, -np.inf), np.full_like(delta, np.inf)
    before, step = np.zeros_like(delta), np.zeros_like(delta)
    for turn in range(_ROUNDS):
        score = np.clip(special.ndtri(nct_cdf(values, freedom, delta)), -37.0, 8.0) - target
        low, high = np.where(score > 0.0, delta, low), np.where(score <= 0.0, delta, high)
        if turn:
            secant = np.divide(score - before, step, out=np.zeros_like(step), where=step != 0.0)
            rate = np.where(secant < 0.1 * rate, secant, rate)
        goal = delta - score / rate
        astray = ~((goal > low) & (goal < high)) | (turn % 8 == 7)
        both = np.isfinite(low) & np.isfinite(high)
        goal = np.where(astray & both, 0.5 * (np.where(both, low, 0.0) + np.where(both, high, 0.0)), goal)
        step = goal - delta
        out[open_] = goal
        moving = np.abs(step) > 1e-11 * (1.0 + np.abs(goal))
        if not moving.any():
            return out.reshape(t.shape)
        open_, values, freedom, rate = open_[moving], values[moving], freedom[moving], rate[moving]
        low, high, step = low[moving], high[moving], step[moving]
        delta, before = goal[moving], score[moving]
    raise EstimationError(
        f"The interval of the noncentrality did not settle for t = {values[0]:g} on {freedom[0]:g} degrees "
        "of freedom"
    )


def _poisson_mixture(
    F: float, dfn: float, dfd: float, noncentrality: npt.ArrayLike, *, upper: bool
) -> Floats:
    shifts = np.asarray(noncentrality, dtype=float)
    if not (np.isfinite(F) and F >= 0.0):
        raise InputError(f"The F statistic is {F!r}", allowed="a finite number, zero or above")
    if not (0.0 < dfn < np.inf and 0.0 < dfd < np.inf):
        raise InputError(
            f"The degrees of freedom are {dfn!r} and {dfd!r}", allowed="finite numbers above zero"
        )
    if shifts.size and not (np.isfinite(shifts).all() and float(shifts.min()) >= 0.0):
        raise InputError("A noncentrality is negative or not finite", allowed="finite numbers, zero or above")
    x = dfn * F / (dfn * F + dfd)
    beta_tail = special.betaincc if upper else special.betainc
    out = np.empty(shifts.shape)
    for place, shift in np.ndenumerate(shifts):
        # Twelve standard deviations leave out less than 1e-30; only a deep tail needs more.
        value = _mixture(0.5 * shift, 12.0, 0.5 * dfn, 0.5 * dfd, x, beta_tail)
        out[place] = (
            _mixture(0.5 * shift, 40.0, 0.5 * dfn, 0.5 * dfd, x, beta_tail) if value < 1e-15 else value
        )
    return out


def _mixture(mean: float, deviations: float, a: float, b: float, x: float, tail: Callable[..., Any]) -> float:
    reach = deviations * np.sqrt(mean) + 5.0 * deviations
    j = np.arange(max(0.0, np.floor(mean - reach)), np.ceil(mean + reach) + 1.0)
    weight = np.exp(special.xlogy(j, mean) - mean - special.gammaln(j + 1.0))
    # What the window leaves out is negligible: dividing by the sum removes the rounding of the logs.
    return min(float(weight @ tail(a + j, b, x)) / float(weight.sum()), 1.0)
