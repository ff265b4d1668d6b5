"""Figure specifications as parts: what each mark becomes in bqplot, and where its labels stand.

Colours are CSS variables, with the light page's colour as fallback, so that a drawing follows the page's theme.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import singledispatch
from typing import Any

import bqplot
import numpy as np
import numpy.typing as npt

from soffit.present.live.axes import positions
from soffit.present.live.frame import FONT, HEIGHT, WIDTH, Frame, label_size, last_seen, shown_at
from soffit.present.spec import (
    AxisScale,
    Band,
    Bars,
    Line,
    Mark,
    Orientation,
    Points,
    Role,
    Rule,
    Segments,
)
from soffit.present.still.places import Box, around
from soffit.present.theme import look
from soffit.present.wording import show

__all__ = ["INK", "Part", "colour", "parts_of", "point_area"]

Floats = npt.NDArray[np.float64]

INK = "var(--soffit-ink, #1F1F1F)"
_PAPER = "var(--soffit-paper, #FFFFFF)"
_SOFT = "var(--soffit-soft, #5C5C5C)"
_GRID = "var(--soffit-grid, #E6E6E6)"
_MOST_HOVER_POINTS = 400


def colour(role: Role) -> str:
    """CSS colour of a role: a variable that follows the page's theme."""
    return f"var(--soffit-{role.value}, {look(role).light})"


def point_area(count: int) -> int:
    """Area of one point, in square pixels, when there are so many."""
    return 64 if count <= 80 else 36 if count <= 800 else 16


@dataclass(frozen=True, eq=False)
class Part:
    """One bqplot mark, described: its class and its traits; `names` are what a click on it selects."""

    kind: type[bqplot.Mark]
    traits: dict[str, Any]
    tooltip: bool = False
    names: tuple[str, ...] = ()


def _roles(roles: tuple[Role, ...], count: int) -> tuple[Role, ...]:
    return roles * count if len(roles) == 1 else roles


def _groups(roles: tuple[Role, ...]) -> list[tuple[Role, npt.NDArray[np.intp]]]:
    """Positions of each role, in the order in which roles are declared."""
    return [
        (role, np.flatnonzero([one is role for one in roles]))
        for role in sorted(set(roles), key=list(Role).index)
    ]


def _text(
    frame: Frame, anchor: tuple[float, float], text: str, role: Role | None, box: Box | None = None
) -> Part:
    """One label at an anchor, in the page's ink where there is no role.

    The offset from the anchor is in pixels, so that it holds at every width of the figure; it is read off the
    box that the label was given, in the nominal figure.
    """
    across, up = (float(value) for value in frame.pixel(*anchor))
    left, middle, align = 5.0, 0.0, "start"
    if box is not None:
        middle = up - (box.y0 + box.y1) / 2
        left = box.x0 - across
        if box.x1 <= across:
            left, align = box.x1 - across, "end"
        elif box.x0 < across:
            left, align = (box.x0 + box.x1) / 2 - across, "middle"
    x, y = anchor
    traits = {
        "x": shown_at([x], frame.spec.x),
        "y": np.array([y]),
        "text": np.array([text], dtype=str),
        "x_offset": round(left),
        "y_offset": round(middle),
        "align": align,
        "colors": [_lettering(role)],
        "default_size": FONT,
        "font_weight": "normal",
        "apply_clip": False,
        "interactions": {},
    }
    return Part(bqplot.Label, traits)


def _lettering(role: Role | None) -> str:
    """Colour of words of a role; what is drawn faint is still written to be read."""
    if role is None:
        return INK
    return _SOFT if role in (Role.MUTED, Role.REFERENCE) else colour(role)


def _line_traits(role: Role, *, dashed: bool = False) -> dict[str, Any]:
    return {
        "colors": [colour(role)],
        "stroke_width": look(role).width,
        "line_style": "dashed" if dashed else "solid",
        "interactions": {},
    }


@singledispatch
def parts_of(mark: Mark, frame: Frame) -> list[Part]:
    """Describe the bqplot marks that draw a mark, first at the back."""
    raise TypeError(f"A {type(mark).__name__} is not a mark that can be drawn")


@parts_of.register
def _(mark: Points, frame: Frame) -> list[Part]:
    x, y = positions(mark.x, frame.spec.x), positions(mark.y, frame.spec.y)
    roles = _roles(mark.roles, len(x))
    shown = mark.hover or mark.names
    # A mark whose roles change in the browser must stay one mark.
    one = [(Role.INSIDE, np.arange(len(x)))]
    parts = []
    for role, chosen in one if mark.key in frame.moving else _groups(roles):
        drawn = look(role)
        traits = {
            "x": shown_at(x[chosen], frame.spec.x),
            "y": y[chosen],
            "names": np.array([shown[i] for i in chosen], dtype=str),
            "names_unique": False,
            "display_names": False,
            "marker": drawn.marker.value,
            "default_size": point_area(len(x)),
            "colors": [colour(role) if drawn.filled else _PAPER],
            "stroke": colour(role),
            "stroke_width": 1.5,
            "interactions": {"hover": "tooltip"},
        }
        names = tuple(mark.names[i] for i in chosen) if mark.selectable else ()
        parts.append(Part(bqplot.Scatter, traits, tooltip=True, names=names))
    if mark.labelled:
        parts += _point_labels(mark, x, y, (None,) * len(x) if mark.key in frame.moving else roles, frame)
    return parts


def _point_labels(
    mark: Points, x: Floats, y: Floats, roles: tuple[Role | None, ...], frame: Frame
) -> list[Part]:
    across, up = frame.pixel(x, y)
    there = np.isfinite(across) & np.isfinite(up)
    half = np.sqrt(point_area(len(x))) / 2
    dots = np.column_stack([across - half, up - half, across + half, up + half])[there]
    frame.places.avoid(dots, 1.0)
    parts = []
    for i in mark.labelled:
        if not there[i]:
            continue
        candidates = around(float(across[i]), float(up[i]), *label_size(mark.names[i]), half + 4)
        best = frame.places.settle(candidates)
        if best is not None:
            at = (float(x[i]), float(y[i]))
            parts.append(_text(frame, at, mark.names[i], roles[i], candidates[best]))
    return parts


@parts_of.register
def _(mark: Segments, frame: Frame) -> list[Part]:
    upright = mark.orientation is Orientation.VERTICAL
    along, across = (frame.spec.y, frame.spec.x) if upright else (frame.spec.x, frame.spec.y)
    at = positions(mark.at, across)
    low, high = positions(mark.low, along), positions(mark.high, along)
    parts = []
    for role, chosen in _groups(_roles(mark.roles, len(at))):
        # One path with gaps: a mark for each interval would be slow.
        chosen = chosen[np.isfinite(low[chosen]) & np.isfinite(high[chosen])]
        gap = np.full(len(chosen), np.nan)
        ends = np.column_stack([low[chosen], high[chosen], gap]).ravel()
        places = np.repeat(at[chosen], 3)
        x, y = (places, ends) if upright else (ends, np.where(np.isnan(ends), np.nan, places))
        # No gap after the last interval: bqplot places a hidden text at the last point.
        traits = {
            "x": shown_at(np.where(np.isnan(x), places, x)[:-1], frame.spec.x),
            "y": y[:-1],
            **_line_traits(role),
            "stroke_width": 1.4,
        }
        parts.append(Part(bqplot.Lines, traits))
    return parts


@parts_of.register
def _(mark: Line, frame: Frame) -> list[Part]:
    x, y = positions(mark.x, frame.spec.x), positions(mark.y, frame.spec.y)
    if mark.key not in frame.moving:
        there = np.flatnonzero(np.isfinite(x) & np.isfinite(y))
        upto = there[-1] + 1 if len(there) else 0
        x, y = x[:upto], y[:upto]
    traits = {"x": shown_at(x, frame.spec.x), "y": y, **_line_traits(mark.role, dashed=mark.dashed)}
    parts = [Part(bqplot.Lines, traits)]
    if mark.key in frame.moving:
        return parts
    if len(x) <= _MOST_HOVER_POINTS:
        parts.append(_hover_points(mark, x, y, frame))
    end = last_seen(x, y, frame)
    if mark.label and end is not None:
        parts.append(_end_label(mark, end, frame))
    return parts


def _end_label(mark: Line, end: tuple[float, float], frame: Frame) -> Part:
    width, height = label_size(mark.label)
    if mark.key in frame.beside:
        middle = frame.beside[mark.key]
        box = Box.at(WIDTH + 6, middle - height / 2, width, height)
        return _text(frame, (frame.x[1], end[1]), mark.label, mark.role, box)
    across, up = (float(value) for value in frame.pixel(*end))
    candidates = [
        Box.at(across + 5, up + row * height - height / 2, width, height)
        for row in (0.0, 1.2, -1.2, 2.4, -2.4)
    ]
    best = frame.places.settle(candidates)
    return _text(frame, end, mark.label, mark.role, candidates[best or 0])


def _hover_points(mark: Line, x: Floats, y: Floats, frame: Frame) -> Part:
    name = f"{mark.label}: " if mark.label else ""
    there = np.isfinite(x) & np.isfinite(y)
    where = (np.asarray(mark.x)[: len(x)] if frame.spec.x.scale is AxisScale.DATE else x)[there]
    x, y = x[there], y[there]
    names = [
        f"{name}{show(at, frame.spec.x.form)}, {show(float(value), frame.spec.y.form)}"
        for at, value in zip(where, y, strict=True)
    ]
    traits = {
        "x": shown_at(x, frame.spec.x),
        "y": y,
        "names": np.array(names, dtype=str),
        "names_unique": False,
        "display_names": False,
        "default_size": 90,
        "opacities": np.zeros(1),
        "interactions": {"hover": "tooltip"},
    }
    return Part(bqplot.Scatter, traits, tooltip=True)


@parts_of.register
def _(mark: Band, frame: Frame) -> list[Part]:
    x = positions(mark.x, frame.spec.x)
    traits = {
        "x": shown_at(x, frame.spec.x),
        "y": np.vstack([positions(mark.low, frame.spec.y), positions(mark.high, frame.spec.y)]),
        "colors": [colour(mark.role)] * 2,
        "fill": "between",
        "fill_colors": [colour(mark.role)] * 2,
        "fill_opacities": [0.13, 0.0],
        "stroke_width": 1.2,
        "interactions": {},
    }
    parts = [Part(bqplot.Lines, traits)]
    top = last_seen(x, np.asarray(traits["y"])[1], frame)
    if mark.label and top is not None and mark.key not in frame.moving:
        across, up = (float(value) for value in frame.pixel(*top))
        width, height = label_size(mark.label)
        box = Box.at(max(across - width - 4, 0.0), min(up, HEIGHT) - 1.6 * height, width, height)
        parts.append(_text(frame, top, mark.label, mark.role, box))
    return parts


@parts_of.register
def _(mark: Rule, frame: Frame) -> list[Part]:
    upright = mark.orientation is Orientation.VERTICAL
    at = float(np.ravel(positions(mark.at, frame.spec.x if upright else frame.spec.y))[0])
    x, y = (np.full(2, at), np.array(frame.y)) if upright else (np.array(frame.x), np.full(2, at))
    traits = {"x": shown_at(x, frame.spec.x), "y": y, **_line_traits(mark.role, dashed=mark.dashed)}
    parts = [Part(bqplot.Lines, traits)]
    if mark.key in frame.above:
        parts.append(_label_above(mark, at, frame))
    elif mark.label and not upright and frame.y[0] <= at <= frame.y[1] and mark.key not in frame.moving:
        anchor = (frame.x[1], at)
        up = float(frame.pixel(*anchor)[1])
        width, height = label_size(mark.label)
        candidates = [Box.at(WIDTH - width - 4, up + side, width, height) for side in (3.0, -3.0 - height)]
        best = frame.places.settle(candidates)
        parts.append(_text(frame, anchor, mark.label, mark.role, candidates[best or 0]))
    return parts


def _label_above(mark: Rule, at: float, frame: Frame) -> Part:
    width, height = label_size(mark.label)
    across = float(frame.pixel(at, frame.y[1])[0])
    left = across - 1 if across + width <= WIDTH + 12 else across + 1 - width
    box = Box.at(left, HEIGHT + 3 + 15 * frame.above[mark.key], width, height)
    return _text(frame, (at, frame.y[1]), mark.label, mark.role, box)


@parts_of.register
def _(mark: Bars, frame: Frame) -> list[Part]:
    upright = mark.orientation is Orientation.VERTICAL
    along, across = (frame.spec.y, frame.spec.x) if upright else (frame.spec.x, frame.spec.y)
    at, length = positions(mark.at, across), positions(mark.length, along)
    gaps = np.diff(np.unique(at))
    sets = [one.key for one in frame.spec.marks if isinstance(one, Bars)]
    thick = (0.72 * float(gaps.min()) if len(gaps) else 0.5) / len(sets)
    at = at + thick * (sets.index(mark.key) - (len(sets) - 1) / 2)
    roles = _roles(mark.roles, len(at))
    zero = np.zeros(len(at))
    ends = np.column_stack([zero, length, length, zero])
    sides = np.column_stack([at - thick / 2, at - thick / 2, at + thick / 2, at + thick / 2])
    x, y = (sides, ends) if upright else (ends, sides)
    label = f"{mark.label}, " if mark.label else ""
    traits = {
        "x": shown_at(x, frame.spec.x),
        "y": y,
        "labels": [
            f"{label}{name}: {show(float(value), along.form)}"
            for name, value in zip(mark.names, length, strict=True)
        ],
        "close_path": True,
        "fill": "inside",
        "colors": [colour(role) for role in roles],
        "fill_colors": [colour(role) for role in roles],
        "fill_opacities": [0.85] * len(roles),
        "stroke_width": 1.0,
        "interactions": {"hover": "tooltip"},
    }
    base = np.zeros(2)
    ends_x, ends_y = (np.array(frame.x), base) if upright else (base, np.array(frame.y))
    axis_line = {"x": shown_at(ends_x, frame.spec.x), "y": ends_y, **_line_traits(Role.REFERENCE)}
    return [Part(bqplot.Lines, traits, tooltip=True), Part(bqplot.Lines, axis_line)]
