"""The sheet: its size, axes, title, legend, and the room each of them gets."""

from __future__ import annotations

import textwrap
from typing import Any

from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.lines import Line2D

from soffit.present.spec import AxisScale, Bars, FigureSpec, Line, Mark, Orientation, Points, Role, Segments
from soffit.present.still.marks import PAINTERS, STATUSES, marker_style
from soffit.present.still.scales import drawable, last_seen, limits_of, stride, ticks_of
from soffit.present.theme import FONT_FAMILY, look

__all__ = ["Sheet"]

INK, SOFT, GRID = "#1A1A1A", "#555555", "#E3E3E3"


class Sheet:
    """One figure with everything but the labels inside its axes.

    Parameters
    ----------
    spec : FigureSpec
        The figure as data.
    inches : float
        Width of the sheet; its height follows from what stands on it.
    size : float
        Font size in points.
    title, footnote : bool
        Whether they are written.
    """

    def __init__(self, spec: FigureSpec, *, inches: float, size: float, title: bool, footnote: bool) -> None:
        self.spec = spec
        self.size = size
        self.inches = inches
        self.figure = Figure(figsize=(inches, inches / spec.aspect), dpi=100, facecolor="white")
        self.canvas = FigureCanvasAgg(self.figure)
        self.axes: Axes = self.figure.add_axes((0.1, 0.1, 0.8, 0.8))
        self.title = drawable(spec.title) if title else ""
        self.footnote = drawable(spec.footnote) if footnote else ""
        self._limits()
        self._frame()
        self._room()
        for mark in spec.marks:
            PAINTERS[type(mark)](self, mark)

    # ---- scales
    def _limits(self) -> None:
        bars = [mark for mark in self.spec.marks if isinstance(mark, Bars)]
        for axis, horizontal in ((self.spec.x, True), (self.spec.y, False)):
            way = Orientation.HORIZONTAL if horizontal else Orientation.VERTICAL
            low, high = limits_of(
                axis, self.spec.marks, horizontal, any(bar.orientation is way for bar in bars)
            )
            if axis.scale is AxisScale.LOG:
                (self.axes.set_xscale if horizontal else self.axes.set_yscale)("log")
            (self.axes.set_xlim if horizontal else self.axes.set_ylim)(low, high)

    def _frame(self) -> None:
        for side in ("top", "right"):
            self.axes.spines[side].set_visible(False)
        for side in ("left", "bottom"):
            self.axes.spines[side].set(color="#8A8A8A", linewidth=0.7)
        self.axes.minorticks_off()
        self.axes.set_axisbelow(True)
        self.axes.grid(True, color=GRID, linewidth=0.6)
        if self.spec.x.scale is AxisScale.CATEGORY:
            self.axes.grid(False, axis="x")
        if self.spec.y.scale is AxisScale.CATEGORY:
            self.axes.grid(False, axis="y")
        self.axes.tick_params(labelsize=self.size, colors=SOFT, labelcolor=INK, length=3, width=0.6)

    # ---- room
    def extent(self, text: str, size: float, weight: str = "normal") -> tuple[float, float]:
        """Width and height of one line of text, in pixels at the figure's own resolution."""
        renderer: Any = self.canvas.get_renderer()  # type: ignore[no-untyped-call]
        font = FontProperties(family=FONT_FAMILY[0], size=size, weight=weight)
        wide, _, _ = renderer.get_text_width_height_descent(text, font, False)
        return float(wide), size * 1.25 * 100 / 72

    def wrap(self, text: str, size: float, room: float, weight: str = "normal") -> list[str]:
        """Break a text into lines no wider than `room` pixels."""
        if not text:
            return []
        wide, _ = self.extent(text, size, weight)
        columns = max(12, int(len(text) * room / max(wide, 1.0) * 0.97))
        return textwrap.wrap(text, columns)

    def _room(self) -> None:
        """Set the size of the sheet and of the axes from what has to stand around them."""
        px, line = self.inches * 100, self.size * 1.35 * 100 / 72
        pad = 0.06 * 100
        self.end_labels = self._end_labels()
        right = pad + (8 + max(w for *_, w in self.end_labels) if self.end_labels else 4)
        body = self._body_height(px)
        categories = self.spec.y.scale is AxisScale.CATEGORY
        y_ticks = ticks_of(
            self.spec.y, self.axes.get_ylim(), max(2, int(body / (line * (1.1 if categories else 2.6))))
        )
        left = pad + 8 + max((self.extent(text, self.size)[0] for _, text in y_ticks), default=0.0)
        across = px - left - right
        x_ticks, turned = self._x_ticks(across)
        tallest = (
            max((self.extent(text, self.size)[0] for _, text in x_ticks), default=0.0) if turned else line
        )
        last = x_ticks[-1][1] if x_ticks and not turned else ""
        right = max(right, pad + self.extent(last, self.size)[0] / 2 if last else right)
        below = self.wrap(self.footnote, self.size - 1, px - 2 * pad)
        x_title = self.wrap(drawable(self.spec.x.label), self.size, px - left - right)
        foot = len(below) * line * 0.92 + (4 if below else 0)
        bottom = pad + foot + line * len(x_title) + 3 + tallest + 7
        heading = self.wrap(self.title, self.size + 2, px - 2 * pad, "bold")
        y_title = self.wrap(drawable(self.spec.y.label), self.size, px - 2 * pad)
        legend = self._legend_rows(px - 2 * pad)
        rows = len(heading) * (self.size + 2) / self.size + len(y_title) + len(legend)
        top = pad + rows * line + (6 if rows else 0) + (4 if heading else 0) + (3 if legend else 0)
        height = top + body + bottom
        self.figure.set_size_inches(self.inches, height / 100)
        self.axes.set_position((left / px, bottom / height, (px - left - right) / px, body / height))
        self._set_ticks(x_ticks, y_ticks, turned)
        at = height - pad
        at = self._write(heading, pad, at, self.size + 2, line * (self.size + 2) / self.size, "bold", INK)
        at = self._legend(legend, pad, at - (4 if heading else 0), line)
        self._write(y_title, pad, at - (3 if legend else 0), self.size, line, "normal", SOFT)
        self._write(x_title, left, pad + foot + line * len(x_title), self.size, line, "normal", SOFT)
        self._write(below, pad, pad + len(below) * line * 0.92, self.size - 1, line * 0.92, "normal", SOFT)

    def _body_height(self, px: float) -> float:
        height = 0.78 * px / self.spec.aspect
        if self.spec.y.scale is AxisScale.CATEGORY:
            row = self.size * 1.5 * 100 / 72
            return min(max(row * len(self.spec.y.categories), 0.3 * height), 780.0)
        return height

    def _write(
        self, lines: list[str], x: float, top: float, size: float, line: float, weight: str, colour: str
    ) -> float:
        px, height = self.figure.get_size_inches() * 100
        for text in lines:
            self.figure.text(
                x / px,
                top / height,
                text,
                size=size,
                weight=weight,
                color=colour,
                va="top",
                ha="left",
                parse_math=False,
            )
            top -= line
        return top

    def _x_ticks(self, across: float) -> tuple[list[tuple[float, str]], bool]:
        """Ticks that do not run into each other; names are turned upright when they must be."""
        most = 40 if self.spec.x.scale is AxisScale.CATEGORY else 8
        for count in range(most, 1, -1):
            ticks = ticks_of(self.spec.x, self.axes.get_xlim(), count)
            widest = max((self.extent(text, self.size)[0] for _, text in ticks), default=0.0)
            if self.spec.x.scale is AxisScale.CATEGORY:
                slot = across / max(len(self.spec.x.categories), 1) * stride(self.spec.x, count)
                if widest + 6 <= slot:
                    return ticks, False
                if count * self.size * 1.45 * 100 / 72 <= across and len(ticks) <= count:
                    return ticks, True
            elif (widest + 10) * len(ticks) <= across:
                return ticks, False
        return ticks_of(self.spec.x, self.axes.get_xlim(), 2), False

    def _set_ticks(self, x: list[tuple[float, str]], y: list[tuple[float, str]], turned: bool) -> None:
        self.axes.set_xticks([at for at, _ in x], [text for _, text in x], parse_math=False)
        self.axes.set_yticks([at for at, _ in y], [text for _, text in y], parse_math=False)
        if turned:
            for text in self.axes.get_xticklabels():
                text.set(rotation=90, ha="center", va="top")
        for scale, axis in ((self.spec.x.scale, self.axes.xaxis), (self.spec.y.scale, self.axes.yaxis)):
            if scale is AxisScale.CATEGORY:
                axis.set_tick_params(length=0)

    # ---- legend: only for shapes, which cannot be labelled one by one
    def _legend_entries(self) -> list[tuple[str, Line2D]]:
        entries: dict[str, Line2D] = {}
        for mark in self.spec.marks:
            if not isinstance(mark, Points | Segments | Bars):
                continue
            used = sorted(set(mark.roles), key=list(Role).index)
            words = [look(role).word for role in used]
            if isinstance(mark, Points | Bars) and STATUSES & set(used) and all(words):
                for role, word in zip(used, words, strict=True):
                    entries.setdefault(word, self._sample(role, Points))
            elif mark.label and used:
                entries.setdefault(drawable(mark.label), self._sample(used[0], type(mark)))
        return list(entries.items())

    def _sample(self, role: Role, kind: type[Mark]) -> Line2D:
        """A specimen of a mark for the legend."""
        if kind is Points:
            return Line2D([], [], linestyle="none", **marker_style(role, self.size * 0.62))
        thick = 5.0 if kind is Bars else 1.4
        return Line2D([], [], color=look(role).light, linewidth=thick, solid_capstyle="butt")

    def _legend_rows(self, room: float) -> list[list[tuple[str, Line2D, float]]]:
        rows: list[list[tuple[str, Line2D, float]]] = []
        used = room + 1.0
        for word, handle in self._legend_entries():
            wide = self.extent(word, self.size)[0] + 34
            if used + wide > room:
                rows.append([])
                used = 0.0
            rows[-1].append((word, handle, wide))
            used += wide
        return rows

    def _legend(
        self, rows: list[list[tuple[str, Line2D, float]]], left: float, top: float, line: float
    ) -> float:
        px, height = self.figure.get_size_inches() * 100
        for row in rows:
            at = left
            for word, handle, wide in row:
                middle = top - line * 0.42
                dot = handle.get_linestyle() == "None"
                handle.set_data(
                    [(at + 8) / px] if dot else [at / px, (at + 16) / px],
                    [middle / height] * (1 if dot else 2),
                )
                handle.set_transform(self.figure.transFigure)
                self.figure.add_artist(handle)
                self._write([word], at + 21, top, self.size, line, "normal", INK)
                at += wide
            top -= line
        return top

    # ---- labels
    def _end_labels(self) -> list[tuple[str, float, str, float]]:
        """Lines that reach the right edge are named in the margin: text, height, colour, width."""
        found = []
        low, high = self.axes.get_xlim()
        bottom, top = sorted(self.axes.get_ylim())
        for mark in self.spec.marks:
            if not isinstance(mark, Line) or not mark.label:
                continue
            end = last_seen(mark, low, high, bottom, top)
            text = drawable(mark.label)
            wide, _ = self.extent(text, self.size)
            if end and end[0] >= high - 0.06 * (high - low) and wide <= 0.27 * self.inches * 100:
                found.append((text, end[1], look(mark.role).light, wide))
        return found
