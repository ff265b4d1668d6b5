"""Excel workbooks: one sheet, through the same reading of preamble, names, data and footer as text files."""

from __future__ import annotations

import zipfile
from datetime import date, datetime
from pathlib import Path
from typing import Any

from soffit.errors import InputError, nearest
from soffit.intake.grid import Line, table_of
from soffit.intake.progress import Tick
from soffit.intake.record import EntryKind, listed
from soffit.intake.sources import Limits, RawTable, Source, check_bytes, check_cells, need_extra

__all__ = ["read_workbook"]


def read_workbook(path: Path, name: str, source: Source, limits: Limits, tick: Tick) -> RawTable:
    """Read one sheet of a workbook.

    Values are read, never formulas; a sheet that was not named is the first one.

    Raises
    ------
    InputError
        If openpyxl is missing, the file is no workbook, there is no such sheet, or its table cannot be read.
    """
    try:
        from openpyxl import load_workbook
        from openpyxl.utils.exceptions import InvalidFileException
    except ImportError as error:
        raise need_extra("openpyxl", "Reading a workbook", error) from error
    try:
        with zipfile.ZipFile(path) as packed:
            check_bytes(sum(item.file_size for item in packed.infolist()), f"{path.name} (unpacked)", limits)
        book = load_workbook(path, read_only=True, data_only=True, keep_links=False)
    except (zipfile.BadZipFile, InvalidFileException, KeyError, OSError) as error:
        raise InputError(
            f"'{path.name}' is not a workbook ({error})", remedy="save it again as .xlsx"
        ) from error
    try:
        sheet = _sheet(book, source.sheet, name)
        lines = _lines(sheet, name, limits, tick)
        title, others = sheet.title, [one for one in book.sheetnames if one != sheet.title]
    finally:
        book.close()
    if not lines:
        raise InputError(
            f"Sheet '{title}' of {name} is empty", remedy="name another with Source(path, sheet='...')"
        )
    table = table_of(lines, name, source, limits, "row")
    if source.sheet is None and others:
        table.note(EntryKind.SOURCE, f"Sheet '{title}' was read; the workbook also has {listed(others)}.")
    return table


def _sheet(book: Any, wanted: str | int | None, name: str) -> Any:
    names = list(book.sheetnames)
    if wanted is None:
        return book.worksheets[0]
    if isinstance(wanted, int):
        if not 1 <= wanted <= len(names):
            raise InputError(
                f"{name} has no sheet {wanted}", allowed=f"a number from 1 to {len(names)}, or a name"
            )
        return book.worksheets[wanted - 1]
    if wanted not in names:
        raise InputError(f"{name} has no sheet '{wanted}'", remedy=nearest(wanted, names))
    return book[wanted]


def _lines(sheet: Any, name: str, limits: Limits, tick: Tick) -> list[Line]:
    lines: list[Line] = []
    cells = 0
    for number, row in enumerate(sheet.iter_rows(values_only=True), start=1):
        fields = [_text(cell) for cell in row]
        while fields and not fields[-1]:
            fields.pop()
        cells += len(fields)
        if cells > limits.cells:
            check_cells(number, len(fields), name, Limits(0, limits.file_bytes))
        lines.append(Line(number, tuple(fields)))
        tick(1)
    width = max((len(line.fields) for line in lines), default=0)
    # A row that ends in empty cells is as wide as the rest; a title or a footer is narrow on purpose.
    full = [line for line in lines if 2 * len(line.fields) >= width]
    padded = {
        line.number: Line(line.number, line.fields + ("",) * (width - len(line.fields)))
        for line in full
        if len(line.fields) > 1
    }
    return (
        [padded.get(line.number, line) for line in lines]
        if width > 1
        else [line for line in lines if line.fields]
    )


def _text(cell: Any) -> str:
    """A cell as text from which the same value is read back."""
    if cell is None:
        return ""
    if isinstance(cell, datetime):
        return cell.isoformat(sep=" ") if cell.hour or cell.minute or cell.second else cell.date().isoformat()
    if isinstance(cell, date):
        return cell.isoformat()
    if isinstance(cell, float):
        return repr(cell)
    return str(cell).strip()
