"""Cells to numbers: missing codes, decimal commas, thousands marks; and errors that name the cell."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from soffit.errors import InputError

__all__ = [
    "MISSING_CODES",
    "MISSING_TEXTS",
    "Column",
    "Marks",
    "Missing",
    "detect_marks",
    "is_numeric",
    "read_numbers",
]

MISSING_CODES = (-99.99, -999.0, -999.99, -9999.0)
"""Numbers that providers write where there is no value."""

MISSING_TEXTS = frozenset(
    [
        "",
        "na",
        "n/a",
        "n.a.",
        "nan",
        "null",
        "none",
        "-",
        "--",
        ".",
        "..",
        "#n/a",
        "#n/a n/a",
        "<na>",
        "nat",
        "missing",
    ]
)
"""Texts, in lower case, that stand where there is no value."""

_PLAIN = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:e[+-]?\d+)?", re.IGNORECASE | re.ASCII)
_SPACES = str.maketrans(
    {"\u00a0": "", "\u202f": "", "\u2009": "", " ": "", "'": "", "\u2019": "", "\u2212": "-"}
)
_GROUPED = {
    ",": re.compile(r"[+-]?\d{1,3}(?:,\d{3})+(?:\.\d*)?", re.ASCII),
    ".": re.compile(r"[+-]?\d{1,3}(?:\.\d{3})+(?:,\d*)?", re.ASCII),
}


@dataclass(frozen=True)
class Marks:
    """Decimal and thousands mark of a source."""

    decimal: str = "."
    thousands: str = ""


@dataclass(frozen=True)
class Missing:
    """What stands for 'no value'.

    Parameters
    ----------
    codes : tuple of float
        Numbers.
    texts : frozenset of str
        Texts in lower case.
    """

    codes: tuple[float, ...] = MISSING_CODES
    texts: frozenset[str] = MISSING_TEXTS

    @classmethod
    def of(cls, declared: Iterable[float | str] | None) -> Missing:
        """The codes an analyst declared, in place of the usual numbers and beside the usual texts."""
        if declared is None:
            return cls()
        items = list(declared)
        texts = {item.strip().casefold() for item in items if isinstance(item, str)}
        return cls(tuple(float(item) for item in items if not isinstance(item, str)), MISSING_TEXTS | texts)


@dataclass
class Column:
    """A column of numbers, with what was done to read it.

    Parameters
    ----------
    values : ndarray of float64
        NaN where there is no value.
    missing : dict of str to int
        How many cells held each missing code.
    repairs : dict of str to int
        How many cells were mended, by what was done.
    percent_signs : int
        How many cells carried a per-cent sign.
    """

    values: NDArray[np.float64]
    missing: dict[str, int] = field(default_factory=dict)
    repairs: dict[str, int] = field(default_factory=dict)
    percent_signs: int = 0


def read_numbers(
    cells: Any, name: str, place: Callable[[int], str], marks: Marks, missing: Missing
) -> Column:
    """Read one column.

    Parameters
    ----------
    cells : array-like
        Numbers or text.
    name : str
        Name of the column, for errors.
    place : callable
        Says where the analyst finds a row.
    marks : Marks
        Decimal and thousands mark.
    missing : Missing
        What stands for no value.

    Raises
    ------
    InputError
        If a cell is neither a number nor a known missing code, or is infinite.
    """
    column = _from_floats(cells) if is_numeric(cells) else _from_cells(cells, name, place, marks, missing)
    infinite = np.flatnonzero(np.isinf(column.values))
    if len(infinite):
        raise InputError(
            f"Column '{name}' is infinite in {place(int(infinite[0]))}",
            remedy="correct the value, or leave the cell empty",
        )
    for code in missing.codes:
        hits = column.values == code
        if hits.any():
            column.missing[f"{code:g}"] = column.missing.get(f"{code:g}", 0) + int(hits.sum())
            column.values[hits] = np.nan
    return column


def is_numeric(cells: Any) -> bool:
    """Whether a column holds numbers already, and no text."""
    return getattr(getattr(cells, "dtype", None), "kind", "O") in "fiu"


def _from_floats(cells: Any) -> Column:
    if isinstance(cells, np.ndarray):
        column = Column(np.array(cells, dtype=float))
    else:
        column = Column(pd.Series(cells).to_numpy(dtype=float, na_value=np.nan, copy=True))
    blank = int(np.isnan(column.values).sum())
    if blank:
        column.missing["blank"] = blank
    return column


def _from_cells(cells: Any, name: str, place: Callable[[int], str], marks: Marks, missing: Missing) -> Column:
    if getattr(getattr(cells, "dtype", None), "kind", "O") in "bcmM":
        raise InputError(
            f"Column '{name}' holds {cells.dtype}, not numbers",
            remedy=f"give it the role 'ignored': roles={{'{name}': 'ignored'}}",
        )
    items: NDArray[np.object_] = np.asarray(cells, dtype=object)
    if marks.decimal == "." and len(items) and all(type(item) is str for item in items):
        plain = _all_plain(list(items))
        if plain is not None:
            return Column(plain)
    return _read_text(items, name, place, marks, missing)


def _all_plain(texts: list[str]) -> NDArray[np.float64] | None:
    """All texts as numbers when every one is a plain number; the common case, and quick."""
    joined = "".join(texts)
    if not joined.isascii() or "_" in joined:
        return None
    try:
        values = np.array([float(text) for text in texts])
    except ValueError:
        return None
    return values if bool(np.isfinite(values).all()) else None


def _read_text(
    cells: NDArray[np.object_], name: str, place: Callable[[int], str], marks: Marks, missing: Missing
) -> Column:
    column = Column(np.full(len(cells), np.nan))
    for row, cell in enumerate(cells):
        if isinstance(cell, (bool, np.bool_)):
            raise _not_a_number(cell, name, place(row))
        if isinstance(cell, (int, float, np.integer, np.floating)):
            column.values[row] = float(cell)
            if np.isnan(column.values[row]):
                _count(column.missing, "blank")
            continue
        text = "" if cell is None or cell is pd.NA or cell is pd.NaT else str(cell).strip()
        if _PLAIN.fullmatch(text) and marks.decimal == ".":
            column.values[row] = float(text)
        elif text.casefold() in missing.texts:
            _count(column.missing, f"'{text}'" if text else "blank")
        else:
            column.values[row] = _mended(text, column, name, place(row), marks)
    if column.percent_signs and column.percent_signs != int((~np.isnan(column.values)).sum()):
        raise InputError(
            f"Column '{name}' has a per-cent sign on {column.percent_signs} of its values and none on the rest",
            remedy="write all of them one way",
        )
    return column


def _count(counts: dict[str, int], key: str) -> None:
    counts[key] = counts.get(key, 0) + 1


def _mended(text: str, column: Column, name: str, where: str, marks: Marks) -> float:
    """A number that is not written plainly."""
    bare = text.translate(_SPACES)
    negative = bare.startswith("(") and bare.endswith(")")
    if negative:
        bare = "-" + bare[1:-1]
    signed = bare.endswith("%")
    bare = bare.removesuffix("%")
    if marks.thousands and _GROUPED[marks.thousands].fullmatch(bare):
        bare = bare.replace(marks.thousands, "")
        _count(column.repairs, f"thousands mark '{marks.thousands}' taken out")
    if marks.decimal == ",":
        if "." in bare:
            raise _not_a_number(text, name, where)
        if "," in bare:
            bare = bare.replace(",", ".")
            _count(column.repairs, "decimal comma read")
    if not _PLAIN.fullmatch(bare):
        raise _not_a_number(text, name, where)
    if negative:
        _count(column.repairs, "brackets read as a minus")
    column.percent_signs += signed
    return float(bare)


def _not_a_number(cell: Any, name: str, where: str) -> InputError:
    shown = str(cell) if len(str(cell)) <= 40 else str(cell)[:40] + "..."
    return InputError(
        f"Column '{name}' has {shown!r} in {where}",
        allowed="a number, an empty cell or a known missing code",
        remedy=f"correct the cell, declare the code with missing=({shown!r},), or ignore the column with "
        f"roles={{'{name}': 'ignored'}}",
    )


def detect_marks(columns: Iterable[Sequence[Any]]) -> Marks:
    """Tell the decimal mark of a source from its text cells.

    Raises
    ------
    InputError
        If commas can be read both as decimal and as thousands marks, or are used as both.
    """
    seen = _Seen()
    without_comma: list[list[str]] = []
    for cells in columns:
        texts = [cell for cell in cells if isinstance(cell, str)]
        if "," in "".join(texts):
            seen.look(texts)
        else:
            without_comma.append(texts)
    if seen.decimal_comma or seen.unclear:
        # Only now does it matter whether a point is a decimal mark.
        for texts in without_comma:
            seen.look(texts)
    if seen.decimal_comma and (seen.thousands_comma or seen.plain_dot):
        other = seen.thousands_comma or "a decimal point"
        raise InputError(
            f"Numbers are written both with a decimal comma ('{seen.decimal_comma}') and with {other!r}",
            remedy="write all of them one way, or say which with decimal=',' or decimal='.'",
        )
    if seen.decimal_comma:
        return Marks(",", ".")
    if seen.unclear and not (seen.thousands_comma or seen.plain_dot):
        raise InputError(
            f"'{seen.unclear}' can be a thousand or a decimal number",
            remedy="say which with decimal=',' or decimal='.'",
        )
    return Marks(".", "," if seen.unclear or seen.thousands_comma else "")


@dataclass
class _Seen:
    """An example of each way in which points and commas were seen."""

    decimal_comma: str = ""
    thousands_comma: str = ""
    unclear: str = ""
    plain_dot: bool = False

    def look(self, texts: Iterable[str]) -> None:
        """Look at the cells that hold a point or a comma."""
        for cell in texts:
            if "," not in cell and "." not in cell:
                continue
            text = cell.strip().translate(_SPACES).strip("()%+-")
            if "," not in text:
                grouped = re.fullmatch(r"[1-9]\d{0,2}\.\d{3}", text)
                self.plain_dot = self.plain_dot or (text.count(".") == 1 and not grouped)
            elif "." in text:
                self.thousands_comma = self.thousands_comma or (text if _GROUPED[","].fullmatch(text) else "")
                self.decimal_comma = self.decimal_comma or (text if _GROUPED["."].fullmatch(text) else "")
            elif text.count(",") > 1:
                self.thousands_comma = self.thousands_comma or text
            elif re.fullmatch(r"[1-9]\d{0,2},\d{3}", text):
                self.unclear = self.unclear or text
            elif re.fullmatch(r"\d*,\d*", text):
                self.decimal_comma = self.decimal_comma or text
