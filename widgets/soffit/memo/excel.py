"""The tables as a workbook: full precision under number formats, one sheet a table, notes and provenance."""

from __future__ import annotations

import io
from datetime import datetime, time
from typing import Any

import pandas as pd
import xlsxwriter

from soffit.memo.layout import Cell, Memo, NumberedTable, SimpleTable
from soffit.memo.text import flat
from soffit.present.spec import NumberForm

__all__ = ["excel"]

# The same digits as on the page; the cell keeps them all.
_FORMATS = {
    NumberForm.PERCENT: "0.00%",
    NumberForm.SHARE: "0%",
    NumberForm.RATIO: "0.00",
    NumberForm.STATISTIC: "0.000",
    NumberForm.PVALUE: '[<0.0001]"<0.0001";[<0.01]0.0000;0.000',
    NumberForm.COUNT: "#,##0",
    NumberForm.MONEY: "#,##0",
    NumberForm.BASIS_POINTS: '0.0" bp"',
    NumberForm.DATE: "yyyy-mm",
}
_FONT = {"font_name": "Verdana", "font_size": 9}
_OPTIONS = {
    "in_memory": True,
    # Names come from other people's files: text stays text.
    "strings_to_formulas": False,
    "strings_to_urls": False,
    "strings_to_numbers": False,
    "nan_inf_to_errors": False,
}


def excel(memo: Memo) -> bytes:
    """Write a memo's tables as a workbook.

    Parameters
    ----------
    memo : Memo
        As laid out.

    Returns
    -------
    bytes
        An .xlsx file; the same bytes for the same memo.
    """
    target = io.BytesIO()
    with xlsxwriter.Workbook(target, _OPTIONS) as book:
        book.set_properties(
            {
                "title": memo.title,
                "author": memo.author,
                "created": datetime.combine(memo.as_of, time()),
            }
        )
        _Book(book).write(memo)
    return target.getvalue()


class _Book:
    def __init__(self, book: Any) -> None:
        self._book = book
        self._made: dict[tuple[tuple[str, Any], ...], Any] = {}

    def look(self, **properties: Any) -> Any:
        """One cell format for each distinct set of properties."""
        wanted = {**_FONT, **properties}
        key = tuple(sorted(wanted.items()))
        if key not in self._made:
            self._made[key] = self._book.add_format(wanted)
        return self._made[key]

    def write(self, memo: Memo) -> None:
        self._front(memo)
        for table in memo.tables:
            self._table(table)
        for simple in (memo.provenance.facts, *memo.provenance.tables):
            self._simple(simple)

    def _sheet(self, name: str) -> Any:
        sheet = self._book.add_worksheet(name)
        sheet.hide_gridlines(2)
        sheet.set_paper(9)
        sheet.set_landscape()
        sheet.fit_to_pages(1, 0)
        return sheet

    def _front(self, memo: Memo) -> None:
        sheet = self._sheet("Memo")
        sheet.set_column(0, 0, 18, self.look())
        sheet.set_column(1, 1, 110, self.look(text_wrap=True))
        row = 0

        def line(left: str, right: str, **properties: Any) -> None:
            nonlocal row
            sheet.write_string(row, 0, left, self.look(valign="top", **properties))
            sheet.write_string(row, 1, right, self.look(text_wrap=True, valign="top", **properties))
            row += 1

        sheet.write_string(row, 0, memo.title, self.look(bold=True, font_size=14))
        row += 1
        for text in (memo.author, memo.dated, memo.label_line, memo.span):
            if text:
                sheet.write_string(row, 0, text, self.look(bold=text == memo.label_line))
                row += 1
        row += 1
        for section in memo.sections:
            line(f"Finding {section.number}", section.finding)
        row += 1
        for table in memo.tables:
            anchor = f"internal:'{table.name}'!A1"
            sheet.write_url(row, 0, anchor, self.look(font_color="#00548A"), string=table.name)
            sheet.write_string(row, 1, flat(table.caption), self.look(text_wrap=True))
            row += 1
        row += 1
        for number, text in enumerate(memo.cautions):
            line("" if number else "Cautions", text)
        row += 1
        for number, text in enumerate(memo.references):
            line("" if number else "Sources", f"[{number + 1}] {text}")

    def _table(self, table: NumberedTable) -> None:
        sheet = self._sheet(table.name)
        sheet.write_string(0, 0, f"{table.name}. {flat(table.caption)}", self.look(bold=True))
        widths = [len(heading) for heading in table.headings]
        for column, (heading, number) in enumerate(zip(table.headings, table.is_number, strict=True)):
            head = self.look(bold=True, top=2, bottom=1, text_wrap=True, align="right" if number else "left")
            sheet.write_string(2, column, heading, head)
            widths[column] = min(widths[column], 16)
        row = 2
        for row, (name, cells) in enumerate(table.rows(), start=3):
            sheet.write_string(row, 0, name, self.look())
            widths[0] = max(widths[0], len(name))
            for column, cell in enumerate(cells, start=1):
                self._cell(sheet, row, column, cell)
                widths[column] = max(widths[column], min(len(cell.text), 60))
        for column, width in enumerate(widths):
            sheet.set_column(column, column, min(width, 60) * 1.15 + 2)
        sheet.freeze_panes(3, 1)
        sheet.repeat_rows(2)
        sheet.write_string(row + 2, 0, table.footnote, self.look(font_color="#555555"))

    def _cell(self, sheet: Any, row: int, column: int, cell: Cell) -> None:
        if cell.form is NumberForm.DATE and cell.value is not None and not isinstance(cell.value, str):
            stamp = pd.Timestamp(cell.value).to_pydatetime()
            sheet.write_datetime(row, column, stamp, self.look(num_format=_FORMATS[cell.form], align="right"))
        elif cell.number is not None and cell.form in _FORMATS:
            # Excel has no format that multiplies by ten thousand.
            value = cell.number * 10_000 if cell.form is NumberForm.BASIS_POINTS else cell.number
            sheet.write_number(row, column, value, self.look(num_format=_FORMATS[cell.form]))
        else:
            align = "left" if cell.form is NumberForm.TEXT else "right"
            sheet.write_string(row, column, cell.text, self.look(align=align))

    def _simple(self, table: SimpleTable) -> None:
        sheet = self._sheet(table.title[:31])
        for column, heading in enumerate(table.headings):
            sheet.write_string(0, column, heading, self.look(bold=True, top=2, bottom=1))
            longest = max((len(row[column]) for row in table.rows), default=0)
            sheet.set_column(column, column, min(max(longest, len(heading)), 90) * 1.15 + 2)
        for row, texts in enumerate(table.rows, start=1):
            for column, text in enumerate(texts):
                sheet.write_string(row, column, text, self.look(text_wrap=True, valign="top"))
        sheet.freeze_panes(1, 0)
