"""One calendar for all sources: frequencies told, days compounded to longer periods, dates moved to period ends."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from soffit.errors import InputError
from soffit.intake.options import Frequency, Role
from soffit.intake.periods import (
    COARSENESS,
    anchor_of,
    detect_frequency,
    mixed_stretch,
    month_text,
    period_ends,
    periods_between,
    refuse_finer,
)
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed
from soffit.intake.tables import PRICES, Table, merge_duplicates

__all__ = ["consecutive", "tell_frequency", "to_one_calendar"]

# A column with fewer values than this follows the dates of its source; and a period is kept only when a
# column has at least this share of the period's rows. Common practice, no source.
_LEAST_DATES = 12
_LEAST_SHARE = 0.75
_HALF = 0.5


def tell_frequency(table: Table, declared: Frequency | None, record: RecordBuilder) -> None:
    """Settle how often a source is observed.

    Raises
    ------
    InputError
        If the dates tell no frequency, or several.
    """
    found = (
        detect_frequency(table.stamps)
        or (table.told if len(np.unique(table.stamps)) < 3 else None)
        or declared
    )
    if found is None:
        gap = (
            "one date"
            if len(table.stamps) == 1
            else "dates whose usual distance is no day, week, month, quarter or year"
        )
        raise InputError(
            f"{table.source} has {gap}",
            remedy="say how often it is observed with frequency='monthly' (or another)",
        )
    mixed = mixed_stretch(table.stamps, found)
    if mixed is not None:
        kind, first, last = mixed
        coarse = max((kind, found), key=lambda one: COARSENESS[one])
        fine = min((kind, found), key=lambda one: COARSENESS[one])
        if declared is None or COARSENESS[declared] < COARSENESS[coarse]:
            raise InputError(
                f"{table.source} is {found.value}, but {kind.value} from {first} to {last}",
                remedy=f"compound all of it with frequency='{coarse.value}', or give the two stretches apart",
            )
        record.add(
            EntryKind.FREQUENCY,
            f"{table.source} mixes {fine.value} and {coarse.value} rows; all are compounded to {declared.value}.",
            Severity.WARNING,
            rows=len(table.stamps),
            source=table.source,
        )
        found = fine
        table.mixed = True
    table.frequency = found
    table.slow = _slow_columns(table, found)
    for name, kind in table.slow.items():
        record.add(
            EntryKind.FREQUENCY,
            f"'{name}' has {kind.value} values among {found.value} rows.",
            series=name,
            source=table.source,
        )
    record.add(
        EntryKind.FREQUENCY,
        f"Observed {found.value}: {len(table.stamps):,} rows from {month_text(table.stamps[0], found)} "
        f"to {month_text(table.stamps[-1], found)}.",
        rows=len(table.stamps),
        source=table.source,
    )


def _slow_columns(table: Table, base: Frequency) -> dict[str, Frequency]:
    """Columns observed less often than their source, such as a monthly index among daily ones."""
    slow: dict[str, Frequency] = {}
    empty = np.isnan(table.values).sum(axis=0)
    for position in np.flatnonzero(empty > len(table.stamps) // 2):
        dates = table.stamps[~np.isnan(table.values[:, position])]
        found = detect_frequency(dates) if len(dates) >= _LEAST_DATES else None
        if found is not None and COARSENESS[found] > COARSENESS[base]:
            slow[table.names[position]] = found
    return slow


def consecutive(stamps: NDArray[np.datetime64], frequency: Frequency) -> NDArray[np.bool_]:
    """Whether each period end follows the one before without a gap; a week at most between days."""
    days = np.diff(stamps.astype("datetime64[D]")).astype(np.int64)
    most = {
        Frequency.DAILY: 7,
        Frequency.WEEKLY: 7,
        Frequency.MONTHLY: 31,
        Frequency.QUARTERLY: 92,
        Frequency.ANNUAL: 366,
    }
    return days <= most[frequency]


def to_one_calendar(
    tables: Sequence[Table], roles: Mapping[str, Role], declared: Frequency | None, record: RecordBuilder
) -> Frequency:
    """Bring all sources to one frequency and their dates to period ends, in place.

    The coarsest source sets the frequency unless the analyst does; finer returns are compounded to it, and
    nothing is ever made finer.

    Raises
    ------
    InputError
        If a finer frequency is asked for, weeks would have to be cut, or two rows fall in one period and differ.
    """
    found = [table.frequency for table in tables if table.frequency is not None]
    found += [kind for table in tables for kind in table.slow.values()]
    target = declared or max(found, key=lambda kind: COARSENESS[kind])
    for table in tables:
        assert table.frequency is not None
        for kind in (table.frequency, *table.slow.values()):
            refuse_finer(target, kind, table.source)
    code = _common_anchor(tables, target)
    for table in tables:
        if table.frequency is target:
            _to_period_ends(table, code, target, record)
        else:
            _compound(table, code, target, roles, record)
        table.frequency = target
        _report_holes(table, code, target, record)
    return target


def _common_anchor(tables: Sequence[Table], target: Frequency) -> str:
    codes = {table.source: anchor_of(table.stamps, target) for table in tables if table.frequency is target}
    if not codes:
        return {Frequency.WEEKLY: "W-FRI", Frequency.QUARTERLY: "Q-DEC", Frequency.ANNUAL: "Y-DEC"}.get(
            target, "M" if target is Frequency.MONTHLY else "D"
        )
    if len(set(codes.values())) > 1:
        ends = " and ".join(f"{source} ends on {code}" for source, code in codes.items())
        raise InputError(
            f"The {target.noun}s of the sources end on different days: {ends}",
            remedy="bring both to the same period end, or ask for a coarser frequency",
        )
    return next(iter(codes.values()))


def _to_period_ends(table: Table, code: str, target: Frequency, record: RecordBuilder) -> None:
    ends = period_ends(table.stamps, code)
    moved = int((ends != table.stamps).sum())
    if moved:
        row = int(np.flatnonzero(ends != table.stamps)[0])
        opens = " (the first day of a period counts for that period)" if _opens(table.stamps, target) else ""
        record.add(
            EntryKind.DATES,
            f"{moved:,} dates were moved to the end of their {target.noun}{opens}: {str(table.stamps[row])[:10]} "
            f"became {str(ends[row])[:10]}.",
            Severity.REPAIRED if not opens or table.told is None else Severity.NOTE,
            rows=moved,
            source=table.source,
        )
    table.stamps = ends
    merge_duplicates(table, record, target.noun)


def _opens(stamps: NDArray[np.datetime64], target: Frequency) -> bool:
    months = stamps.astype("datetime64[M]").astype("datetime64[D]")
    return target in (Frequency.MONTHLY, Frequency.QUARTERLY, Frequency.ANNUAL) and bool(
        (stamps.astype("datetime64[D]") == months).all()
    )


def _compound(
    table: Table, code: str, target: Frequency, roles: Mapping[str, Role], record: RecordBuilder
) -> None:
    """Compound returns within each period; prices and non-traded series keep their last value.

    A series has a value in a period when it has one in three quarters of the period's rows, or, for prices, in
    the last quarter of them.
    """
    source = table.frequency
    assert source is not None
    if source is Frequency.WEEKLY:
        raise InputError(
            f"{table.source} is weekly, and weeks do not fit into {target.noun}s",
            remedy=f"bring {target.value} or daily returns",
        )
    days = len(table.stamps)
    ends = period_ends(table.stamps, code)
    starts = np.flatnonzero(np.concatenate([[True], ends[1:] != ends[:-1]]))
    size = np.diff(np.append(starts, days))
    result = np.empty((len(starts), len(table.names)), order="F")
    thin: dict[str, int] = {}
    part: dict[str, int] = {}
    for position, name in enumerate(table.names):
        x = table.values[:, position]
        held = ~np.isnan(x)
        counts = np.add.reduceat(held, starts, dtype=np.int64)
        if roles[name] is Role.NON_TRADED or table.units.get(name) == PRICES:
            within = days if name in table.slow or roles[name] is Role.NON_TRADED else 1 - _LEAST_SHARE
            result[:, position], enough = _last_values(x, starts, size, within)
        else:
            product = np.multiply.reduceat(np.where(held, 1.0 + x, 1.0), starts) - 1.0
            alone = np.add.reduceat(np.where(held, x, 0.0), starts)
            result[:, position] = np.where(counts == 1, alone, product)
            enough = counts >= (1 if name in table.slow else np.ceil(_LEAST_SHARE * size))
            if name not in table.slow and (enough & (counts < size)).any():
                part[name] = int((enough & (counts < size)).sum())
        result[~enough, position] = np.nan
        if ((counts > 0) & ~enough).any():
            thin[name] = int(((counts > 0) & ~enough).sum())
    last_rows = starts + size - 1
    table.values, table.stamps, table.rows = result, ends[starts], table.rows[last_rows]
    record.merged(table.source, days - len(starts))
    record.add(
        EntryKind.FREQUENCY,
        f"{days:,} {source.value} rows were compounded to {len(starts):,} {target.noun}s.",
        Severity.REPAIRED,
        rows=days,
        source=table.source,
    )
    _say_thin(table, thin, part, target, record)
    _drop_part_periods(table, size, source, target, record)


def _last_values(
    x: NDArray[np.float64], starts: NDArray[np.int64], size: NDArray[np.int64], within: float
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """The last value of each period, and whether it stands among the last `within` (a share) of its rows."""
    rows = np.arange(len(x))
    last = np.maximum.reduceat(np.where(np.isnan(x), -1, rows), starts)
    known = last >= starts
    lag = starts + size - 1 - last
    return np.where(known, x[np.maximum(last, 0)], np.nan), known & (lag <= np.floor(within * size))


def _say_thin(
    table: Table, thin: Mapping[str, int], part: Mapping[str, int], target: Frequency, record: RecordBuilder
) -> None:
    for found, what, severity in (
        (thin, f"no value for a {target.noun} with too few rows", Severity.WARNING),
        (part, f"a {target.noun} compounded over the rows that have a value", Severity.NOTE),
    ):
        if found:
            counts = [f"'{name}' ({count})" for name, count in found.items()]
            record.add(
                EntryKind.MISSING,
                f"Not all rows have a value: {what}, in {listed(counts, quote='')}.",
                severity,
                series=list(found),
                rows=sum(found.values()),
                source=table.source,
            )


def _drop_part_periods(
    table: Table, size: NDArray[np.int64], source: Frequency, target: Frequency, record: RecordBuilder
) -> None:
    """Drop periods that the rows do not fill: a first or last one short of a quarter, others short of a half.

    A first period of prices stays, since its last price is a good base; so do the single rows of a coarser
    stretch. Trading stops for a week now and then, so that a thin period inside is kept and said.
    """
    priced = all(table.units.get(name) == PRICES for name in table.names)
    judged = (size > 1) if table.mixed else np.ones(len(size), dtype=bool)
    usual = float(np.median(size[judged])) if judged.any() else 1.0
    keep = ~judged | (size >= _HALF * usual)
    for edge in (0, -1):
        if len(size) > 2 and judged[edge] and size[edge] < _LEAST_SHARE * usual:
            keep[edge] = priced and edge == 0
    for row in np.flatnonzero(judged & keep & (size < _LEAST_SHARE * usual)):
        record.add(
            EntryKind.GAPS,
            f"{month_text(table.stamps[row], target)} has only {size[row]} {source.value} rows, "
            f"against {usual:.0f} usually.",
            Severity.WARNING,
            rows=int(size[row]),
            source=table.source,
        )
    for row in np.flatnonzero(~keep):
        record.add(
            EntryKind.FREQUENCY,
            f"{month_text(table.stamps[row], target)} is not complete ({size[row]} {source.value} "
            f"rows, against {usual:.0f} "
            "usually) and was dropped.",
            Severity.WARNING,
            rows=1,
            source=table.source,
        )
        record.dropped(table.source, 1)
    table.take(keep)


def _report_holes(table: Table, code: str, target: Frequency, record: RecordBuilder) -> None:
    """Say which periods have no row at all."""
    if len(table.stamps) < 2:
        return
    absent = np.setdiff1d(periods_between(table.stamps, code), table.stamps)
    if not len(absent):
        return
    if target is Frequency.DAILY:
        days = np.diff(table.stamps.astype("datetime64[D]")).astype(np.int64)
        longest = int(days.max())
        at = int(days.argmax())
        message = (
            f"{len(absent):,} weekdays have no row (holidays or gaps); the longest stretch "
            f"is {longest} days after {str(table.stamps[at])[:10]}."
        )
        severity = Severity.WARNING if longest > 7 else Severity.NOTE
    else:
        message = (
            f"{len(absent)} {target.noun}s have no row: "
            f"{listed([month_text(day, target) for day in absent], quote='')}. Nothing was filled in."
        )
        severity = Severity.WARNING
    record.add(EntryKind.GAPS, message, severity, rows=len(absent), source=table.source)
