"""Which rows of a panel an estimate uses: the window, the chosen series, and unequal histories."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.errors import EstimationError, SettingError, nearest
from soffit.intake import Frequency, Panel
from soffit.settings import Histories, Settings

__all__ = ["Block", "Sample"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Block:
    """A complete rectangle of returns: every asset has a value in every row.

    Parameters
    ----------
    dates : DatetimeIndex
        The T period ends.
    positions : ndarray of int, shape (n,)
        Columns of the sample that the block covers.
    returns : ndarray, shape (T, n)
        Excess returns of those assets.
    factors : ndarray, shape (T, K)
        Excess returns of the factors.
    """

    dates: pd.DatetimeIndex
    positions: npt.NDArray[np.int64]
    returns: Floats
    factors: Floats


@dataclass(frozen=True, eq=False)
class Sample:
    """The part of a panel that the settings choose.

    Parameters
    ----------
    returns : DataFrame
        T×N excess returns, decimal per period; NaN where an asset has no value.
    factors : DataFrame
        T×K excess returns of traded factors.
    frequency : Frequency
        How often they are observed.
    histories : Histories
        Common sample, or each asset on its own history.
    """

    returns: pd.DataFrame
    factors: pd.DataFrame
    frequency: Frequency
    histories: Histories

    @classmethod
    def of(cls, panel: Panel, settings: Settings) -> Sample:
        """Cut a panel to the window, assets and factors of the settings.

        Raises
        ------
        SettingError
            If a named series is not in the panel, or the window holds no rows.
        """
        factors = _chosen(panel.factors, settings.factors, "factor")
        assets = _chosen(panel.assets, settings.assets, "asset")
        window = slice(settings.start and str(settings.start), settings.end and str(_month_end(settings)))
        returns = assets.loc[window]
        if returns.empty:
            dates = panel.dates
            raise SettingError(
                f"No rows lie between {settings.start or 'the start'} and {settings.end or 'the end'}",
                allowed=f"dates from {dates[0]:%Y-%m-%d} to {dates[-1]:%Y-%m-%d}",
                remedy="widen the sample window",
            )
        return cls(returns, factors.loc[window], panel.frequency, settings.histories)

    @property
    def assets(self) -> pd.Index:
        """Names of the N assets."""
        return self.returns.columns

    @property
    def factor_names(self) -> tuple[str, ...]:
        """Names of the K factors."""
        return tuple(str(name) for name in self.factors.columns)

    @property
    def periods_per_year(self) -> int:
        """Periods in a year, m."""
        return self.frequency.periods_per_year

    @cached_property
    def _there(self) -> npt.NDArray[np.bool_]:
        return self.returns.notna().to_numpy()

    def _block(self, rows: npt.NDArray[np.bool_], positions: npt.NDArray[np.int64]) -> Block:
        return Block(
            pd.DatetimeIndex(self.returns.index[rows]),
            positions,
            self.returns.to_numpy()[np.ix_(rows, positions)],
            self.factors.to_numpy()[rows],
        )

    @cached_property
    def common(self) -> Block:
        """Rows in which every asset has a value.

        Raises
        ------
        EstimationError
            If there are fewer than K + 3 such rows.
        """
        rows = np.asarray(self._there.all(axis=1))
        needed = self.factors.shape[1] + 3
        if rows.sum() < needed:
            shortest = self.returns.notna().sum().sort_values()
            raise EstimationError(
                f"The assets share only {int(rows.sum())} rows; the shortest history is that of "
                f"'{shortest.index[0]}' with {int(shortest.iloc[0])}",
                allowed=f"at least {needed} rows that every asset has",
                remedy="leave that asset out, or set histories to 'own history'",
            )
        return self._block(rows, np.arange(self.returns.shape[1]))

    @cached_property
    def own(self) -> tuple[Block, ...]:
        """One block for each distinct pattern of missing values.

        Raises
        ------
        EstimationError
            If an asset has fewer than K + 3 values.
        """
        needed = self.factors.shape[1] + 3
        counts = self._there.sum(axis=0)
        if counts.min(initial=needed) < needed:
            short = int(counts.argmin())
            raise EstimationError(
                f"'{self.assets[short]}' has {int(counts[short])} values in this window",
                allowed=f"at least {needed}, for {self.factors.shape[1]} betas, an alpha and their errors",
                remedy="leave it out, or widen the sample window",
            )
        packed = np.packbits(self._there, axis=0).T.copy()
        keys = packed.view([("", packed.dtype)] * packed.shape[1]).ravel()
        _, first, group = np.unique(keys, return_index=True, return_inverse=True)
        return tuple(
            self._block(self._there[:, first[label]], np.flatnonzero(group == label))
            for label in np.argsort(first)
        )

    @property
    def blocks(self) -> tuple[Block, ...]:
        """The blocks that per-asset results use, by the histories setting."""
        return (self.common,) if self.histories is Histories.COMMON else self.own

    @cached_property
    def joint_block(self) -> Block:
        """The block that joint results use.

        The common sample; under own histories the largest block (rows times assets) among those that keep
        the assets with the longest histories.
        """
        if self.histories is Histories.COMMON or len(self.own) == 1:
            return self.blocks[0]
        order = np.argsort(-self._there.sum(axis=0), kind="stable")
        cells, best = -1, (np.zeros(len(self.returns), dtype=bool), order[:1])
        rows = np.ones(len(self.returns), dtype=bool)
        for kept, position in enumerate(order, start=1):
            rows = rows & self._there[:, position]
            if rows.sum() > kept + self.factors.shape[1] and rows.sum() * kept > cells:
                cells, best = int(rows.sum() * kept), (rows, np.sort(order[:kept]))
        return self._block(*best)

    def left_out(self, block: Block) -> tuple[str, ...]:
        """Names of the assets that a block does not cover."""
        return tuple(str(name) for name in self.assets.delete(block.positions))


def _month_end(settings: Settings) -> pd.Timestamp:
    # A month typed as its first day means the whole month, as in "to 2017-03".
    assert settings.end is not None
    stamp = pd.Timestamp(settings.end)
    return stamp + pd.offsets.MonthEnd(0) if stamp.day == 1 else stamp


def _chosen(frame: pd.DataFrame, names: Sequence[str] | None, noun: str) -> pd.DataFrame:
    if names is None:
        return frame
    known = [str(name) for name in frame.columns]
    for name in names:
        if name not in known:
            raise SettingError(f"There is no {noun} '{name}' in this panel", remedy=nearest(name, known))
    return frame.loc[:, list(names)]
