"""Rolling and expanding factor regressions for many assets at once.

All quantities are decimal per period. A window that ends at period t uses nothing after t.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from soffit.errors import EstimationError

__all__ = ["RollingRegression", "rolling_betas"]

Floats = npt.NDArray[np.float64]

_COLLINEAR = 1e-10  # as in soffit.estimate.regression
_ROUNDING = 1e-13
_BATCH_BYTES = 8_000_000  # what one batch of windows may hold of the returns: stays in the cache


@dataclass(frozen=True, eq=False)
class RollingRegression:
    """Regressions of N assets on K factors over W windows.

    Parameters
    ----------
    ends : ndarray of int, shape (W,)
        Position of the last period in each window.
    alpha : ndarray, shape (W, N)
        Intercepts.
    beta : ndarray, shape (W, N, K)
        Slopes.
    sigma : ndarray, shape (W, N)
        Residual standard deviations, divisor n − K − 1 with n the window's own number of periods.
    r2 : ndarray, shape (W, N)
        Shares of variance explained; NaN where a return does not move in the window.
    unit_errors : ndarray, shape (W, K + 1)
        Classical standard errors per unit of residual volatility, the intercept's first.
    periods : ndarray of int, shape (W,)
        Number of periods in each window.

    Notes
    -----
    Where a return is missing inside a window, all numbers of that asset and window are NaN; :attr:`complete`
    tells them apart.
    """

    ends: npt.NDArray[np.int64]
    alpha: Floats
    beta: Floats
    sigma: Floats
    r2: Floats
    unit_errors: Floats
    periods: npt.NDArray[np.int64]

    @property
    def count(self) -> int:
        """W, the number of windows."""
        return len(self.ends)

    @cached_property
    def complete(self) -> npt.NDArray[np.bool_]:
        """Whether an asset has all its returns in a window, shape (W, N)."""
        return np.isfinite(self.alpha)

    @cached_property
    def alpha_error(self) -> Floats:
        """Classical standard errors of the intercepts, shape (W, N)."""
        return self.sigma * self.unit_errors[:, :1]

    @cached_property
    def beta_error(self) -> Floats:
        """Classical standard errors of the slopes, shape (W, N, K)."""
        return self.sigma[:, :, None] * self.unit_errors[:, None, 1:]

    @cached_property
    def appraisal(self) -> Floats:
        """Appraisal ratios per period, shape (W, N); NaN where the factors leave no residual."""
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(self.sigma > 0.0, self.alpha / self.sigma, np.nan)

    @property
    def df(self) -> npt.NDArray[np.int64]:
        """Residual degrees of freedom of each window, shape (W,)."""
        return np.asarray(self.periods - self.beta.shape[2] - 1, dtype=np.int64)


def rolling_betas(
    returns: Floats,
    factors: Floats,
    window: int,
    *,
    expanding: bool = False,
    step: int = 1,
    names: Sequence[str] = (),
) -> RollingRegression:
    """Regress every asset on the factors in every window.

    Parameters
    ----------
    returns : ndarray, shape (T, N)
        Excess returns, decimal per period. NaN marks a missing return.
    factors : ndarray, shape (T, K)
        Factor returns without gaps; K may be zero.
    window : int
        Periods in a rolling window, or in the first expanding one.
    expanding : bool
        Whether every window starts at the first period.
    step : int
        Periods between the ends of successive windows.
    names : sequence of str
        Factor names, for messages.

    Returns
    -------
    RollingRegression
        Windows end at ``window − 1``, ``window − 1 + step``, …

    Raises
    ------
    EstimationError
        If the window is too short or longer than the sample, a factor value is missing, or the factors are
        collinear inside a window.

    Notes
    -----
    Each rolling window is demeaned by its own means and factorised by itself, so that no error builds up
    from one window to the next. Expanding windows factorise the factors anew and add up squared recursive
    residuals (Brown, Durbin and Evans 1975), whose terms are all positive.
    """
    returns, factors = _checked(returns, factors, window, step)
    T = len(returns)
    ends = np.arange(window - 1, T, step, dtype=np.int64)
    missing = np.isnan(returns)
    filled = np.where(missing, 0.0, returns)
    if expanding:
        pieces = _expanding(filled, factors, window, names)
        alpha, beta, ssr, tss, unit = (piece[::step] for piece in pieces)
        periods = ends + 1
    else:
        alpha, beta, ssr, tss, unit = _rolling(filled, factors, window, ends, names)
        periods = np.full(len(ends), window, dtype=np.int64)
    df = (periods - factors.shape[1] - 1)[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        r2 = np.where(tss > 0.0, 1.0 - ssr / tss, np.nan)
    result = RollingRegression(ends, alpha, beta, np.sqrt(ssr / df), r2, unit, periods)
    if missing.any():
        gaps = np.vstack([np.zeros((1, returns.shape[1]), dtype=np.int64), np.cumsum(missing, axis=0)])
        touched = gaps[ends + 1] - gaps[ends + 1 - periods] > 0
        for values in (alpha, beta, result.sigma, r2):
            values[touched] = np.nan
    return result


def _checked(returns: Floats, factors: Floats, window: int, step: int) -> tuple[Floats, Floats]:
    returns, factors = np.asarray(returns, dtype=float), np.asarray(factors, dtype=float)
    if returns.ndim != 2 or factors.ndim != 2 or len(returns) != len(factors):
        raise EstimationError(
            f"The arrays have shapes {returns.shape} and {factors.shape}",
            allowed="two tables with the same number of rows",
        )
    if not np.isfinite(factors).all() or np.isinf(returns).any():
        raise EstimationError(
            "A factor value is missing, or a value is infinite",
            allowed="finite factor returns; returns may have gaps",
            remedy="cut the sample to where all the factors exist",
        )
    T, K = factors.shape
    if not K + 2 <= window <= T:
        raise EstimationError(
            f"A window of {window} periods came for {K} factors and {T} periods",
            allowed=f"{K + 2} to {T}" if K + 2 <= T else f"a sample of {K + 2} periods or more",
            remedy="choose another window, fewer factors or a longer sample",
        )
    if step < 1:
        raise EstimationError(f"A step of {step} periods came", allowed="1 or more")
    return returns, factors


def _rolling(
    returns: Floats, factors: Floats, window: int, ends: npt.NDArray[np.int64], names: Sequence[str]
) -> tuple[Floats, Floats, Floats, Floats, Floats]:
    """Intercepts, slopes, residual and total sums of squares, and unit errors of windows of one length."""
    W, N, K = len(ends), returns.shape[1], factors.shape[1]
    starts = ends - window + 1
    f = np.lib.stride_tricks.sliding_window_view(factors, window, axis=0)[starts].transpose(0, 2, 1)
    centre = f.mean(axis=1)
    q, bread = _factorise(f, centre, ends, names)
    unit = _unit_errors(bread, centre, np.full(W, window))
    y = np.lib.stride_tricks.sliding_window_view(returns, window, axis=0).transpose(0, 2, 1)
    alpha, beta = np.empty((W, N)), np.empty((W, N, K))
    ssr, tss = np.empty((W, N)), np.empty((W, N))
    batch = max(1, _BATCH_BYTES // (8 * window * N))
    for low in range(0, W, batch):
        part = slice(low, low + batch)
        block = y[starts[part]]
        mean = block.mean(axis=1)
        size = np.einsum("wtn,wtn->wn", block, block)
        left = block - mean[:, None, :]
        tss[part] = np.einsum("wtn,wtn->wn", left, left)
        loads = q[part].transpose(0, 2, 1) @ left
        left -= q[part] @ loads
        ssr[part] = np.einsum("wtn,wtn->wn", left, left)
        ssr[part][ssr[part] <= _ROUNDING**2 * size] = 0.0
        tss[part][tss[part] <= _ROUNDING**2 * size] = 0.0
        beta[part] = (bread[part] @ loads).transpose(0, 2, 1)
        alpha[part] = mean - np.einsum("wnk,wk->wn", beta[part], centre[part])
    return alpha, beta, ssr, tss, unit


def _expanding(
    returns: Floats, factors: Floats, window: int, names: Sequence[str]
) -> tuple[Floats, Floats, Floats, Floats, Floats]:
    """As :func:`_rolling` for windows that all start at the first period, one for each end."""
    (T, N), K = returns.shape, factors.shape[1]
    ends = np.arange(window - 1, T)
    W = len(ends)
    beta, centre, bread = np.empty((W, N, K)), np.empty((W, K)), np.empty((W, K, K))
    for w, end in enumerate(ends):
        centre[w] = factors[: end + 1].mean(axis=0)
        q, root = _factorise(factors[None, : end + 1], centre[w : w + 1], ends[w : w + 1], names)
        bread[w] = root[0]
        # The columns of q are centred, so the returns need not be.
        beta[w] = (root[0] @ (q[0].T @ returns[: end + 1])).T
    mean = np.cumsum(returns, axis=0)[ends] / (ends + 1)[:, None]
    alpha = mean - np.einsum("wnk,wk->wn", beta, centre)
    unit = _unit_errors(bread, centre, ends + 1)
    # The forecast error of each period from the coefficients before it, scaled by its own variance.
    later = ends[1:]
    surprise = returns[later] - alpha[:-1] - np.einsum("wnk,wk->wn", beta[:-1], factors[later])
    gap = np.einsum("wk,wkj->wj", factors[later] - centre[:-1], bread[:-1])
    spread = 1.0 + 1.0 / later + (gap**2).sum(axis=1)
    start = returns[:window] - returns[:window].mean(axis=0)
    left = start - (factors[:window] - centre[0]) @ beta[0].T
    ssr = np.cumsum(np.vstack([(left**2).sum(axis=0), surprise**2 / spread[:, None]]), axis=0)
    change = (returns[later] - mean[:-1]) ** 2 * (later / (later + 1))[:, None]
    tss = np.cumsum(np.vstack([(start**2).sum(axis=0), change]), axis=0)
    floor = _ROUNDING**2 * np.cumsum(returns**2, axis=0)[ends]
    ssr[ssr <= floor] = 0.0
    tss[tss <= floor] = 0.0
    return alpha, beta, ssr, tss, unit


def _factorise(
    factors: Floats, centre: Floats, ends: npt.NDArray[np.int64], names: Sequence[str]
) -> tuple[Floats, Floats]:
    """Orthonormal columns, shape (W, n, K), and the root of the inverse cross-product, shape (W, K, K)."""
    centred = factors - centre[:, None, :]
    scale = np.linalg.norm(centred, axis=1)
    scale[scale <= _COLLINEAR * np.linalg.norm(factors, axis=1)] = 0.0
    safe = np.where(scale > 0.0, scale, 1.0)
    q, r = np.linalg.qr(centred / safe[:, None, :])
    diagonal = np.abs(np.diagonal(r, axis1=1, axis2=2))
    bad = (diagonal < _COLLINEAR) | (scale == 0.0)
    if bad.any():
        w, column = (int(place[0]) for place in np.nonzero(bad))
        label = f"'{names[column]}'" if column < len(names) else f"factor {column + 1}"
        raise EstimationError(
            f"{label} is constant or a combination of the other factors in the window that ends at "
            f"period {ends[w] + 1}",
            remedy="take a longer window, leave it out, or start the sample where it moves by itself",
        )
    return q, np.linalg.inv(r) / safe[:, :, None]


def _unit_errors(bread: Floats, centre: Floats, periods: npt.NDArray[np.int64]) -> Floats:
    slopes = np.linalg.norm(bread, axis=2)
    level = np.einsum("wk,wkj->wj", centre, bread)
    return np.column_stack([np.sqrt(1.0 / periods + (level**2).sum(axis=1)), slopes])
