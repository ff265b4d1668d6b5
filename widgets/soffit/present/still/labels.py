"""Names written on the picture: at line ends, on rules, in bands and beside points, none over another."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from matplotlib.lines import Line2D

from soffit.present.spec import Band, Bars, Line, Orientation, Points, Rule, Segments
from soffit.present.still.places import Box, Places, around, spread
from soffit.present.still.scales import (
    Floats,
    along_path,
    drawable,
    last_seen,
    numbers,
    position,
    spread_over,
)
from soffit.present.still.sheet import SOFT, Sheet
from soffit.present.theme import look
from soffit.present.wording import plural

__all__ = ["Labels"]


class Labels:
    """Writes every label of a sheet whose marks are drawn.

    Parameters
    ----------
    sheet : Sheet
        Its axes must have their final place and limits.
    """

    def __init__(self, sheet: Sheet) -> None:
        self.sheet = sheet
        self.unnamed = 0
        self.frame = sheet.axes.get_window_extent()
        self.places = Places(Box(self.frame.x0, self.frame.y0, self.frame.x1, self.frame.y1))

    def write(self) -> None:
        """Write them, those with the least choice of place first."""
        for boxes, weight in self._obstacles():
            self.places.avoid(boxes, weight)
        self._margin_labels()
        outside = {text for text, *_ in self.sheet.end_labels}
        for mark in self.sheet.spec.marks:
            if isinstance(mark, Rule) and mark.label:
                self._rule_label(mark)
        for mark in self.sheet.spec.marks:
            if isinstance(mark, Line) and mark.label and drawable(mark.label) not in outside:
                self._line_label(mark)
            elif isinstance(mark, Band) and mark.label:
                self._band_label(mark)
        for mark in self.sheet.spec.marks:
            if isinstance(mark, Points):
                self._point_labels(mark)
        if self.unnamed:
            # Said, not hidden: a reader must know that names are missing.
            said = f"{plural(self.unnamed, 'name')} not written for want of room"
            small = self.sheet.size - 1.5
            self._text(said, self.frame.x1, self.frame.y1 + 3, SOFT, ha="right", va="bottom", size=small)

    def _text(self, text: str, x: float, y: float, colour: str, **more: Any) -> None:
        at_x, at_y = self.sheet.figure.transFigure.inverted().transform((x, y))
        self.sheet.figure.text(
            at_x,
            at_y,
            text,
            color=colour,
            parse_math=False,
            **{"size": self.sheet.size, "ha": "left", "va": "center", **more},
        )

    def _settle(self, text: str, colour: str, candidates: Callable[[float, float], list[Box]]) -> Box | None:
        wide, high = self.sheet.extent(text, self.sheet.size)
        boxes = candidates(wide, high)
        chosen = self.places.settle(boxes)
        if chosen is None:
            return None
        box = boxes[chosen]
        veil = {"facecolor": "white", "alpha": 0.75, "edgecolor": "none", "pad": 0.4}
        self._text(text, box.x0, (box.y0 + box.y1) / 2, colour, bbox=veil)
        return box

    def _leader(self, x: float, y: float, box: Box) -> None:
        to_x = min(max(x, box.x0), box.x1)
        to_y = min(max(y, box.y0), box.y1)
        if np.hypot(to_x - x, to_y - y) > self.sheet.size * 1.6:
            self._stroke((x, y), (to_x, to_y), "#9A9A9A")

    def _stroke(self, start: tuple[float, float], end: tuple[float, float], colour: str) -> None:
        ends = self.sheet.figure.transFigure.inverted().transform([start, end])
        self.sheet.figure.add_artist(Line2D(ends[:, 0], ends[:, 1], color=colour, linewidth=0.5))

    def _margin_labels(self) -> None:
        pixel = self.sheet.axes.transData.transform
        wished = [float(pixel((self.sheet.axes.get_xlim()[0], y))[1]) for _, y, _, _ in self.sheet.end_labels]
        high = self.sheet.size * 1.3 * 100 / 72
        for (text, _, colour, _), was, at in zip(
            self.sheet.end_labels, wished, spread(wished, high, self.frame.y0, self.frame.y1), strict=True
        ):
            self._text(text, self.frame.x1 + 7, at, colour)
            if abs(was - at) > 2:
                self._stroke((self.frame.x1, was), (self.frame.x1 + 6, at), colour)

    def _rule_label(self, mark: Rule) -> None:
        level = mark.orientation is Orientation.HORIZONTAL
        at = float(self._rule_ends(mark)[0, 1 if level else 0])
        low, high = (self.frame.y0, self.frame.y1) if level else (self.frame.x0, self.frame.x1)
        if not low - 1 <= at <= high + 1:
            return

        def along(wide: float, high: float) -> list[Box]:
            gap = 3.0
            steps = np.linspace(0, 1, 13)
            if level:
                room = self.frame.width - wide - 2 * gap
                return [
                    Box.at(self.frame.x1 - gap - wide - step * room, y, wide, high)
                    for step in steps
                    for y in (at + 1.5, at - high - 1.5)
                ]
            room = self.frame.height - high - 2 * gap
            return [
                Box.at(x, self.frame.y1 - gap - high - step * room, wide, high)
                for step in steps
                for x in (at + gap, at - gap - wide)
            ]

        self._count(self._settle(drawable(mark.label), look(mark.role).light, along))

    def _line_label(self, mark: Line) -> None:
        low, high = self.sheet.axes.get_xlim()
        end = last_seen(mark, low, high, *sorted(self.sheet.axes.get_ylim()))
        if end is None:
            return
        x, y = self.sheet.axes.transData.transform(end)
        box = self._settle(
            drawable(mark.label),
            look(mark.role).light,
            lambda wide, tall: around(x, y, wide, tall, self.sheet.size * 0.6),
        )
        if box:
            self._leader(x, y, box)
        self._count(box)

    def _band_label(self, mark: Band) -> None:
        x, low, high = numbers(mark.x), numbers(mark.low), numbers(mark.high)
        bottom, top = sorted(self.sheet.axes.get_ylim())
        good = np.isfinite(x) & np.isfinite(low) & np.isfinite(high)
        x, low, high = x[good], np.clip(low[good], bottom, top), np.clip(high[good], bottom, top)
        pixel = self.sheet.axes.transData.transform
        edges = np.stack([pixel(np.column_stack([x, side])) for side in (low, high)])

        def within(wide: float, tall: float) -> list[Box]:
            found = []
            for share in np.linspace(0.95, 0.05, 19) if len(x) else ():
                lower, upper = edges[:, int(share * (len(x) - 1))]
                half = max(0.0, abs(upper[1] - lower[1]) / 2 - tall)
                at = (lower + upper) / 2
                found += [
                    Box.at(at[0] - wide / 2, at[1] - tall / 2 + up * half, wide, tall)
                    for up in (0, 0.5, -0.5, 1, -1)
                ]
            return found

        self._count(self._settle(drawable(mark.label), look(mark.role).light, within))

    def _point_labels(self, mark: Points) -> None:
        roles = spread_over(mark.roles, len(mark.x))
        spots = self.sheet.axes.transData.transform(np.column_stack([numbers(mark.x), numbers(mark.y)]))
        for index in mark.labelled:
            x, y = spots[index]
            if not (self.frame.x0 <= x <= self.frame.x1 and self.frame.y0 <= y <= self.frame.y1):
                continue
            box = self._settle(
                drawable(mark.names[index], 32),
                look(roles[index]).light,
                lambda wide, high, x=x, y=y: around(x, y, wide, high, self.sheet.size * 0.75),  # type: ignore[misc]
            )
            if box:
                self._leader(x, y, box)
            self._count(box)

    def _rule_ends(self, mark: Rule) -> Floats:
        across, up = self.sheet.axes.get_xlim(), self.sheet.axes.get_ylim()
        if mark.orientation is Orientation.HORIZONTAL:
            ends = [(across[0], mark.at), (across[1], mark.at)]
        else:
            at = position(mark.at, self.sheet.spec.x)
            ends = [(at, up[0]), (at, up[1])]
        return np.asarray(self.sheet.axes.transData.transform(ends), dtype=float)

    def _count(self, box: Box | None) -> None:
        self.unnamed += box is None

    def _obstacles(self) -> list[tuple[Floats, float]]:
        found: list[tuple[Floats, float]] = []
        pixel = self.sheet.axes.transData.transform
        for mark in self.sheet.spec.marks:
            half = self.sheet.size * 0.55
            weight = 1.0
            if isinstance(mark, Points):
                spots = pixel(np.column_stack([numbers(mark.x), numbers(mark.y)]))
            elif isinstance(mark, Line):
                spots, half, weight = along_path(pixel(np.column_stack([numbers(mark.x), mark.y]))), 1.5, 0.25
            elif isinstance(mark, Segments):
                up = mark.orientation is Orientation.VERTICAL
                at = numbers(mark.at)
                shares = np.linspace(0, 1, 9)[:, None]
                span = (mark.low + (mark.high - mark.low) * shares).ravel()
                at = np.tile(at, 9)
                spots, half, weight = pixel(np.column_stack([at, span] if up else [span, at])), 1.5, 0.1
            elif isinstance(mark, Bars):
                level = mark.orientation is Orientation.HORIZONTAL
                share = np.linspace(0, 1, 9)[:, None] * np.asarray(mark.length, dtype=float)
                at = np.tile(numbers(mark.at), 9)
                spots = pixel(np.column_stack([share.ravel(), at] if level else [at, share.ravel()]))
                half, weight = self.sheet.size * 0.8, 0.5
            elif isinstance(mark, Rule):
                spots, half, weight = along_path(self._rule_ends(mark)), 0.8, 0.6
            else:
                continue
            spots = spots[np.isfinite(spots).all(axis=1)]
            found.append((np.hstack([spots - half, spots + half]), weight))
        return found
