"""FigureSpec -> matplotlib: the still pictures of memos and of notebooks without a kernel.

Nothing global is touched for longer than a call: figures are built from the object interface, under a style
of their own, so that neither an analyst's matplotlibrc nor their open figures play a part. Always light.
"""

from __future__ import annotations

import io
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from enum import StrEnum
from typing import Any

import matplotlib.style as mpl_style
from matplotlib.figure import Figure

from soffit.errors import SettingError, SoffitWarning
from soffit.present.spec import FigureSpec
from soffit.present.still.labels import Labels
from soffit.present.still.scales import drawable
from soffit.present.still.sheet import Sheet
from soffit.present.theme import FONT_FAMILY, MEMO_WIDTHS
from soffit.present.wording import plural

__all__ = ["MemoWidth", "draw", "pdf_bytes", "png_bytes", "svg_bytes"]

_STYLE: dict[str, Any] = {
    "font.family": [FONT_FAMILY[0]],
    "text.usetex": False,
    "svg.hashsalt": "soffit",
    "svg.fonttype": "none",
    "pdf.fonttype": 42,
    "axes.unicode_minus": True,
    "path.simplify": True,
}


class MemoWidth(StrEnum):
    """Width of a figure on the page."""

    COLUMN = "column"
    PAGE = "page"


def draw(
    spec: FigureSpec,
    *,
    width: MemoWidth | str = MemoWidth.PAGE,
    title: bool = True,
    footnote: bool = False,
) -> Figure:
    """Draw a figure.

    Parameters
    ----------
    spec : FigureSpec
        The figure as data.
    width : MemoWidth or str
        A page column or the whole text width.
    title, footnote : bool
        Whether the title stands above and the footnote below; a captioned figure needs neither.

    Returns
    -------
    matplotlib.figure.Figure
        Not registered with pyplot.

    Raises
    ------
    SettingError
        For an unknown width.
    """
    with _own_style():
        return _drawn(spec, width, title, footnote)


def png_bytes(
    spec: FigureSpec,
    *,
    width: MemoWidth | str = MemoWidth.PAGE,
    dpi: int = 110,
    title: bool = True,
    footnote: bool = False,
) -> bytes:
    """PNG of a figure; the same bytes for the same figure."""
    return _saved(spec, "png", {"Software": None, "Title": drawable(spec.title)}, width, title, footnote, dpi)


def svg_bytes(
    spec: FigureSpec,
    *,
    width: MemoWidth | str = MemoWidth.PAGE,
    title: bool = True,
    footnote: bool = False,
) -> bytes:
    """SVG of a figure, text as text, the text alternative inside; the same bytes for the same figure."""
    about = {
        "Date": None,
        "Creator": "soffit",
        "Title": drawable(spec.title),
        "Description": drawable(spec.alt),
    }
    return _saved(spec, "svg", about, width, title, footnote)


def pdf_bytes(
    spec: FigureSpec,
    *,
    width: MemoWidth | str = MemoWidth.PAGE,
    title: bool = True,
    footnote: bool = False,
) -> bytes:
    """PDF of a figure with its fonts embedded; the same bytes for the same figure."""
    about = {"CreationDate": None, "Creator": "soffit", "Producer": "soffit", "Title": drawable(spec.title)}
    return _saved(spec, "pdf", about, width, title, footnote)


def _saved(
    spec: FigureSpec,
    kind: str,
    about: dict[str, Any],
    width: MemoWidth | str,
    title: bool,
    footnote: bool,
    dpi: int = 300,
) -> bytes:
    target = io.BytesIO()
    with _own_style():
        figure = _drawn(spec, width, title, footnote)
        figure.savefig(target, format=kind, dpi=dpi, metadata=about)
    return target.getvalue()


def _drawn(spec: FigureSpec, width: MemoWidth | str, title: bool, footnote: bool) -> Figure:
    chosen = _width(width)
    size = 8.0 if chosen is MemoWidth.PAGE else 7.0
    sheet = Sheet(spec, inches=MEMO_WIDTHS[chosen], size=size, title=title, footnote=footnote)
    Labels(sheet).write()
    return sheet.figure


def _width(width: MemoWidth | str) -> MemoWidth:
    try:
        return MemoWidth(width)
    except ValueError as error:
        allowed = ", ".join(f"'{choice}'" for choice in MemoWidth)
        raise SettingError(f"The figure width is {width!r}", allowed=allowed) from error


@contextmanager
def _own_style() -> Iterator[None]:
    """Matplotlib's defaults and our few changes, for the time of one drawing."""
    with mpl_style.context(["default", _STYLE]), warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        yield
    missing = [item for item in caught if "missing from" in str(item.message)]
    for item in caught:
        if item not in missing:
            warnings.warn_explicit(item.message, item.category, item.filename, item.lineno)
    if missing:
        warnings.warn(
            f"{plural(len({str(item.message) for item in missing}), 'character')} in the names of a figure "
            "cannot be drawn in its font and stand as boxes; tables carry the names in full.",
            SoffitWarning,
            stacklevel=4,
        )
