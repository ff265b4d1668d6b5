"""Delimited text files: preamble, header, data, footer; every data row with its line number."""

from __future__ import annotations

import csv
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from soffit.errors import InputError, nearest
from soffit.intake.dates import looks_like_dates
from soffit.intake.numbers import MISSING_TEXTS
from soffit.intake.readers import Limits, RawTable, Source, check_cells, clean_names
from soffit.intake.record import EntryKind, Severity, listed

__all__ = ["read_text_file"]

_DELIMITERS = ("\t", ";", "|", ",")
_SAMPLE = 400
_NUMBER = re.compile(r"[(+-]?[\d.,]+(?:e[+-]?\d+)?%?\)?", re.IGNORECASE | re.ASCII)


@dataclass(frozen=True)
class _Line:
    number: int
    fields: tuple[str, ...]

    @property
    def blank(self) -> bool:
        return not any(self.fields)

    @property
    def numeric(self) -> bool:
        """Whether most of the fields after the first are numbers or missing codes."""
        rest = self.fields[1:]
        hits = sum(1 for item in rest if _NUMBER.fullmatch(item) or item.casefold() in MISSING_TEXTS)
        return bool(rest) and 2 * hits > len(rest)


def read_text_file(path: Path, name: str, source: Source, limits: Limits) -> RawTable:
    """Read a delimited text file.

    Raises
    ------
    InputError
        If the file is not text, has no table of dates and numbers, or has a row that does not fit, by its line.
    """
    text, encoding = _decoded(path, source.encoding)
    delimiter = source.delimiter if source.delimiter is not None else _delimiter(text)
    lines = _lines(text, delimiter, name)
    if all(line.blank for line in lines):
        raise InputError(f"The file '{name}' holds nothing but blanks", remedy="export it again")
    header, body, column = _layout(lines, name, source)
    data, further, blanks = _data_rows(body, header, column, name)
    check_cells(len(data), len(header.fields), name, limits)
    table = _table(name, header, data, column)
    table.rows_in = len(data) + len(further)
    if encoding not in ("utf-8", "ascii") and source.encoding is None:
        table.note(EntryKind.SOURCE, f"The file is not UTF-8; it was read as {encoding}.")
    if delimiter != "," and source.delimiter is None:
        table.note(EntryKind.SOURCE, f"Fields are separated by {_spelled(delimiter)}.")
    before = sum(1 for line in lines if line.number < header.number and not line.blank)
    if before:
        table.note(
            EntryKind.SOURCE, f"{before} lines before the names (line {header.number}) were passed over."
        )
    if blanks:
        table.note(EntryKind.SOURCE, f"{blanks} blank lines among the data were passed over.")
    after = [line for line in body if not line.blank and line.number > data[-1].number]
    if further:
        table.note(
            EntryKind.SOURCE,
            f"A further table begins at line {after[0].number}; its {len(further)} rows "
            f"(from line {further[0].number}) were not read.",
            Severity.WARNING,
            len(further),
        )
    elif after:
        table.note(
            EntryKind.SOURCE,
            f"{len(after)} lines after the data (from line {after[0].number}) were passed over.",
        )
    return table


def _spelled(delimiter: str) -> str:
    return {"\t": "tabs", " ": "blanks"}.get(delimiter, f"'{delimiter}'")


def _decoded(path: Path, encoding: str | None) -> tuple[str, str]:
    raw = path.read_bytes()
    if encoding is None:
        if raw.startswith((b"\xff\xfe", b"\xfe\xff")):
            encoding = "utf-16"
        elif b"\x00" in raw[:4096] or raw.startswith((b"PK\x03\x04", b"PAR1", b"%PDF", b"\x1f\x8b")):
            raise InputError(
                f"'{path.name}' is not a text file",
                remedy="check its name: .xlsx and .parquet are read by their ending",
            )
    if encoding is not None:
        try:
            return raw.decode(encoding), encoding
        except (UnicodeDecodeError, LookupError) as error:
            raise InputError(
                f"'{path.name}' cannot be read as {encoding} ({error})",
                remedy="leave encoding out, or name another",
            ) from error
    try:
        return raw.decode("utf-8-sig"), "utf-8"
    except UnicodeDecodeError:
        return raw.decode("cp1252", errors="replace"), "cp1252"


def _delimiter(text: str) -> str:
    sample = [line for line in text.splitlines()[:_SAMPLE] if line.strip()]
    best, score = " ", 0
    for candidate in _DELIMITERS:
        widths = [len(row) for row in csv.reader(sample, delimiter=candidate, skipinitialspace=True)]
        common = max((width for width in set(widths) if width > 1), key=widths.count, default=0)
        if common and widths.count(common) > score:
            best, score = candidate, widths.count(common)
    return best


def _lines(text: str, delimiter: str, name: str) -> list[_Line]:
    raw = text.splitlines()
    if delimiter == " ":
        return [_Line(number, tuple(line.split())) for number, line in enumerate(raw, start=1)]
    if len(delimiter) != 1:
        raise InputError(f"delimiter={delimiter!r} has {len(delimiter)} characters", allowed="one character")
    reader = csv.reader(raw, delimiter=delimiter, skipinitialspace=True)
    lines: list[_Line] = []
    try:
        for row in reader:
            lines.append(_Line(reader.line_num, tuple(item.strip() for item in row)))
    except csv.Error as error:
        raise InputError(
            f"Line {reader.line_num} of {name} cannot be split into fields ({error})",
            remedy="look for a stray quotation mark",
        ) from error
    return lines


def _layout(lines: list[_Line], name: str, source: Source) -> tuple[_Line, list[_Line], int]:
    """The header, the lines below it, and the position of the dates."""
    if source.header is not None:
        header = next((line for line in lines if line.number == source.header), None)
        if header is None or header.blank:
            raise InputError(
                f"Line {source.header} of {name} holds no names",
                allowed=f"a line from 1 to {lines[-1].number}",
            )
        body = [line for line in lines if line.number > header.number]
        return header, body, _date_position(header, body, name, source)
    start = next((i for i, line in enumerate(lines) if _opens_data(lines, i)), None)
    if start is None:
        return _layout_by_names(lines, name, source)
    above = [line for line in lines[:start] if not line.blank]
    if not above:
        raise InputError(
            f"{name} begins with data in line {lines[start].number}: the names of the columns are missing",
            remedy="add a first line with the names",
        )
    header = above[-1]
    if len(above) > 1 and len(header.fields) == len(above[-2].fields) > 1:
        if header.numeric:
            raise InputError(
                f"'{header.fields[0]}' in line {header.number} of {name} is not a date",
                remedy="correct the row, or remove it if it is not data",
            )
        raise InputError(
            f"Lines {above[-2].number} and {header.number} of {name} both look like names",
            remedy=f"say which holds the names with Source(path, header={above[-2].number})",
        )
    if len(header.fields) < len(lines[start].fields) - 1 or (
        len(header.fields) < 2 and len(lines[start].fields) > 2
    ):
        raise InputError(
            f"Line {header.number} of {name} has {len(header.fields)} names for the {len(lines[start].fields)} "
            f"fields of line {lines[start].number}",
            remedy="give every column a name",
        )
    if len(header.fields) == len(lines[start].fields) - 1:
        header = _Line(header.number, ("", *header.fields))
    return header, lines[start:], _date_position(header, lines[start:], name, source)


def _opens_data(lines: list[_Line], at: int) -> bool:
    line = lines[at]
    return len(line.fields) > 1 and looks_like_dates([line.fields[0]]) and line.numeric


def _layout_by_names(lines: list[_Line], name: str, source: Source) -> tuple[_Line, list[_Line], int]:
    """A table whose first column is not the dates: the header is the first line as wide as most."""
    widths = [len(line.fields) for line in lines if not line.blank]
    common = max(set(widths), key=widths.count)
    header = next((line for line in lines if len(line.fields) == common and not line.blank), lines[0])
    body = [line for line in lines if line.number > header.number]
    if common < 2 or all(line.blank for line in body):
        raise InputError(
            f"{name} holds no rows of dates and numbers",
            remedy="check the file, or say what it is with Source(path, delimiter=..., header=..., date=...)",
        )
    return header, body, _date_position(header, body, name, source)


def _date_position(header: _Line, body: list[_Line], name: str, source: Source) -> int:
    if source.date is not None:
        if source.date not in header.fields:
            raise InputError(
                f"{name} has no date column '{source.date}'",
                remedy=nearest(source.date, [f for f in header.fields if f]),
            )
        return header.fields.index(source.date)
    full = [line for line in body if len(line.fields) == len(header.fields)]
    for position in range(len(header.fields)):
        readable = sum(looks_like_dates([line.fields[position]]) for line in full[:50])
        if 2 * readable >= max(1, len(full[:50])):
            return position
    shown = next((line for line in body if not line.blank), header)
    raise InputError(
        f"No column of {name} holds dates; line {shown.number} begins with '{(*shown.fields, '')[0]}'",
        allowed="dates such as 1990-03-31, 1990-03, 199003, 31/03/1990 or 31 Mar 1990",
        remedy="name the date column with Source(path, date='...'), or give its date_format",
    )


def _data_rows(
    body: list[_Line], header: _Line, column: int, name: str
) -> tuple[list[_Line], list[_Line], int]:
    """Rows of the first table, rows of later tables, and the number of blank lines among the first."""
    width = len(header.fields)
    data: list[_Line] = []
    blanks = pending = 0
    for position, line in enumerate(body):
        if line.blank:
            pending += 1
            continue
        fields = _trimmed(line.fields, width)
        dated = len(fields) > column and looks_like_dates([fields[column]])
        if len(fields) == width and (dated or (line.numeric and not pending)):
            data.append(_Line(line.number, fields))
            blanks, pending = blanks + pending, 0
        elif dated and len(fields) > 1 and not (pending and len(fields) != width and not data):
            raise InputError(
                f"Line {line.number} of {name} has {len(fields)} fields, the names in line "
                f"{header.number} are {width}",
                remedy="complete the line, or look for a stray or missing delimiter",
            )
        elif data:
            return data, _further(body[position:], line, name, data), blanks
        elif len(fields) == width and line.numeric:
            raise InputError(
                f"'{fields[column]}' in line {line.number} of {name} is not a date",
                remedy="correct the row, or remove it if it is not data",
            )
    if not data:
        raise InputError(f"{name} has names but no rows", remedy="check how it was exported")
    return data, [], blanks


def _trimmed(fields: tuple[str, ...], width: int) -> tuple[str, ...]:
    while len(fields) > width and not fields[-1]:
        fields = fields[:-1]
    return fields


def _further(rest: list[_Line], stop: _Line, name: str, data: list[_Line]) -> list[_Line]:
    """Rows of the tables below the first; a line that merely interrupts the first is refused."""
    rows = [line for line in rest if len(line.fields) > 1 and looks_like_dates([line.fields[0]])]
    if rows:
        filled = [line for line in rest if not line.blank]
        before = filled[filled.index(rows[0]) - 1]
        if before is stop and (before.numeric or len(before.fields) < 2):
            raise InputError(
                f"Line {stop.number} of {name} ('{stop.fields[0][:40]}') interrupts the data",
                remedy="correct the line, or remove it if it is not data",
            )
    return rows


def _table(name: str, header: _Line, data: list[_Line], column: int) -> RawTable:
    names = list(header.fields)
    cells = list(zip(*(line.fields for line in data), strict=True))
    keep: list[int] = []
    empty = 0
    counter = False
    for position, label in enumerate(names):
        if position == column:
            continue
        if not label and not any(cells[position]):
            empty += 1
        elif not label and _counts(cells[position]):
            counter = True
        else:
            keep.append(position)
    labels, _ = clean_names([names[position] for position in keep], name)
    frame = pd.DataFrame(
        {
            label: np.array(cells[position], dtype=object)
            for label, position in zip(labels, keep, strict=True)
        },
        dtype=object,
    )
    rows = np.array([line.number for line in data], dtype=np.int64)
    table = RawTable(name, frame, np.array(cells[column], dtype=object), rows, "line")
    if not labels:
        raise InputError(f"{name} has dates but no columns of numbers", remedy="check the delimiter")
    if empty:
        table.note(EntryKind.NAMES, f"{empty} columns without a name and without values were left out.")
    if counter:
        table.note(EntryKind.NAMES, "A column without a name that only counts rows was left out.")
    if column:
        table.note(EntryKind.DATES, f"The dates were taken from column {listed([names[column]])}.")
    return table


def _counts(cells: Sequence[str]) -> bool:
    return all(cell.isdigit() and len(cell) < 10 for cell in cells) and [int(cell) for cell in cells] in (
        list(range(len(cells))),
        list(range(1, len(cells) + 1)),
    )
