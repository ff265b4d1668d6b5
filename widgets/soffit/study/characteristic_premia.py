"""Premia of characteristics with labels and annual units: what an asset is, not what it moves with."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.errors import InputError, nearest
from soffit.estimate.characteristics import CharacteristicPremia, characteristic_premia
from soffit.estimate.cross_section import PremiumError
from soffit.estimate.statistic import NotApplicable, TestStatistic
from soffit.intake import Frequency
from soffit.settings import Settings
from soffit.study.prices_of_risk import CONSTANT, newey_west_choice
from soffit.study.sample import Sample

__all__ = ["CharacteristicTable", "CharacteristicsPriced"]

Floats = npt.NDArray[np.float64]

# Longest time from a date to the end of the period that holds it, in days.
_REACH = {
    Frequency.DAILY: 0,
    Frequency.WEEKLY: 6,
    Frequency.MONTHLY: 31,
    Frequency.QUARTERLY: 92,
    Frequency.ANNUAL: 366,
}


@dataclass(frozen=True, eq=False)
class CharacteristicTable:
    """Characteristics of assets in a long table, equal to another with the same content.

    Parameters
    ----------
    frame : DataFrame
        Index levels ``date`` and ``asset``; a column a characteristic.
    """

    frame: pd.DataFrame

    @classmethod
    def of(cls, given: Any, assets: pd.Index) -> CharacteristicTable:
        """Read characteristics in any of the accepted shapes.

        Parameters
        ----------
        given : DataFrame, or mapping of str to DataFrame
            A frame whose index has two levels, dates and assets in either order, or a frame of dates by assets for
            each characteristic.
        assets : Index
            Names of the assets of the study.

        Raises
        ------
        InputError
            If it has another shape; for a frame of common factors, with the way to price them.
        """
        if isinstance(given, Mapping):
            return cls(_stacked(given, assets))
        if isinstance(given, pd.DataFrame) and given.index.nlevels == 2:
            return cls(_long(given))
        columns = [str(c) for c in given.columns] if isinstance(given, pd.DataFrame) else []
        if columns and not set(columns) & {str(a) for a in assets}:
            shown = ", ".join(f"'{c}'" for c in columns[:4])
            raise InputError(
                f"This table has one value a date for {shown}, not one for each asset: these are common factors, not "
                "characteristics",
                allowed="characteristics, which differ between assets on the same date",
                remedy="open the study with them as factors and ask for study.prices_of_risk(), or give them "
                "an index of dates and assets",
            )
        raise InputError(
            f"Characteristics came as {type(given).__name__}"
            + (" with assets as columns" if columns else ""),
            allowed="a frame with an index of dates and assets, or {name: frame of dates by assets}",
            remedy="wrap a single characteristic as {'size': frame}" if columns else "see the allowed shapes",
        )

    @cached_property
    def _digest(self) -> str:
        hashed = pd.util.hash_pandas_object(self.frame, index=True).to_numpy()
        head = "\x1f".join(str(c) for c in self.frame.columns).encode()
        return hashlib.sha256(head + hashed.tobytes()).hexdigest()

    def __eq__(self, other: object) -> bool:
        return isinstance(other, CharacteristicTable) and self._digest == other._digest

    def __hash__(self) -> int:
        return hash(self._digest)


@dataclass(frozen=True, eq=False)
class CharacteristicsPriced:
    """Premia of characteristics, annual decimals; `fit` holds the same per period.

    Parameters
    ----------
    sample : Sample
        What was priced.
    names : tuple of str
        Names of the characteristics.
    lag : int
        Periods from a characteristic's date to the return that it explains.
    dates : DatetimeIndex
        Periods that have a cross-section.
    fit : CharacteristicPremia
        The estimate.
    unmatched : tuple of str
        Assets with characteristics that are not in the study.
    outside : int
        Rows dated outside the sample.
    skipped : Series
        Periods without a cross-section and why.
    settings : Settings
        Level and reference distribution.
    """

    sample: Sample
    names: tuple[str, ...]
    lag: int
    dates: pd.DatetimeIndex
    fit: CharacteristicPremia
    unmatched: tuple[str, ...]
    outside: int
    skipped: pd.Series[str]
    settings: Settings

    @classmethod
    def of(
        cls, sample: Sample, table: CharacteristicTable, settings: Settings, *, lag: int, constant: bool
    ) -> CharacteristicsPriced:
        """Estimate by the settings.

        Raises
        ------
        InputError
            If no asset or date of the table is in the sample, an asset comes twice in a period, or the lag is
            negative.
        EstimationError
            If a characteristic is a common factor, or too few periods have a cross-section.
        """
        if lag < 0:
            raise InputError(
                f"A lag of {lag} periods would let a characteristic explain returns before it is known",
                allowed="0 or more",
            )
        names = tuple(str(name) for name in table.frame.columns)
        period, asset, values, unmatched, outside = _matched(table.frame, sample)
        target = period + lag
        late = target >= len(sample.returns)
        period, asset, values = target[~late], asset[~late], values[~late]
        returns = sample.returns.to_numpy(dtype=float)[period, asset]
        fit = characteristic_premia(
            returns,
            values,
            period,
            asset,
            constant=constant,
            lags=newey_west_choice(settings),
            names=names,
        )
        index = pd.DatetimeIndex(sample.returns.index)
        skipped = pd.Series(
            [s.reason for s in fit.skipped],
            index=index[[s.period for s in fit.skipped]],
            dtype=object,
            name="reason",
        )
        outside += int(late.sum())
        return cls(sample, names, lag, index[fit.periods], fit, unmatched, outside, skipped, settings)

    @property
    def premium_names(self) -> tuple[str, ...]:
        """Names of the premia, the constant first if there is one."""
        return (CONSTANT, *self.names) if self.fit.constant else self.names

    @cached_property
    def premia(self) -> pd.Series[float]:
        """Return a year per unit of each characteristic, the constant's first."""
        values = self.fit.premia * self.sample.periods_per_year
        return pd.Series(values, index=self.premium_names, name="premium")

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row a premium, annual: premium, then error, t and p of Fama-MacBeth and Newey-West."""
        columns: dict[str, npt.ArrayLike] = {"premium": self.premia.to_numpy()}
        for kind in (PremiumError.FAMA_MACBETH, PremiumError.NEWEY_WEST):
            errors = self.fit.standard_errors(kind)
            assert not isinstance(errors, NotApplicable)
            tests = self.fit.tests(kind, self.settings.reference)
            columns[f"error {kind}"] = errors * self.sample.periods_per_year
            columns[f"t {kind}"] = [t.value if isinstance(t, TestStatistic) else np.nan for t in tests]
            columns[f"p {kind}"] = [t.pvalue if isinstance(t, TestStatistic) else np.nan for t in tests]
        return pd.DataFrame(columns, index=list(self.premium_names))

    @cached_property
    def slopes(self) -> pd.DataFrame:
        """Premia of each period, decimal per period and unit of the characteristic."""
        return pd.DataFrame(self.fit.slopes, index=self.dates, columns=list(self.premium_names))


def _stacked(given: Mapping[Any, Any], assets: pd.Index) -> pd.DataFrame:
    if not given:
        raise InputError("No characteristic came", remedy="name at least one, with its frame")
    parts = {}
    for name, frame in given.items():
        if not isinstance(frame, pd.DataFrame):
            raise InputError(
                f"Characteristic '{name}' came as {type(frame).__name__}",
                allowed="a frame of dates by assets for each characteristic",
            )
        if not {str(c) for c in frame.columns} & {str(a) for a in assets}:
            raise InputError(
                f"The frame of characteristic '{name}' has none of the study's assets as columns",
                remedy="its columns must be asset names; "
                + nearest(str(frame.columns[0]) if len(frame.columns) else "", [str(a) for a in assets]),
            )
        parts[str(name)] = frame.rename_axis(index="date", columns="asset").stack(future_stack=True)
    return _numbers(pd.DataFrame(parts).rename_axis(index=["date", "asset"]))


def _long(given: pd.DataFrame) -> pd.DataFrame:
    assert isinstance(given.index, pd.MultiIndex)
    dated = [isinstance(given.index.levels[i], pd.DatetimeIndex | pd.PeriodIndex) for i in (0, 1)]
    if sum(dated) != 1:
        raise InputError(
            "The index of these characteristics has "
            + ("no level" if not any(dated) else "two levels")
            + " of dates",
            allowed="one level of dates and one of assets",
            remedy="convert the dates with pandas.to_datetime and set both columns as the index",
        )
    frame = given if dated[0] else given.swaplevel()
    return _numbers(frame.rename_axis(index=["date", "asset"]))


def _numbers(frame: pd.DataFrame) -> pd.DataFrame:
    try:
        return frame.astype(float)
    except (TypeError, ValueError) as error:
        raise InputError(
            f"A characteristic is not a number ({error})", remedy="turn words into numbers first"
        ) from error


def _matched(
    frame: pd.DataFrame, sample: Sample
) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64], Floats, tuple[str, ...], int]:
    """Positions of period and asset, values, assets not in the sample, rows dated outside."""
    names = pd.Index([str(a) for a in sample.assets])
    asked = frame.index.get_level_values("asset").astype(str)
    asset = names.get_indexer(asked)
    unmatched = tuple(dict.fromkeys(asked[asset < 0]))
    if (asset < 0).all():
        raise InputError(
            "None of the assets with characteristics is in the study",
            remedy=nearest(unmatched[0], list(names)) if unmatched else "the table is empty",
        )
    dates = frame.index.get_level_values("date")
    stamps = dates.to_timestamp(how="end") if isinstance(dates, pd.PeriodIndex) else pd.DatetimeIndex(dates)
    stamps = stamps.tz_localize(None).normalize()
    ends = pd.DatetimeIndex(sample.returns.index).normalize()
    period = np.asarray(ends.searchsorted(stamps), dtype=np.int64)
    reach = pd.Timedelta(days=_REACH[sample.frequency])
    inside = period < len(ends)
    inside[inside] &= ends[period[inside]] - stamps[inside] <= reach
    kept = inside & (asset >= 0)
    if not kept.any():
        raise InputError(
            "No characteristic is dated inside the sample",
            allowed=f"dates from {ends[0]:%Y-%m-%d} to {ends[-1]:%Y-%m-%d}",
        )
    period, chosen = period[kept], asset[kept].astype(np.int64)
    pairs = pd.MultiIndex.from_arrays([period, chosen])
    if pairs.has_duplicates:
        row = int(np.flatnonzero(pairs.duplicated())[0])
        raise InputError(
            f"'{names[chosen[row]]}' has two rows of characteristics for the {sample.frequency.noun} to "
            f"{ends[period[row]]:%Y-%m-%d}",
            allowed="one row an asset and period",
            remedy="keep the one that was known at the end of the period",
        )
    values = frame.to_numpy(dtype=float)[kept]
    return period, chosen, values, unmatched, int((~inside & (asset >= 0)).sum())
