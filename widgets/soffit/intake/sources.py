"""What a source is, how large it may be, and what a reader hands on."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from soffit.errors import InputError, nearest
from soffit.intake.cells import Marks
from soffit.intake.options import Layout
from soffit.intake.record import EntryKind, Severity, listed

__all__ = [
    "DATE_NAMES",
    "Limits",
    "RawTable",
    "Source",
    "check_cells",
    "check_file",
    "clean_names",
    "content_hash",
    "need_extra",
]

DATE_NAMES = frozenset(
    [
        "date",
        "dates",
        "month",
        "months",
        "period",
        "time",
        "day",
        "caldt",
        "datadate",
        "yearmonth",
        "yyyymm",
        "quarter",
        "year",
        "datum",
        "monat",
    ]
)
"""Names, in lower case, that a column of dates usually has."""


@dataclass(frozen=True)
class Limits:
    """The largest source that is read.

    Parameters
    ----------
    cells : int
        Rows times columns.
    file_bytes : int
        Size of a file, and of a packed file once unpacked.
    """

    cells: int = 30_000_000
    file_bytes: int = 1_000_000_000


@dataclass(frozen=True, eq=False)
class Source:
    """A source with the particulars that its content does not tell.

    Parameters
    ----------
    data : path, DataFrame or database URL
        Where the numbers are. A path with a `query` is a DuckDB database; text with ``://`` is a database URL as
        SQLAlchemy reads it.
    name : str, optional
        What the record calls it; the file's name if empty.
    label : str, optional
        Which download it is, such as ``"downloaded 2024-05-01"``; kept in the record.
    date : str, optional
        The column that holds the dates.
    date_format : str, optional
        A strptime format of the dates, such as ``"%d/%m/%Y"``.
    header : int, optional
        Number of the line or row that holds the names, counted from 1.
    delimiter : str, optional
        What separates the fields of a text file.
    decimal : str, optional
        Decimal mark, ``"."`` or ``","``.
    encoding : str, optional
        Encoding of a text file.
    sheet : str or int, optional
        Sheet of a workbook, by name or by number from 1.
    query : str, optional
        One SELECT (or WITH ... SELECT) for a database.
    layout : Layout or str, optional
        Wide (a column a series) or long (a row a value).
    series, value : str, optional
        In the long layout, the columns with the names and with the values.
    """

    data: Any
    name: str = ""
    label: str = ""
    date: str | None = None
    date_format: str | None = None
    header: int | None = None
    delimiter: str | None = None
    decimal: str | None = None
    encoding: str | None = None
    sheet: str | int | None = None
    query: str | None = None
    layout: Layout | str = Layout.DETECT
    series: str | None = None
    value: str | None = None


@dataclass(eq=False)
class RawTable:
    """What a reader hands on: cells and dates as they came, and where each row stands.

    Parameters
    ----------
    source : str
        What the record calls the source.
    columns : dict of str to array
        T cells a column, text or numbers, without the dates.
    dates : array-like
        T dates as they came.
    rows : ndarray of int
        T numbers by which the analyst finds each row.
    row_word : str
        'line' in a text file, 'row' elsewhere.
    rows_in : int
        Data rows that the source holds, with those that were not read.
    merged : int
        Rows that the layout folded into others.
    date_format : str or None
        Declared form of the dates.
    marks : Marks or None
        Declared decimal mark; told from the cells if None.
    signs : bool
        Whether the values of a long table carried per-cent signs.
    slot : str
        What it was given as: 'returns', 'factors' or 'risk-free'.
    fingerprint, label : str
        SHA-256 of the content, and which download it is.
    notes : list
        What goes in the record: kind, message, severity, rows.
    """

    source: str
    columns: dict[str, Any]
    dates: Any
    rows: NDArray[np.int64]
    row_word: str
    rows_in: int = 0
    merged: int = 0
    date_format: str | None = None
    marks: Marks | None = None
    signs: bool = False
    slot: str = ""
    fingerprint: str = ""
    label: str = ""
    notes: list[tuple[EntryKind, str, Severity, int]] = field(default_factory=list)

    def place(self, row: int) -> str:
        """Where the analyst finds a row."""
        return f"{self.row_word} {self.rows[row]} of {self.source}"

    def note(self, kind: EntryKind, message: str, severity: Severity = Severity.NOTE, rows: int = 0) -> None:
        """Add a note for the record."""
        self.notes.append((kind, message, severity, rows))


def need_extra(package: str, what: str, error: ImportError) -> InputError:
    """The error for a source whose package is not installed."""
    return InputError(
        f"{what} needs the package {package}, which is not installed ({error})",
        remedy="install it with pip install 'soffit[sources]'",
    )


def check_file(path: Path, limits: Limits) -> None:
    """Refuse a path that is no file of a size within the limits.

    Raises
    ------
    InputError
        If there is no such file, it is empty or too large.
    """
    if not path.exists():
        near = (
            nearest(path.name, [item.name for item in path.parent.iterdir()]) if path.parent.is_dir() else ""
        )
        raise InputError(
            f"There is no file '{path}'", remedy=near if near.startswith("did") else "check the path"
        )
    if not path.is_file():
        raise InputError(f"'{path}' is not a file", allowed="the path of one file")
    size = path.stat().st_size
    if size == 0:
        raise InputError(f"The file '{path.name}' is empty", remedy="export it again")
    check_bytes(size, path.name, limits)


def check_bytes(size: int, name: str, limits: Limits) -> None:
    """Refuse a file larger than the limits."""
    if size > limits.file_bytes:
        raise InputError(
            f"The file '{name}' has {size:,} bytes",
            allowed=f"at most {limits.file_bytes:,} bytes",
            remedy="split it, or raise limits=Limits(file_bytes=...)",
        )


def check_cells(rows: int, columns: int, source: str, limits: Limits) -> None:
    """Refuse a table larger than the limits, before it is held in memory."""
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
        if any(ord(mark) < 32 for mark in text):
            raise InputError(
                f"The name {text!r} of column {position} of {source} holds a control character",
                remedy="look for a stray quotation mark or line break",
            )
        if text != name:
            changed.append(text)
        texts.append(text)
    if len(set(texts)) < len(texts):
        twice = next(name for position, name in enumerate(texts) if name in texts[:position])
        places = listed([str(i) for i, name in enumerate(texts, start=1) if name == twice], quote="")
        raise InputError(
            f"Two columns of {source} are called '{twice}' (columns {places})",
            remedy="give each its own name",
        )
    return texts, changed


def content_hash(columns: Mapping[str, Any], dates: Iterable[Any]) -> str:
    """SHA-256 of a table's names, dates and cells."""
    digest = hashlib.sha256("\n".join(str(date) for date in dates).encode())
    for name, cells in columns.items():
        digest.update(f"\n{name}\n".encode())
        array = np.asarray(cells)
        if array.dtype.kind in "fiu":
            digest.update(np.ascontiguousarray(array, dtype="<f8").tobytes())
        else:
            digest.update("\n".join(str(cell) for cell in array.tolist()).encode())
    return digest.hexdigest()
