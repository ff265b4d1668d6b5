"""FigureSpec -> matplotlib: the still pictures of memos and of notebooks without a kernel.

Nothing global is touched for longer than a call: figures are built from the object interface, under a style
of their own, so that neither an analyst's matplotlibrc nor their open figures play a part. Always light.
"""

from __future__ import annotations

import io
import textwrap
import unicodedata
import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from enum import StrEnum
from typing import Any

import matplotlib.style as mpl_style
import numpy as np
import numpy.typing as npt
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.dates import AutoDateLocator, date2num, num2date
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.lines import Line2D
from matplotlib.ticker import LogLocator, MaxNLocator

from soffit.errors import SettingError, SoffitWarning
from soffit.present.label_places import Box, Places, around, spread
from soffit.present.spec import (
    Axis,
    AxisScale,
    Band,
    Bars,
    FigureSpec,
    Line,
    Mark,
    NumberForm,
    Orientation,
    Points,
    Role,
    Rule,
    Segments,
)
from soffit.present.theme import FONT_FAMILY, MEMO_WIDTHS, Marker, look
from soffit.present.wording import plural, show

__all__ = ["MemoWidth", "draw", "pdf_bytes", "png_bytes", "svg_bytes"]

Floats = npt.NDArray[np.float64]

INK, SOFT, GRID = "#1A1A1A", "#555555", "#E3E3E3"
_MARKERS = {
    Marker.CIRCLE: "o",
    Marker.TRIANGLE: "^",
    Marker.DIAMOND: "D",
    Marker.SQUARE: "s",
    Marker.CROSS: "X",
}
_RASTER_ABOVE = 3000  # more points than this are a picture inside SVG and PDF, or the files grow to megabytes
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
        return _Sheet(spec, _width(width), title=title, footnote=footnote).figure


def png_bytes(
    spec: FigureSpec,
    *,
    width: MemoWidth | str = MemoWidth.PAGE,
    dpi: int = 110,
    title: bool = True,
    footnote: bool = False,
) -> bytes:
    """PNG of a figure; the same bytes for the same figure."""
    return _saved(
        spec, "png", {"Software": None, "Title": _drawable(spec.title)}, width, title, footnote, dpi
    )


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
        "Title": _drawable(spec.title),
        "Description": _drawable(spec.alt),
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
    about = {"CreationDate": None, "Creator": "soffit", "Producer": "soffit", "Title": _drawable(spec.title)}
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
        figure = _Sheet(spec, _width(width), title=title, footnote=footnote).figure
        figure.savefig(target, format=kind, dpi=dpi, metadata=about)
    return target.getvalue()


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


def _drawable(text: str, most: int = 0) -> str:
    """Text on one line without invisible control characters, which have no glyph; shortened if asked."""
    seen = "".join(
        " " if char.isspace() else char
        for char in text
        if char.isspace() or unicodedata.category(char)[0] != "C"
    )
    line = " ".join(seen.split())
    return line[: most - 1].rstrip() + "…" if most and len(line) > most else line


def _spread_over(roles: tuple[Role, ...], n: int) -> tuple[Role, ...]:
    return roles * n if len(roles) == 1 else roles


class _Sheet:
    """One figure in the making: limits, then room, then marks, then labels."""

    def __init__(self, spec: FigureSpec, width: MemoWidth, *, title: bool, footnote: bool) -> None:
        self.spec = spec
        self.size = 8.0 if width is MemoWidth.PAGE else 7.0
        self.inches = MEMO_WIDTHS[width]
        self.figure = Figure(figsize=(self.inches, self.inches / spec.aspect), dpi=100, facecolor="white")
        self.canvas = FigureCanvasAgg(self.figure)
        self.axes: Axes = self.figure.add_axes((0.1, 0.1, 0.8, 0.8))
        self.title = _drawable(spec.title) if title else ""
        self.footnote = _drawable(spec.footnote) if footnote else ""
        self.unnamed = 0
        self._limits()
        self._frame()
        self._room()
        for mark in spec.marks:
            _PAINTERS[type(mark)](self, mark)
        self._labels()

    # ---- scales
    def _limits(self) -> None:
        bars = [mark for mark in self.spec.marks if isinstance(mark, Bars)]
        for axis, horizontal in ((self.spec.x, True), (self.spec.y, False)):
            way = Orientation.HORIZONTAL if horizontal else Orientation.VERTICAL
            low, high = _limits(
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
        for axis, name in ((self.spec.x, "x"), (self.spec.y, "y")):
            if axis.scale is AxisScale.CATEGORY:
                self.axes.grid(False, axis=name)
        self.axes.tick_params(labelsize=self.size, colors=SOFT, labelcolor=INK, length=3, width=0.6)

    # ---- room
    def extent(self, text: str, size: float, weight: str = "normal") -> tuple[float, float]:
        """Width and height of one line of text, in pixels at the figure's own resolution."""
        renderer = self.canvas.get_renderer()
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
        y_ticks = _ticks(
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
        x_title = self.wrap(_drawable(self.spec.x.label), self.size, px - left - right)
        foot = len(below) * line * 0.92 + (4 if below else 0)
        bottom = pad + foot + line * len(x_title) + 3 + tallest + 7
        heading = self.wrap(self.title, self.size + 2, px - 2 * pad, "bold")
        y_title = self.wrap(_drawable(self.spec.y.label), self.size, px - 2 * pad)
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
            ticks = _ticks(self.spec.x, self.axes.get_xlim(), count)
            widest = max((self.extent(text, self.size)[0] for _, text in ticks), default=0.0)
            if self.spec.x.scale is AxisScale.CATEGORY:
                slot = across / max(len(self.spec.x.categories), 1) * _stride(self.spec.x, count)
                if widest + 6 <= slot:
                    return ticks, False
                if count * self.size * 1.45 * 100 / 72 <= across and len(ticks) <= count:
                    return ticks, True
            elif (widest + 10) * len(ticks) <= across:
                return ticks, False
        return _ticks(self.spec.x, self.axes.get_xlim(), 2), False

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
            if isinstance(mark, Points) or (isinstance(mark, Bars) and len(set(mark.roles)) > 1):
                used = sorted(set(_spread_over(mark.roles, len(mark.names))), key=list(Role).index)
                for role in used:
                    word = _drawable(mark.label) if len(used) == 1 else look(role).word or str(role)
                    if word and (len(used) > 1 or mark.label):
                        entries.setdefault(
                            word, Line2D([], [], linestyle="none", **_marker(role, self.size * 0.62))
                        )
            elif isinstance(mark, Segments | Bars) and mark.label:
                role = mark.roles[0] if mark.roles else Role.MUTED
                thick = 1.4 if isinstance(mark, Segments) else 5.0
                entries.setdefault(
                    _drawable(mark.label),
                    Line2D([], [], color=look(role).light, linewidth=thick, solid_capstyle="butt"),
                )
        return list(entries.items())

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
            end = _last_seen(mark, low, high, bottom, top)
            text = _drawable(mark.label)
            wide, _ = self.extent(text, self.size)
            if end and end[0] >= high - 0.06 * (high - low) and wide <= 0.27 * self.inches * 100:
                found.append((text, end[1], look(mark.role).light, wide))
        return found

    def _labels(self) -> None:
        frame = self.axes.get_window_extent()
        places = Places(Box(frame.x0, frame.y0, frame.x1, frame.y1))
        for boxes, weight in self._obstacles():
            places.avoid(boxes, weight)
        self._margin_labels(frame)
        outside = {text for text, *_ in self.end_labels}
        for mark in self.spec.marks:
            if isinstance(mark, Rule) and mark.label:
                self._rule_label(mark, places, frame)
        for mark in self.spec.marks:
            if isinstance(mark, Line) and mark.label and _drawable(mark.label) not in outside:
                self._line_label(mark, places)
            elif isinstance(mark, Band) and mark.label:
                self._band_label(mark, places)
        for mark in self.spec.marks:
            if isinstance(mark, Points):
                self._point_labels(mark, places)
        if self.unnamed:
            # Said, not hidden: a reader must know that names are missing.
            self._text(
                f"{plural(self.unnamed, 'name')} not written for want of room",
                frame.x1,
                frame.y1 + 3,
                SOFT,
                ha="right",
                va="bottom",
                size=self.size - 1.5,
            )

    def _text(self, text: str, x: float, y: float, colour: str, **more: Any) -> None:
        at_x, at_y = self.figure.transFigure.inverted().transform((x, y))
        self.figure.text(
            at_x,
            at_y,
            text,
            color=colour,
            parse_math=False,
            **{"size": self.size, "ha": "left", "va": "center", **more},
        )

    def _settle(
        self, text: str, colour: str, candidates: Callable[[float, float], list[Box]], places: Places
    ) -> Box | None:
        wide, high = self.extent(text, self.size)
        boxes = candidates(wide, high)
        chosen = places.settle(boxes)
        if chosen is None:
            return None
        box = boxes[chosen]
        veil = {"facecolor": "white", "alpha": 0.75, "edgecolor": "none", "pad": 0.4}
        self._text(text, box.x0, (box.y0 + box.y1) / 2, colour, bbox=veil)
        return box

    def _leader(self, x: float, y: float, box: Box) -> None:
        to_x = min(max(x, box.x0), box.x1)
        to_y = min(max(y, box.y0), box.y1)
        if np.hypot(to_x - x, to_y - y) > self.size * 1.6:
            ends = self.figure.transFigure.inverted().transform([(x, y), (to_x, to_y)])
            self.figure.add_artist(Line2D(ends[:, 0], ends[:, 1], color="#9A9A9A", linewidth=0.5))

    def _margin_labels(self, frame: Any) -> None:
        pixel = self.axes.transData.transform
        wished = [float(pixel((self.axes.get_xlim()[0], y))[1]) for _, y, _, _ in self.end_labels]
        high = self.size * 1.3 * 100 / 72
        for (text, _, colour, _), was, at in zip(
            self.end_labels, wished, spread(wished, high, frame.y0, frame.y1), strict=True
        ):
            self._text(text, frame.x1 + 7, at, colour)
            if abs(was - at) > 2:
                ends = self.figure.transFigure.inverted().transform([(frame.x1, was), (frame.x1 + 6, at)])
                self.figure.add_artist(Line2D(ends[:, 0], ends[:, 1], color=colour, linewidth=0.5))

    def _rule_label(self, mark: Rule, places: Places, frame: Any) -> None:
        level = mark.orientation is Orientation.HORIZONTAL
        at = float(self._rule_ends(mark)[0, 1 if level else 0])
        if not (frame.y0 if level else frame.x0) - 1 <= at <= (frame.y1 if level else frame.x1) + 1:
            return

        def along(wide: float, high: float) -> list[Box]:
            gap = 3.0
            steps = np.linspace(0, 1, 13)
            if level:
                room = frame.width - wide - 2 * gap
                return [
                    Box.at(frame.x1 - gap - wide - step * room, y, wide, high)
                    for step in steps
                    for y in (at + 1.5, at - high - 1.5)
                ]
            room = frame.height - high - 2 * gap
            return [
                Box.at(x, frame.y1 - gap - high - step * room, wide, high)
                for step in steps
                for x in (at + gap, at - gap - wide)
            ]

        self._count(self._settle(_drawable(mark.label), look(mark.role).light, along, places))

    def _line_label(self, mark: Line, places: Places) -> None:
        low, high = self.axes.get_xlim()
        end = _last_seen(mark, low, high, *sorted(self.axes.get_ylim()))
        if end is None:
            return
        x, y = self.axes.transData.transform(end)
        box = self._settle(
            _drawable(mark.label),
            look(mark.role).light,
            lambda wide, tall: around(x, y, wide, tall, self.size * 0.6),
            places,
        )
        if box:
            self._leader(x, y, box)
        self._count(box)

    def _band_label(self, mark: Band, places: Places) -> None:
        x, low, high = _numbers(mark.x), _numbers(mark.low), _numbers(mark.high)
        bottom, top = sorted(self.axes.get_ylim())
        good = np.isfinite(x) & np.isfinite(low) & np.isfinite(high)
        x, low, high = x[good], np.clip(low[good], bottom, top), np.clip(high[good], bottom, top)
        pixel = self.axes.transData.transform
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

        self._count(self._settle(_drawable(mark.label), look(mark.role).light, within, places))

    def _point_labels(self, mark: Points, places: Places) -> None:
        roles = _spread_over(mark.roles, len(mark.x))
        spots = self.axes.transData.transform(np.column_stack([_numbers(mark.x), _numbers(mark.y)]))
        frame = self.axes.get_window_extent()
        for index in mark.labelled:
            x, y = spots[index]
            if not (frame.x0 <= x <= frame.x1 and frame.y0 <= y <= frame.y1):
                continue
            box = self._settle(
                _drawable(mark.names[index], 32),
                look(roles[index]).light,
                lambda wide, high, x=x, y=y: around(x, y, wide, high, self.size * 0.75),  # type: ignore[misc]
                places,
            )
            if box:
                self._leader(x, y, box)
            self._count(box)

    def _rule_ends(self, mark: Rule) -> Floats:
        across, up = self.axes.get_xlim(), self.axes.get_ylim()
        if mark.orientation is Orientation.HORIZONTAL:
            ends = [(across[0], mark.at), (across[1], mark.at)]
        else:
            at = _position(mark.at, self.spec.x)
            ends = [(at, up[0]), (at, up[1])]
        return np.asarray(self.axes.transData.transform(ends), dtype=float)

    def _count(self, box: Box | None) -> None:
        self.unnamed += box is None

    def _obstacles(self) -> list[tuple[Floats, float]]:
        found: list[tuple[Floats, float]] = []
        pixel = self.axes.transData.transform
        for mark in self.spec.marks:
            half = self.size * 0.55
            weight = 1.0
            if isinstance(mark, Points):
                spots = pixel(np.column_stack([_numbers(mark.x), _numbers(mark.y)]))
            elif isinstance(mark, Line):
                spots, half, weight = _along(pixel(np.column_stack([_numbers(mark.x), mark.y]))), 1.5, 0.25
            elif isinstance(mark, Segments):
                up = mark.orientation is Orientation.VERTICAL
                at = _numbers(mark.at)
                shares = np.linspace(0, 1, 9)[:, None]
                span = (mark.low + (mark.high - mark.low) * shares).ravel()
                at = np.tile(at, 9)
                spots, half, weight = pixel(np.column_stack([at, span] if up else [span, at])), 1.5, 0.1
            elif isinstance(mark, Rule):
                spots, half, weight = _along(self._rule_ends(mark)), 0.8, 0.6
            else:
                continue
            spots = spots[np.isfinite(spots).all(axis=1)]
            found.append((np.hstack([spots - half, spots + half]), weight))
        return found


# ---- numbers on axes
def _numbers(values: Any) -> Floats:
    """Positions as floats; dates as matplotlib's days."""
    array = np.asarray(values)
    if array.dtype.kind == "M":
        return np.asarray(date2num(array), dtype=float)
    return np.asarray(array, dtype=float)


def _position(value: Any, axis: Axis) -> float:
    if axis.scale is AxisScale.DATE and not isinstance(value, int | float):
        return float(_numbers(np.asarray(pd.Timestamp(value).to_datetime64())))
    return float(value)


def _extents(marks: tuple[Mark, ...], horizontal: bool, axis: Axis) -> Floats:
    parts: list[Any] = []
    for mark in marks:
        if isinstance(mark, Points | Line):
            parts.append(mark.x if horizontal else mark.y)
        elif isinstance(mark, Band):
            parts += [mark.x] if horizontal else [mark.low, mark.high]
        elif isinstance(mark, Segments):
            along = (mark.orientation is Orientation.HORIZONTAL) == horizontal
            parts += [mark.low, mark.high] if along else [mark.at]
        elif isinstance(mark, Bars):
            along = (mark.orientation is Orientation.HORIZONTAL) == horizontal
            parts.append(mark.length if along else mark.at)
        elif isinstance(mark, Rule) and (mark.orientation is Orientation.VERTICAL) == horizontal:
            parts.append([_position(mark.at, axis)])
    flat = np.concatenate([_numbers(part).ravel() for part in parts]) if parts else np.empty(0)
    return flat[np.isfinite(flat)]


def _limits(axis: Axis, marks: tuple[Mark, ...], horizontal: bool, from_zero: bool) -> tuple[float, float]:
    if axis.limits is not None:
        return _position(axis.limits[0], axis), _position(axis.limits[1], axis)
    if axis.scale is AxisScale.CATEGORY:
        return -0.6, max(len(axis.categories), 1) - 0.4
    values = _extents(marks, horizontal, axis)
    if axis.scale is AxisScale.LOG:
        values = values[values > 0]
        if not len(values):
            return 0.1, 1.0
        low, high = float(values.min()), float(values.max())
        factor = max((high / low) ** 0.05, 1.1)
        return low / factor, high * factor
    if not len(values):
        return 0.0, 1.0
    low, high = float(values.min()), float(values.max())
    if from_zero:
        low, high = min(low, 0.0), max(high, 0.0)
    pad = 0.05 * (high - low) or abs(high) * 0.1 or 0.5
    if axis.scale is AxisScale.DATE:
        pad *= 0.2
    return low - (0.0 if from_zero and low == 0 else pad), high + (0.0 if from_zero and high == 0 else pad)


def _stride(axis: Axis, most: int) -> int:
    return max(1, -(-len(axis.categories) // most))


def _ticks(axis: Axis, limits: tuple[float, float], most: int) -> list[tuple[float, str]]:
    """Positions and texts of at most about `most` ticks, no two texts alike."""
    low, high = sorted(limits)
    if axis.scale is AxisScale.CATEGORY:
        names = axis.categories
        return [(float(i), _drawable(names[i], 28)) for i in range(0, len(names), _stride(axis, most))]
    for bins in range(most, 0, -1):
        if axis.scale is AxisScale.DATE:
            values = _date_ticks(low, high, bins)
            texts = [
                show(pd.Timestamp(num2date(value)).tz_localize(None), NumberForm.DATE) for value in values
            ]
            if all(text.endswith("-01") for text in texts):
                texts = [text.removesuffix("-01") for text in texts]
        else:
            locator = (
                LogLocator(numticks=bins)
                if axis.scale is AxisScale.LOG
                else MaxNLocator(bins, steps=[1, 2, 2.5, 5, 10])
            )
            values = [float(value) for value in locator.tick_values(low, high)]
            span = high - low
            values = [0.0 if abs(value) < 1e-9 * span else value for value in values]
            values = [value for value in values if low - 1e-9 * span <= value <= high + 1e-9 * span]
            # A tick at zero is a position, not a p-value below what is worth printing.
            form = NumberForm.STATISTIC if axis.form is NumberForm.PVALUE else axis.form
            texts = _shortened([show(value, form) for value in values])
        if len(set(texts)) == len(texts):
            return list(zip(values, texts, strict=True))
    return []


def _date_ticks(low: float, high: float, most: int) -> list[float]:
    locator = AutoDateLocator(minticks=1, maxticks=max(most, 2))
    values = locator.tick_values(num2date(low), num2date(high))
    return [float(value) for value in values if low <= value <= high]


def _shortened(texts: list[str]) -> list[str]:
    """Drop the decimals that are zero in every one of them."""
    while texts and all(_cut(text) is not None for text in texts):
        texts = [_cut(text) or text for text in texts]
    return texts


def _cut(text: str) -> str | None:
    digits = text.rstrip("% bp")
    unit = text[len(digits) :]
    if "." not in digits or digits[-1] not in "0.":
        return None
    return digits[:-1].rstrip(".") + unit


def _last_seen(mark: Line, low: float, high: float, bottom: float, top: float) -> tuple[float, float] | None:
    """Last point of a line within the axes; where it leaves them if it does."""
    x, y = _numbers(mark.x), np.asarray(mark.y, dtype=float)
    good = np.isfinite(x) & np.isfinite(y)
    x, y = x[good], y[good]
    if not len(x):
        return None
    if len(x) > 1:
        steps = np.linspace(0, len(x) - 1, max(400, len(x)))
        x, y = np.interp(steps, np.arange(len(x)), x), np.interp(steps, np.arange(len(y)), y)
    seen = np.flatnonzero((x >= low) & (x <= high) & (y >= bottom) & (y <= top))
    return (float(x[seen[-1]]), float(y[seen[-1]])) if len(seen) else None


def _along(spots: Floats, step: float = 6.0) -> Floats:
    """Points every few pixels along a path."""
    spots = spots[np.isfinite(spots).all(axis=1)]
    if len(spots) < 2:
        return spots
    length = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(spots, axis=0).T))])
    at = np.linspace(0, length[-1], int(min(length[-1] / step, 2000)) + 2)
    return np.column_stack([np.interp(at, length, spots[:, 0]), np.interp(at, length, spots[:, 1])])


# ---- marks
def _marker(role: Role, size: float) -> dict[str, Any]:
    drawn = look(role)
    return {
        "marker": _MARKERS[drawn.marker],
        "markersize": size,
        "markerfacecolor": drawn.light if drawn.filled else "white",
        "markeredgecolor": drawn.light,
        "markeredgewidth": 1.0,
    }


def _paint_points(sheet: _Sheet, mark: Points) -> None:
    roles = _spread_over(mark.roles, len(mark.x))
    x, y = _numbers(mark.x), _numbers(mark.y)
    many = len(x) > 400
    for role in sorted(set(roles), key=list(Role).index):
        chosen = np.array([one is role for one in roles])
        sheet.axes.plot(
            x[chosen],
            y[chosen],
            linestyle="none",
            zorder=4,
            rasterized=len(x) > _RASTER_ABOVE,
            **_marker(role, sheet.size * (0.4 if many else 0.62)),
        )


def _paint_segments(sheet: _Sheet, mark: Segments) -> None:
    at = _numbers(mark.at)
    colours = [look(role).light for role in _spread_over(mark.roles, len(at))]
    paint = sheet.axes.vlines if mark.orientation is Orientation.VERTICAL else sheet.axes.hlines
    paint(at, mark.low, mark.high, colors=colours, linewidth=1.1, zorder=3)


def _paint_line(sheet: _Sheet, mark: Line) -> None:
    drawn = look(mark.role)
    x = _numbers(mark.x)
    others = {one.role for one in sheet.spec.marks if isinstance(one, Line)} - {mark.role}
    marked: dict[str, Any] = {}
    if others and len(x) >= 8 and drawn.marker is not Marker.CIRCLE:
        # Shape tells curves apart where colour does not.
        marked = {**_marker(mark.role, sheet.size * 0.5), "markevery": max(1, len(x) // 8)}
    sheet.axes.plot(
        x,
        mark.y,
        color=drawn.light,
        linewidth=drawn.width,
        linestyle=(0, (4, 2.5)) if mark.dashed else "-",
        zorder=3.5,
        **marked,
    )


def _paint_band(sheet: _Sheet, mark: Band) -> None:
    sheet.axes.fill_between(
        _numbers(mark.x),
        mark.low,
        mark.high,
        color=look(mark.role).light,
        alpha=0.12,
        linewidth=0,
        zorder=1.5,
    )


def _paint_rule(sheet: _Sheet, mark: Rule) -> None:
    drawn = look(mark.role)
    style = {
        "color": drawn.light,
        "linewidth": drawn.width,
        "linestyle": (0, (4, 2.5)) if mark.dashed else "-",
        "zorder": 2.5,
    }
    if mark.orientation is Orientation.HORIZONTAL:
        sheet.axes.axhline(mark.at, **style)
    else:
        sheet.axes.axvline(_position(mark.at, sheet.spec.x), **style)


def _paint_bars(sheet: _Sheet, mark: Bars) -> None:
    at = _numbers(mark.at)
    colours = [look(role).light for role in _spread_over(mark.roles, len(at))]
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
    if len(set(mark.roles)) > 1:
        # The role's shape at the tip, so that colour is not the only sign.
        x, y = (at, _numbers(mark.length)) if upright else (_numbers(mark.length), at)
        tips = Points(mark.key, x, y, mark.names, mark.roles)
        _paint_points(sheet, tips)


_PAINTERS: dict[type[Mark], Callable[[_Sheet, Any], None]] = {
    Points: _paint_points,
    Segments: _paint_segments,
    Line: _paint_line,
    Band: _paint_band,
    Rule: _paint_rule,
    Bars: _paint_bars,
}
