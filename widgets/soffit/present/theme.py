"""Colours, shapes and sizes, one set for screen and memo.

Hues are from Okabe and Ito's set (Color Universal Design, 2008), which stays apart under the common colour
vision deficiencies; each role also has a shape, so that colour is never the only sign.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from soffit.present.spec import Role

__all__ = ["FONT_FAMILY", "MEMO_WIDTHS", "Look", "Marker", "look"]

FONT_FAMILY = ("DejaVu Sans", "Liberation Sans", "Arial", "sans-serif")

# Inches: one column and the full text width of an A4 or letter page with usual margins.
MEMO_WIDTHS = {"column": 3.4, "page": 6.5}


class Marker(StrEnum):
    """Shapes of points, drawn alike by both drawings."""

    CIRCLE = "circle"
    TRIANGLE = "triangle-up"
    DIAMOND = "diamond"
    SQUARE = "square"
    CROSS = "cross"


@dataclass(frozen=True)
class Look:
    """How a role is drawn.

    Parameters
    ----------
    light, dark : str
        Hexadecimal colours for a light and a dark page.
    marker : Marker
        Shape of points.
    filled : bool
        Whether points are filled.
    width : float
        Line width in points.
    word : str
        The word that stands beside the colour in legends and tables.
    """

    light: str
    dark: str
    marker: Marker = Marker.CIRCLE
    filled: bool = True
    width: float = 1.6
    word: str = ""


_LOOKS = {
    Role.INSIDE: Look("#0072B2", "#56B4E9", Marker.CIRCLE, False, word="inside"),
    Role.STRADDLES: Look("#A26B00", "#E69F00", Marker.TRIANGLE, True, word="straddles"),
    Role.OUTSIDE: Look("#B33F00", "#FF7F3F", Marker.DIAMOND, True, word="outside"),
    Role.CEILING: Look("#3D3D3D", "#E0E0E0", Marker.SQUARE, width=2.0, word="ceiling"),
    Role.FACTORS: Look("#00795A", "#2FC49B", Marker.SQUARE, word="factors"),
    Role.MARKET: Look("#6B4C9A", "#B79CE0", Marker.SQUARE, word="market"),
    Role.ESTIMATE: Look("#0072B2", "#56B4E9", word="estimate"),
    Role.SECOND: Look("#B33F00", "#FF7F3F", Marker.DIAMOND),
    Role.THIRD: Look("#00795A", "#2FC49B", Marker.SQUARE),
    Role.PROMISED: Look("#0072B2", "#56B4E9", word="promised"),
    Role.DELIVERED: Look("#B33F00", "#FF7F3F", Marker.DIAMOND, word="delivered"),
    Role.REFERENCE: Look("#767676", "#A0A0A0", width=1.0),
    Role.MUTED: Look("#9A9A9A", "#7C7C7C", width=1.0),
}


def look(role: Role) -> Look:
    """How a role is drawn."""
    return _LOOKS[role]
