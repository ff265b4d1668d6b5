"""Which legs to hold and how much under limits: two small quadratic problems solved for many assets at once.

Both start from a target b and a metric G: holding h in place of b adds ``(h − b)'G(h − b)`` of variance.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import optimize

from soffit.errors import EstimationError

__all__ = ["LegChoice", "nearest_within", "select_legs"]

Floats = npt.NDArray[np.float64]
Bools = npt.NDArray[np.bool_]

_ENUMERATED = 8  # up to this many legs every subset is tried
_STEPS = 2_000
_TOLERANCE = 1e-12
_BATCH = 50_000  # problems solved together, to bound memory


@dataclass(frozen=True, eq=False)
class LegChoice:
    """What each leg saves, what it costs, and which are held.

    Parameters
    ----------
    ratios : ndarray, shape (..., N, K)
        Ratios after dropping legs, the kept ones re-optimised; zero where dropped.
    kept : ndarray of bool, shape (..., N, K)
        Legs that are held.
    saving : ndarray, shape (..., N, K)
        What the leg saves a period when it is the last one added to all others: price of variance times the
        variance that it takes away.
    cost : ndarray, shape (..., N, K)
        What the leg costs a period at its ratio in the full hedge.
    """

    ratios: Floats
    kept: Bools
    saving: Floats
    cost: Floats

    @property
    def first(self) -> LegChoice:
        """The choice of the first window alone, shape (N, K)."""
        return LegChoice(self.ratios[0], self.kept[0], self.saving[0], self.cost[0])


def select_legs(target: Floats, covariance: Floats, costs: Floats, risk_aversion: float) -> LegChoice:
    """Choose the legs that pay for themselves.

    Minimises ``risk_aversion / 2 · variance + Σ cost_k |h_k|`` over the subsets of legs, each subset at its own
    minimum-variance ratios.

    Parameters
    ----------
    target : ndarray, shape (W, N, K)
        Ratios of the full hedge.
    covariance : ndarray, shape (W, K, K)
        Covariances of the legs.
    costs : ndarray, shape (K,)
        Cost a period of one unit of each leg.
    risk_aversion : float
        Price of variance.

    Notes
    -----
    All subsets are compared for up to eight legs. Beyond, legs are dropped one at a time, the least worthwhile
    first, while that lowers the objective. For equal values the larger subset wins.
    """
    width = target.shape[2]
    if width == 0:
        return LegChoice(target, np.zeros(target.shape, dtype=bool), target, target)
    inverse = np.linalg.inv(covariance)
    spare = np.diagonal(inverse, axis1=1, axis2=2)[:, None, :]
    saving = 0.5 * risk_aversion * target**2 / spare
    cost = np.abs(target) * costs
    if width <= _ENUMERATED:
        subsets = [
            np.array(subset, dtype=np.int64)
            for size in range(width, -1, -1)
            for subset in itertools.combinations(range(width), size)
        ]
        ratios = _best_subset(target, covariance, costs, risk_aversion, subsets)
    else:
        ratios = np.stack(
            [
                [_drop_one_by_one(row, covariance[window], costs, risk_aversion) for row in target[window]]
                for window in range(len(target))
            ]
        ).reshape(target.shape)
    return LegChoice(ratios, (ratios != 0.0) & np.isfinite(ratios), saving, cost)


def _on_subset(target: Floats, covariance: Floats, subset: npt.NDArray[np.int64]) -> Floats:
    """Minimum-variance ratios with only the legs in `subset`, shape as `target`."""
    ratios = np.zeros_like(target)
    if len(subset):
        inside = covariance[:, subset[:, None], subset[None, :]]
        moved = np.linalg.solve(inside, covariance[:, subset, :] @ np.swapaxes(target, 1, 2))
        ratios[:, :, subset] = np.swapaxes(moved, 1, 2)
    return ratios


def _objective(
    ratios: Floats, target: Floats, covariance: Floats, costs: Floats, risk_aversion: float
) -> Floats:
    gap = ratios - target
    added = np.einsum("wnk,wnk->wn", gap @ covariance, gap)
    return np.asarray(0.5 * risk_aversion * added + np.abs(ratios) @ costs, dtype=float)


def _best_subset(
    target: Floats,
    covariance: Floats,
    costs: Floats,
    risk_aversion: float,
    subsets: list[npt.NDArray[np.int64]],
) -> Floats:
    best = target.copy()
    lowest = _objective(best, target, covariance, costs, risk_aversion)
    for subset in subsets[1:]:
        ratios = _on_subset(target, covariance, subset)
        value = _objective(ratios, target, covariance, costs, risk_aversion)
        better = value < lowest
        lowest = np.where(better, value, lowest)
        best = np.where(better[:, :, None], ratios, best)
    return np.where(np.isfinite(target), best, np.nan)


def _drop_one_by_one(target: Floats, covariance: Floats, costs: Floats, risk_aversion: float) -> Floats:
    if not np.isfinite(target).all():
        return np.full_like(target, np.nan)
    whole, metric = target[None, None], covariance[None]
    held = np.arange(len(target))
    best = target
    lowest = _objective(whole, whole, metric, costs, risk_aversion)[0, 0]
    while len(held):
        trials = [np.delete(held, position) for position in range(len(held))]
        ratios = [_on_subset(whole, metric, trial) for trial in trials]
        values = [_objective(ratio, whole, metric, costs, risk_aversion)[0, 0] for ratio in ratios]
        lowest_trial = int(np.argmin(values))
        if not values[lowest_trial] < lowest:
            break
        lowest, held, best = values[lowest_trial], trials[lowest_trial], ratios[lowest_trial][0, 0]
    return best


def nearest_within(
    target: Floats, metric: Floats, bounds: Floats, gross: float | None
) -> tuple[Floats, Bools]:
    """Solve ``min (h − b)'G(h − b)`` under ``|h_k| ≤ bound_k`` and ``Σ|h_k| ≤ gross``.

    Parameters
    ----------
    target : ndarray, shape (W, N, K)
        b; rows with NaN stay NaN.
    metric : ndarray, shape (W, K, K)
        G, positive definite.
    bounds : ndarray, broadcastable to (W, N, K)
        Largest absolute values; infinite for none.
    gross : float or None
        Largest sum of absolute values.

    Returns
    -------
    solution : ndarray, shape (W, N, K)
    changed : ndarray of bool, shape (W, N)
        Where a limit binds.

    Notes
    -----
    Accelerated projected gradient (Beck and Teboulle 2009) finds which limits bind; the optimality conditions are
    then solved exactly and checked. Rows that this leaves, for nearly collinear legs, go to SLSQP one by one.
    """
    bounds = np.broadcast_to(bounds, target.shape)
    limit = np.inf if gross is None else float(gross)
    size = np.abs(target)
    with np.errstate(invalid="ignore"):
        changed = (size > bounds).any(axis=2) | (size.sum(axis=2) > limit)
    solution = target.copy()
    windows, assets = np.nonzero(changed)
    for start in range(0, len(windows), _BATCH):
        window, asset = windows[start : start + _BATCH], assets[start : start + _BATCH]
        solution[window, asset] = _solve(target[window, asset], metric[window], bounds[window, asset], limit)
    return solution, changed


def _solve(target: Floats, metric: Floats, bounds: Floats, limit: float) -> Floats:
    """Solve M problems of K unknowns: `target` and `bounds` (M, K), `metric` (M, K, K)."""
    scaled = metric / np.linalg.eigvalsh(metric)[:, -1][:, None, None]
    point = _project(target, bounds, limit)
    ahead, momentum = point.copy(), np.ones(len(target))
    unsolved = np.ones(len(target), dtype=bool)
    for step in range(1, _STEPS + 1):
        live = np.flatnonzero(unsolved)
        if not len(live):
            return point
        at, old = ahead[live], point[live]
        slope = np.einsum("mij,mj->mi", scaled[live], at - target[live])
        new = _project(at - slope, bounds[live], limit)
        # Restart where the momentum points uphill (O'Donoghue and Candès 2015).
        weight = np.where(((at - new) * (new - old)).sum(axis=1) > 0, 1.0, momentum[live])
        following = 0.5 * (1.0 + np.sqrt(1.0 + 4.0 * weight**2))
        ahead[live] = new + ((weight - 1.0) / following)[:, None] * (new - old)
        momentum[live], point[live] = following, new
        if step & (step - 1) == 0:  # at powers of two
            exact, right = _finish(new, target[live], scaled[live], bounds[live], limit)
            point[live[right]] = exact[right]
            unsolved[live[right]] = False
    for row in np.flatnonzero(unsolved):
        point[row] = _slsqp(target[row], scaled[row], bounds[row], limit, point[row])
    return point


def _finish(
    point: Floats, target: Floats, metric: Floats, bounds: Floats, limit: float
) -> tuple[Floats, Bools]:
    """Solve the optimality conditions for the limits that bind at `point`; say where that is the solution."""
    sign, size = np.sign(point), np.abs(point)
    capped = size >= bounds
    free = (sign != 0) & ~capped
    tight = np.zeros(len(point), dtype=bool)
    if np.isfinite(limit):
        tight = np.abs(size.sum(axis=1) - limit) <= _TOLERANCE * max(limit, 1.0)
    fixed = np.where(capped, sign * np.where(np.isfinite(bounds), bounds, 0.0), 0.0)
    count, width = point.shape
    # Unknowns: the ratios, and the price of gross exposure.
    left, right = np.zeros((count, width + 1, width + 1)), np.zeros((count, width + 1))
    left[:, :width, :width] = np.where(free[:, :, None], metric, np.eye(width))
    left[:, :width, width] = np.where(free, sign, 0.0)
    priced = tight & free.any(axis=1)
    left[:, width, :width] = np.where(priced[:, None] & free, sign, 0.0)
    left[:, width, width] = np.where(priced, 0.0, 1.0)
    wanted = np.einsum("mij,mj->mi", metric, target)
    right[:, :width] = np.where(free, wanted, fixed)
    right[:, width] = np.where(
        priced, (limit if np.isfinite(limit) else 0.0) - np.abs(fixed).sum(axis=1), 0.0
    )
    try:
        found = np.linalg.solve(left, right[:, :, None])[:, :, 0]
    except np.linalg.LinAlgError:
        return point, np.zeros(count, dtype=bool)
    ratios, price = found[:, :width], found[:, width]
    slack = _TOLERANCE * np.maximum(np.abs(target).max(axis=1), 1e-300)[:, None]
    pull = wanted - np.einsum("mij,mj->mi", metric, ratios)
    # Where every held leg is at its own cap, any price between the pulls at zero and those at the caps will do.
    idle = (sign == 0) & (bounds > 0)
    price = np.where(tight & ~priced, np.where(idle, np.abs(pull), 0.0).max(axis=1), price)
    kept = np.where(free, (ratios * sign > 0) & (np.abs(ratios) <= bounds + slack), True)
    at_cap = np.where(capped & (sign != 0), pull * sign >= price[:, None] - slack, True)
    at_zero = np.where(idle, np.abs(pull) <= price[:, None] + slack, True)
    within = np.abs(ratios).sum(axis=1) <= limit * (1.0 + _TOLERANCE)
    return ratios, np.asarray(
        (kept & at_cap & at_zero).all(axis=1) & within & (price >= -slack[:, 0]), dtype=bool
    )


def _project(values: Floats, bounds: Floats, limit: float) -> Floats:
    """Nearest points with ``|h_k| ≤ bound_k`` and ``Σ|h_k| ≤ limit``, row by row."""
    size = np.abs(values)
    inside = np.minimum(size, bounds)
    over = inside.sum(axis=1) > limit
    if over.any():
        inside[over] = _shrunk(size[over], bounds[over], limit)
    return np.copysign(inside, values)


def _shrunk(size: Floats, bounds: Floats, limit: float) -> Floats:
    """``min(max(size − θ, 0), bound)`` with θ such that each row sums to `limit`.

    The sum falls piecewise linearly in θ with corners at size and size − bound: find the piece, then interpolate.
    """
    corners = np.concatenate([size, np.where(np.isfinite(bounds), size - bounds, 0.0)], axis=1)
    corners = np.sort(np.maximum(corners, 0.0), axis=1)
    sums = np.minimum(np.maximum(size[:, None, :] - corners[:, :, None], 0.0), bounds[:, None, :]).sum(axis=2)
    right = np.minimum((sums > limit).sum(axis=1), corners.shape[1] - 1)
    rows = np.arange(len(size))
    left = np.maximum(right - 1, 0)
    low, high = np.where(right > 0, corners[rows, left], 0.0), corners[rows, right]
    above = np.where(right > 0, sums[rows, left], np.minimum(size, bounds).sum(axis=1))
    below = sums[rows, right]
    step = np.divide(above - limit, above - below, out=np.zeros_like(above), where=above > below)
    theta = low + step * (high - low)
    return np.asarray(np.minimum(np.maximum(size - theta[:, None], 0.0), bounds), dtype=float)


def _slsqp(target: Floats, metric: Floats, bounds: Floats, limit: float, start: Floats) -> Floats:
    """Solve one problem by sequential quadratic programming, long and short sides apart."""
    width = len(target)
    both = np.concatenate([np.eye(width), -np.eye(width)], axis=1)

    def value(sides: Floats) -> float:
        gap = both @ sides - target
        return float(gap @ metric @ gap)

    def slope(sides: Floats) -> Floats:
        return np.asarray(2.0 * both.T @ metric @ (both @ sides - target), dtype=float)

    edges = optimize.Bounds(np.zeros(2 * width), np.tile(bounds, 2))
    gross = () if np.isinf(limit) else (optimize.LinearConstraint(np.ones((1, 2 * width)), ub=limit),)
    found = optimize.minimize(
        value,
        np.concatenate([np.maximum(start, 0.0), np.maximum(-start, 0.0)]),
        jac=slope,
        bounds=edges,
        constraints=gross,
        method="SLSQP",
        options={"ftol": 1e-15, "maxiter": 500},
    )
    if not found.success:
        raise EstimationError(
            f"The capped hedge was not solved ({found.message})",
            remedy="raise the caps, or use fewer or less alike legs",
        )
    return np.asarray(both @ found.x, dtype=float)
