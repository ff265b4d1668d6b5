"""Panel: what a study computes on. Aligned, decimal, excess, dated, with a fingerprint."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from soffit.intake.options import Frequency, Role
from soffit.intake.record import IntakeRecord

__all__ = ["Frequency", "Panel", "SeriesLabel", "fingerprint"]

_DIGITS = 12


@dataclass(frozen=True)
class SeriesLabel:
    """What a series is besides its numbers.

    Parameters
    ----------
    currency : str
        Currency code such as ``"USD"``; empty if not stated.
    fees : str
        ``"gross"`` or ``"net"`` of fees; empty if not stated.
    source : str
        Where the series came from.
    """

    currency: str = ""
    fees: str = ""
    source: str = ""


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


def fingerprint(frequency: Frequency, dates: pd.DatetimeIndex, parts: Mapping[Role, pd.DataFrame]) -> str:
    """SHA-256 over names, roles, dates and values.

    Values are rounded to 12 decimals first, so that the order in which a machine multiplies does not show.

    Returns
    -------
    str
        64 hexadecimal digits.
    """
    digest = hashlib.sha256()
    digest.update(f"{frequency.value}\n".encode())
    digest.update("\n".join(str(day) for day in dates.to_numpy().astype("datetime64[D]")).encode())
    for role, frame in parts.items():
        digest.update(f"\n[{role.value}]".encode())
        for position, name in enumerate(frame.columns):
            column = np.round(frame.iloc[:, position].to_numpy(dtype="<f8", na_value=np.nan), _DIGITS) + 0.0
            column[np.isnan(column)] = np.nan
            digest.update(f"\n{len(str(name))}:{name}\n".encode())
            digest.update(column.astype("<f8").tobytes())
    return digest.hexdigest()
