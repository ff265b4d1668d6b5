"""Frequencies, period ends, and compounding to a coarser calendar."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from soffit.errors import InputError
from soffit.intake.options import Frequency

__all__ = [
    "COARSENESS",
    "anchor_of",
    "detect_frequency",
    "mixed_stretch",
    "month_text",
    "period_ends",
    "periods_between",
    "refuse_finer",
]

Stamps = NDArray[np.datetime64]

COARSENESS = {kind: level for level, kind in enumerate(Frequency)}
_GAPS = {
    Frequency.DAILY: (1, 4),
    Frequency.WEEKLY: (5, 9),
    Frequency.MONTHLY: (26, 36),
    Frequency.QUARTERLY: (80, 100),
    Frequency.ANNUAL: (350, 380),
}
_WEEKDAYS = ("MON", "TUE", "WED", "THU", "FRI", "SAT", "SUN")
_MONTH_NAMES = ("JAN", "FEB", "MAR", "APR", "MAY", "JUN", "JUL", "AUG", "SEP", "OCT", "NOV", "DEC")
_RUN = 4


def _gaps(stamps: Stamps) -> NDArray[np.int64]:
    return np.diff(np.unique(stamps.astype("datetime64[D]"))).astype(np.int64)


def detect_frequency(stamps: Stamps) -> Frequency | None:
    """The frequency that the median distance between neighbouring dates tells; None if it tells none."""
    gaps = _gaps(stamps)
    if len(gaps) == 0:
        return None
    middle = float(np.median(gaps))
    return next((kind for kind, (low, high) in _GAPS.items() if low <= middle <= high), None)


def mixed_stretch(
    stamps: Stamps, frequency: Frequency
) -> tuple[Frequency, np.datetime64, np.datetime64] | None:
    """A stretch of at least four steps that goes at another frequency, with its first and last date."""
    days = np.unique(stamps.astype("datetime64[D]"))
    gaps = np.diff(days).astype(np.int64)
    for kind, (low, high) in _GAPS.items():
        if kind is frequency:
            continue
        hits = np.concatenate([[False], (gaps >= low) & (gaps <= high), [False]])
        edges = np.flatnonzero(np.diff(hits.astype(np.int8)))
        for start, stop in zip(edges[::2], edges[1::2], strict=True):
            if stop - start >= _RUN:
                return kind, days[start], days[stop]
    return None


def anchor_of(stamps: Stamps, frequency: Frequency) -> str:
    """The pandas period code under which these dates are period ends, such as ``'W-FRI'`` or ``'Q-DEC'``.

    Dates at the start of calendar quarters or years name the quarter or year that they open.
    """
    if frequency is Frequency.DAILY:
        return "D"
    if frequency is Frequency.MONTHLY:
        return "M"
    days = stamps.astype("datetime64[D]")
    if frequency is Frequency.WEEKLY:
        weekday = (days.astype(np.int64) + 3) % 7
        return f"W-{_WEEKDAYS[int(np.bincount(weekday, minlength=7).argmax())]}"
    months = days.astype("datetime64[M]").astype(np.int64) % 12
    opens = bool((days == days.astype("datetime64[M]").astype("datetime64[D]")).all())
    if frequency is Frequency.QUARTERLY:
        phase = int(np.bincount(months % 3, minlength=3).argmax())
        return "Q-DEC" if opens and phase == 0 else f"Q-{_MONTH_NAMES[9 + phase]}"
    month = int(np.bincount(months, minlength=12).argmax())
    return "Y-DEC" if opens and month == 0 else f"Y-{_MONTH_NAMES[month]}"


def period_ends(stamps: Stamps, code: str) -> Stamps:
    """The last day of the period that each date falls in."""
    if code == "D":
        return stamps.astype("datetime64[D]").astype("datetime64[ns]")
    if code == "M":
        months = stamps.astype("datetime64[M]")
        return ((months + 1).astype("datetime64[D]") - np.timedelta64(1, "D")).astype("datetime64[ns]")
    periods = pd.DatetimeIndex(stamps.astype("datetime64[ns]")).to_period(code)
    return periods.to_timestamp(how="end").to_numpy().astype("datetime64[D]").astype("datetime64[ns]")


def periods_between(ends: Stamps, code: str) -> Stamps:
    """All period ends from the first to the last of these, both included; weekdays for daily dates."""
    first, last = ends.min(), ends.max()
    if code == "D":
        return pd.bdate_range(first, last).to_numpy().astype("datetime64[ns]")
    return period_ends(
        pd.period_range(pd.Timestamp(first), pd.Timestamp(last), freq=code)
        .to_timestamp(how="start")
        .to_numpy()
        .astype("datetime64[ns]"),
        code,
    )


def month_text(stamp: np.datetime64, frequency: Frequency) -> str:
    """A date as short as its frequency allows: ``'1990-03'`` for a month."""
    unit = {Frequency.MONTHLY: "M", Frequency.QUARTERLY: "M", Frequency.ANNUAL: "Y"}.get(frequency, "D")
    return str(stamp.astype(f"datetime64[{unit}]"))


def refuse_finer(wanted: Frequency, found: Frequency, source: str) -> None:
    """Refuse to make returns finer than they are.

    Raises
    ------
    InputError
        If `wanted` is finer than `found`.
    """
    if COARSENESS[wanted] < COARSENESS[found]:
        raise InputError(
            f"{source} is {found.value}; {wanted.value} returns cannot be made from it",
            remedy=f"ask for frequency='{found.value}' or coarser, or bring {wanted.value} data",
        )
