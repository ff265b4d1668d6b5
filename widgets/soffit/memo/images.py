"""Pictures of the figures as files of their own."""

from __future__ import annotations

from soffit.memo.layout import Memo, NumberedFigure
from soffit.present.draw_mpl import MemoWidth, pdf_bytes, png_bytes, svg_bytes

__all__ = ["DPI", "pdf_files", "png_files", "svg_files"]

DPI = 300


def png_files(memo: Memo) -> dict[str, bytes]:
    """Pictures at 300 dpi, each for a column and for the whole width of a page."""
    return {
        f"figures/{_name(figure, width)}.png": png_bytes(figure.spec, width=width, dpi=DPI, footnote=True)
        for figure in memo.figures
        for width in MemoWidth
    }


def svg_files(memo: Memo) -> dict[str, bytes]:
    """Scalable pictures, each for a column and for the whole width of a page."""
    return {
        f"figures/{_name(figure, width)}.svg": svg_bytes(figure.spec, width=width, footnote=True)
        for figure in memo.figures
        for width in MemoWidth
    }


def pdf_files(memo: Memo) -> dict[str, bytes]:
    """Scalable pictures with fonts inside, each for a column and for the whole width of a page."""
    return {
        f"figures/{_name(figure, width)}.pdf": pdf_bytes(figure.spec, width=width, footnote=True)
        for figure in memo.figures
        for width in MemoWidth
    }


def _name(figure: NumberedFigure, width: MemoWidth) -> str:
    return f"{figure.stem}-{width}"
