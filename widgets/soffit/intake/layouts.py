"""Long tables (a row a value) to wide ones (a column a series)."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from soffit.errors import InputError, nearest
from soffit.intake.cells import MISSING_TEXTS, Marks, Missing, detect_marks, read_numbers
from soffit.intake.options import Layout, choice
from soffit.intake.record import EntryKind, Severity
from soffit.intake.sources import RawTable, Source, clean_names

__all__ = ["widen"]


def widen(raw: RawTable, source: Source, missing: Missing) -> RawTable:
    """Turn a long table into a wide one; leave a wide one alone.

    Raises
    ------
    InputError
        If it is not plain which columns hold the names and the values, or a date has two values of one series.
    """
    layout = choice(Layout, source.layout, "layout")
    if source.series is not None or source.value is not None:
        layout = Layout.LONG
    if layout is Layout.WIDE or (layout is Layout.DETECT and not _looks_long(raw)):
        return raw
    names_in, values_in = _columns(raw, source)
    series = [str(item).strip() for item in raw.columns[names_in]]
    cells = raw.columns[values_in]
    marks = raw.marks
    if marks is None:
        marks = (
            Marks()
            if getattr(cells, "dtype", None) is not None and cells.dtype.kind in "fiu"
            else detect_marks([list(cells)])
        )
    column = read_numbers(cells, values_in, raw.place, marks, missing)
    labels = list(dict.fromkeys(series))
    clean_names(labels, f"column '{names_in}' of {raw.source}")
    dates, firsts, day = _days(raw.dates)
    where = pd.Index(labels).get_indexer(pd.Index(series))
    wide, repeats = _spread(raw, column.values, day, where, len(firsts), labels)
    table = RawTable(
        raw.source,
        {label: wide[:, i] for i, label in enumerate(labels)},
        dates,
        raw.rows[firsts],
        raw.row_word,
        rows_in=raw.rows_in,
        merged=len(raw.rows) - len(firsts),
        date_format=raw.date_format,
        marks=raw.marks,
        signs=column.percent_signs > 0,
        slot=raw.slot,
        fingerprint=raw.fingerprint,
        label=raw.label,
        notes=raw.notes,
    )
    table.note(
        EntryKind.LAYOUT,
        f"A long table: series named by '{names_in}', values from '{values_in}'; {len(raw.rows):,} rows became "
        f"{len(firsts):,} dates of {len(labels):,} series.",
        Severity.NOTE,
        len(raw.rows),
    )
    left = [name for name in raw.columns if name not in (names_in, values_in)]
    if left:
        table.note(EntryKind.LAYOUT, f"Columns not used: {', '.join(left)}.", Severity.NOTE, len(left))
    if repeats:
        table.note(
            EntryKind.DUPLICATES,
            f"{repeats} rows repeat a value of the same date and series; they were merged.",
            Severity.REPAIRED,
            repeats,
        )
    for code, count in column.missing.items():
        table.note(
            EntryKind.MISSING,
            f"Cells with {code} count as no value: '{values_in}' ({count:,}).",
            Severity.REPAIRED if code != "blank" else Severity.NOTE,
            count,
        )
    for repair, count in column.repairs.items():
        table.note(
            EntryKind.NUMBERS, f"{repair.capitalize()}: '{values_in}' ({count:,}).", Severity.REPAIRED, count
        )
    return table


def _looks_long(raw: RawTable) -> bool:
    """Dates that repeat, one column of words and one of numbers."""
    if len(raw.columns) != 2:
        return False
    words = [name for name, cells in raw.columns.items() if _wordy(cells)]
    return len(words) == 1 and len(set(map(str, raw.dates))) < len(raw.rows)


def _wordy(cells: Any) -> bool:
    """Whether a column is words and no numbers."""
    if getattr(cells, "dtype", None) is not None and cells.dtype.kind in "fiubM":
        return False
    texts = {str(cell).strip() for cell in cells}
    return all(
        any(mark.isalpha() for mark in text) and text.casefold() not in MISSING_TEXTS for text in texts
    )


def _columns(raw: RawTable, source: Source) -> tuple[str, str]:
    names = list(raw.columns)
    for given, what in ((source.series, "series"), (source.value, "value")):
        if given is not None and given not in names:
            raise InputError(f"{raw.source} has no column '{given}' ({what})", remedy=nearest(given, names))
    words = (
        [source.series]
        if source.series
        else [name for name in names if name != source.value and _wordy(raw.columns[name])]
    )
    if len(words) != 1:
        raise InputError(
            f"It is not plain which column of {raw.source} names the series",
            remedy="say so with Source(path, series='...')",
        )
    values = (
        [source.value]
        if source.value
        else [name for name in names if name != words[0] and not _wordy(raw.columns[name])]
    )
    if len(values) != 1:
        raise InputError(
            f"It is not plain which column of {raw.source} holds the values: {', '.join(values) or 'none does'}",
            remedy="say so with Source(path, value='...')",
        )
    return words[0], values[0]


def _days(dates: Any) -> tuple[Any, NDArray[np.int64], NDArray[np.int64]]:
    """The distinct dates as they came, the first row of each, and the date of each row."""
    index = pd.Index(dates)
    codes, unique = pd.factorize(index)
    if (codes < 0).any():
        return index, np.arange(len(index)), np.arange(len(index))
    firsts = np.full(len(unique), len(codes), dtype=np.int64)
    np.minimum.at(firsts, codes, np.arange(len(codes)))
    return unique, firsts, codes.astype(np.int64)


def _spread(
    raw: RawTable,
    values: NDArray[np.float64],
    day: NDArray[np.int64],
    where: NDArray[np.int64],
    dates: int,
    labels: list[str],
) -> tuple[NDArray[np.float64], int]:
    """Values by date and series; the same value twice is merged, two values are refused."""
    wide = np.full((dates, len(labels)), np.nan, order="F")
    cell = day * len(labels) + where
    order = np.argsort(cell, kind="stable")
    again = np.flatnonzero(np.diff(cell[order]) == 0)
    first, second = order[again], order[again + 1]
    differs = np.flatnonzero(
        ~((values[first] == values[second]) | (np.isnan(values[first]) & np.isnan(values[second])))
    )
    if len(differs):
        a, b = first[differs[0]], second[differs[0]]
        raise InputError(
            f"{raw.row_word.capitalize()}s {raw.rows[a]} and {raw.rows[b]} of {raw.source} both "
            f"give '{labels[where[a]]}' on one date, "
            f"but differ ({values[a]:g} and {values[b]:g})",
            remedy="remove the wrong row",
        )
    wide[day, where] = values
    return wide, len(again)
