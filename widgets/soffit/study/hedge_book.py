"""The book of hedged assets with labels: weights, what they imply, and what one more asset adds."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.errors import EstimationError
from soffit.estimate.statistic import NotApplicable
from soffit.hedge.book import Book, BuildUp, build_up, make_book, one_more
from soffit.judge.shrinkage import CeilingPrior
from soffit.study.joint_test import JointTest

__all__ = ["BookAlpha", "BookLimits", "HedgedBook", "book_alphas"]

Floats = npt.NDArray[np.float64]


class BookAlpha(StrEnum):
    """Which alphas a book's weights rest on."""

    ESTIMATED = "estimated"
    CEILING = "shrunk under the ceiling"
    NET = "net of costs"


@dataclass(frozen=True)
class BookLimits:
    """How a book's weights are chosen.

    Parameters
    ----------
    alphas : BookAlpha
        Which alphas the weights rest on.
    diagonal : bool
        Whether the weights ignore residual correlations.
    risk_aversion : float
        Price of variance that sets the scale.
    position, gross : float, optional
        Largest absolute weight and largest sum of absolute weights, per unit of capital.
    """

    alphas: BookAlpha = BookAlpha.ESTIMATED
    diagonal: bool = False
    risk_aversion: float = 3.0
    position: float | None = None
    gross: float | None = None


def book_alphas(joint: JointTest, kind: BookAlpha, ceiling: float, costs: pd.Series[float] | None) -> Floats:
    """Alphas per period that a book of the joint test's assets rests on.

    Parameters
    ----------
    joint : JointTest
        The alphas together.
    kind : BookAlpha
        Which ones.
    ceiling : float
        Annual ceiling, for those shrunk under it.
    costs : Series, optional
        Cost of holding each asset's hedge, decimal a year, for those net of costs. An alpha is moved towards zero by
        it, and not past zero.

    Raises
    ------
    EstimationError
        If the factors alone break the ceiling, or an asset of the book has no cost.
    """
    alpha = joint.fit.alpha
    m = joint.regression.periods_per_year
    if kind is BookAlpha.CEILING:
        weight = float(CeilingPrior(joint.alphas).weight(ceiling / np.sqrt(m)))
        if not np.isfinite(weight):
            raise EstimationError(
                f"The factors alone earn a Sharpe ratio of {joint.factors_sharpe:.2f} a year, above the ceiling of"
                f" {ceiling:.2f}: no alpha is left for a book",
                remedy="raise the ceiling, or use the estimated alphas",
            )
        return np.asarray(weight * alpha, dtype=float)
    if kind is BookAlpha.NET:
        assert costs is not None
        paid = costs.reindex(joint.regression.sample.assets[joint.block.positions]).to_numpy(dtype=float)
        if not np.isfinite(paid).all():
            name = joint.regression.sample.assets[joint.block.positions[int(np.argmin(np.isfinite(paid)))]]
            raise EstimationError(
                f"'{name}' has no hedge cost", remedy="leave it out of the book, or shorten the hedge window"
            )
        return np.asarray(np.sign(alpha) * np.maximum(np.abs(alpha) - paid / m, 0.0), dtype=float)
    return alpha


@dataclass(frozen=True, eq=False)
class HedgedBook:
    """A book of hedged assets.

    Means and volatilities are annual decimals; Sharpe and appraisal ratios are annual. Residual covariances have
    divisor T, as in the joint test, so that an unlimited book of all assets has the joint test's Sharpe ratio.

    Parameters
    ----------
    joint : JointTest
        Where alphas and covariances come from.
    limits : BookLimits
        How the weights were chosen.
    ceiling : float
        Annual ceiling.
    alphas : ndarray, shape (n,)
        Alphas per period of all assets of the joint test.
    held : ndarray of bool, shape (n,)
        Which of them the book may hold.
    book : Book
        The book, per period.
    """

    joint: JointTest
    limits: BookLimits
    ceiling: float
    alphas: Floats
    held: npt.NDArray[np.bool_]
    book: Book

    @classmethod
    def of(
        cls,
        joint: JointTest,
        limits: BookLimits,
        ceiling: float,
        alphas: Floats,
        members: tuple[str, ...] | None,
    ) -> HedgedBook:
        """Choose the weights.

        Raises
        ------
        EstimationError
            If a member has too short a history for the joint block, or the covariances are singular.
        """
        names = [str(name) for name in joint.regression.sample.assets[joint.block.positions]]
        wanted = set(names if members is None else members)
        if strangers := sorted(wanted.difference(names)):
            raise EstimationError(
                f"'{strangers[0]}' is not in the joint block: its history is too short beside the others",
                remedy="leave it out of the book, or use the common sample",
            )
        if not wanted:
            raise EstimationError("The book names no asset", allowed="at least one")
        held = np.array([name in wanted for name in names], dtype=bool)
        covariance = joint.fit.residuals.T @ joint.fit.residuals / joint.fit.periods
        book = make_book(
            alphas[held],
            covariance[np.ix_(held, held)],
            theta2=joint.fit.factors.theta2,
            diagonal=limits.diagonal,
            risk_aversion=limits.risk_aversion,
            position_limit=limits.position,
            gross_limit=limits.gross,
        )
        return cls(joint, limits, ceiling, alphas, held, book)

    @property
    def _m(self) -> int:
        return self.joint.regression.periods_per_year

    @property
    def assets(self) -> pd.Index:
        """Names of the assets of the joint test."""
        return self.joint.regression.sample.assets[self.joint.block.positions]

    @cached_property
    def covariance(self) -> Floats:
        """Residual covariances of all assets of the joint test per period, divisor T, shape (n, n)."""
        residuals = self.joint.fit.residuals
        return np.asarray(residuals.T @ residuals / self.joint.fit.periods, dtype=float)

    @property
    def sharpe(self) -> float:
        """Sharpe ratio of factors and book at the best mix, annual, as the chosen alphas imply it."""
        return self.book.sharpe * float(np.sqrt(self._m))

    @property
    def factors_sharpe(self) -> float:
        """Sharpe ratio of the factors' best combination, annual."""
        return self.joint.factors_sharpe

    @property
    def appraisal(self) -> float | NotApplicable:
        """Appraisal ratio of the book, annual."""
        ratio = self.book.appraisal
        return ratio if isinstance(ratio, NotApplicable) else ratio * float(np.sqrt(self._m))

    @property
    def alpha(self) -> float:
        """Alpha of the book, decimal a year."""
        return self.book.mean * self._m

    @property
    def volatility(self) -> float:
        """Residual volatility of the book, decimal a year."""
        return self.book.volatility * float(np.sqrt(self._m))

    @property
    def fits(self) -> bool:
        """Whether the implied Sharpe ratio is within the ceiling."""
        return self.sharpe <= self.ceiling * (1.0 + 1e-12)

    @property
    def alpha_scale(self) -> float | NotApplicable:
        """Factor by which the alphas would have to shrink for the unlimited book to fit under the ceiling."""
        return self.book.alpha_scale(self.ceiling / float(np.sqrt(self._m)))

    @cached_property
    def adds(self) -> pd.Series[float] | NotApplicable:
        """Annual Sharpe ratio that each asset adds: lost without it if held, gained with it if not; no limits."""
        try:
            squared = one_more(self.alphas, self.covariance, self.held)
        except EstimationError as error:
            return NotApplicable("What one more asset adds", error.what)
        base = self.book.theta2 + self.book.best_squared
        other = np.where(self.held, np.maximum(base - squared, 0.0), base + squared)
        values = np.abs(np.sqrt(other) - np.sqrt(base)) * np.sqrt(self._m)
        return pd.Series(values, index=self.assets, name="adds")

    @cached_property
    def path(self) -> BuildUp | NotApplicable:
        """Assets in the order in which they add most, and the squared ratio after each, per period; no limits."""
        try:
            return build_up(self.alphas, self.covariance)
        except EstimationError as error:
            return NotApplicable("The build-up of the book", error.what)

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row an asset of the joint test.

        Columns: held; alpha (as used, decimal a year), sigma (decimal a year), appraisal (annual); weight (per unit
        of capital), alpha_share, risk_share; adds (annual Sharpe ratio).
        """
        spread = np.sqrt(np.diag(self.covariance))

        def placed(values: Floats) -> Floats:
            out = np.full(len(self.held), np.nan)
            out[self.held] = values
            return out

        adds = self.adds
        columns: dict[str, npt.ArrayLike] = {
            "held": self.held,
            "alpha": self.alphas * self._m,
            "sigma": spread * np.sqrt(self._m),
            "appraisal": np.divide(self.alphas, spread, out=np.full(len(spread), np.nan), where=spread > 0)
            * np.sqrt(self._m),
            "weight": placed(self.book.weights),
            "alpha_share": placed(self.book.mean_shares),
            "risk_share": placed(self.book.risk_shares),
            "adds": np.full(len(spread), np.nan) if isinstance(adds, NotApplicable) else adds.to_numpy(),
        }
        return pd.DataFrame(columns, index=self.assets)
