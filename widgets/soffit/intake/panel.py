"""Panel: what a study computes on. Aligned, decimal, excess, dated, with a fingerprint."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from soffit.intake.labels import SeriesLabel
from soffit.intake.options import Frequency, Role
from soffit.intake.record import IntakeRecord

__all__ = ["Frequency", "Panel", "SeriesLabel", "fingerprint"]

_DIGITS = 12


@dataclass(frozen=True, eq=False)
class Panel:
    """Returns of assets and factors on one calendar.

    Parameters
    ----------
    assets : DataFrame
        T×N excess returns, decimal per period; the index is naive, sorted, unique, at the period's end.
        NaN where an asset has no value.
    factors : DataFrame
        T×K excess returns of traded factors, decimal per period; no NaN.
    risk_free : Series or None
        T risk-free returns, decimal per period, when they were given.
    non_traded : DataFrame
        T×G non-traded factors in their own units; may have NaN and no columns.
    frequency : Frequency
        How often the panel is observed.
    record : IntakeRecord
        What was assumed, converted and dropped.
    fingerprint : str
        SHA-256 over names, roles, dates and values.
    labels : mapping of str to SeriesLabel
        Currency, fees and source of each series.
    """

    assets: pd.DataFrame
    factors: pd.DataFrame
    risk_free: pd.Series[float] | None
    non_traded: pd.DataFrame
    frequency: Frequency
    record: IntakeRecord
    fingerprint: str
    labels: Mapping[str, SeriesLabel] = field(default_factory=dict)

    @property
    def dates(self) -> pd.DatetimeIndex:
        """The T period ends."""
        return pd.DatetimeIndex(self.assets.index)

    def __repr__(self) -> str:
        dates = self.dates
        span = f"{dates[0]:%Y-%m-%d} to {dates[-1]:%Y-%m-%d}" if len(dates) else "no dates"
        return (
            f"Panel({self.assets.shape[1]} assets, {self.factors.shape[1]} factors, {len(dates)} "
            f"{self.frequency.noun}s, {span}, {self.record.dropped_rows} rows dropped, "
            f"fingerprint {self.fingerprint[:12]})"
        )


def fingerprint(
    frequency: Frequency,
    dates: NDArray[np.datetime64],
    parts: Mapping[Role, tuple[Sequence[str], NDArray[np.float64]]],
) -> str:
    """SHA-256 over names, roles, dates and values.

    Values are rounded to 12 decimals first, so that the order in which a machine multiplies does not show.

    Parameters
    ----------
    frequency : Frequency
        Of the panel.
    dates : ndarray of datetime64
        T period ends.
    parts : mapping of Role to (names, T×n values)
        In the order of the roles.

    Returns
    -------
    str
        64 hexadecimal digits.
    """
    digest = hashlib.sha256()
    digest.update(f"{frequency.value}\n".encode())
    digest.update("\n".join(str(day) for day in dates.astype("datetime64[D]")).encode())
    for role, (names, values) in parts.items():
        digest.update(f"\n[{role.value}]".encode())
        for position, name in enumerate(names):
            column = np.round(values[:, position], _DIGITS) + 0.0
            column[np.isnan(column)] = np.nan
            digest.update(f"\n{len(name)}:{name}\n".encode())
            digest.update(column.astype("<f8").tobytes())
    return digest.hexdigest()
