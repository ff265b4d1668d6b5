"""The memo as slides: a figure or a small table each, with its finding, footnote and number."""

from __future__ import annotations

import io
from collections.abc import Sequence
from datetime import datetime, time
from typing import Any

from pptx import Presentation
from pptx.dml.color import RGBColor
from pptx.enum.text import MSO_ANCHOR, PP_ALIGN
from pptx.util import Emu, Inches, Pt

from soffit.memo.archive import without_clock
from soffit.memo.images import DPI
from soffit.memo.layout import Grid, Memo, NumberedFigure, NumberedTable, Remark, Section, column_shares
from soffit.memo.text import flat
from soffit.present.draw_mpl import png_bytes

__all__ = ["MOST_ROWS", "slides"]

# What a room can read; what is left out is said, and stands in the workbook.
MOST_ROWS = 12
_WIDE = 9
_FONT = "Verdana"
_INK: Any = RGBColor.from_string("1A1A1A")  # type: ignore[no-untyped-call]
_SOFT: Any = RGBColor.from_string("555555")  # type: ignore[no-untyped-call]
_WIDTH, _HEIGHT, _MARGIN = Inches(13.333), Inches(7.5), Inches(0.6)
_ROOM = Emu(_WIDTH - 2 * _MARGIN)
_LINES = 9  # bullets on one slide


def slides(memo: Memo) -> bytes:
    """Write a memo as slides.

    Parameters
    ----------
    memo : Memo
        As laid out.

    Returns
    -------
    bytes
        A .pptx file; the same bytes for the same memo.
    """
    target = io.BytesIO()
    _Deck(memo).show.save(target)
    return without_clock(target.getvalue())


class _Deck:
    def __init__(self, memo: Memo) -> None:
        self.memo = memo
        self.show: Any = Presentation()
        self.show.slide_width, self.show.slide_height = _WIDTH, _HEIGHT
        about, moment = self.show.core_properties, datetime.combine(memo.as_of, time())
        about.title, about.author, about.last_modified_by = memo.title, memo.author, memo.author
        about.created = about.modified = moment
        about.revision, about.language = 1, "en"
        self.left_out: list[str] = []
        self._front()
        self._bullets("Findings", [section.finding for section in memo.sections])
        for part in memo.body:
            if isinstance(part, Remark):
                self._bullets("Not delivered" if part.failed else "Note", [flat(part.words)])
            else:
                self._section(part)
        self._bullets("Too wide for a slide; in the document and the workbook", self.left_out)
        self._bullets("Cautions", memo.cautions)
        self._bullets("Methods and sources", memo.references, size=11)
        facts = [f"{what}: {value}" for what, value in memo.provenance.facts.rows]
        self._bullets("Provenance", facts, size=11)

    def _slide(self, title: str) -> Any:
        slide = self.show.slides.add_slide(self.show.slide_layouts[5])  # title only
        head = slide.shapes.title
        head.left, head.top, head.width, head.height = _MARGIN, Inches(0.35), _ROOM, Inches(0.8)
        self._put(head.text_frame, [title], 22, bold=True)
        foot = slide.shapes.add_textbox(_MARGIN, Inches(7.05), _ROOM, Inches(0.3))
        self._put(foot.text_frame, [f"{self.memo.title} · {self.memo.label_line}"], 9, colour=_SOFT)
        return slide

    def _put(
        self,
        frame: Any,
        texts: Sequence[str],
        size: float,
        *,
        bold: bool = False,
        colour: Any = _INK,
        bullet: str = "",
    ) -> None:
        frame.word_wrap, frame.vertical_anchor = True, MSO_ANCHOR.TOP
        frame.margin_left = frame.margin_right = 0
        for number, text in enumerate(texts):
            line = frame.paragraphs[0] if number == 0 else frame.add_paragraph()
            line.alignment, line.space_after = PP_ALIGN.LEFT, Pt(size / 2)
            run = line.add_run()
            run.text = bullet + text
            run.font.name, run.font.size, run.font.bold = _FONT, Pt(size), bold
            run.font.color.rgb = colour

    def _front(self) -> None:
        slide = self._slide(self.memo.title)
        box = slide.shapes.add_textbox(_MARGIN, Inches(1.6), _ROOM, Inches(3))
        byline = " · ".join(text for text in (self.memo.author, self.memo.dated) if text)
        self._put(
            box.text_frame, [text for text in (byline, self.memo.label_line, self.memo.span) if text], 14
        )

    def _bullets(self, title: str, texts: Sequence[str], size: float = 14) -> None:
        for start in range(0, len(texts), _LINES):
            slide = self._slide(title)
            box = slide.shapes.add_textbox(_MARGIN, Inches(1.35), _ROOM, Inches(5.5))
            self._put(box.text_frame, texts[start : start + _LINES], size, bullet="• ")

    def _section(self, section: Section) -> None:
        for figure in section.figures:
            self._figure(section, figure)
        for table in section.tables:
            grid = table.grid(MOST_ROWS, _WIDE)
            if len(grid.headings) <= _WIDE:
                self._table(table, grid)
            else:
                self.left_out.append(f"{table.name}. {flat(table.caption)}")

    def _figure(self, section: Section, figure: NumberedFigure) -> None:
        slide = self._slide(f"{figure.name}. {flat(figure.caption)}")
        picture = slide.shapes.add_picture(
            io.BytesIO(png_bytes(figure.spec, dpi=DPI, title=False)), _MARGIN, Inches(1.25)
        )
        scale = min(Inches(8.2) / picture.width, Inches(5.3) / picture.height)
        picture.width, picture.height = Emu(int(picture.width * scale)), Emu(int(picture.height * scale))
        about = picture._element.nvPicPr.cNvPr
        about.set("descr", figure.alt)
        about.set("name", figure.name)
        left = Emu(_MARGIN + Inches(8.5))
        box = slide.shapes.add_textbox(left, Inches(1.25), Emu(_WIDTH - left - _MARGIN), Inches(5))
        self._put(box.text_frame, [section.finding, *section.notes, *section.cautions], 12)
        self._foot(slide, figure.footnote)

    def _table(self, table: NumberedTable, grid: Grid) -> None:
        slide = self._slide(f"{table.name}. {flat(table.caption)}")
        rows = [grid.headings, *grid.rows[: MOST_ROWS * 2]]
        shape = slide.shapes.add_table(
            len(rows), len(grid.headings), _MARGIN, Inches(1.25), _ROOM, Inches(0.3) * len(rows)
        )
        shape.name = table.name
        shares = column_shares(rows, 130)
        for column, share in zip(shape.table.columns, shares, strict=True):
            column.width = Emu(int(_ROOM * share / sum(shares)))
        for row, texts in enumerate(rows):
            for column, text in enumerate(texts):
                cell = shape.table.cell(row, column)
                cell.margin_top = cell.margin_bottom = Inches(0.02)
                self._put(cell.text_frame, [text], 10, bold=row == 0)
                cell.text_frame.paragraphs[0].space_after = Pt(0)
                if grid.is_number[column]:
                    cell.text_frame.paragraphs[0].alignment = PP_ALIGN.RIGHT
                cell.fill.background()
        self._foot(slide, " ".join(part for part in (table.footnote, table.cut(MOST_ROWS)) if part))

    def _foot(self, slide: Any, text: str) -> None:
        box = slide.shapes.add_textbox(_MARGIN, Inches(6.62), _ROOM, Inches(0.4))
        self._put(box.text_frame, [text], 8, colour=_SOFT)
