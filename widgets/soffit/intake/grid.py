"""The table in a grid of fields: preamble, names, data, footer; every data row with its number."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from soffit.errors import InputError, nearest
from soffit.intake.cells import MISSING_TEXTS
from soffit.intake.dates import looks_like_dates
from soffit.intake.record import EntryKind, Severity, listed
from soffit.intake.sources import DATE_NAMES, Limits, RawTable, Source, check_cells, clean_names

__all__ = ["Line", "table_of"]

_LOOK = 40
_NUMBER = re.compile(r"[(+-]?[\d.,]+(?:e[+-]?\d+)?%?\)?", re.IGNORECASE | re.ASCII)
_FRACTION = re.compile(r"\d[.,]\d")
_FORMS = "dates such as 1990-03-31, 1990-03, 199003, 31/03/1990 or 31 Mar 1990"


@dataclass(frozen=True)
class Line:
    """One line of a file, or row of a sheet, split into fields.

    Parameters
    ----------
    number : int
        Its number, counted from 1.
    fields : tuple of str
        Its fields without surrounding blanks.
    """

    number: int
    fields: tuple[str, ...]

    @property
    def blank(self) -> bool:
        """Whether nothing is in it."""
        return not any(self.fields)

    @property
    def numeric(self) -> bool:
        """Whether most of its first fields, the very first aside, are numbers or missing codes."""
        rest = self.fields[1:_LOOK]
        hits = sum(1 for item in rest if _NUMBER.fullmatch(item) or item.casefold() in MISSING_TEXTS)
        return bool(rest) and 2 * hits > len(rest)

    def dated(self, column: int) -> bool:
        """Whether the field at this position is a date."""
        return len(self.fields) > column and looks_like_dates([self.fields[column]])


@dataclass(frozen=True)
class _Layout:
    """Where the names and the dates are, and what lies below the names."""

    header: Line
    body: list[Line]
    column: int
    name: str
    word: str
    date_format: str | None

    @property
    def width(self) -> int:
        return len(self.header.fields)

    def dated(self, line: Line) -> bool:
        if self.date_format is not None:
            return len(line.fields) > self.column and bool(line.fields[self.column])
        return line.dated(self.column)

    def trimmed(self, line: Line) -> Line:
        fields = line.fields
        while len(fields) > self.width and not fields[-1]:
            fields = fields[:-1]
        return line if fields is line.fields else Line(line.number, fields)


def table_of(lines: list[Line], name: str, source: Source, limits: Limits, word: str) -> RawTable:
    """Find the table in the lines of a file or the rows of a sheet.

    Raises
    ------
    InputError
        If there is no table of dates and numbers, or a row does not fit, by its number.
    """
    if all(line.blank for line in lines):
        raise InputError(f"{name} holds nothing but blanks", remedy="export it again")
    layout = _layout(lines, name, source, word)
    found = _data_rows(layout)
    data, further = found.data, found.further
    check_cells(len(data), layout.width, name, limits)
    table = _table(layout, data)
    table.rows_in = len(data) + len(further)
    before = sum(1 for line in lines if line.number < layout.header.number and not line.blank)
    if before:
        table.note(
            EntryKind.SOURCE,
            f"{before} {word}s before the names ({word} {layout.header.number}) were passed over.",
            rows=before,
        )
    between = sum(1 for line in layout.body if line.number < data[0].number and not line.blank)
    if between:
        table.note(
            EntryKind.SOURCE,
            f"{between} {word}s between the names and the data were passed over.",
            rows=between,
        )
    for count, what in ((found.blanks, f"blank {word}s"), (found.again, f"{word}s that repeat the names")):
        if count:
            table.note(EntryKind.SOURCE, f"{count} {what} among the data were passed over.", rows=count)
    after = [line for line in layout.body if not line.blank and line.number > data[-1].number]
    if further:
        table.note(
            EntryKind.SOURCE,
            f"A further table begins at {word} {after[0].number}; its {len(further)} rows (from {word} "
            f"{further[0].number}) were not read.",
            Severity.WARNING,
            len(further),
        )
    elif after:
        table.note(
            EntryKind.SOURCE,
            f"{len(after)} {word}s after the data (from {word} {after[0].number}: '{after[0].fields[0][:40]}') "
            "were passed over.",
            rows=len(after),
        )
    return table


def _layout(lines: list[Line], name: str, source: Source, word: str) -> _Layout:
    if source.header is not None:
        header = next((line for line in lines if line.number == source.header), None)
        if header is None or header.blank:
            raise InputError(
                f"{word.capitalize()} {source.header} of {name} holds no names",
                allowed=f"a {word} from 1 to {lines[-1].number}",
            )
    else:
        header = _header(lines, name, word)
    body = [line for line in lines if line.number > header.number]
    if not any(not line.blank for line in body):
        raise InputError(f"{name} has names but no rows", remedy="check how it was exported")
    first = next((line for line in body if line.numeric and len(line.fields) == len(header.fields) + 1), None)
    if (
        first is not None
        and first.dated(0)
        and not any(len(line.fields) == len(header.fields) for line in body)
    ):
        # The names leave out the column of dates.
        header = Line(header.number, ("", *header.fields))
    column = _date_position(header, body, name, word, source)
    return _Layout(header, body, column, name, word, source.date_format)


def _header(lines: list[Line], name: str, word: str) -> Line:
    """The line of names: the last one above the first line that is a date and numbers."""
    start = next(
        (i for i, line in enumerate(lines) if len(line.fields) > 1 and line.dated(0) and line.numeric), None
    )
    if start is None:
        return _widest(lines, name)
    first = lines[start]
    above = [line for line in lines[:start] if not line.blank]
    if not above:
        raise InputError(
            f"{name} begins with data in {word} {first.number}: the names of the columns are missing",
            remedy=f"add a first {word} with the names",
        )
    header = above[-1]
    doubled = len(above) > 1 and len(header.fields) == len(above[-2].fields) > 1
    if header.numeric and (doubled or any(_FRACTION.search(item) for item in header.fields[1:])):
        raise InputError(
            f"'{header.fields[0]}' in {word} {header.number} of {name} is not a date",
            remedy=f"correct the {word}, or remove it if it is not data",
        )
    if doubled:
        raise InputError(
            f"{word.capitalize()}s {above[-2].number} and {header.number} of {name} both look like names",
            remedy=f"say which holds the names with Source(path, header={above[-2].number})",
        )
    if len(header.fields) < len(first.fields) - 1 or (len(header.fields) < 2 < len(first.fields)):
        raise InputError(
            f"{word.capitalize()} {header.number} of {name} has {len(header.fields)} names for the "
            f"{len(first.fields)} fields of {word} {first.number}",
            remedy="give every column a name",
        )
    return header


def _widest(lines: list[Line], name: str) -> Line:
    """The first line as wide as most: the names of a table whose first column is not the dates."""
    widths = [len(line.fields) for line in lines if not line.blank]
    common = max(set(widths), key=widths.count)
    if common < 2:
        raise InputError(
            f"{name} holds no rows of dates and numbers",
            remedy="check the file, or say what it is with Source(path, delimiter=..., header=..., date=...)",
        )
    return next(line for line in lines if len(line.fields) == common and not line.blank)


def _date_position(header: Line, body: list[Line], name: str, word: str, source: Source) -> int:
    if source.date is not None:
        if source.date not in header.fields:
            raise InputError(
                f"{name} has no date column '{source.date}'",
                remedy=nearest(source.date, filter(None, header.fields)),
            )
        return header.fields.index(source.date)
    full = [line for line in body if len(line.fields) == len(header.fields)][:50]
    order = sorted(
        range(len(header.fields)), key=lambda position: header.fields[position].casefold() not in DATE_NAMES
    )
    for position in order[:200]:
        if source.date_format is not None or (
            full and 2 * sum(line.dated(position) for line in full) >= len(full)
        ):
            return position
    shown = next((line for line in body if not line.blank), header)
    raise InputError(
        f"No column of {name} holds dates; {word} {shown.number} begins with '{(*shown.fields, '')[0]}'",
        allowed=_FORMS,
        remedy="name the date column with Source(path, date='...'), or give its date_format",
    )


@dataclass(frozen=True)
class _Rows:
    """Rows of the first table and of later ones; blank lines and repeated names among the first."""

    data: list[Line]
    further: list[Line]
    blanks: int
    again: int


def _data_rows(layout: _Layout) -> _Rows:
    """Tell data from what stands between and below."""
    data: list[Line] = []
    blanks = pending = again = 0
    for position, raw in enumerate(layout.body):
        if raw.blank:
            pending += 1
            continue
        line = layout.trimmed(raw)
        fits, dated = len(line.fields) == layout.width, layout.dated(line)
        if fits and (dated or (line.numeric and not pending)):
            data.append(line)
            blanks, pending = blanks + pending, 0
        elif dated and len(line.fields) > 1:
            raise InputError(
                f"{layout.word.capitalize()} {line.number} of {layout.name} has "
                f"{len(line.fields)} fields, and there are "
                f"{layout.width} names in {layout.word} {layout.header.number}",
                remedy=f"complete the {layout.word}, or look for a stray or missing delimiter",
            )
        elif data and line.fields == layout.header.fields:
            again += 1
        elif data:
            return _Rows(data, _further(layout, layout.body[position:], fits and not pending), blanks, again)
    if not data:
        raise InputError(
            f"{layout.name} has names but no rows of dates and numbers", remedy="check how it was exported"
        )
    return _Rows(data, [], blanks, again)


def _further(layout: _Layout, rest: list[Line], abrupt: bool) -> list[Line]:
    """Rows of the tables below the first; a line that merely interrupts the first is refused."""
    rows = [line for line in rest if len(line.fields) > 1 and layout.dated(line)]
    if rows:
        filled = [line for line in rest if not line.blank]
        before = filled[filled.index(rows[0]) - 1]
        if before is rest[0] and (abrupt or before.numeric or len(before.fields) < 2):
            raise InputError(
                f"{layout.word.capitalize()} {before.number} of {layout.name} "
                f"('{before.fields[0][:40]}') interrupts the data",
                remedy=f"correct the {layout.word}, or remove it if it is not data",
            )
    return rows


def _table(layout: _Layout, data: list[Line]) -> RawTable:
    names = layout.header.fields
    cells = list(zip(*(line.fields for line in data), strict=True))
    keep: list[int] = []
    empty: list[int] = []
    counters: list[int] = []
    for position, label in enumerate(names):
        if position == layout.column:
            continue
        bare = not label
        (
            empty
            if bare and not any(cells[position])
            else counters
            if bare and _counts(cells[position])
            else keep
        ).append(position)
    labels, _ = clean_names([names[position] for position in keep], layout.name)
    if not labels:
        raise InputError(f"{layout.name} has dates but no columns of numbers", remedy="check the delimiter")
    columns = {
        label: np.array(cells[position], dtype=object) for label, position in zip(labels, keep, strict=True)
    }
    rows = np.array([line.number for line in data], dtype=np.int64)
    table = RawTable(layout.name, columns, np.array(cells[layout.column], dtype=object), rows, layout.word)
    if empty:
        table.note(
            EntryKind.NAMES,
            f"{len(empty)} columns without a name and without values were left out.",
            rows=len(empty),
        )
    if counters:
        table.note(
            EntryKind.NAMES, "A column without a name that only counts rows was left out.", rows=len(counters)
        )
    if layout.column:
        table.note(EntryKind.DATES, f"The dates were taken from column {listed([names[layout.column]])}.")
    return table


def _counts(cells: Sequence[str]) -> bool:
    if not all(cell.isdigit() and len(cell) < 10 for cell in cells):
        return False
    return [int(cell) for cell in cells] in (list(range(len(cells))), list(range(1, len(cells) + 1)))
