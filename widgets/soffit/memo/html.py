"""The memo as one HTML file that opens without a network and prints well."""

from __future__ import annotations

import base64
from functools import cache
from importlib.resources import files

from jinja2 import Environment, StrictUndefined, select_autoescape
from markupsafe import Markup

from soffit.memo.layout import Memo
from soffit.present.draw_mpl import svg_bytes

__all__ = ["MOST_ROWS", "html"]

# A page of a browser stays quick up to here; what is left out is said, and stands in the workbook.
MOST_ROWS = 500


@cache
def _environment() -> Environment:
    return Environment(
        autoescape=select_autoescape(default=True, default_for_string=True),
        undefined=StrictUndefined,
        keep_trailing_newline=True,
    )


def _template(name: str) -> str:
    return files("soffit.memo").joinpath("templates", name).read_text(encoding="utf-8")


def html(memo: Memo) -> str:
    """Write a memo as HTML.

    Parameters
    ----------
    memo : Memo
        As laid out.

    Returns
    -------
    str
        One document; pictures are inside it, nothing is loaded from elsewhere.
    """
    pictures = {
        figure.number: "data:image/svg+xml;base64,"
        + base64.b64encode(svg_bytes(figure.spec, title=False)).decode("ascii")
        for figure in memo.figures
    }
    style = Markup(_template("memo.css").strip())  # our own file
    template = _environment().from_string(_template("memo.html.j2"))
    return template.render(memo=memo, pictures=pictures, style=style, most=MOST_ROWS)
