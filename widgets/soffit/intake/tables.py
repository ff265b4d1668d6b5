"""One source on its way to the panel: dates read and sorted, cells made numbers, rows counted."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from soffit.errors import InputError
from soffit.intake.cells import Column, Missing, detect_marks, is_numeric, read_numbers
from soffit.intake.dates import read_dates
from soffit.intake.options import Frequency, Role
from soffit.intake.periods import month_text
from soffit.intake.progress import Tick
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed
from soffit.intake.sources import RawTable

__all__ = ["PRICES", "Table", "clean_table", "merge_duplicates"]

Floats = NDArray[np.float64]

PRICES = "prices"
"""The unit of a column of prices."""


@dataclass(eq=False)
class Table:
    """A source with sorted dates and numeric columns.

    Parameters
    ----------
    source : str
        What the record calls the source.
    names : list of str
        C column names.
    values : ndarray
        T×C, NaN where there is no value.
    stamps : ndarray of datetime64[ns]
        T dates, sorted.
    rows : ndarray of int
        T numbers by which the analyst finds each row.
    row_word : str
        'line' or 'row'.
    told : Frequency or None
        What the form of the dates says.
    signs : set of str
        Columns whose cells carried per-cent signs.
    units : dict of str to str
        What was found or declared, by column.
    frequency : Frequency or None
        Set once it is known.
    slow : dict of str to Frequency
        Columns observed less often than the source.
    mixed : bool
        Whether a stretch of the rows goes at a coarser frequency than the rest.
    """

    source: str
    names: list[str]
    values: Floats
    stamps: NDArray[np.datetime64]
    rows: NDArray[np.int64]
    row_word: str
    told: Frequency | None = None
    signs: set[str] = field(default_factory=set)
    units: dict[str, str] = field(default_factory=dict)
    frequency: Frequency | None = None
    slow: dict[str, Frequency] = field(default_factory=dict)
    mixed: bool = False

    def place(self, row: int) -> str:
        """Where the analyst finds a row, with its date."""
        day = month_text(self.stamps[row], self.frequency or Frequency.DAILY)
        return f"{self.row_word} {self.rows[row]} ({day}) of {self.source}"

    def take(self, rows: NDArray[np.int64] | NDArray[np.bool_]) -> None:
        """Keep some rows, in the order given."""
        self.values = self.values[rows]
        self.stamps = self.stamps[rows]
        self.rows = self.rows[rows]


def clean_table(
    raw: RawTable,
    roles: Mapping[str, Role],
    missing: Missing,
    record: RecordBuilder,
    tick: Tick,
) -> Table:
    """Dates and numbers of a raw table, sorted, with exact duplicates merged.

    The raw table is used up: each of its columns is let go once it is read.

    Parameters
    ----------
    raw : RawTable
        From a reader.
    roles : mapping of str to Role
        Role of each column; ignored ones are not read.
    missing : Missing
        What stands for no value.
    record : RecordBuilder
        Where everything is said.
    tick : callable
        Called after each series.

    Raises
    ------
    InputError
        If a date or a number cannot be read, or two rows of one date differ.
    """
    dates = read_dates(raw.dates, raw.place, raw.date_format)
    for kind, message, severity in dates.notes:
        record.add(kind, message, severity, rows=len(raw.rows), source=raw.source)
    names = [name for name in raw.columns if roles[name] is not Role.IGNORED]
    marks = raw.marks
    if marks is None:
        marks = detect_marks(raw.columns[name] for name in names if not is_numeric(raw.columns[name]))
    values = np.empty((len(raw.rows), len(names)), order="F")
    told: dict[str, Column] = {}
    for position, name in enumerate(names):
        column = read_numbers(raw.columns.pop(name), name, raw.place, marks, missing)
        values[:, position] = column.values
        if column.missing or column.repairs or column.percent_signs:
            column.values = values[:0, 0]
            told[name] = column
        tick(1)
    _report_cells(told, raw.source, record)
    signs = set(names) if raw.signs else {name for name, column in told.items() if column.percent_signs}
    table = Table(raw.source, names, values, dates.stamps, raw.rows, raw.row_word, dates.told, signs)
    _sort(table, record)
    merge_duplicates(table, record, "date")
    return table


def _report_cells(columns: Mapping[str, Column], source: str, record: RecordBuilder) -> None:
    """One entry for each missing code and each kind of repair."""
    by_code: dict[str, dict[str, int]] = {}
    by_repair: dict[str, dict[str, int]] = {}
    for name, column in columns.items():
        for code, count in column.missing.items():
            by_code.setdefault(code, {})[name] = count
        for repair, count in column.repairs.items():
            by_repair.setdefault(repair, {})[name] = count
    for code, counts in by_code.items():
        what = "Blank cells" if code == "blank" else f"Cells with {code}"
        record.add(
            EntryKind.MISSING,
            f"{what} count as no value: {_counted(counts)}.",
            Severity.NOTE if code == "blank" else Severity.REPAIRED,
            series=list(counts),
            rows=sum(counts.values()),
            source=source,
        )
    for repair, counts in by_repair.items():
        record.add(
            EntryKind.NUMBERS,
            f"{repair.capitalize()}: {_counted(counts)}.",
            Severity.REPAIRED,
            series=list(counts),
            rows=sum(counts.values()),
            source=source,
        )


def _counted(counts: Mapping[str, int]) -> str:
    return listed([f"'{name}' ({count:,})" for name, count in counts.items()], quote="")


def _sort(table: Table, record: RecordBuilder) -> None:
    steps = np.diff(table.stamps.astype(np.int64))
    if not (steps < 0).any():
        return
    if (steps <= 0).all():
        message = "Rows ran from the latest date to the earliest; they were sorted."
    else:
        row = int(np.flatnonzero(steps < 0)[0]) + 1
        message = f"Dates were out of order, first in {table.place(row)}; the rows were sorted."
    record.add(EntryKind.ORDER, message, Severity.REPAIRED, rows=int((steps < 0).sum()), source=table.source)
    table.take(np.argsort(table.stamps, kind="stable"))


def merge_duplicates(table: Table, record: RecordBuilder, what: str) -> None:
    """Merge rows of one date whose values are the same.

    Parameters
    ----------
    table : Table
        Changed in place.
    record : RecordBuilder
        Where it is said.
    what : str
        'date', or the period in which two dates fall.

    Raises
    ------
    InputError
        If rows of one date differ.
    """
    again = np.flatnonzero(np.diff(table.stamps.astype(np.int64)) == 0) + 1
    if not len(again):
        return
    for row in again:
        here, before = table.values[row], table.values[row - 1]
        differs = ~((here == before) | (np.isnan(here) & np.isnan(before)))
        if differs.any():
            column = int(np.flatnonzero(differs)[0])
            raise InputError(
                f"{table.row_word.capitalize()}s {table.rows[row - 1]} and {table.rows[row]} of "
                f"{table.source} are both for "
                f"{what} {str(table.stamps[row])[:10]} but differ, first in '{table.names[column]}' "
                f"({before[column]:g} and {here[column]:g})",
                remedy="remove the wrong row",
            )
    record.add(
        EntryKind.DUPLICATES,
        f"{len(again)} rows repeat another row of the same {what} (first: {table.place(int(again[0]))}); "
        "they were merged.",
        Severity.REPAIRED,
        rows=len(again),
        source=table.source,
    )
    record.merged(table.source, len(again))
    keep = np.ones(len(table.stamps), dtype=bool)
    keep[again] = False
    table.take(keep)
