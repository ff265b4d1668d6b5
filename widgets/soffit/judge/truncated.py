"""Normal distributions cut off at ± a bound, right even when the mean lies far outside.

A mean 40 standard deviations beyond its bound leaves a probability of 1e-350 inside it, less than a floating
number can hold; ratios of densities and probabilities are then 0/0. Everything here is measured inwards from the
bound nearer to the mean, where the density is exponential in shape and all terms are of order one.
"""

from __future__ import annotations

from functools import cached_property

import numpy as np
import numpy.typing as npt
from scipy import special

from soffit.errors import EstimationError

__all__ = ["TruncatedNormal"]

Floats = npt.NDArray[np.float64]
Places = npt.NDArray[np.int64]

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(96)
_DROP = 45.0  # the density is left out where its log is this far below its peak
_FREE = 40.0  # standard deviations between mean and bound beyond which the cut takes less than 1e-349
_NO_ROOM = 1e-290  # a bound this small, in standard deviations, is none: below it arithmetic fails
_ROUNDS = 60


class TruncatedNormal:
    """``N(centre, error²)`` restricted to ``[−bound, bound]``, one for each of n elements.

    Parameters
    ----------
    centre, error, bound : ndarray, shape (n,)
        Mean and standard deviation before the cut, and where it is cut. A bound of zero, or an error of zero, leaves
        a point; an infinite bound leaves the normal; a NaN in any of the three gives NaN.

    Raises
    ------
    EstimationError
        If shapes differ, or an error or a bound is negative.
    """

    def __init__(self, centre: Floats, error: Floats, bound: Floats) -> None:
        self.centre, self.error, self.bound = (
            np.array(v, dtype=np.float64, ndmin=1) for v in (centre, error, bound)
        )
        if not self.centre.shape == self.error.shape == self.bound.shape:
            raise EstimationError(
                f"{self.centre.shape} estimates, {self.error.shape} errors and {self.bound.shape} bounds came",
                allowed="one error and one bound an estimate",
            )
        if (self.error < 0).any() or (self.bound < 0).any():
            raise EstimationError("A standard error or a bound is negative", allowed="zero or above")
        undefined = np.isnan(self.centre) | np.isnan(self.error) | np.isnan(self.bound)
        point = (self.error == 0) | (self.bound <= _NO_ROOM * self.error)
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            room = (self.bound - np.abs(self.centre)) / self.error
        free = ~undefined & ~point & (room > _FREE)
        self._undefined, self._free = undefined, free
        self._cut = np.flatnonzero(~undefined & ~point & ~free)
        m, s, b = self.centre[self._cut], self.error[self._cut], self.bound[self._cut]
        self._sign = np.where(m < 0, -1.0, 1.0)
        # By symmetry the mean is taken to be at or above zero. In standard deviations, `_edge` is where the upper
        # bound stands as seen from the mean, and `_width` is the distance between the bounds.
        self._edge = (b - np.abs(m)) / s
        self._width = 2.0 * b / s
        self._all = np.arange(len(self._cut))

    @cached_property
    def _range(self) -> tuple[Floats, Floats]:
        """Depths between which the density matters."""
        reach = np.sqrt(2.0 * _DROP)
        beyond = np.maximum(-self._edge, 0.0)
        shallow = 2.0 * _DROP / (beyond + np.sqrt(beyond**2 + 2.0 * _DROP))
        far = np.where(self._edge < 0.0, shallow, self._edge + reach)
        return np.maximum(self._edge - reach, 0.0), np.minimum(self._width, far)

    def _log_density(self, depth: Floats, which: Places) -> Floats:
        """Log density at depths of shape (n, q): zero at its peak, which is the bound itself or the mean."""
        edge = self._edge[which, None]
        return np.asarray(np.minimum(edge, 0.0) * depth - 0.5 * (depth - np.maximum(edge, 0.0)) ** 2)

    @cached_property
    def _moments(self) -> tuple[Floats, Floats]:
        """Mean and standard deviation of the depth."""
        low, high = self._range
        depth = 0.5 * (high + low)[:, None] + 0.5 * (high - low)[:, None] * _NODES
        share = np.exp(self._log_density(depth, self._all)) * _WEIGHTS
        share /= share.sum(axis=1, keepdims=True)
        mean = (share * depth).sum(axis=1)
        return mean, np.sqrt((share * (depth - mean[:, None]) ** 2).sum(axis=1))

    def _log_tail(self, depth: Floats, which: Places) -> Floats:
        """Log of the density's integral from `depth`, shape (n,), to the far end."""
        low, high = (end[which] for end in self._range)
        start = np.clip(depth, low, high)
        half = 0.5 * (high - start)
        logs = self._log_density(0.5 * (high + start)[:, None] + half[:, None] * _NODES, which)
        top = logs.max(axis=1)
        with np.errstate(divide="ignore"):
            return np.asarray(np.log(half) + top + np.log(np.exp(logs - top[:, None]) @ _WEIGHTS))

    @cached_property
    def log_mass(self) -> Floats:
        """Log of the probability that the uncut normal puts within the bounds, shape (n,)."""
        out = np.where(np.abs(self.centre) <= self.bound, 0.0, -np.inf)
        out[(self.bound <= _NO_ROOM * self.error) & (self.error > 0)] = -np.inf
        out[self._undefined] = np.nan
        # The density is written with its peak at one: what it lost is put back.
        peak = 0.5 * np.minimum(self._edge, 0.0) ** 2 + 0.5 * np.log(2.0 * np.pi)
        out[self._cut] = np.minimum(self._log_tail(np.zeros_like(peak), self._all) - peak, 0.0)
        return out

    @cached_property
    def mean(self) -> Floats:
        """Means after the cut, within the bounds."""
        return self._outward(self._moments[0], self.centre)

    @cached_property
    def spread(self) -> Floats:
        """Standard deviations after the cut."""
        out = np.where(self._free, self.error, 0.0)
        out[self._undefined] = np.nan
        out[self._cut] = self.error[self._cut] * self._moments[1]
        return out

    def quantile(self, probability: float) -> Floats:
        """Quantiles after the cut.

        Parameters
        ----------
        probability : float
            Strictly between 0 and 1.

        Returns
        -------
        ndarray, shape (n,)
            Within the bounds.

        Raises
        ------
        EstimationError
            If the search does not settle.
        """
        # Depth runs from the upper bound of |centre|: its own upper tail is the element's lower one.
        below = np.where(self._sign > 0, probability, 1.0 - probability)
        depth = self._depth_at(below)
        free = self.centre + self.error * special.ndtri(probability)
        return self._outward(depth, np.where(self._free, free, self.centre))

    def _depth_at(self, tail: Floats) -> Floats:
        """Depth d with P(depth > d) = tail: Newton on the log of the tail, kept within a bracket."""
        low, high = (end.copy() for end in self._range)
        depth = 0.5 * (low + high)
        target = self._log_tail(low, self._all) + np.log(tail)
        open_ = self._all
        for _ in range(_ROUNDS):
            d = depth[open_]
            log_tail = self._log_tail(d, open_)
            gap = log_tail - target[open_]
            below, above = np.where(gap > 0, d, low[open_]), np.where(gap > 0, high[open_], d)
            with np.errstate(over="ignore", invalid="ignore"):
                step = d + gap * np.exp(log_tail - self._log_density(d[:, None], open_)[:, 0])
            following = np.where((step >= below) & (step <= above), step, 0.5 * (below + above))
            there = np.abs(gap) <= 4e-15 * (1.0 + np.abs(log_tail))
            low[open_], high[open_], depth[open_] = below, above, np.where(there, d, following)
            moving = ~there & (np.abs(following - d) > 1e-13 * above)
            open_ = open_[moving]
            if not open_.size:
                return depth
        raise EstimationError(f"A quantile of a bounded alpha did not settle in {_ROUNDS} rounds")

    def _outward(self, depth: Floats, otherwise: Floats) -> Floats:
        """From a depth below the upper bound back to the element's own scale and sign."""
        out = np.where(self._free, otherwise, np.clip(self.centre, -self.bound, self.bound))
        out[self._undefined] = np.nan
        b, s = self.bound[self._cut], self.error[self._cut]
        out[self._cut] = self._sign * np.clip(b - s * depth, -b, b)
        return out
