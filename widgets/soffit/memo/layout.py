"""The memo laid out: sections, numbered figures and tables, appendices. Every writer takes this and adds nothing."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from datetime import date
from enum import StrEnum
from typing import Any

import numpy as np
import pandas as pd

from soffit.estimate.statistic import NotApplicable
from soffit.memo.text import Runs, plain
from soffit.present.spec import Column, FigureSpec, NumberForm, TableSpec
from soffit.present.wording import show

__all__ = [
    "Cell",
    "Grid",
    "Label",
    "Memo",
    "NumberedFigure",
    "NumberedTable",
    "ProvenancePage",
    "Remark",
    "Section",
    "SimpleTable",
    "column_shares",
]


_FEW = 5  # rows up to which a wide table is turned on its side


class Label(StrEnum):
    """What kind of figures a memo or a section shows, and for whom."""

    GROSS = "gross of fees and costs"
    NET = "net of fees and costs"
    HYPOTHETICAL = "hypothetical"
    INTERNAL = "for internal use"


@dataclass(frozen=True)
class Cell:
    """One cell: the text every format shows, the value behind it, and how it is written."""

    text: str
    value: Any
    form: NumberForm

    @property
    def number(self) -> float | None:
        """Full-precision number, or None where the cell holds text or nothing."""
        if isinstance(self.value, bool) or not isinstance(self.value, int | float):
            return None
        return float(self.value) if np.isfinite(self.value) else None


def _cell(value: Any, form: NumberForm) -> Cell:
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, NotApplicable) or (not isinstance(value, str) and pd.isna(value)):
        value = None
    return Cell(plain(show(value, form)), value, form)


@dataclass(frozen=True)
class Grid:
    """Headings and texts of a table on a page, and which columns are set to the right."""

    headings: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    is_number: tuple[bool, ...]


@dataclass(frozen=True, eq=False)
class NumberedFigure:
    """A figure with its number and caption.

    Parameters
    ----------
    number : int
        From 1, in reading order.
    spec : FigureSpec
        What is drawn.
    caption : Runs
        The words beside the number.
    """

    number: int
    spec: FigureSpec
    caption: Runs

    @property
    def name(self) -> str:
        """``Figure 3``."""
        return f"Figure {self.number}"

    @property
    def anchor(self) -> str:
        """``figure-3``."""
        return f"figure-{self.number}"

    @property
    def stem(self) -> str:
        """Start of its file names: ``figure-03-ceiling-p``."""
        return f"figure-{self.number:02d}-{_file_part(self.spec.key)}"

    @property
    def alt(self) -> str:
        """Text alternative."""
        return plain(self.spec.alt)

    @property
    def footnote(self) -> str:
        """Sample, units, error type."""
        return plain(self.spec.footnote)


@dataclass(frozen=True, eq=False)
class NumberedTable:
    """A table with its number and caption; the same members as a figure's."""

    number: int
    spec: TableSpec
    caption: Runs

    @property
    def name(self) -> str:
        """``Table 2``."""
        return f"Table {self.number}"

    @property
    def anchor(self) -> str:
        """``table-2``."""
        return f"table-{self.number}"

    @property
    def stem(self) -> str:
        """Start of its file names: ``table-02-ceiling-verdicts``."""
        return f"table-{self.number:02d}-{_file_part(self.spec.key)}"

    @property
    def footnote(self) -> str:
        """Sample, units, error type, what a dash means."""
        return plain(self.spec.footnote)

    @property
    def headings(self) -> tuple[str, ...]:
        """Heading of the row names, then of the columns."""
        return plain(self.spec.index_heading), *(plain(column.heading) for column in self.spec.columns)

    @property
    def is_number(self) -> tuple[bool, ...]:
        """Which columns, the row names first, are set to the right."""
        return False, *(column.form is not NumberForm.TEXT for column in self.spec.columns)

    def rows(self, most: int | None = None) -> Iterator[tuple[str, tuple[Cell, ...]]]:
        """Row names and cells, the first `most` of them."""
        columns: list[tuple[Column, list[Any]]] = [
            (column, list(self.spec.frame[column.key])) for column in self.spec.columns
        ]
        for row, name in enumerate(self.spec.frame.index[:most]):
            cells = tuple(_cell(values[row], self.spec.form_at(row, column)) for column, values in columns)
            yield plain(name), cells

    def grid(self, most: int, columns: int) -> Grid:
        """The table as a page sets it: turned on its side where it has few rows and more columns than fit.

        Parameters
        ----------
        most : int
            Rows at most.
        columns : int
            Columns beyond which a page of usual width is too narrow.
        """
        rows = [(name, *(cell.text for cell in cells)) for name, cells in self.rows(most)]
        if len(self.headings) <= columns or len(rows) > _FEW:
            return Grid(self.headings, tuple(rows), self.is_number)
        return Grid(
            (self.headings[0], *(row[0] for row in rows)),
            tuple(zip(self.headings[1:], *(row[1:] for row in rows), strict=True)),
            (False, *(True for _ in rows)),
        )

    def cut(self, most: int) -> str:
        """Say how many rows a page leaves out; empty if none."""
        count = len(self.spec.frame)
        return "" if count <= most else f"The first {most:,} of {count:,} rows; the workbook has all of them."


@dataclass(frozen=True, eq=False)
class Section:
    """One kept exhibit on the page."""

    number: int
    heading: str
    sample: str
    finding: str
    where: Runs
    figures: tuple[NumberedFigure, ...] = ()
    tables: tuple[NumberedTable, ...] = ()
    notes: tuple[str, ...] = ()
    labels: tuple[Label, ...] = ()
    cautions: tuple[str, ...] = ()
    citations: tuple[int, ...] = ()
    changes: tuple[str, ...] = ()

    @property
    def anchor(self) -> str:
        """``section-1``."""
        return f"section-{self.number}"


@dataclass(frozen=True)
class Remark:
    """A paragraph of the analyst's own, or the word that a section failed."""

    words: Runs
    failed: bool = False


@dataclass(frozen=True)
class SimpleTable:
    """A table of text without a number: settings, versions, the intake record."""

    title: str
    headings: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]


@dataclass(frozen=True)
class ProvenancePage:
    """What a reader needs to make the same memo again."""

    facts: SimpleTable
    tables: tuple[SimpleTable, ...]
    command: str


@dataclass(frozen=True, eq=False)
class Memo:
    """Everything on the page, in order.

    Parameters
    ----------
    title, author, dated : str
        As the analyst typed them; author and date may be empty.
    span : str
        Sample of the study.
    as_of : date
        Last day of the data; files that must carry a date carry this one.
    labels : tuple of Label
        Labels of the whole memo.
    fees : str
        What is known about fees.
    body : tuple of Section or Remark
        In the analyst's order.
    references : tuple of str
        Full references of the methods used, numbered from 1.
    cautions : tuple of str
        Those that no memo may leave out.
    provenance : ProvenancePage
        The last page.
    """

    title: str
    author: str
    dated: str
    span: str
    as_of: date
    labels: tuple[Label, ...]
    fees: str
    body: tuple[Section | Remark, ...]
    references: tuple[str, ...]
    cautions: tuple[str, ...]
    provenance: ProvenancePage = field(repr=False)

    @property
    def sections(self) -> tuple[Section, ...]:
        """The sections alone."""
        return tuple(part for part in self.body if isinstance(part, Section))

    @property
    def figures(self) -> tuple[NumberedFigure, ...]:
        """Every figure, by number."""
        return tuple(figure for section in self.sections for figure in section.figures)

    @property
    def tables(self) -> tuple[NumberedTable, ...]:
        """Every numbered table."""
        return tuple(table for section in self.sections for table in section.tables)

    @property
    def label_line(self) -> str:
        """Labels and what is known about fees, as one line under the title."""
        parts = [str(label) for label in self.labels] + ([self.fees] if self.fees else [])
        line = " · ".join(parts)
        return line[:1].upper() + line[1:]


def column_shares(rows: Sequence[Sequence[str]], letters: int) -> list[float]:
    """Share of a line that each column of a table gets.

    Every column first gets room for its longest word, so that words keep whole; what is left goes to the columns
    whose texts are longer.

    Parameters
    ----------
    rows : sequence of sequence of str
        Headings and rows.
    letters : int
        About how many letters a line holds.
    """
    columns = list(zip(*rows, strict=True))
    words = [
        max(4, *(len(word) for text in column for word in text.split() or [""])) + 2.0 for column in columns
    ]
    words = [min(size, letters / 2) for size in words]
    extra = [
        max(0.0, max(len(text) for text in column) + 2.0 - size)
        for column, size in zip(columns, words, strict=True)
    ]
    left = max(0.0, letters - sum(words))
    part = min(1.0, left / sum(extra)) if sum(extra) else 0.0
    return [size + part * more for size, more in zip(words, extra, strict=True)]


def _file_part(key: str) -> str:
    kept = "".join(char if char.isascii() and (char.isalnum() or char in "-_") else "-" for char in key)
    return kept.strip("-")[:60] or "untitled"
