"""Positions, limits and ticks: what stands on an axis."""

from __future__ import annotations

import unicodedata
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
from matplotlib.ticker import LogLocator, MaxNLocator

from soffit.present.spec import (
    Axis,
    AxisScale,
    Band,
    Bars,
    Line,
    Mark,
    NumberForm,
    Orientation,
    Points,
    Role,
    Rule,
    Segments,
)
from soffit.present.wording import show

__all__ = [
    "Floats",
    "along_path",
    "drawable",
    "last_seen",
    "limits_of",
    "numbers",
    "position",
    "spread_over",
    "stride",
    "ticks_of",
]

Floats = npt.NDArray[np.float64]
_DAY_ZERO = np.datetime64("1970-01-01")
_MONTHS = (1, 2, 3, 6, 12, 24, 60, 120, 240, 600, 1200)


def drawable(text: str, most: int = 0) -> str:
    """Text on one line without invisible control characters, which have no glyph; shortened if asked."""
    seen = "".join(
        " " if char.isspace() else char
        for char in text
        if char.isspace() or unicodedata.category(char)[0] != "C"
    )
    line = " ".join(seen.split())
    return line[: most - 1].rstrip() + "…" if most and len(line) > most else line


def spread_over(roles: tuple[Role, ...], n: int) -> tuple[Role, ...]:
    """One role for each of n things, when a single one stands for all."""
    return roles * n if len(roles) == 1 else roles


def numbers(values: Any) -> Floats:
    """Positions as floats; dates as days since 1970."""
    array = np.asarray(values)
    if array.dtype.kind == "M":
        return np.where(np.isnat(array), np.nan, (array - _DAY_ZERO) / np.timedelta64(1, "D"))
    return np.asarray(array, dtype=float)


def position(value: Any, axis: Axis) -> float:
    """One position as a float; a date on a date axis as days since 1970."""
    if axis.scale is AxisScale.DATE and not isinstance(value, int | float):
        return float(numbers(np.asarray(pd.Timestamp(value).to_datetime64())))
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
            parts.append([position(mark.at, axis)])
    flat = np.concatenate([numbers(part).ravel() for part in parts]) if parts else np.empty(0)
    finite: Floats = flat[np.isfinite(flat)]
    return finite


def limits_of(axis: Axis, marks: tuple[Mark, ...], horizontal: bool, from_zero: bool) -> tuple[float, float]:
    """Lowest and highest value shown, from the axis or else from what is finite in the marks."""
    if axis.limits is not None:
        low, high = (position(limit, axis) for limit in axis.limits)
        return (low, high) if low != high else (low - 0.5, high + 0.5)
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
        if low == high:
            return 0.0, 1.0
    pad = 0.05 * (high - low) or abs(high) * 0.1 or 0.5
    if axis.scale is AxisScale.DATE:
        pad *= 0.2
    return low - (0.0 if from_zero and low == 0 else pad), high + (0.0 if from_zero and high == 0 else pad)


def stride(axis: Axis, most: int) -> int:
    """Every how many categories one is named, so that at most `most` are."""
    return max(1, -(-len(axis.categories) // most))


def ticks_of(axis: Axis, limits: tuple[float, float], most: int) -> list[tuple[float, str]]:
    """Positions and texts of at most about `most` ticks, no two texts alike."""
    low, high = sorted(limits)
    if axis.scale is AxisScale.CATEGORY:
        names = axis.categories
        return [(float(i), drawable(names[i], 28)) for i in range(0, len(names), stride(axis, most))]
    for bins in range(most, 0, -1):
        if axis.scale is AxisScale.DATE:
            values = _date_ticks(low, high, bins)
            texts = [show(_date(value), NumberForm.DATE) for value in values]
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
    """Starts of months, of every second, of quarters … of years, as many as fit."""
    first, last = (int(_date(value).astype("datetime64[M]").astype(int)) for value in (low, high))
    for step in _MONTHS:
        # Months count from 1970-01, so multiples of 12 are Januaries.
        months = np.arange(-(-first // step) * step, last + 1, step)
        values = numbers(months.astype("datetime64[M]").astype("datetime64[D]"))
        values = values[(values >= low) & (values <= high)]
        if len(values) <= most:
            break
    return [float(value) for value in values]


def _date(value: float) -> np.datetime64:
    return _DAY_ZERO + np.timedelta64(round(value), "D")


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


def last_seen(mark: Line, low: float, high: float, bottom: float, top: float) -> tuple[float, float] | None:
    """Last point of a line within the axes; where it leaves them if it does."""
    x, y = numbers(mark.x), np.asarray(mark.y, dtype=float)
    good = np.isfinite(x) & np.isfinite(y)
    x, y = x[good], y[good]
    if not len(x):
        return None
    if len(x) > 1:
        steps = np.linspace(0, len(x) - 1, max(400, len(x)))
        x, y = np.interp(steps, np.arange(len(x)), x), np.interp(steps, np.arange(len(y)), y)
    seen = np.flatnonzero((x >= low) & (x <= high) & (y >= bottom) & (y <= top))
    return (float(x[seen[-1]]), float(y[seen[-1]])) if len(seen) else None


def along_path(spots: Floats, step: float = 6.0) -> Floats:
    """Points every few pixels along a path."""
    spots = spots[np.isfinite(spots).all(axis=1)]
    if len(spots) < 2:
        return spots
    length = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(spots, axis=0).T))])
    at = np.linspace(0, length[-1], int(min(length[-1] / step, 2000)) + 2)
    return np.column_stack([np.interp(at, length, spots[:, 0]), np.interp(at, length, spots[:, 1])])
