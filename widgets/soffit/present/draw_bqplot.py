"""Draw a FigureSpec with bqplot, and update the drawing in place.

A specification is first turned into parts, plain descriptions of bqplot marks; an update compares parts and
sends only the traits that differ, so an array that the browser has is never sent again.
"""

from __future__ import annotations

from collections.abc import Callable, Collection
from typing import Any

import bqplot
import numpy as np
import numpy.typing as npt

from soffit.present.freeing import free
from soffit.present.live.axes import limits, positions, tick_key, ticks
from soffit.present.live.frame import Frame, fraction, shown_at
from soffit.present.live.parts import INK, Part, colour, parts_of, point_area
from soffit.present.spec import Axis, AxisScale, FigureSpec, Points

__all__ = ["DrawnFigure", "colour", "point_area"]

Floats = npt.NDArray[np.float64]

_GRID = "var(--soffit-grid, #E6E6E6)"


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
        self._drawn: dict[tuple[str, int], tuple[bqplot.Mark, Part]] = {}
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
            display_toolbar=False,
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
            x=shown_at([limits(spec.x, spec.marks, horizontal=True)[0]], spec.x),
            y=[limits(spec.y, spec.marks, horizontal=False)[0]],
            scales=self._scales,
            colors=["transparent"],
            stroke=INK,
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
        frame = Frame.of(spec, self._moving)
        self._set_axes(spec, frame)
        drawn: dict[tuple[str, int], tuple[bqplot.Mark, Part]] = {}
        for mark in spec.marks:
            for number, part in enumerate(parts_of(mark, frame)):
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
        return fraction(x, self._frame.x, self.spec.x), fraction(y, self._frame.y, self.spec.y)

    def ring(self, name: str) -> None:
        """Ring the selectable point of this name; an empty or unknown name takes the ring away."""
        for mark in self.spec.marks:
            if isinstance(mark, Points) and mark.selectable and name in mark.names:
                at = mark.names.index(name)
                x, y = positions(mark.x, self.spec.x)[at], positions(mark.y, self.spec.y)[at]
                with self._ring.hold_sync():
                    self._ring.x, self._ring.y = shown_at([x], self.spec.x), np.array([y])
                    self._ring.visible = True
                return
        self._ring.visible = False

    def close(self) -> None:
        """Free the figure and all its parts in the browser."""
        self._select.clear()
        tooltips = [mark.tooltip for mark, _ in self._drawn.values()]
        scales = [*self._scales.values(), self.widget.scale_x, self.widget.scale_y]
        free([*self.widget.marks, *tooltips, *self._axes, *scales, self.widget])

    def _placed(self, key: tuple[str, int], part: Part) -> bqplot.Mark:
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

    def _made(self, key: tuple[str, int], part: Part) -> bqplot.Mark:
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

    def _set_axes(self, spec: FigureSpec, frame: Frame) -> None:
        for name, axis, (low, high), drawn in (
            ("x", spec.x, frame.x, self._axes[0]),
            ("y", spec.y, frame.y, self._axes[1]),
        ):
            scale = self._scales[name]
            ends = shown_at([low, high], axis)
            for end, value in zip(("min", "max"), ends, strict=True):
                _assign(scale, end, value.item())
            at, texts = ticks(axis, low, high, 9)
            _assign(drawn, "tick_values", shown_at(at, axis))
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
        _assign(self._axes[0], "label_offset", "38px")
        top, right = frame.margins
        _assign(self.widget, "fig_margin", {"top": top, "bottom": 52, "left": left, "right": right})


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
