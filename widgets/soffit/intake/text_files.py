"""Delimited text files: their encoding, their delimiter, and their lines split into fields."""

from __future__ import annotations

import csv
from pathlib import Path

from soffit.errors import InputError
from soffit.intake.grid import Line, table_of
from soffit.intake.progress import Tick
from soffit.intake.record import EntryKind
from soffit.intake.sources import Limits, RawTable, Source, check_cells

__all__ = ["read_text_file"]

_DELIMITERS = ("\t", ";", "|", ",")
_SAMPLE = 200_000


def read_text_file(path: Path, name: str, source: Source, limits: Limits, tick: Tick) -> RawTable:
    """Read a delimited text file.

    Raises
    ------
    InputError
        If the file is not text, has no table of dates and numbers, or has a row that does not fit, by its line.
    """
    text, encoding = _decoded(path, source.encoding)
    delimiter = source.delimiter if source.delimiter is not None else _delimiter(text)
    table = table_of(_lines(text, delimiter, name, limits, tick), name, source, limits, "line")
    if encoding not in ("utf-8", "ascii") and source.encoding is None:
        table.note(EntryKind.SOURCE, f"The file is not UTF-8; it was read as {encoding}.")
    if delimiter != "," and source.delimiter is None:
        spelled = {"\t": "tabs", " ": "blanks"}.get(delimiter, f"'{delimiter}'")
        table.note(EntryKind.SOURCE, f"Fields are separated by {spelled}.")
    return table


def _decoded(path: Path, encoding: str | None) -> tuple[str, str]:
    raw = path.read_bytes()
    if encoding is None:
        if raw.startswith((b"\xff\xfe", b"\xfe\xff")):
            encoding = "utf-16"
        elif b"\x00" in raw[:4096] or raw.startswith((b"PK\x03\x04", b"PAR1", b"%PDF", b"\x1f\x8b")):
            raise InputError(
                f"'{path.name}' is not a text file",
                remedy="check its ending: .xlsx and .parquet files are read by theirs",
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
    sample = [line for line in text[:_SAMPLE].splitlines() if line.strip()]
    if len(text) > _SAMPLE and len(sample) > 1:
        sample.pop()
    best, score = " ", 0
    for candidate in _DELIMITERS:
        widths = [len(row) for row in csv.reader(sample, delimiter=candidate, skipinitialspace=True)]
        common = max((width for width in set(widths) if width > 1), key=widths.count, default=0)
        if common and widths.count(common) > score:
            best, score = candidate, widths.count(common)
    return best


def _lines(text: str, delimiter: str, name: str, limits: Limits, tick: Tick) -> list[Line]:
    raw = text.splitlines()
    if len(delimiter) != 1:
        raise InputError(f"delimiter={delimiter!r} has {len(delimiter)} characters", allowed="one character")
    if text.count(delimiter) > limits.cells:
        check_cells(len(raw), text.count(delimiter) // max(len(raw), 1) + 1, name, limits)
    if delimiter == " ":
        return [Line(number, tuple(line.split())) for number, line in enumerate(raw, start=1)]
    reader = csv.reader(raw, delimiter=delimiter, skipinitialspace=True)
    lines: list[Line] = []
    try:
        for row in reader:
            lines.append(Line(reader.line_num, tuple(map(str.strip, row))))
            tick(1)
    except csv.Error as error:
        raise InputError(
            f"Line {reader.line_num} of {name} cannot be split into fields ({error})",
            remedy="look for a stray quotation mark",
        ) from error
    return lines
