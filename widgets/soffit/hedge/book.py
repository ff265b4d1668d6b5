"""A book of hedged assets: how much of each, what Sharpe ratio that implies, and what one more would add.

Weights are capital in each hedged asset per unit of the book's capital; all moments are decimal per period.
Source: Treynor and Black (1973). Arrays in, frozen results out.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
from scipy import linalg

from soffit.errors import EstimationError, SettingError
from soffit.estimate.statistic import NotApplicable
from soffit.hedge.quadratic import nearest_within

__all__ = ["ActiveMarket", "Book", "BuildUp", "build_up", "make_book", "one_more", "with_market"]

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

_FLAT = 1e-9  # a net weight below this share of the gross one cannot be scaled to one


@dataclass(frozen=True, eq=False)
class Book:
    """Weights of N hedged assets and what they imply.

    Parameters
    ----------
    alpha : ndarray, shape (N,)
        Alphas that the weights rest on.
    covariance : ndarray, shape (N, N)
        Residual covariances by which the book is judged: the full ones, also where the weights ignore correlations.
    weights : ndarray, shape (N,)
        Capital in each hedged asset.
    unlimited : ndarray, shape (N,)
        Weights before any limit: Σ⁻¹α over the risk aversion.
    diagonal : bool
        Whether the weights ignore residual correlations.
    theta2 : float
        Squared Sharpe ratio of the factors, per period.
    risk_aversion : float
        Price of variance that sets the scale.
    limited : bool
        Whether a limit binds.
    """

    alpha: Floats
    covariance: Floats
    weights: Floats
    unlimited: Floats
    diagonal: bool
    theta2: float
    risk_aversion: float
    limited: bool

    @cached_property
    def mean(self) -> float:
        """Alpha of the book per unit of capital, w'α."""
        return float(self.weights @ self.alpha)

    @cached_property
    def volatility(self) -> float:
        """Residual volatility of the book, √(w'Σw)."""
        return math.sqrt(max(float(self.weights @ self.covariance @ self.weights), 0.0))

    @property
    def gross(self) -> float:
        """Sum of absolute weights."""
        return float(np.abs(self.weights).sum())

    @property
    def net(self) -> float:
        """Sum of weights."""
        return float(self.weights.sum())

    @property
    def appraisal(self) -> float | NotApplicable:
        """Appraisal ratio of the book, which does not exist for a book that holds nothing."""
        if self.volatility == 0.0:
            return NotApplicable("Appraisal ratio of the book", "the book holds nothing: all alphas are zero")
        return self.mean / self.volatility

    @property
    def sharpe(self) -> float:
        """Sharpe ratio of the factors and the book together at the best mix, √(θ_f² + AR²)."""
        ratio = self.appraisal
        return math.sqrt(self.theta2 + (0.0 if isinstance(ratio, NotApplicable) else ratio**2))

    @cached_property
    def best_squared(self) -> float:
        """α'Σ⁻¹α: squared appraisal ratio without limits and with all correlations."""
        return float(self.alpha @ _solve(self.covariance, self.alpha))

    def alpha_scale(self, ceiling: float) -> float | NotApplicable:
        """Factor by which the alphas would have to shrink for the unlimited book to fit under a ceiling.

        Parameters
        ----------
        ceiling : float
            Highest Sharpe ratio per period.

        Returns
        -------
        float or NotApplicable
            One where they fit as they are; it does not exist where the factors alone exceed the ceiling.
        """
        room = ceiling**2 - self.theta2
        if room < 0:
            return NotApplicable(
                "Scale of the alphas",
                "the factors alone earn more than the ceiling, so that no alpha fits under it",
            )
        return 1.0 if self.best_squared <= room else math.sqrt(room / self.best_squared)

    @cached_property
    def mean_shares(self) -> Floats:
        """Share of the book's alpha that each asset earns, shape (N,); they sum to one."""
        return self._shares(self.weights * self.alpha, self.mean)

    @cached_property
    def risk_shares(self) -> Floats:
        """Share of the book's residual variance that each asset carries, shape (N,); they sum to one."""
        return self._shares(self.weights * (self.covariance @ self.weights), self.volatility**2)

    @property
    def scaled_to_one(self) -> Floats | NotApplicable:
        """Weights that sum to one, the form of Treynor and Black (1973), shape (N,)."""
        if abs(self.net) <= _FLAT * self.gross:
            return NotApplicable("Weights that sum to one", "the book's net weight is zero")
        return self.weights / self.net

    def _shares(self, parts: Floats, whole: float) -> Floats:
        return np.asarray(parts / whole if whole else np.zeros_like(parts), dtype=float)


def make_book(
    alpha: Floats,
    covariance: Floats,
    *,
    theta2: float = 0.0,
    diagonal: bool = False,
    risk_aversion: float = 3.0,
    position_limit: float | None = None,
    gross_limit: float | None = None,
) -> Book:
    """Choose the weights of a book of hedged assets.

    Parameters
    ----------
    alpha : ndarray, shape (N,)
        Alphas: estimated, shrunk under a ceiling, or net of costs.
    covariance : ndarray, shape (N, N)
        Residual covariances.
    theta2 : float
        Squared Sharpe ratio of the factors.
    diagonal : bool
        Whether the weights ignore residual correlations, as in Treynor and Black (1973).
    risk_aversion : float
        Price of variance: without limits the weights are Σ⁻¹α over it.
    position_limit, gross_limit : float, optional
        Largest absolute weight, and largest sum of absolute weights.

    Raises
    ------
    EstimationError
        If a value is missing, an asset has no residual risk, or the full covariance is singular.
    SettingError
        If the risk aversion or a limit is not positive.

    Notes
    -----
    Under limits the weights maximise ``w'α − risk_aversion/2 · w'Σw``.
    """
    alpha, covariance = _checked(alpha, covariance, diagonal)
    if not (math.isfinite(risk_aversion) and risk_aversion > 0):
        raise SettingError(f"The risk aversion is {risk_aversion:g}", allowed="a positive number")
    for label, limit in (("position limit", position_limit), ("gross limit", gross_limit)):
        if limit is not None and not limit > 0:
            raise SettingError(
                f"A {label} of {limit:g} admits no position", allowed="a positive limit, or none"
            )
    metric = np.diag(np.diag(covariance)) if diagonal else covariance
    unlimited = _solve(metric, alpha) / risk_aversion
    weights, limited = unlimited, False
    if position_limit is not None or gross_limit is not None:
        bounds = np.array(np.inf if position_limit is None else position_limit)
        found, changed = nearest_within(unlimited[None, None], metric[None], bounds, gross_limit)
        weights, limited = found[0, 0], bool(changed[0, 0])
    return Book(alpha, covariance, weights, unlimited, diagonal, float(theta2), float(risk_aversion), limited)


def _checked(alpha: Floats, covariance: Floats, diagonal: bool = False) -> tuple[Floats, Floats]:
    alpha, covariance = np.asarray(alpha, dtype=float), np.asarray(covariance, dtype=float)
    if alpha.ndim != 1 or covariance.shape != (len(alpha), len(alpha)) or not len(alpha):
        raise EstimationError(f"{alpha.shape} alphas came with covariances of shape {covariance.shape}")
    if not (np.isfinite(alpha).all() and np.isfinite(covariance).all()):
        raise EstimationError("An alpha or covariance is missing", remedy="leave the asset out of the book")
    risk = np.diag(covariance)
    if (risk <= 0).any():
        raise EstimationError(
            f"Asset {int(np.argmin(risk)) + 1} has no residual risk, so that no weight is finite",
            remedy="leave it out of the book",
        )
    if not diagonal:
        _root(covariance)
    return alpha, covariance


def _root(covariance: Floats) -> tuple[Floats, Floats]:
    """Cholesky factor of the correlations, and the volatilities."""
    scale = np.sqrt(np.diag(covariance))
    correlation = covariance / np.outer(scale, scale)
    try:
        root = np.linalg.cholesky(correlation)
    except np.linalg.LinAlgError:
        root = np.zeros_like(correlation)
    if np.diag(root).min() < 1e-7:
        raise EstimationError(
            f"The residual covariances of {len(scale)} assets are singular",
            allowed="fewer assets than periods less factors, none a combination of the others",
            remedy="use diagonal covariances, or fewer assets",
        )
    return root, scale


def _solve(covariance: Floats, vector: Floats) -> Floats:
    """Σ⁻¹v through the correlations."""
    root, scale = _root(covariance)
    return np.asarray(linalg.cho_solve((root, True), vector / scale) / scale, dtype=float)


def one_more(alpha: Floats, covariance: Floats, held: npt.NDArray[np.bool_]) -> Floats:
    """Squared appraisal ratio that each asset adds to a book without limits, shape (N,).

    For an asset outside the book what it would add to those held; for one inside what would be lost without it.

    Parameters
    ----------
    alpha, covariance : ndarray, shape (N,) and (N, N)
        Of all assets, held or not.
    held : ndarray of bool, shape (N,)
        The book.

    Notes
    -----
    With c the asset's covariances with the book, the gain is (α − c'Σ⁻¹α_b)²/(σ² − c'Σ⁻¹c): the squared appraisal
    ratio of its alpha relative to the book.

    Raises
    ------
    EstimationError
        If a value is missing or the covariances are singular.
    """
    alpha, covariance = _checked(alpha, covariance)
    held = np.asarray(held, dtype=bool)
    adds = np.empty(len(alpha))
    inside, outside = np.flatnonzero(held), np.flatnonzero(~held)
    if len(inside):
        block = covariance[np.ix_(inside, inside)]
        inverse = np.column_stack([_solve(block, column) for column in np.eye(len(inside))])
        best = inverse @ alpha[inside]
        adds[inside] = best**2 / np.diag(inverse)
        cross = covariance[np.ix_(inside, outside)]
        moved = inverse @ cross
        left = alpha[outside] - moved.T @ alpha[inside]
        risk = np.diag(covariance)[outside] - (cross * moved).sum(axis=0)
    else:
        left, risk = alpha[outside], np.diag(covariance)[outside]
    adds[outside] = left**2 / risk
    return adds


@dataclass(frozen=True, eq=False)
class BuildUp:
    """Assets in the order in which they add most.

    Parameters
    ----------
    order : ndarray of int, shape (N,)
        Positions of the assets, the most useful first.
    squared : ndarray, shape (N,)
        Squared appraisal ratio of the book after each one.
    """

    order: Ints
    squared: Floats


def build_up(alpha: Floats, covariance: Floats) -> BuildUp:
    """Build a book one asset at a time, each time the one that adds most to the squared appraisal ratio.

    Parameters
    ----------
    alpha, covariance : ndarray, shape (N,) and (N, N)
        Alphas and residual covariances.

    Raises
    ------
    EstimationError
        If a value is missing or the covariances are singular.
    """
    alpha, covariance = _checked(alpha, covariance)
    left, spread = alpha.copy(), covariance.copy()
    free = np.ones(len(alpha), dtype=bool)
    order, gains = np.empty(len(alpha), dtype=np.int64), np.empty(len(alpha))
    for step in range(len(alpha)):
        risk = np.where(free, np.diag(spread), 1.0)
        gain = np.where(free, left**2 / risk, -1.0)
        pick = int(np.argmax(gain))
        order[step], gains[step] = pick, gain[pick]
        loading = spread[:, pick] / spread[pick, pick]
        left = left - loading * left[pick]
        spread = spread - np.outer(loading, spread[pick])
        free[pick] = False
    return BuildUp(order, np.cumsum(gains))


@dataclass(frozen=True)
class ActiveMarket:
    """An active book beside the market, after Treynor and Black (1973).

    Parameters
    ----------
    alpha, beta, sigma : float
        Of the active portfolio with weights that sum to one.
    initial : float
        Its weight if its beta were one.
    weight : float
        Its optimal weight; the rest is in the market.
    sharpe : float
        Sharpe ratio of the two together.
    m2 : float
        Return over the market's at the market's volatility (Modigliani and Modigliani 1997).
    """

    alpha: float
    beta: float
    sigma: float
    initial: float
    weight: float
    sharpe: float
    m2: float


def with_market(book: Book, beta: Floats, market_mean: float, market_volatility: float) -> ActiveMarket:
    """Mix an active book of unhedged assets with the market.

    Parameters
    ----------
    book : Book
        The active book.
    beta : ndarray, shape (N,)
        Market betas of its assets.
    market_mean, market_volatility : float
        Mean excess return and volatility of the market.

    Raises
    ------
    EstimationError
        If the book's net weight is zero, or the market has no premium or no risk.
    """
    weights = book.scaled_to_one
    if isinstance(weights, NotApplicable):
        raise EstimationError(f"The active portfolio does not exist: {weights.reason}")
    if not (market_volatility > 0 and market_mean != 0):
        raise EstimationError(
            f"A market with mean {market_mean:g} and volatility {market_volatility:g}",
            allowed="a positive volatility and a premium other than zero",
        )
    alpha, slope = float(weights @ book.alpha), float(weights @ beta)
    sigma = float(np.sqrt(weights @ book.covariance @ weights))
    initial = (alpha / sigma**2) / (market_mean / market_volatility**2)
    sharpe = math.sqrt((market_mean / market_volatility) ** 2 + (alpha / sigma) ** 2)
    return ActiveMarket(
        alpha=alpha,
        beta=slope,
        sigma=sigma,
        initial=initial,
        weight=initial / (1.0 + (1.0 - slope) * initial),
        sharpe=sharpe,
        m2=(sharpe - market_mean / market_volatility) * market_volatility,
    )
