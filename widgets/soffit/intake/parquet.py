"""Parquet files, read a few columns at a time so that memory stays close to the size of the data."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

from soffit.errors import InputError, nearest
from soffit.intake.columns import column_blocks
from soffit.intake.progress import Tick
from soffit.intake.record import EntryKind
from soffit.intake.sources import DATE_NAMES, Limits, RawTable, Source, check_cells, clean_names, need_extra

__all__ = ["read_parquet"]


def read_parquet(path: Path, name: str, source: Source, limits: Limits, tick: Tick) -> RawTable:
    """Read a Parquet file.

    Raises
    ------
    InputError
        If pyarrow is missing, the file is not Parquet, or there are no dates or columns.
    """
    try:
        import pyarrow as pa
        import pyarrow.parquet as pq
    except ImportError as error:
        raise need_extra("pyarrow", "Reading Parquet", error) from error
    try:
        file = pq.ParquetFile(path)
    except (pa.ArrowException, OSError) as error:
        raise InputError(
            f"'{path.name}' cannot be read as Parquet ({error})", remedy="write it again"
        ) from error
    with file:
        schema = file.schema_arrow
        names, types = list(schema.names), list(schema.types)
        rows = int(file.metadata.num_rows)
        check_cells(rows, len(names), name, limits)
        if rows == 0:
            raise InputError(f"{name} has no rows", remedy="check how it was made")
        dated, remark = _date_column(schema, name, source)
        kept = [position for position in range(len(names)) if position != dated]
        labels, _ = clean_names([names[position] for position in kept], name)
        if not labels:
            raise InputError(f"{name} has dates but no columns of numbers", remedy="check how it was made")
        plain = [pa.types.is_floating(types[position]) for position in kept]
        block = np.empty((rows, sum(plain)), order="F")
        columns: dict[str, Any] = {}
        filled = 0
        for span in column_blocks(len(kept)):
            part = file.read(columns=[names[position] for position in kept[span]])
            for cells, label, is_plain in zip(part.columns, labels[span], plain[span], strict=True):
                if is_plain:
                    columns[label] = block[:, filled]
                    columns[label][:] = cells.to_numpy()
                    filled += 1
                else:
                    columns[label] = _cells(cells)
            tick(len(labels[span]))
        dates = _cells(file.read(columns=[names[dated]]).column(0))
    table = RawTable(name, columns, dates, np.arange(1, rows + 1, dtype=np.int64), "row", rows_in=rows)
    if remark:
        table.note(EntryKind.DATES, remark)
    return table


def _cells(column: Any) -> Any:
    """Text, whole numbers and dates, as pandas reads them."""
    cells = column.to_pandas()
    return cells.to_numpy() if isinstance(cells.dtype, np.dtype) else cells.array


def _date_column(schema: Any, name: str, source: Source) -> tuple[int, str]:
    """Position of the dates, and what to say about it."""
    from pyarrow import types

    names = list(schema.names)
    if source.date is not None:
        if source.date not in names:
            raise InputError(f"{name} has no date column '{source.date}'", remedy=nearest(source.date, names))
        return names.index(source.date), ""
    content = json.loads((schema.metadata or {}).get(b"pandas", b"{}"))
    index = [item for item in content.get("index_columns", []) if isinstance(item, str) and item in names]
    if len(index) > 1:
        raise InputError(f"{name} has an index of several levels", remedy="put the dates alone in the index")
    typed = [i for i, one in enumerate(schema.types) if types.is_timestamp(one) or types.is_date(one)]
    named = [i for i, label in enumerate(names) if label.casefold() in DATE_NAMES]
    if index and (names.index(index[0]) in typed or not typed + named):
        return names.index(index[0]), ""
    position = next(iter(typed + named), None)
    if position is None:
        raise InputError(f"{name} has no column of dates", remedy="name it with Source(path, date='...')")
    return position, f"The dates were taken from column '{names[position]}'."
