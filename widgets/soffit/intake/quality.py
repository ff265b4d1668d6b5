"""What the numbers give away: stretches that do not move, stale prices, outliers, survivors, backfill."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

import numpy as np
from numpy.typing import NDArray

from soffit.intake.options import Frequency, Role
from soffit.intake.periods import month_text
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed
from soffit.intake.tables import Table

__all__ = ["check_late_starters", "check_quality", "check_survivors", "column_blocks", "drop_first_periods"]

Floats = NDArray[np.float64]

# Thresholds of the flags below are common practice, no source. Nothing is changed by them.
_RUN = {
    Frequency.DAILY: 6,
    Frequency.WEEKLY: 5,
    Frequency.MONTHLY: 4,
    Frequency.QUARTERLY: 4,
    Frequency.ANNUAL: 4,
}
_ZERO_SHARE = 0.2
_AUTOCORRELATION = 0.25
_FAR = {Frequency.DAILY: 12.0}
_FAR_OTHERWISE = 6.0
_MAD_TO_SIGMA = 1.482602218505602
_EARLY = 12


def column_blocks(count: int, width: int = 256) -> Iterator[slice]:
    """Slices over columns, so that temporaries stay small whatever the number of series."""
    for start in range(0, count, width):
        yield slice(start, min(start + width, count))


def check_quality(table: Table, roles: Mapping[str, Role], record: RecordBuilder) -> None:
    """Flag constant stretches, stale prices and outliers of assets and factors, and odd rates."""
    frequency = table.frequency or Frequency.MONTHLY
    runs: dict[str, str] = {}
    stale: dict[str, str] = {}
    far: dict[str, str] = {}
    counts = [0, 0]
    for position, name in enumerate(table.names):
        x = table.values[:, position]
        if roles[name] is Role.RISK_FREE:
            _check_rate(table, position, frequency, record)
        if roles[name] not in (Role.ASSET, Role.FACTOR):
            continue
        held = np.flatnonzero(~np.isnan(x))
        y = x[held]
        if len(y) < 3 or bool((y == y[0]).all()):
            continue
        start, length = _longest_run(y)
        if length >= _RUN[frequency]:
            runs[name] = f"{length} from {month_text(table.stamps[held[start]], frequency)}"
            counts[0] += length
        sign = _staleness(y)
        if sign:
            stale[name] = sign
        outliers = _outliers(y, _FAR.get(frequency, _FAR_OTHERWISE))
        if len(outliers):
            first = held[outliers[0]]
            more = f" and {len(outliers) - 1} more" if len(outliers) > 1 else ""
            far[name] = f"{x[first]:.1%} in {month_text(table.stamps[first], frequency)}{more}"
            counts[1] += len(outliers)
    _flag(
        record,
        table,
        EntryKind.CONSTANT,
        "The same return again and again",
        runs,
        counts[0],
        f"{frequency.noun}s",
    )
    _flag(record, table, EntryKind.STALE, "Signs of stale prices", stale, len(stale), "")
    _flag(
        record, table, EntryKind.OUTLIERS, "Far from the rest of their series, and kept", far, counts[1], ""
    )


def _flag(
    record: RecordBuilder,
    table: Table,
    kind: EntryKind,
    what: str,
    found: Mapping[str, str],
    rows: int,
    unit: str,
) -> None:
    if found:
        shown = [f"'{name}' ({text})" for name, text in found.items()]
        record.add(
            kind,
            f"{what}{f' ({unit})' if unit else ''}: {listed(shown, quote='')}.",
            Severity.WARNING,
            series=list(found),
            rows=rows,
            source=table.source,
        )


def _longest_run(y: Floats) -> tuple[int, int]:
    """Start and length of the longest stretch of equal values."""
    edges = np.flatnonzero(np.concatenate([[True], y[1:] != y[:-1], [True]]))
    lengths = np.diff(edges)
    longest = int(lengths.argmax())
    return int(edges[longest]), int(lengths[longest])


def _staleness(y: Floats) -> str:
    zeros = float((y == 0).mean())
    if zeros >= _ZERO_SHARE and len(y) >= 10:
        return f"{zeros:.0%} of the returns are zero"
    z = y - y.mean()
    rho = float(z[1:] @ z[:-1] / (z @ z))
    return f"autocorrelation {rho:.2f}" if rho > _AUTOCORRELATION and rho > 3.0 / np.sqrt(len(y)) else ""


def _outliers(y: Floats, far: float) -> NDArray[np.intp]:
    """Positions more than `far` robust standard deviations from the median."""
    off = np.abs(y - np.median(y))
    scale = _MAD_TO_SIGMA * float(np.median(off))
    return np.flatnonzero(off > far * scale) if scale > 0 else np.flatnonzero(off < 0)


def _check_rate(table: Table, position: int, frequency: Frequency, record: RecordBuilder) -> None:
    x = table.values[:, position] * frequency.periods_per_year
    odd = np.flatnonzero((x > 0.3) | (x < -0.05))
    if len(odd):
        record.add(
            EntryKind.OUTLIERS,
            f"The risk-free return '{table.names[position]}' is {x[odd[0]]:.1%} a year in "
            f"{table.place(int(odd[0]))}{f' and odd in {len(odd) - 1} more rows' if len(odd) > 1 else ''}; kept.",
            Severity.WARNING,
            series=table.names[position],
            rows=len(odd),
            source=table.source,
        )


def drop_first_periods(table: Table, roles: Mapping[str, Role], count: int, record: RecordBuilder) -> None:
    """Take out the first values of every asset's history, where backfilled returns would stand."""
    if count == 0:
        return
    names = [name for name in table.names if roles[name] is Role.ASSET]
    for name in names:
        x = table.values[:, table.names.index(name)]
        x[np.flatnonzero(~np.isnan(x))[:count]] = np.nan
    if names:
        record.add(
            EntryKind.HISTORY,
            f"The first {count} values of every asset were taken out, as declared: {listed(names)}.",
            Severity.REPAIRED,
            series=names,
            rows=count * len(names),
            source=table.source,
        )


def check_survivors(
    first: NDArray[np.int64], last: NDArray[np.int64], periods: int, record: RecordBuilder
) -> None:
    """Ask about survivors when many assets begin late and none ends early.

    Parameters
    ----------
    first, last : ndarray of int
        Position of the first and last value of each asset.
    periods : int
        Number of periods of the panel.
    record : RecordBuilder
        Where it is said.
    """
    late = int((first > 0).sum())
    if len(first) >= 5 and late >= max(2, len(first) // 5) and bool((last == periods - 1).all()):
        record.add(
            EntryKind.HISTORY,
            f"{late} of {len(first)} assets begin late and none ends early: the set may hold survivors only. "
            "Ask the source for the assets that ended.",
            Severity.WARNING,
            rows=late,
        )


def check_late_starters(values: Floats, first: NDArray[np.int64], record: RecordBuilder) -> None:
    """Ask about backfill when the first year of late starters is better than what follows.

    The difference of the two means is held against its spread over the late starters (a t ratio above 2).
    """
    gaps: list[float] = []
    for column in np.flatnonzero(first > 0):
        x = values[first[column] :, column]
        x = x[~np.isnan(x)]
        if len(x) >= 3 * _EARLY:
            gaps.append(float(x[:_EARLY].mean() - x[_EARLY:].mean()))
    if len(gaps) < 5:
        return
    mean, error = float(np.mean(gaps)), float(np.std(gaps, ddof=1)) / np.sqrt(len(gaps))
    if mean > 2.0 * error:
        record.add(
            EntryKind.HISTORY,
            f"The first {_EARLY} returns of {len(gaps)} late starters are better than the rest by "
            f"{mean:.2%} a period "
            f"on average: they may have been filled in backwards. Drop them with skip_first={_EARLY}.",
            Severity.WARNING,
            rows=len(gaps),
        )
