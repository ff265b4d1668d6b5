"""Hedge ratios with labels, from the whole sample or from the latest window."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cached_property
from typing import cast

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.errors import EstimationError
from soffit.estimate.regression import LeastSquares, least_squares
from soffit.hedge.walk_forward import WalkSchedule
from soffit.hedge.weights import BetaPrior, HedgeRatios, HedgeRule, beta_prior, hedge_ratios
from soffit.settings import HedgeBeta, WindowKind
from soffit.study.sample import Block, Sample

__all__ = ["FactorHedge"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class FactorHedge:
    """Hedge of every asset with the factors, and what it promises in its own sample.

    Means and volatilities of the table are annual decimals; `pieces` holds the same per period.

    Parameters
    ----------
    sample : Sample
        What is hedged.
    rule : HedgeRule
        How ratios followed from the estimates.
    latest : bool
        Whether the ratios come from the latest window of the walk-forward rather than from the whole sample.
    pieces : tuple of (Block, HedgeRatios)
        One a block of rows; a single one on the common sample.
    """

    sample: Sample
    rule: HedgeRule
    latest: bool
    pieces: tuple[tuple[Block, HedgeRatios], ...]

    @classmethod
    def of(cls, sample: Sample, rule: HedgeRule, schedule: WalkSchedule | None = None) -> FactorHedge:
        """Estimate hedge ratios.

        Parameters
        ----------
        sample : Sample
            What is hedged.
        rule : HedgeRule
            How.
        schedule : WalkSchedule, optional
            Given, the ratios come from the latest window that this schedule would use.

        Raises
        ------
        EstimationError
            If a block is too short for the window or the factors.
        """
        blocks = [block if schedule is None else _latest(block, schedule, sample) for block in sample.blocks]
        names = sample.factor_names
        fits = [least_squares(block.returns, block.factors, names=names) for block in blocks]
        prior = _prior(fits) if rule.beta is HedgeBeta.VASICEK else None
        pieces = tuple(
            (block, hedge_ratios(block.returns, block.factors, rule, fit=fit, prior=prior, names=names))
            for block, fit in zip(blocks, fits, strict=True)
        )
        return cls(sample, rule, schedule is not None, pieces)

    def _gather(self, name: str) -> Floats:
        first = getattr(self.pieces[0][1], name)
        out = np.empty((len(self.sample.assets), *first.shape[1:]))
        for block, piece in self.pieces:
            out[block.positions] = getattr(piece, name)
        return out

    @property
    def periods_per_year(self) -> int:
        """Periods in a year, m."""
        return self.sample.periods_per_year

    @cached_property
    def ratios(self) -> pd.DataFrame:
        """Notional of each factor sold per unit of the asset, N×K; negative where bought."""
        return pd.DataFrame(
            self._gather("ratios"), index=self.sample.assets, columns=list(self.sample.factor_names)
        )

    @cached_property
    def estimated_through(self) -> pd.Series[pd.Timestamp]:
        """Last date of the data behind each asset's ratios."""
        return self._dates(-1)

    def _dates(self, place: int) -> pd.Series[pd.Timestamp]:
        out = pd.Series(pd.NaT, index=self.sample.assets, dtype="datetime64[ns]")
        for block, _ in self.pieces:
            out.iloc[block.positions] = block.dates[place]
        return cast("pd.Series[pd.Timestamp]", out)

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row an asset.

        Columns: ratio of each factor; gross (sum of absolute ratios); alpha (mean hedged return), unhedged,
        volatility (decimal a year); effectiveness; appraisal (annual); capped; periods, first, last.
        """
        m, root = self.periods_per_year, np.sqrt(self.periods_per_year)
        alpha, volatility = self._gather("mean") * m, self._gather("volatility") * root
        columns: dict[str, npt.ArrayLike] = {f"ratio {name}": self.ratios[name] for name in self.ratios}
        columns["gross"] = self._gather("gross")
        columns["alpha"] = alpha
        columns["unhedged"] = self._blockwise(lambda block: block.returns.std(axis=0, ddof=1)) * root
        columns["volatility"] = volatility
        columns["effectiveness"] = self._gather("effectiveness")
        with np.errstate(divide="ignore", invalid="ignore"):
            columns["appraisal"] = np.where(volatility > 0, alpha / volatility, np.nan)
        columns["capped"] = self._gather("capped").astype(bool)
        columns["periods"] = self._blockwise(lambda block: [len(block.dates)] * len(block.positions)).astype(
            int
        )
        out = pd.DataFrame(columns, index=self.sample.assets)
        out["first"], out["last"] = self._dates(0), self._dates(-1)
        return out

    @cached_property
    def legs(self) -> pd.DataFrame | None:
        """What each leg saves and costs, decimal a year, where legs were chosen; None otherwise.

        One row an asset and leg. Columns: saving (the risk that the leg takes away at the stated risk aversion),
        cost, held.
        """
        if self.pieces[0][1].legs is None:
            return None
        shape = self.ratios.shape
        saving, cost, held = np.empty(shape), np.empty(shape), np.empty(shape, dtype=bool)
        for block, piece in self.pieces:
            assert piece.legs is not None
            saving[block.positions], cost[block.positions] = piece.legs.saving, piece.legs.cost
            held[block.positions] = piece.legs.kept
        index = pd.MultiIndex.from_product([self.sample.assets, self.ratios.columns], names=["asset", "leg"])
        m = self.periods_per_year
        return pd.DataFrame(
            {"saving": saving.ravel() * m, "cost": cost.ravel() * m, "held": held.ravel()}, index=index
        )

    def _blockwise(self, value: Callable[[Block], npt.ArrayLike]) -> Floats:
        out = np.empty(len(self.sample.assets))
        for block, _ in self.pieces:
            out[block.positions] = value(block)
        return out


def _latest(block: Block, schedule: WalkSchedule, sample: Sample) -> Block:
    """Rows of the window that a hedge traded after the block's end would be estimated on."""
    if schedule.kind is WindowKind.EXPANDING:
        return block
    rows = len(block.dates)
    if rows < schedule.window:
        name = sample.assets[block.positions[0]]
        raise EstimationError(
            f"'{name}' has {rows} periods and the hedge window has {schedule.window}",
            allowed="a window no longer than the history",
            remedy="shorten the window, or leave the asset out",
        )
    tail = slice(rows - schedule.window, rows)
    return replace(block, dates=block.dates[tail], returns=block.returns[tail], factors=block.factors[tail])


def _prior(fits: list[LeastSquares]) -> BetaPrior:
    """Prior of the betas over the assets of all blocks."""
    beta = np.concatenate([fit.coefficients[:, 1:] for fit in fits])
    errors = np.concatenate([fit.errors[:, 1:] for fit in fits])
    return beta_prior(beta[None], errors[None] ** 2)
