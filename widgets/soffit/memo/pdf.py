"""The memo as a PDF, typeset from data: names reach the page as text and never as markup."""

from __future__ import annotations

import json
import tempfile
from importlib.resources import files
from pathlib import Path
from typing import Any

import matplotlib as mpl
import typst

from soffit.memo.layout import (
    Memo,
    NumberedFigure,
    NumberedTable,
    Remark,
    Section,
    SimpleTable,
    column_shares,
)
from soffit.memo.text import Runs
from soffit.present.draw_mpl import svg_bytes
from soffit.present.theme import MEMO_WIDTHS

__all__ = ["MOST_ROWS", "pdf"]

# A page holds about fifty rows; what is left out is said, and stands in the workbook.
MOST_ROWS = 60
_WIDE = 9  # columns beyond which a table is set across the page


def pdf(memo: Memo) -> bytes:
    """Write a memo as a PDF.

    Parameters
    ----------
    memo : Memo
        As laid out.

    Returns
    -------
    bytes
        A tagged PDF with its fonts inside, the same as those of the figures; the same bytes for the same memo.
    """
    template = files("soffit.memo").joinpath("templates", "memo.typ").read_text(encoding="utf-8")
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "memo.typ").write_text(template, encoding="utf-8")
        (folder / "memo.json").write_text(json.dumps(_data(memo)), encoding="utf-8")
        for figure in memo.figures:
            (folder / f"{figure.stem}.svg").write_bytes(svg_bytes(figure.spec, title=False))
        fonts = Path(mpl.get_data_path()) / "fonts" / "ttf"
        made: bytes = typst.compile(
            str(folder / "memo.typ"), root=name, font_paths=[str(fonts)], ignore_system_fonts=True
        )
    return made


def _data(memo: Memo) -> dict[str, Any]:
    page = memo.provenance
    return {
        "title": memo.title,
        "author": memo.author,
        "byline": " · ".join(text for text in (memo.author, memo.dated) if text),
        "as_of": [memo.as_of.year, memo.as_of.month, memo.as_of.day],
        "label_line": memo.label_line,
        "span": memo.span,
        "width": MEMO_WIDTHS["page"] * 25.4,
        "sections": [{"finding": part.finding, "where": _runs(part.where)} for part in memo.sections],
        "body": [_remark(part) if isinstance(part, Remark) else _section(part) for part in memo.body],
        "cautions": list(memo.cautions),
        "references": list(memo.references),
        "command": page.command,
        "simple": [_simple(table) for table in (page.facts, *page.tables)],
    }


def _remark(remark: Remark) -> dict[str, Any]:
    return {"kind": "remark", "words": _runs(remark.words), "failed": remark.failed}


def _section(section: Section) -> dict[str, Any]:
    return {
        "kind": "section",
        "number": section.number,
        "heading": section.heading,
        "labels": " · ".join(section.labels),
        "finding": section.finding,
        "citations": list(section.citations),
        "changes": "; ".join(section.changes),
        "notes": list(section.notes),
        "cautions": list(section.cautions),
        "figures": [_figure(figure) for figure in section.figures],
        "tables": [_table(table) for table in section.tables],
    }


def _figure(figure: NumberedFigure) -> dict[str, Any]:
    return {
        "name": figure.name,
        "anchor": figure.anchor,
        "caption": _runs(figure.caption),
        "file": f"{figure.stem}.svg",
        "alt": figure.alt,
        "footnote": figure.footnote,
    }


def _table(table: NumberedTable) -> dict[str, Any]:
    note = " ".join(part for part in (table.footnote, table.cut(MOST_ROWS)) if part)
    grid = table.grid(MOST_ROWS, _WIDE)
    return {
        "name": table.name,
        "anchor": table.anchor,
        "caption": _runs(table.caption),
        "headings": list(grid.headings),
        "numbers": list(grid.is_number),
        "rows": [list(row) for row in grid.rows],
        "wide": len(grid.headings) > _WIDE,
        "columns": column_shares([grid.headings, *grid.rows], 170),
        "footnote": note,
    }


def _simple(table: SimpleTable) -> dict[str, Any]:
    return {
        "title": table.title,
        "headings": list(table.headings),
        "rows": [list(row) for row in table.rows],
        "columns": column_shares([table.headings, *table.rows], 120),
    }


def _runs(words: Runs) -> list[Any]:
    return [part if isinstance(part, str) else {"text": part.text, "anchor": part.anchor} for part in words]
