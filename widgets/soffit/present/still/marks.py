"""Painters: one for each kind of mark."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np

from soffit.present.spec import Band, Bars, Line, Mark, Orientation, Points, Role, Rule, Segments
from soffit.present.still.scales import numbers, position, spread_over
from soffit.present.theme import Marker, look

if TYPE_CHECKING:
    from soffit.present.still.sheet import Sheet

__all__ = ["PAINTERS", "STATUSES", "marker_style"]

# Roles that judge: they carry a shape wherever they are drawn, and a word in the legend.
STATUSES = frozenset({Role.INSIDE, Role.STRADDLES, Role.OUTSIDE})

_MARKERS = {
    Marker.CIRCLE: "o",
    Marker.TRIANGLE: "^",
    Marker.DIAMOND: "D",
    Marker.SQUARE: "s",
    Marker.CROSS: "X",
}
_RASTER_ABOVE = 3000  # more points than this are a picture inside SVG and PDF, or the files grow to megabytes


def marker_style(role: Role, size: float) -> dict[str, Any]:
    """Keywords that give a point of this role its shape and colours."""
    drawn = look(role)
    return {
        "marker": _MARKERS[drawn.marker],
        "markersize": size,
        "markerfacecolor": drawn.light if drawn.filled else "white",
        "markeredgecolor": drawn.light,
        "markeredgewidth": 1.0,
    }


def _paint_points(sheet: Sheet, mark: Points) -> None:
    roles = spread_over(mark.roles, len(mark.x))
    x, y = numbers(mark.x), numbers(mark.y)
    many = len(x) > 400
    for role in sorted(set(roles), key=list(Role).index):
        chosen = np.array([one is role for one in roles])
        sheet.axes.plot(
            x[chosen],
            y[chosen],
            linestyle="none",
            zorder=4,
            rasterized=len(x) > _RASTER_ABOVE,
            **marker_style(role, sheet.size * (0.4 if many else 0.62)),
        )


def _paint_segments(sheet: Sheet, mark: Segments) -> None:
    at = numbers(mark.at)
    colours = [look(role).light for role in spread_over(mark.roles, len(at))]
    paint = sheet.axes.vlines if mark.orientation is Orientation.VERTICAL else sheet.axes.hlines
    paint(at, mark.low, mark.high, colors=colours, linewidth=1.1, zorder=3)


def _paint_line(sheet: Sheet, mark: Line) -> None:
    drawn = look(mark.role)
    x = numbers(mark.x)
    others = {one.role for one in sheet.spec.marks if isinstance(one, Line)} - {mark.role}
    marked: dict[str, Any] = {}
    if others and len(x) >= 8 and drawn.marker is not Marker.CIRCLE:
        # Shape tells curves apart where colour does not.
        marked = {**marker_style(mark.role, sheet.size * 0.5), "markevery": max(1, len(x) // 8)}
    sheet.axes.plot(
        x,
        mark.y,
        color=drawn.light,
        linewidth=drawn.width,
        linestyle=(0, (4, 2.5)) if mark.dashed else "-",
        zorder=3.5,
        **marked,
    )


def _paint_band(sheet: Sheet, mark: Band) -> None:
    sheet.axes.fill_between(
        numbers(mark.x),
        mark.low,
        mark.high,
        color=look(mark.role).light,
        alpha=0.12,
        linewidth=0,
        zorder=1.5,
    )


def _paint_rule(sheet: Sheet, mark: Rule) -> None:
    drawn = look(mark.role)
    style: dict[str, Any] = {
        "color": drawn.light,
        "linewidth": drawn.width,
        "linestyle": (0, (4, 2.5)) if mark.dashed else "-",
        "zorder": 2.5,
    }
    if mark.orientation is Orientation.HORIZONTAL:
        sheet.axes.axhline(mark.at, **style)
    else:
        sheet.axes.axvline(position(mark.at, sheet.spec.x), **style)


def _paint_bars(sheet: Sheet, mark: Bars) -> None:
    at = numbers(mark.at)
    colours = [look(role).light for role in spread_over(mark.roles, len(at))]
    gaps = np.diff(np.unique(at))
    # Several sets of bars stand side by side.
    sets = [one for one in sheet.spec.marks if isinstance(one, Bars)]
    thick = (0.72 * float(gaps.min()) if len(gaps) else 0.5) / len(sets)
    at = at + thick * (sets.index(mark) - (len(sets) - 1) / 2)
    upright = mark.orientation is Orientation.VERTICAL
    if upright:
        sheet.axes.bar(at, mark.length, width=thick, color=colours, zorder=3)
        sheet.axes.axhline(0, color="#8A8A8A", linewidth=0.7, zorder=3.1)
    else:
        sheet.axes.barh(at, mark.length, height=thick, color=colours, zorder=3)
        sheet.axes.axvline(0, color="#8A8A8A", linewidth=0.7, zorder=3.1)
    if STATUSES & set(mark.roles):
        # The role's shape at the tip, so that colour is not the only sign.
        x, y = (at, numbers(mark.length)) if upright else (numbers(mark.length), at)
        tips = Points(mark.key, x, y, mark.names, mark.roles)
        _paint_points(sheet, tips)


PAINTERS: dict[type[Mark], Callable[[Sheet, Any], None]] = {
    Points: _paint_points,
    Segments: _paint_segments,
    Line: _paint_line,
    Band: _paint_band,
    Rule: _paint_rule,
    Bars: _paint_bars,
}
