"""The frame of an interactive figure: its limits, and the room that labels take beside and above the plot."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from soffit.present.live.axes import limits, positions
from soffit.present.spec import Axis, AxisScale, FigureSpec, Line, Orientation, Rule
from soffit.present.still.places import Box, Places, spread

__all__ = ["FONT", "HEIGHT", "WIDTH", "Frame", "fraction", "label_size", "last_seen", "shown_at"]

Floats = npt.NDArray[np.float64]

# Labels are placed apart in a plot area of this size; in a wider one they stand further apart.
WIDTH, HEIGHT = 660.0, 340.0
FONT = 12.0


@dataclass(frozen=True, eq=False)
class Frame:
    """What the parts need to know of the figure around them.

    `beside` holds the centres of labels that stand in the right margin, at the ends of lines; `above` the rows of
    labels over the plot, at vertical rules.
    """

    spec: FigureSpec
    x: tuple[float, float]
    y: tuple[float, float]
    moving: frozenset[str]
    places: Places
    beside: dict[str, float] = field(default_factory=dict)
    above: dict[str, int] = field(default_factory=dict)

    @classmethod
    def of(cls, spec: FigureSpec, moving: frozenset[str]) -> Frame:
        """Frame of a figure; marks whose keys are `moving` get no labels of lines."""
        x = limits(spec.x, spec.marks, horizontal=True)
        y = limits(spec.y, spec.marks, horizontal=False)
        frame = cls(spec, x, y, moving, Places(Box(0.0, 0.0, WIDTH, HEIGHT)))
        frame._settle_margins()
        return frame

    def _settle_margins(self) -> None:
        labelled = [
            mark
            for mark in self.spec.marks
            if isinstance(mark, Line | Rule) and mark.label and mark.key not in self.moving
        ]
        ends: dict[str, float] = {}
        for mark in labelled:
            if isinstance(mark, Line):
                seen = last_seen(positions(mark.x, self.spec.x), positions(mark.y, self.spec.y), self)
                if seen is not None and float(self.pixel(*seen)[0]) > 0.9 * WIDTH:
                    ends[mark.key] = float(self.pixel(*seen)[1])
        centres = spread(list(ends.values()), 1.2 * FONT, 0.0, HEIGHT)
        self.beside.update(zip(ends, centres, strict=True))
        taken: list[list[tuple[float, float]]] = []
        for mark, left, right in sorted(self._over(labelled), key=lambda one: one[1]):
            row = next(
                (i for i, spans in enumerate(taken) if all(right < a or left > b for a, b in spans)),
                len(taken),
            )
            taken[row:row] = [[]] if row == len(taken) else []
            taken[row].append((left, right))
            self.above[mark.key] = row

    def _over(self, labelled: list[Line | Rule]) -> Iterator[tuple[Rule, float, float]]:
        """Vertical rules in sight, with the left and right ends of their labels."""
        for mark in labelled:
            if isinstance(mark, Rule) and mark.orientation is Orientation.VERTICAL:
                at = float(np.ravel(positions(mark.at, self.spec.x))[0])
                if self.x[0] <= at <= self.x[1]:
                    across, width = float(self.pixel(at, self.y[0])[0]), label_size(mark.label)[0] + 8
                    left = across if across + width <= WIDTH + 20 else across - width
                    yield mark, left, left + width

    @property
    def margins(self) -> tuple[int, int]:
        """Pixels above and to the right of the plot that its labels need."""
        labels = [
            mark.label for mark in self.spec.marks if isinstance(mark, Line) and mark.key in self.beside
        ]
        right = max((round(label_size(label)[0]) + 14 for label in labels), default=18)
        return 10 + 15 * (max(self.above.values(), default=-1) + 1), right

    def pixel(self, x: npt.ArrayLike, y: npt.ArrayLike) -> tuple[Floats, Floats]:
        """Places in the nominal plot area, from its lower left corner."""
        return fraction(x, self.x, self.spec.x) * WIDTH, fraction(y, self.y, self.spec.y) * HEIGHT


def fraction(values: npt.ArrayLike, span: tuple[float, float], axis: Axis) -> Floats:
    """Positions as shares of the way along an axis."""
    at, ends = np.asarray(values, dtype=float), np.asarray(span)
    if axis.scale is AxisScale.LOG:
        with np.errstate(divide="ignore", invalid="ignore"):
            at, ends = np.log(at), np.log(ends)
    return np.asarray((at - ends[0]) / (ends[1] - ends[0]))


def label_size(text: str) -> tuple[float, float]:
    """Width and height of a label, about."""
    return 0.56 * FONT * len(text), 1.15 * FONT


def last_seen(x: Floats, y: Floats, frame: Frame) -> tuple[float, float] | None:
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


def shown_at(values: npt.ArrayLike, axis: Axis) -> npt.NDArray[Any]:
    """Positions as bqplot takes them."""
    array = np.asarray(values, dtype=float)
    return array.astype("datetime64[ms]") if axis.scale is AxisScale.DATE else array
