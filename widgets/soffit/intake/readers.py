"""Files and frames to raw tables: names, cells and dates as they came, and where each row stands."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from soffit.errors import InputError, nearest
from soffit.intake.dates import looks_like_dates
from soffit.intake.numbers import Marks
from soffit.intake.record import EntryKind, Severity

__all__ = ["Limits", "RawTable", "Source", "read"]

_DATE_NAMES = (
    "date",
    "dates",
    "month",
    "period",
    "time",
    "day",
    "caldt",
    "datadate",
    "yearmonth",
    "yyyymm",
    "quarter",
    "year",
)


@dataclass(frozen=True)
class Limits:
    """The largest source that is read.

    Parameters
    ----------
    cells : int
        Rows times columns.
    file_bytes : int
        Size of a file.
    """

    cells: int = 60_000_000
    file_bytes: int = 2_000_000_000


@dataclass(frozen=True, eq=False)
class Source:
    """A source with the particulars that cannot be seen from its content.

    Parameters
    ----------
    data : path or DataFrame
        Where the numbers are.
    name : str, optional
        What the record calls it; the file's name if empty.
    date : str, optional
        The column that holds the dates.
    date_format : str, optional
        A strptime format of the dates, such as ``"%d/%m/%Y"``.
    header : int, optional
        Number of the line that holds the names, counted from 1.
    delimiter : str, optional
        What separates the fields of a text file.
    decimal : str, optional
        Decimal mark, ``"."`` or ``","``.
    encoding : str, optional
        Encoding of a text file.
    """

    data: Any
    name: str = ""
    date: str | None = None
    date_format: str | None = None
    header: int | None = None
    delimiter: str | None = None
    decimal: str | None = None
    encoding: str | None = None


@dataclass(eq=False)
class RawTable:
    """What a reader hands on.

    Parameters
    ----------
    source : str
        What the record calls the source.
    frame : DataFrame
        T×C cells, text or numbers, without the dates; columns are unique text.
    dates : array-like
        T dates as they came.
    rows : ndarray of int
        T numbers by which the analyst finds each row.
    row_word : str
        'line' in a text file, 'row' elsewhere.
    date_format : str or None
        Declared form of the dates.
    marks : Marks or None
        Declared decimal mark; told from the cells if None.
    rows_in : int
        Data rows the source holds, with those that were not read.
    notes : list of (EntryKind, str, Severity, int)
        What goes in the record, with a count.
    """

    source: str
    frame: pd.DataFrame
    dates: Any
    rows: NDArray[np.int64]
    row_word: str
    date_format: str | None = None
    marks: Marks | None = None
    rows_in: int = 0
    notes: list[tuple[EntryKind, str, Severity, int]] = field(default_factory=list)

    def place(self, row: int) -> str:
        """Where the analyst finds a row."""
        return f"{self.row_word} {self.rows[row]} of {self.source}"

    def note(self, kind: EntryKind, message: str, severity: Severity = Severity.NOTE, rows: int = 0) -> None:
        """Add a note for the record."""
        self.notes.append((kind, message, severity, rows))


def read(data: Any, slot: str, limits: Limits) -> RawTable:
    """Read a source.

    Parameters
    ----------
    data : path, DataFrame or Source
        What the analyst gave.
    slot : str
        'returns' or 'factors': what a frame without a name is called.
    limits : Limits
        The largest source that is read.

    Raises
    ------
    InputError
        If the source cannot be read.
    """
    from soffit.intake.text_files import read_text_file

    source = data if isinstance(data, Source) else Source(data)
    if isinstance(source.data, pd.Series):
        source = Source(**{**source.__dict__, "data": source.data.to_frame(str(source.data.name or slot))})
    if isinstance(source.data, pd.DataFrame):
        table = read_frame(source.data, source.name or f"{slot} frame", source, limits)
    elif isinstance(source.data, (str, os.PathLike)):
        path = Path(source.data)
        check_file(path, limits)
        table = read_text_file(path, source.name or path.name, source, limits)
    else:
        raise InputError(f"{slot} is a {type(source.data).__name__}", allowed="a path or a DataFrame")
    if source.decimal is not None:
        table.marks = declared_marks(source.decimal)
    table.date_format = source.date_format
    return table


def declared_marks(decimal: str) -> Marks:
    """Marks for a declared decimal mark."""
    if decimal not in (".", ","):
        raise InputError(f"decimal={decimal!r} is not known", allowed="'.' or ','")
    return Marks(decimal, "," if decimal == "." else ".")


def check_file(path: Path, limits: Limits) -> None:
    """Refuse a path that is no readable file of a size within the limits."""
    if not path.exists():
        folder = path.parent
        near = nearest(path.name, [item.name for item in folder.iterdir()]) if folder.is_dir() else ""
        raise InputError(
            f"There is no file '{path}'", remedy=near if near.startswith("did") else "check the path"
        )
    if not path.is_file():
        raise InputError(f"'{path}' is not a file", allowed="the path of one file")
    size = path.stat().st_size
    if size == 0:
        raise InputError(f"The file '{path.name}' is empty", remedy="export it again")
    if size > limits.file_bytes:
        raise InputError(
            f"The file '{path.name}' has {size:,} bytes",
            allowed=f"at most {limits.file_bytes:,} bytes",
            remedy="split it, or raise limits=Limits(file_bytes=...)",
        )


def check_cells(rows: int, columns: int, source: str, limits: Limits) -> None:
    """Refuse a table larger than the limits."""
    if rows * columns > limits.cells:
        raise InputError(
            f"{source} has {rows:,} rows and {columns:,} columns",
            allowed=f"at most {limits.cells:,} cells",
            remedy="split it, or raise limits=Limits(cells=...)",
        )


def clean_names(names: Sequence[Any], source: str) -> tuple[list[str], list[str]]:
    """Column names as text without surrounding blanks, and those that changed.

    Raises
    ------
    InputError
        If a name is empty, not a plain label, or comes twice.
    """
    texts: list[str] = []
    changed: list[str] = []
    for position, name in enumerate(names, start=1):
        if isinstance(name, tuple):
            raise InputError(
                f"{source} has column names of several levels, such as {name!r}",
                remedy="flatten the columns to one level",
            )
        text = str(name).strip()
        if not text or name is None or (isinstance(name, float) and np.isnan(name)):
            raise InputError(
                f"Column {position} of {source} has no name", remedy="name it, or remove the column"
            )
        if text != name:
            changed.append(text)
        texts.append(text)
    twice = (
        next((name for position, name in enumerate(texts) if name in texts[:position]), None)
        if len(set(texts)) < len(texts)
        else None
    )
    if twice is not None:
        places = " and ".join(str(i) for i, name in enumerate(texts, start=1) if name == twice)
        raise InputError(
            f"Two columns of {source} are called '{twice}' (columns {places})",
            remedy="give each its own name",
        )
    return texts, changed


def read_frame(frame: pd.DataFrame, name: str, source: Source, limits: Limits) -> RawTable:
    """Read a DataFrame: dates from its index, or from a column.

    Raises
    ------
    InputError
        If there are no dates, no columns or no rows.
    """
    check_cells(*frame.shape, name, limits)
    if frame.shape[0] == 0:
        raise InputError(f"{name} has no rows", remedy="check how it was made")
    labels, changed = clean_names(list(frame.columns), name)
    frame = frame.set_axis(pd.Index(labels, dtype=object), axis=1)
    column = source.date if source.date is not None else _date_column(frame)
    if source.date is not None and source.date not in labels and source.date != frame.index.name:
        raise InputError(f"{name} has no date column '{source.date}'", remedy=nearest(source.date, labels))
    if column in labels:
        dates: Any = (
            frame[column].to_numpy()
            if not isinstance(frame[column].dtype, pd.PeriodDtype)
            else pd.PeriodIndex(frame[column])
        )
        if isinstance(frame[column].dtype, pd.DatetimeTZDtype):
            dates = pd.DatetimeIndex(frame[column])
        frame = frame.drop(columns=[column])
    elif isinstance(frame.index, pd.MultiIndex):
        raise InputError(f"{name} has an index of several levels", remedy="put the dates alone in the index")
    elif isinstance(frame.index, pd.RangeIndex):
        raise InputError(
            f"{name} has no dates: its index only counts rows",
            remedy="set the dates as the index, or name their column with Source(frame, date='...')",
        )
    else:
        dates = frame.index
    if frame.shape[1] == 0:
        raise InputError(f"{name} has dates but no columns of numbers", remedy="check how it was made")
    rows = np.arange(1, len(frame) + 1, dtype=np.int64)
    table = RawTable(name, frame.reset_index(drop=True), dates, rows, "row", rows_in=len(frame))
    if column in labels and source.date is None:
        table.note(EntryKind.DATES, f"The dates were taken from column '{column}'.")
    _note_changed(table, [label for label in changed if label != column])
    return table


def _note_changed(table: RawTable, changed: list[str]) -> None:
    if changed:
        from soffit.intake.record import listed

        table.note(
            EntryKind.NAMES,
            f"Names were turned into text without surrounding blanks: {listed(changed)}.",
            Severity.REPAIRED,
        )


def _date_column(frame: pd.DataFrame) -> str | None:
    """The column that holds the dates, when the index does not."""
    if not isinstance(frame.index, pd.RangeIndex) and _index_dates(frame.index):
        return None
    typed = [
        str(name)
        for name, dtype in frame.dtypes.items()
        if pd.api.types.is_datetime64_any_dtype(dtype) or isinstance(dtype, pd.PeriodDtype)
    ]
    named = [str(name) for name in frame.columns if str(name).casefold() in _DATE_NAMES]
    return next(iter(typed + named), None)


def _index_dates(index: pd.Index) -> bool:
    if isinstance(index, (pd.DatetimeIndex, pd.PeriodIndex)):
        return True
    return looks_like_dates([str(item) for item in index[:5]])
