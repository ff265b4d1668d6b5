"""What the numbers give away: stretches that do not move, stale prices, outliers, survivors, backfill."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from soffit.intake.columns import column_blocks, column_medians, longest_run
from soffit.intake.options import Frequency, Role
from soffit.intake.periods import month_text
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed
from soffit.intake.tables import Table

__all__ = ["check_late_starters", "check_quality", "check_survivors", "drop_first_periods"]

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
_HIGH_RATE = 0.12


def check_quality(table: Table, roles: Mapping[str, Role], record: RecordBuilder) -> None:
    """Flag constant stretches, stale prices and outliers of assets and factors, and odd rates."""
    frequency = table.frequency or Frequency.MONTHLY
    for position, name in enumerate(table.names):
        if roles[name] is Role.RISK_FREE:
            _check_rate(table, position, frequency, record)
    watched = [i for i, name in enumerate(table.names) if roles[name] in (Role.ASSET, Role.FACTOR)]
    runs: dict[str, tuple[str, int]] = {}
    stale: dict[str, tuple[str, int]] = {}
    far: dict[str, tuple[str, int]] = {}
    for span in column_blocks(len(watched)):
        names = [table.names[i] for i in watched[span]]
        x = table.values[:, watched[span]]
        runs |= _runs(x, names, table, frequency)
        stale |= _stale(x, names)
        far |= _outliers(x, names, table, frequency)
    again = f"The same return again and again ({frequency.noun}s)"
    _flag(record, table, EntryKind.CONSTANT, again, runs)
    _flag(record, table, EntryKind.STALE, "Signs of stale prices", stale)
    _flag(record, table, EntryKind.OUTLIERS, "Far from the rest of their series, and kept", far)


def _flag(
    record: RecordBuilder, table: Table, kind: EntryKind, what: str, found: Mapping[str, tuple[str, int]]
) -> None:
    if found:
        shown = listed([f"'{name}' ({text})" for name, (text, _) in found.items()], quote="")
        rows = sum(count for _, count in found.values())
        record.add(
            kind, f"{what}: {shown}.", Severity.WARNING, series=list(found), rows=rows, source=table.source
        )


def _runs(x: Floats, names: Sequence[str], table: Table, frequency: Frequency) -> dict[str, tuple[str, int]]:
    """Stretches of one and the same value."""
    found: dict[str, tuple[str, int]] = {}
    least = _RUN[frequency]
    for i in np.flatnonzero((x[1:] == x[:-1]).sum(axis=0) >= least - 1).tolist():
        start, length = longest_run(x[:, i])
        if length >= least:
            found[names[i]] = f"{length} from {month_text(table.stamps[start], frequency)}", length
    return found


def _stale(x: Floats, names: Sequence[str]) -> dict[str, tuple[str, int]]:
    """Many zeros, or returns that follow one another."""
    held = ~np.isnan(x)
    count = np.maximum(held.sum(axis=0), 1)
    zeros = (x == 0).sum(axis=0)
    z = np.where(held, x, 0.0)
    z = np.where(held, z - z.sum(axis=0) / count, 0.0)
    power = np.einsum("ti,ti->i", z, z)
    rho = np.einsum("ti,ti->i", z[1:], z[:-1]) / np.where(power > 0, power, 1.0)
    found: dict[str, tuple[str, int]] = {}
    for i in np.flatnonzero((zeros >= _ZERO_SHARE * count) & (count >= 10)).tolist():
        found[names[i]] = f"{zeros[i] / count[i]:.0%} of the returns are zero", int(zeros[i])
    for i in np.flatnonzero((rho > _AUTOCORRELATION) & (rho > 3.0 / np.sqrt(count))).tolist():
        found.setdefault(names[i], (f"autocorrelation {rho[i]:.2f}", int(count[i])))
    return found


def _outliers(
    x: Floats, names: Sequence[str], table: Table, frequency: Frequency
) -> dict[str, tuple[str, int]]:
    """Values many robust standard deviations from their median."""
    off = np.abs(x - column_medians(x))
    bound = _FAR.get(frequency, _FAR_OTHERWISE) * _MAD_TO_SIGMA * column_medians(off)
    beyond = (off > bound) & (bound > 0)
    found: dict[str, tuple[str, int]] = {}
    for i in np.flatnonzero(beyond.any(axis=0)).tolist():
        row = int(beyond[:, i].argmax())
        count = int(beyond[:, i].sum())
        more = f" and {count - 1} more" if count > 1 else ""
        found[names[i]] = f"{x[row, i]:.1%} in {month_text(table.stamps[row], frequency)}{more}", count
    return found


def _check_rate(table: Table, position: int, frequency: Frequency, record: RecordBuilder) -> None:
    x = table.values[:, position] * frequency.periods_per_year
    usual = float(column_medians(x[:, None])[0])
    if usual > _HIGH_RATE:
        record.add(
            EntryKind.OUTLIERS,
            f"The risk-free return '{table.names[position]}' is usually {usual:.1%} a year; if "
            "the column holds yearly "
            f"yields, divide it by {frequency.periods_per_year} first.",
            Severity.WARNING,
            series=table.names[position],
            rows=len(x),
            source=table.source,
        )
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
