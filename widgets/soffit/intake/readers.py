"""Sources to raw tables: each kind of source to its reader."""

from __future__ import annotations

import hashlib
import os
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from soffit.errors import InputError, nearest
from soffit.intake.cells import Marks, Missing
from soffit.intake.databases import read_database, read_duckdb
from soffit.intake.dates import looks_like_dates
from soffit.intake.layouts import widen
from soffit.intake.parquet import read_parquet
from soffit.intake.progress import Tick, quiet
from soffit.intake.record import EntryKind, Severity, listed
from soffit.intake.sources import (
    DATE_NAMES,
    Limits,
    RawTable,
    Source,
    check_cells,
    check_file,
    clean_names,
    content_hash,
)
from soffit.intake.text_files import read_text_file
from soffit.intake.workbooks import read_workbook

__all__ = ["read"]

_REFUSED = {
    ".pkl": "a pickle can run code when it is opened; save the data as Parquet or CSV",
    ".pickle": "a pickle can run code when it is opened; save the data as Parquet or CSV",
    ".xls": "save the workbook as .xlsx",
    ".zip": "unpack it first",
    ".gz": "unpack it first",
    ".7z": "unpack it first",
}


def read(data: Any, slot: str, limits: Limits, missing: Missing, tick: Tick = quiet) -> RawTable:
    """Read a source into a wide table.

    Parameters
    ----------
    data : path, DataFrame, Series, database URL or Source
        What the analyst gave.
    slot : str
        'returns' or 'factors': what a frame without a name is called.
    limits : Limits
        The largest source that is read.
    missing : Missing
        What stands for no value, needed where the values of a long table are read.
    tick : callable
        Called with the number of lines, rows or series just read.

    Raises
    ------
    InputError
        If the source cannot be read.
    """
    source = data if isinstance(data, Source) else Source(data)
    held = source.data
    if isinstance(held, pd.Series):
        held = held.to_frame(str(held.name or slot))
    if isinstance(held, pd.DataFrame):
        table = read_frame(held, source.name or f"{slot} frame", source, limits)
    elif isinstance(held, str) and "://" in held:
        table = read_frame(*read_database(held, source, limits, tick), source, limits)
    elif isinstance(held, (str, os.PathLike)):
        table = _read_path(Path(held), source, limits, tick)
    else:
        raise InputError(
            f"{slot} is a {type(held).__name__}", allowed="a path, a DataFrame, a database URL or a Source"
        )
    table.label = source.label
    table.slot = slot
    table.date_format = source.date_format
    if source.decimal is not None:
        table.marks = _declared_marks(source.decimal)
    if not table.fingerprint:
        table.fingerprint = content_hash(table.columns, table.dates)
    return widen(table, source, missing)


def _read_path(path: Path, source: Source, limits: Limits, tick: Tick) -> RawTable:
    check_file(path, limits)
    name = source.name or path.name
    ending = path.suffix.lower()
    if source.sheet is not None and not source.name:
        name = f"{path.name}, sheet {source.sheet}"
    if ending in _REFUSED:
        raise InputError(
            f"Files that end in '{ending}' are not read ('{path.name}')", remedy=_REFUSED[ending]
        )
    if source.query is not None:
        table = read_frame(read_duckdb(path, source.query, name, limits, tick), name, source, limits)
    elif ending in (".parquet", ".pq"):
        table = read_parquet(path, name, source, limits, tick)
    elif ending in (".xlsx", ".xlsm"):
        table = read_workbook(path, name, source, limits, tick)
    elif ending in (".duckdb", ".db", ".sqlite"):
        raise InputError(
            f"'{path.name}' is a database", remedy="say what to read with Source(path, query='SELECT ...')"
        )
    else:
        table = read_text_file(path, name, source, limits, tick)
    with path.open("rb") as file:
        table.fingerprint = hashlib.file_digest(file, "sha256").hexdigest()
    return table


def _declared_marks(decimal: str) -> Marks:
    if decimal not in (".", ","):
        raise InputError(f"decimal={decimal!r} is not known", allowed="'.' or ','")
    return Marks(decimal, "," if decimal == "." else ".")


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
    position = _date_column(frame, labels, name, source)
    if position is None and isinstance(frame.index, pd.MultiIndex):
        raise InputError(f"{name} has an index of several levels", remedy="put the dates alone in the index")
    if position is None and isinstance(frame.index, pd.RangeIndex) and not _index_dates(frame.index):
        raise InputError(
            f"{name} has no dates: its index only counts rows",
            remedy="set the dates as the index, or name their column with Source(frame, date='...')",
        )
    dates: Any = frame.index if position is None else pd.Index(frame.iloc[:, position])
    columns = {label: frame.iloc[:, i].array for i, label in enumerate(labels) if i != position}
    if not columns:
        raise InputError(f"{name} has dates but no columns of numbers", remedy="check how it was made")
    table = RawTable(
        name,
        {label: _plain(cells) for label, cells in columns.items()},
        dates,
        np.arange(1, len(frame) + 1, dtype=np.int64),
        "row",
        rows_in=len(frame),
    )
    if position is not None and source.date is None:
        table.note(EntryKind.DATES, f"The dates were taken from column '{labels[position]}'.")
    changed = [label for label in changed if label in columns]
    if changed:
        table.note(
            EntryKind.NAMES,
            f"Names were turned into text without surrounding blanks: {listed(changed)}.",
            Severity.REPAIRED,
            len(changed),
        )
    return table


def _plain(cells: Any) -> Any:
    """A NumPy array where there is one behind the column, without a copy."""
    return cells.to_numpy() if isinstance(getattr(cells, "dtype", None), np.dtype) else cells


def _date_column(frame: pd.DataFrame, labels: list[str], name: str, source: Source) -> int | None:
    """Position of the column that holds the dates; None when the index does."""
    if source.date is not None:
        if source.date in labels:
            return labels.index(source.date)
        if source.date == frame.index.name:
            return None
        raise InputError(f"{name} has no date column '{source.date}'", remedy=nearest(source.date, labels))
    if not isinstance(frame.index, (pd.RangeIndex, pd.MultiIndex)) and _index_dates(frame.index):
        return None
    typed = [
        i
        for i, dtype in enumerate(frame.dtypes)
        if pd.api.types.is_datetime64_any_dtype(dtype) or isinstance(dtype, pd.PeriodDtype)
    ]
    named = [i for i, label in enumerate(labels) if label.casefold() in DATE_NAMES]
    return next(iter(typed + named), None)


def _index_dates(index: pd.Index) -> bool:
    if isinstance(index, (pd.DatetimeIndex, pd.PeriodIndex)):
        return True
    if isinstance(index, pd.RangeIndex) and (index.start < 1900 or index.step != 1):
        return False
    return looks_like_dates([str(item).removesuffix(".0") for item in index[:5]])
