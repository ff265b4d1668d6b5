"""The memo as a Word document: real tables, numbered captions, cross-references, text alternatives."""

from __future__ import annotations

import io
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import datetime, time
from typing import Any

from docx import Document
from docx.enum.section import WD_ORIENT
from docx.enum.table import WD_TABLE_ALIGNMENT
from docx.enum.text import WD_ALIGN_PARAGRAPH
from docx.oxml import OxmlElement
from docx.oxml.ns import qn
from docx.shared import Inches, Mm, Pt, RGBColor

from soffit.memo.archive import without_clock
from soffit.memo.images import DPI
from soffit.memo.layout import (
    Grid,
    Memo,
    NumberedFigure,
    NumberedTable,
    Remark,
    Section,
    SimpleTable,
    column_shares,
)
from soffit.memo.text import Link, Runs, plain
from soffit.present.draw_mpl import png_bytes
from soffit.present.theme import MEMO_WIDTHS

__all__ = ["MOST_ROWS", "word"]

# A page holds about fifty rows; what is left out is said, and stands in the workbook.
MOST_ROWS = 60
_FONT = "Verdana"
_INK, _SOFT = RGBColor(0x1A, 0x1A, 0x1A), RGBColor(0x55, 0x55, 0x55)
_WIDE = 9  # columns beyond which a table is set across the page
_PORTRAIT, _LANDSCAPE = (Mm(210), Mm(297)), (Mm(297), Mm(210))
_MARGIN = Mm(20)


def word(memo: Memo) -> bytes:
    """Write a memo as a Word document.

    Parameters
    ----------
    memo : Memo
        As laid out.

    Returns
    -------
    bytes
        A .docx file; the same bytes for the same memo.
    """
    target = io.BytesIO()
    _Writer(memo).document.save(target)
    return without_clock(target.getvalue())


class _Writer:
    def __init__(self, memo: Memo) -> None:
        self.memo = memo
        self.document = Document()
        self._bookmarks = 0
        self._styles()
        self._properties()
        self._page()
        self._front()
        for part in memo.body:
            if isinstance(part, Remark):
                line = self.document.add_paragraph()
                self._runs(line, part.words)
                for run in line.runs if part.failed else ():
                    run.bold = True
            else:
                self._section(part)
        self._cautions()
        self._references()
        self._provenance()

    # ---- the document as a whole
    def _styles(self) -> None:
        styles = self.document.styles
        sizes = {"Normal": 9, "Title": 18, "Heading 1": 12, "Heading 2": 10, "Caption": 8.5, "List Bullet": 9}
        for name, size in {**sizes, "List Number": 8.5}.items():
            style = styles[name]
            style.font.name, style.font.size = _FONT, Pt(size)
            style.font.color.rgb = _INK
            fonts = style.element.get_or_add_rPr().get_or_add_rFonts()
            for slot in ("w:ascii", "w:hAnsi", "w:cs", "w:eastAsia"):
                fonts.set(qn(slot), _FONT)
            for slot in ("w:asciiTheme", "w:hAnsiTheme", "w:cstheme", "w:eastAsiaTheme"):
                fonts.attrib.pop(qn(slot), None)
        for name in ("Title", "Heading 1", "Heading 2", "Caption"):
            styles[name].font.bold, styles[name].font.italic = name != "Caption", False
            styles[name].paragraph_format.keep_with_next = True
        styles["Normal"].paragraph_format.space_after = Pt(5)
        styles["Heading 1"].paragraph_format.space_before = Pt(16)
        styles["Heading 1"].paragraph_format.space_after = Pt(5)
        styles["Caption"].paragraph_format.space_before = Pt(10)
        styles["Caption"].paragraph_format.space_after = Pt(3)
        title = styles["Title"].element.get_or_add_pPr()
        for border in title.findall(qn("w:pBdr")):
            title.remove(border)

    def _properties(self) -> None:
        about, moment = self.document.core_properties, datetime.combine(self.memo.as_of, time())
        about.title, about.author, about.last_modified_by = (
            self.memo.title,
            self.memo.author,
            self.memo.author,
        )
        about.created = about.modified = moment
        about.comments, about.keywords, about.revision, about.language = "", "", 1, "en"

    def _page(self) -> None:
        section = self.document.sections[0]
        section.page_width, section.page_height = _PORTRAIT
        section.left_margin = section.right_margin = section.top_margin = section.bottom_margin = _MARGIN
        head = section.header.paragraphs[0]
        self._small(head, f"{self.memo.title} · {self.memo.label_line}")
        foot = section.footer.paragraphs[0]
        foot.alignment = WD_ALIGN_PARAGRAPH.RIGHT
        self._field(foot, "PAGE", "1")

    @contextmanager
    def _landscape(self, wanted: bool) -> Iterator[None]:
        """Turn the page for what is too wide for it."""
        if not wanted:
            yield
            return
        self._turn(WD_ORIENT.LANDSCAPE, _LANDSCAPE)
        yield
        self._turn(WD_ORIENT.PORTRAIT, _PORTRAIT)

    def _turn(self, way: Any, size: tuple[Any, Any]) -> None:
        section = self.document.add_section()
        section.orientation, (section.page_width, section.page_height) = way, size

    @property
    def _room(self) -> int:
        width = self.document.sections[-1].page_width
        assert width is not None
        return int(width) - 2 * int(_MARGIN)

    # ---- parts
    def _front(self) -> None:
        self.document.add_paragraph(self.memo.title, style="Title")
        byline = " · ".join(text for text in (self.memo.author, self.memo.dated) if text)
        if byline:
            self.document.add_paragraph(byline)
        self.document.add_paragraph().add_run(self.memo.label_line).bold = True
        self._small(self.document.add_paragraph(), self.memo.span)
        self.document.add_paragraph("Findings", style="Heading 1")
        for section in self.memo.sections:
            line = self.document.add_paragraph(section.finding, style="List Bullet")
            if section.where:
                line.add_run(" (")
                self._runs(line, section.where)
                line.add_run(")")
        self._small(self.document.add_paragraph(), "To be read with the cautions.")

    def _section(self, section: Section) -> None:
        self.document.add_paragraph(f"{section.number}. {section.heading}", style="Heading 1")
        if section.labels:
            self.document.add_paragraph().add_run(" · ".join(section.labels)).bold = True
        line = self.document.add_paragraph(section.finding)
        if section.citations:
            numbers = ", ".join(f"[{number}]" for number in section.citations)
            self._small(line, f" Sources: {numbers}.")
        if section.changes:
            self._small(
                self.document.add_paragraph(), f"Settings of this section: {'; '.join(section.changes)}."
            )
        for note in section.notes:
            self._small(self.document.add_paragraph(), f"Note: {note}")
        for caution in section.cautions:
            self._small(self.document.add_paragraph(), f"Caution: {caution}")
        for figure in section.figures:
            self._figure(figure)
        for table in section.tables:
            grid = table.grid(MOST_ROWS, _WIDE)
            with self._landscape(len(grid.headings) > _WIDE):
                self._table(table, grid)

    def _figure(self, figure: NumberedFigure) -> None:
        self._caption("Figure", figure.number, figure.anchor, figure.caption)
        picture = png_bytes(figure.spec, dpi=DPI, title=False)
        shape = self.document.add_picture(io.BytesIO(picture), width=Inches(MEMO_WIDTHS["page"]))
        about = shape._inline.docPr
        about.set("descr", figure.alt)
        about.set("name", figure.name)
        self.document.paragraphs[-1].paragraph_format.keep_with_next = True
        self._small(self.document.add_paragraph(), figure.footnote)

    def _table(self, table: NumberedTable, grid: Grid) -> None:
        self._caption("Table", table.number, table.anchor, table.caption)
        size = 6.5 if len(grid.headings) > _WIDE else 7.5
        about = f"{table.name}. {plain(table.spec.title)}"
        self._grid(grid.headings, list(grid.rows), grid.is_number, size, about)
        note = " ".join(part for part in (table.footnote, table.cut(MOST_ROWS)) if part)
        self._small(self.document.add_paragraph(), note)

    def _cautions(self) -> None:
        lines = [self.document.add_paragraph("Cautions", style="Heading 1")]
        lines += [self.document.add_paragraph(text, style="List Bullet") for text in self.memo.cautions]
        for position, line in enumerate(lines):
            line.paragraph_format.keep_together = True
            line.paragraph_format.keep_with_next = position < len(lines) - 1
            line.paragraph_format.left_indent = Mm(6)
            line.paragraph_format.first_line_indent = Mm(-4)
            _box(line)

    def _references(self) -> None:
        self.document.add_paragraph("Appendix A. Methods and sources", style="Heading 1")
        self.document.add_paragraph("Sources of the methods used here, and of no others.")
        for number, text in enumerate(self.memo.references, 1):
            line = self.document.add_paragraph()
            line.paragraph_format.left_indent, line.paragraph_format.first_line_indent = Mm(8), Mm(-8)
            self._small(line, f"[{number}] {text}")

    def _provenance(self) -> None:
        page = self.memo.provenance
        heading = self.document.add_paragraph("Appendix B. Provenance", style="Heading 1")
        heading.paragraph_format.page_break_before = True
        self._simple(page.facts)
        if page.command:
            self.document.add_paragraph(f"To make this memo again: {page.command}")
        for table in page.tables:
            self._simple(table)

    def _simple(self, table: SimpleTable) -> None:
        self.document.add_paragraph(table.title, style="Heading 2")
        self._grid(table.headings, list(table.rows), (False,) * len(table.headings), 7, table.title)
        self._small(self.document.add_paragraph(), "")

    # ---- pieces
    def _caption(self, kind: str, number: int, anchor: str, words: Runs) -> None:
        line = self.document.add_paragraph(style="Caption")
        self._bookmarks += 1
        start, end = OxmlElement("w:bookmarkStart"), OxmlElement("w:bookmarkEnd")
        for mark in (start, end):
            mark.set(qn("w:id"), str(self._bookmarks))
        start.set(qn("w:name"), _bookmark(anchor))
        line._p.append(start)
        line.add_run(f"{kind} ").bold = True
        self._field(line, f"SEQ {kind} \\* ARABIC", str(number), bold=True)
        line._p.append(end)
        line.add_run(". ").bold = True
        self._runs(line, words)

    def _runs(self, line: Any, words: Runs) -> None:
        for part in words:
            if isinstance(part, Link):
                self._field(line, f"REF {_bookmark(part.anchor)} \\h", part.text)
            else:
                line.add_run(part)

    def _field(self, line: Any, code: str, shown: str, *, bold: bool = False) -> None:
        """A field with the text it shows before Word refreshes it."""
        for kind in ("begin", "separate", "end"):
            run = line.add_run()
            run.bold = bold or None
            char = OxmlElement("w:fldChar")
            char.set(qn("w:fldCharType"), kind)
            run._r.append(char)
            if kind == "begin":
                asked = line.add_run()
                text = OxmlElement("w:instrText")
                text.set(qn("xml:space"), "preserve")
                text.text = f" {code} "
                asked._r.append(text)
            elif kind == "separate":
                line.add_run(shown).bold = bold or None

    def _small(self, line: Any, text: str) -> None:
        run = line.add_run(text)
        run.font.size, run.font.color.rgb = Pt(7.5), _SOFT

    def _grid(
        self, headings: tuple[str, ...], rows: list[Any], numbers: tuple[bool, ...], size: float, about: str
    ) -> None:
        # Letters of this font are about six tenths of its size wide.
        shares = column_shares([headings, *rows], int(self._room / Pt(0.6 * size)))
        widths = [int(self._room * share / sum(shares)) for share in shares]
        table = self.document.add_table(rows=1 + len(rows), cols=len(headings))
        table.alignment = WD_TABLE_ALIGNMENT.LEFT
        table.autofit = False
        for column, width in zip(table.columns, widths, strict=True):
            column.width = width
        _describe(table, about)
        for row, texts in enumerate([headings, *rows]):
            line = table.rows[row]
            _row_rules(line, first=row == 0, last=row == len(rows))
            cells = line._tr.tc_lst
            for column, text in enumerate(texts):
                _fill(cells[column], text, size, widths[column], right=numbers[column], bold=row == 0)


def _fill(cell: Any, text: str, size: float, width: int, *, right: bool, bold: bool) -> None:
    cell.width = width
    paragraph = cell.p_lst[0]
    look = paragraph.get_or_add_pPr()
    look.get_or_add_spacing().set(qn("w:after"), "0")
    if right:
        look.jc_val = WD_ALIGN_PARAGRAPH.RIGHT
    run = paragraph.add_r()
    about = run.get_or_add_rPr()
    about.sz_val = Pt(size)
    if bold:
        about.get_or_add_b()
    run.text = text


def _describe(table: Any, about: str) -> None:
    properties = table._tbl.tblPr
    for tag in ("w:tblCaption",):
        item = OxmlElement(tag)
        item.set(qn("w:val"), about)
        properties.append(item)
    margins = OxmlElement("w:tblCellMar")
    for side, twips in (("left", 40), ("right", 40)):
        gap = OxmlElement(f"w:{side}")
        gap.set(qn("w:w"), str(twips))
        gap.set(qn("w:type"), "dxa")
        margins.append(gap)
    properties.insert_element_before(margins, "w:tblLook", "w:tblCaption", "w:tblDescription")


def _row_rules(row: Any, *, first: bool, last: bool) -> None:
    """Rules above and below the head and below the last row; rows that do not break over pages."""
    properties = row._tr.get_or_add_trPr()
    properties.append(OxmlElement("w:cantSplit"))
    if first:
        properties.append(OxmlElement("w:tblHeader"))
    sides = [("top", 12), ("bottom", 6)] if first else [("bottom", 12 if last else 2)]
    for cell in row._tr.tc_lst:
        borders = OxmlElement("w:tcBorders")
        for side, eighths in sides:
            rule = OxmlElement(f"w:{side}")
            rule.set(qn("w:val"), "single")
            rule.set(qn("w:sz"), str(eighths))
            rule.set(qn("w:color"), "1A1A1A" if eighths > 2 else "D9D9D9")
            borders.append(rule)
        cell.get_or_add_tcPr().append(borders)


def _box(line: Any) -> None:
    """A frame; neighbours with the same frame stand in one."""
    borders = OxmlElement("w:pBdr")
    for side in ("top", "left", "bottom", "right"):
        rule = OxmlElement(f"w:{side}")
        for name, value in (("val", "single"), ("sz", "8"), ("space", "6"), ("color", "1A1A1A")):
            rule.set(qn(f"w:{name}"), value)
        borders.append(rule)
    line._p.get_or_add_pPr().insert_element_before(
        borders, "w:shd", "w:tabs", "w:suppressAutoHyphens", "w:spacing", "w:ind", "w:jc", "w:rPr", "w:sectPr"
    )


def _bookmark(anchor: str) -> str:
    return anchor.replace("-", "_")
