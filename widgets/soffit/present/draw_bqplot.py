"""Draw a FigureSpec with bqplot, and update the drawing in place.

A specification is first turned into parts, plain descriptions of bqplot marks; an update compares parts and
sends only the traits that differ, so an array that the browser has is never sent again. Colours are CSS variables
(see :mod:`soffit.panels.styles`), with the light page's colour as fallback.
"""

from __future__ import annotations

from collections.abc import Callable, Collection
from dataclasses import dataclass
from functools import singledispatch
from typing import Any

import bqplot
import numpy as np
import numpy.typing as npt

from soffit.present.bqplot_axes import limits, positions, tick_key, ticks
from soffit.present.freeing import free
from soffit.present.spec import (
    Axis,
    AxisScale,
    Band,
    Bars,
    FigureSpec,
    Line,
    Mark,
    Orientation,
    Points,
    Role,
    Rule,
    Segments,
)
from soffit.present.still.places import Box, Places, around
from soffit.present.theme import look
from soffit.present.wording import show

__all__ = ["DrawnFigure", "colour", "point_area"]

Floats = npt.NDArray[np.float64]

# Labels are placed apart in a plot area of this size; in a wider one they stand further apart.
_WIDTH, _HEIGHT = 660.0, 340.0
_FONT = 12.0
_INK = "var(--soffit-ink, #1F1F1F)"
_PAPER = "var(--soffit-paper, #FFFFFF)"
_GRID = "var(--soffit-grid, #E6E6E6)"
_MOST_HOVER_POINTS = 400


def colour(role: Role) -> str:
    """CSS colour of a role: a variable that follows the page's theme."""
    return f"var(--soffit-{role.value}, {look(role).light})"


def point_area(count: int) -> int:
    """Area of one point, in square pixels, when there are so many."""
    return 64 if count <= 80 else 36 if count <= 800 else 16


@dataclass(frozen=True, eq=False)
class _Frame:
    """What the parts need to know of the figure around them."""

    spec: FigureSpec
    x: tuple[float, float]
    y: tuple[float, float]
    moving: frozenset[str]
    places: Places

    @classmethod
    def of(cls, spec: FigureSpec, moving: frozenset[str]) -> _Frame:
        x = limits(spec.x, spec.marks, horizontal=True)
        y = limits(spec.y, spec.marks, horizontal=False)
        return cls(spec, x, y, moving, Places(Box(0.0, 0.0, _WIDTH, _HEIGHT)))

    def pixel(self, x: npt.ArrayLike, y: npt.ArrayLike) -> tuple[Floats, Floats]:
        return _fraction(x, self.x, self.spec.x) * _WIDTH, _fraction(y, self.y, self.spec.y) * _HEIGHT


def _fraction(values: npt.ArrayLike, span: tuple[float, float], axis: Axis) -> Floats:
    at, ends = np.asarray(values, dtype=float), np.asarray(span)
    if axis.scale is AxisScale.LOG:
        with np.errstate(divide="ignore", invalid="ignore"):
            at, ends = np.log(at), np.log(ends)
    return np.asarray((at - ends[0]) / (ends[1] - ends[0]))


@dataclass(frozen=True, eq=False)
class _Part:
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


def _out(values: npt.ArrayLike, axis: Axis) -> npt.NDArray[Any]:
    """Positions as bqplot takes them."""
    array = np.asarray(values, dtype=float)
    return array.astype("datetime64[ms]") if axis.scale is AxisScale.DATE else array


def _text(
    frame: _Frame, anchor: tuple[float, float], text: str, role: Role | None, box: Box | None = None
) -> _Part:
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
        "x": _out([x], frame.spec.x),
        "y": np.array([y]),
        "text": np.array([text], dtype=object),
        "x_offset": round(left),
        "y_offset": round(middle),
        "align": align,
        "colors": [_INK if role is None else colour(role)],
        "default_size": _FONT,
        "font_weight": "normal",
        "apply_clip": False,
        "interactions": {},
    }
    return _Part(bqplot.Label, traits)


def _size(text: str) -> tuple[float, float]:
    """Width and height of a label, about."""
    return 0.56 * _FONT * len(text), 1.15 * _FONT


def _line_traits(role: Role, *, dashed: bool = False) -> dict[str, Any]:
    return {
        "colors": [colour(role)],
        "stroke_width": look(role).width,
        "line_style": "dashed" if dashed else "solid",
        "interactions": {},
    }


@singledispatch
def _parts(mark: Mark, frame: _Frame) -> list[_Part]:
    raise TypeError(f"A {type(mark).__name__} is not a mark that can be drawn")


@_parts.register
def _(mark: Points, frame: _Frame) -> list[_Part]:
    x, y = positions(mark.x, frame.spec.x), positions(mark.y, frame.spec.y)
    roles = _roles(mark.roles, len(x))
    shown = mark.hover or mark.names
    # A mark whose roles change in the browser must stay one mark.
    one = [(Role.INSIDE, np.arange(len(x)))]
    parts = []
    for role, chosen in one if mark.key in frame.moving else _groups(roles):
        drawn = look(role)
        traits = {
            "x": _out(x[chosen], frame.spec.x),
            "y": y[chosen],
            "names": np.array([shown[i] for i in chosen], dtype=object),
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
        parts.append(_Part(bqplot.Scatter, traits, tooltip=True, names=names))
    if mark.labelled:
        parts += _point_labels(mark, x, y, (None,) * len(x) if mark.key in frame.moving else roles, frame)
    return parts


def _point_labels(
    mark: Points, x: Floats, y: Floats, roles: tuple[Role | None, ...], frame: _Frame
) -> list[_Part]:
    across, up = frame.pixel(x, y)
    there = np.isfinite(across) & np.isfinite(up)
    half = np.sqrt(point_area(len(x))) / 2
    dots = np.column_stack([across - half, up - half, across + half, up + half])[there]
    frame.places.avoid(dots, 1.0)
    parts = []
    for i in mark.labelled:
        if not there[i]:
            continue
        candidates = around(float(across[i]), float(up[i]), *_size(mark.names[i]), half + 4)
        best = frame.places.settle(candidates)
        if best is not None:
            at = (float(x[i]), float(y[i]))
            parts.append(_text(frame, at, mark.names[i], roles[i], candidates[best]))
    return parts


@_parts.register
def _(mark: Segments, frame: _Frame) -> list[_Part]:
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
            "x": _out(np.where(np.isnan(x), places, x)[:-1], frame.spec.x),
            "y": y[:-1],
            **_line_traits(role),
            "stroke_width": 1.4,
        }
        parts.append(_Part(bqplot.Lines, traits))
    return parts


@_parts.register
def _(mark: Line, frame: _Frame) -> list[_Part]:
    x, y = positions(mark.x, frame.spec.x), positions(mark.y, frame.spec.y)
    if mark.key not in frame.moving:
        there = np.flatnonzero(np.isfinite(x) & np.isfinite(y))
        upto = there[-1] + 1 if len(there) else 0
        x, y = x[:upto], y[:upto]
    traits = {"x": _out(x, frame.spec.x), "y": y, **_line_traits(mark.role, dashed=mark.dashed)}
    parts = [_Part(bqplot.Lines, traits)]
    if mark.key in frame.moving:
        return parts
    if len(x) <= _MOST_HOVER_POINTS:
        parts.append(_hover_points(mark, x, y, frame))
    end = _last_seen(x, y, frame)
    if mark.label and end is not None:
        across, up = (float(value) for value in frame.pixel(*end))
        width, height = _size(mark.label)
        # Beside the end where there is room, else above or below the line.
        beside = across + 5 + width <= _WIDTH
        rows = (0.0, 1.2, -1.2, 2.4, -2.4) if beside else (0.8, -0.8, 1.9, -1.9, 3.0, -3.0)
        left = across + 5 if beside else across - width
        candidates = [Box.at(left, up + row * height - height / 2, width, height) for row in rows]
        best = frame.places.settle(candidates)
        parts.append(_text(frame, end, mark.label, mark.role, candidates[best or 0]))
    return parts


def _hover_points(mark: Line, x: Floats, y: Floats, frame: _Frame) -> _Part:
    name = f"{mark.label}: " if mark.label else ""
    there = np.isfinite(x) & np.isfinite(y)
    where = (np.asarray(mark.x)[: len(x)] if frame.spec.x.scale is AxisScale.DATE else x)[there]
    x, y = x[there], y[there]
    names = [
        f"{name}{show(at, frame.spec.x.form)}, {show(float(value), frame.spec.y.form)}"
        for at, value in zip(where, y, strict=True)
    ]
    traits = {
        "x": _out(x, frame.spec.x),
        "y": y,
        "names": np.array(names, dtype=object),
        "names_unique": False,
        "display_names": False,
        "default_size": 90,
        "opacities": np.zeros(1),
        "interactions": {"hover": "tooltip"},
    }
    return _Part(bqplot.Scatter, traits, tooltip=True)


def _last_seen(x: Floats, y: Floats, frame: _Frame) -> tuple[float, float] | None:
    """Where a line ends inside the figure: its last point there, or where it leaves."""
    inside = (x >= frame.x[0]) & (x <= frame.x[1]) & (y >= frame.y[0]) & (y <= frame.y[1])
    if not inside.any():
        return None
    last = int(np.flatnonzero(inside)[-1])
    if last + 1 < len(x) and np.isfinite(y[last + 1]) and y[last + 1] != y[last]:
        edge = frame.y[1] if y[last + 1] > y[last] else frame.y[0]
        share = float(np.clip((edge - y[last]) / (y[last + 1] - y[last]), 0.0, 1.0))
        return float(x[last] + share * (x[last + 1] - x[last])), float(
            y[last] + share * (y[last + 1] - y[last])
        )
    return float(x[last]), float(y[last])


@_parts.register
def _(mark: Band, frame: _Frame) -> list[_Part]:
    x = positions(mark.x, frame.spec.x)
    traits = {
        "x": _out(x, frame.spec.x),
        "y": np.vstack([positions(mark.low, frame.spec.y), positions(mark.high, frame.spec.y)]),
        "colors": [colour(mark.role)] * 2,
        "fill": "between",
        "fill_colors": [colour(mark.role)] * 2,
        "fill_opacities": [0.13, 0.0],
        "stroke_width": 1.2,
        "interactions": {},
    }
    parts = [_Part(bqplot.Lines, traits)]
    top = _last_seen(x, np.asarray(traits["y"])[1], frame)
    if mark.label and top is not None and mark.key not in frame.moving:
        across, up = (float(value) for value in frame.pixel(*top))
        width, height = _size(mark.label)
        box = Box.at(max(across - width - 4, 0.0), min(up, _HEIGHT) - 1.6 * height, width, height)
        parts.append(_text(frame, top, mark.label, mark.role, box))
    return parts


@_parts.register
def _(mark: Rule, frame: _Frame) -> list[_Part]:
    upright = mark.orientation is Orientation.VERTICAL
    at = float(np.ravel(positions(mark.at, frame.spec.x if upright else frame.spec.y))[0])
    x, y = (np.full(2, at), np.array(frame.y)) if upright else (np.array(frame.x), np.full(2, at))
    traits = {"x": _out(x, frame.spec.x), "y": y, **_line_traits(mark.role, dashed=mark.dashed)}
    parts = [_Part(bqplot.Lines, traits)]
    seen = frame.x if upright else frame.y
    if mark.label and seen[0] <= at <= seen[1] and mark.key not in frame.moving:
        parts.append(_rule_label(mark, at, frame, upright=upright))
    return parts


def _rule_label(mark: Rule, at: float, frame: _Frame, *, upright: bool) -> _Part:
    width, height = _size(mark.label)
    if upright:
        anchor = (at, frame.y[1])
        across = float(frame.pixel(*anchor)[0])
        left = across + 5 if across + 5 + width <= _WIDTH else across - 5 - width
        candidates = [Box.at(left, _HEIGHT - (row + 1) * height - 2, width, height) for row in range(8)]
    else:
        anchor = (frame.x[1], at)
        up = float(frame.pixel(*anchor)[1])
        left = _WIDTH - width - 4
        candidates = [Box.at(left, up + side, width, height) for side in (3.0, -3.0 - height)]
    best = frame.places.settle(candidates)
    return _text(frame, anchor, mark.label, mark.role, candidates[best or 0])


@_parts.register
def _(mark: Bars, frame: _Frame) -> list[_Part]:
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
        "x": _out(x, frame.spec.x),
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
    axis_line = {"x": _out(ends_x, frame.spec.x), "y": ends_y, **_line_traits(Role.REFERENCE)}
    return [_Part(bqplot.Lines, traits, tooltip=True), _Part(bqplot.Lines, axis_line)]


class DrawnFigure:
    """A figure on screen.

    Parameters
    ----------
    spec : FigureSpec
        What to draw.
    moving : collection of str, optional
        Keys of marks that are moved, or whose points change their roles, in the browser. Such points are drawn
        as one mark, and such lines without labels.

    Attributes
    ----------
    widget : bqplot.Figure
        To be put in a layout. Closed by :meth:`close`.
    sent : int
        How many traits of marks have been assigned since the figure was made; for tests.
    """

    def __init__(self, spec: FigureSpec, *, moving: Collection[str] = ()) -> None:
        self._moving = frozenset(moving)
        self._select: list[Callable[[str], None]] = []
        self._drawn: dict[tuple[str, int], tuple[bqplot.Mark, _Part]] = {}
        self.sent = 0
        self._scales = {"x": _scale(spec.x), "y": _scale(spec.y)}
        for scale in self._scales.values():
            scale.allow_padding = False
        self._axes = [
            bqplot.Axis(scale=self._scales["x"], side="bottom"),
            bqplot.Axis(scale=self._scales["y"], side="left"),
        ]
        self.widget = bqplot.Figure(
            axes=self._axes,
            animation_duration=0,
            padding_x=0.0,
            padding_y=0.0,
            background_style={"fill": "none"},
            min_aspect_ratio=0.2,
            max_aspect_ratio=6.0,
        )
        self.widget.layout.width, self.widget.layout.min_width = "100%", "320px"
        self.widget.add_class("soffit-figure")
        # The ring around the selected point is a mark of its own, so that selecting restyles no other point.
        self._ring = bqplot.Scatter(
            x=_out([limits(spec.x, spec.marks, horizontal=True)[0]], spec.x),
            y=[limits(spec.y, spec.marks, horizontal=False)[0]],
            scales=self._scales,
            colors=["transparent"],
            stroke=_INK,
            stroke_width=2.0,
            default_size=220,
            interactions={},
            visible=False,
        )
        self.spec = spec
        self.update(spec)

    def on_select(self, callback: Callable[[str], None]) -> None:
        """Call back with the name of a selectable point when it is clicked."""
        self._select.append(callback)

    def update(self, spec: FigureSpec) -> None:
        """Draw another specification of the same figure in place, sending only what differs."""
        frame = _Frame.of(spec, self._moving)
        self._set_axes(spec, frame)
        drawn: dict[tuple[str, int], tuple[bqplot.Mark, _Part]] = {}
        for mark in spec.marks:
            for number, part in enumerate(_parts(mark, frame)):
                key = (mark.key, number)
                drawn[key] = (self._placed(key, part), part)
        gone = [mark for mark, _ in self._drawn.values() if mark not in [kept for kept, _ in drawn.values()]]
        marks = [mark for mark, _ in drawn.values()]
        self._drawn, self.spec, self._frame = drawn, spec, frame
        if [*marks, self._ring] != list(self.widget.marks):
            self.widget.marks = [*marks, self._ring]
        free([part for mark in gone for part in (mark, mark.tooltip)])

    def marks(self, key: str) -> list[bqplot.Mark]:
        """The bqplot marks that draw the mark with this key."""
        return [mark for (name, _), (mark, _) in self._drawn.items() if name == key]

    def position(self, key: str) -> int:
        """Position, in drawing order, of the first bqplot mark with this key; −1 if there is none."""
        return next((i for i, (name, _) in enumerate(self._drawn) if name == key), -1)

    @property
    def limits(self) -> tuple[tuple[float, float], tuple[float, float]]:
        """Lowest and highest position on each axis."""
        return self._frame.x, self._frame.y

    def shares(self, x: npt.ArrayLike, y: npt.ArrayLike) -> tuple[Floats, Floats]:
        """Positions as shares of the plot area, from its left and from its bottom edge."""
        return _fraction(x, self._frame.x, self.spec.x), _fraction(y, self._frame.y, self.spec.y)

    def ring(self, name: str) -> None:
        """Ring the selectable point of this name; an empty or unknown name takes the ring away."""
        for mark in self.spec.marks:
            if isinstance(mark, Points) and mark.selectable and name in mark.names:
                at = mark.names.index(name)
                x, y = positions(mark.x, self.spec.x)[at], positions(mark.y, self.spec.y)[at]
                with self._ring.hold_sync():
                    self._ring.x, self._ring.y = _out([x], self.spec.x), np.array([y])
                    self._ring.visible = True
                return
        self._ring.visible = False

    def close(self) -> None:
        """Free the figure and all its parts in the browser."""
        self._select.clear()
        tooltips = [mark.tooltip for mark, _ in self._drawn.values()]
        scales = [*self._scales.values(), self.widget.scale_x, self.widget.scale_y]
        free([*self.widget.marks, *tooltips, *self._axes, *scales, self.widget])

    def _placed(self, key: tuple[str, int], part: _Part) -> bqplot.Mark:
        mark, old = self._drawn.get(key, (None, None))
        if mark is None or old is None or old.kind is not part.kind or bool(old.names) != bool(part.names):
            return self._made(key, part)
        fresh = {name: value for name, value in part.traits.items() if not _same(value, old.traits.get(name))}
        if fresh:
            self.sent += len(fresh)
            with mark.hold_sync():
                for name, value in fresh.items():
                    setattr(mark, name, value)
        return mark

    def _made(self, key: tuple[str, int], part: _Part) -> bqplot.Mark:
        mark = part.kind(scales=self._scales, **part.traits)
        if part.tooltip:
            mark.tooltip = bqplot.Tooltip(fields=["name"], show_labels=False)
        if part.names:
            mark.on_element_click(lambda _, content: self._clicked(key, content))
        return mark

    def _clicked(self, key: tuple[str, int], content: dict[str, Any]) -> None:
        # The names are looked up when clicked: an update may have changed them.
        _, part = self._drawn[key]
        for callback in self._select:
            callback(part.names[int(content["data"]["index"])])

    def _set_axes(self, spec: FigureSpec, frame: _Frame) -> None:
        for name, axis, (low, high), drawn in (
            ("x", spec.x, frame.x, self._axes[0]),
            ("y", spec.y, frame.y, self._axes[1]),
        ):
            scale = self._scales[name]
            ends = _out([low, high], axis)
            for end, value in zip(("min", "max"), ends, strict=True):
                _assign(scale, end, value.item())
            at, texts = ticks(axis, low, high, 9)
            _assign(drawn, "tick_values", _out(at, axis))
            if axis.scale is AxisScale.DATE:
                _assign(drawn, "tick_format", "%Y" if all(len(text) == 4 for text in texts) else "%Y-%m")
            else:
                keys = [tick_key(float(value)) for value in at]
                _assign(drawn, "tick_labels", dict(zip(keys, texts, strict=True)))
            _assign(drawn, "label", axis.label)
            _assign(drawn, "grid_color", _GRID)
            _assign(drawn, "grid_lines", "none" if axis.scale is AxisScale.CATEGORY else "solid")
            _assign(drawn, "num_ticks", None)
        widest = max((len(text) for text in self._axes[1].tick_labels.values()), default=4)
        left = int(38 + 6.6 * min(max(widest, 3), 26))
        _assign(self._axes[1], "label_offset", f"{left - 16}px")
        _assign(self._axes[0], "label_offset", "34px")
        _assign(self.widget, "fig_margin", {"top": 10, "bottom": 48, "left": left, "right": 18})


def _scale(axis: Axis) -> bqplot.Scale:
    if axis.scale is AxisScale.DATE:
        return bqplot.DateScale()
    return bqplot.LogScale() if axis.scale is AxisScale.LOG else bqplot.LinearScale()


def _assign(widget: Any, name: str, value: Any) -> None:
    if not _same(getattr(widget, name), value):
        setattr(widget, name, value)


def _same(one: Any, other: Any) -> bool:
    if isinstance(one, np.ndarray) or isinstance(other, np.ndarray):
        if one is None or other is None:
            return False
        a, b = np.asarray(one), np.asarray(other)
        if a.shape != b.shape or a.dtype.kind != b.dtype.kind:
            return False
        return bool(np.array_equal(a, b, equal_nan=a.dtype.kind in "fM"))
    return bool(one == other)
