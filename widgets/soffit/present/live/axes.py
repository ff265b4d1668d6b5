"""Limits and ticks of an interactive figure: fixed before it is drawn, so that a moving mark moves nothing else."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

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
    Rule,
    Segments,
)
from soffit.present.wording import show

__all__ = ["MOST_NAMES", "limits", "positions", "tick_key", "ticks"]

Floats = npt.NDArray[np.float64]

MOST_NAMES = 40
"""Categories up to which each has its name on the axis."""

_STEPS = (1.0, 2.0, 5.0, 10.0)


def positions(values: Any, axis: Axis) -> Floats:
    """Positions on an axis as floats: dates as milliseconds since 1970."""
    if axis.scale is AxisScale.DATE:
        stamps = pd.DatetimeIndex(np.atleast_1d(np.asarray(values)))
        if stamps.tz is not None:
            stamps = stamps.tz_localize(None)
        return stamps.to_numpy().astype("datetime64[ms]").astype(np.int64).astype(float)
    return np.asarray(values, dtype=float)


def _reach(marks: tuple[Mark, ...], axis: Axis, *, horizontal: bool) -> Floats:
    parts: list[Any] = []
    for mark in marks:
        if isinstance(mark, Points | Line):
            parts.append(mark.x if horizontal else mark.y)
        elif isinstance(mark, Band):
            parts += [mark.x] if horizontal else [mark.low, mark.high]
        elif isinstance(mark, Segments):
            along = (mark.orientation is Orientation.HORIZONTAL) is horizontal
            parts += [mark.low, mark.high] if along else [mark.at]
        elif isinstance(mark, Bars):
            along = (mark.orientation is Orientation.HORIZONTAL) is horizontal
            parts += [mark.length, [0.0]] if along else [mark.at]
        elif isinstance(mark, Rule) and (mark.orientation is Orientation.VERTICAL) is horizontal:
            parts.append([mark.at])
    flat: Floats = np.concatenate([positions(part, axis).ravel() for part in parts]) if parts else np.empty(0)
    finite: Floats = flat[np.isfinite(flat)]
    return finite


def limits(axis: Axis, marks: tuple[Mark, ...], *, horizontal: bool) -> tuple[float, float]:
    """Lowest and highest position shown, with some air around the marks.

    Parameters
    ----------
    axis : Axis
        Its own limits win.
    marks : tuple of Mark
        What is to fit.
    horizontal : bool
        Whether it is the x axis.
    """
    if axis.limits is not None:
        low, high = positions(axis.limits, axis)
        return float(low), float(high)
    if axis.scale is AxisScale.CATEGORY:
        return -0.6, max(len(axis.categories), 1) - 0.4
    values = _reach(marks, axis, horizontal=horizontal)
    if axis.scale is AxisScale.LOG:
        values = values[values > 0]
        if not len(values):
            return 0.1, 1.0
        factor = max(float(values.max() / values.min()) ** 0.05, 1.1)
        return float(values.min()) / factor, float(values.max()) * factor
    if not len(values):
        return 0.0, 1.0
    low, high = float(values.min()), float(values.max())
    air = (0.01 if axis.scale is AxisScale.DATE else 0.06) * (high - low) or abs(high) * 0.1 or 0.5
    bars_from_zero = any(isinstance(mark, Bars) for mark in marks)
    return (
        low if bars_from_zero and low == 0 else low - air,
        high if bars_from_zero and high == 0 else high + air,
    )


def ticks(axis: Axis, low: float, high: float, most: int) -> tuple[Floats, tuple[str, ...]]:
    """Positions and texts of at most about `most` ticks, no two texts alike.

    Texts come from the one place where numbers become words; decimals that are zero in all of them are left off.
    A category axis names every category up to :data:`MOST_NAMES`, for which the figure must be tall enough.
    """
    if axis.scale is AxisScale.CATEGORY:
        stride = max(1, -(-len(axis.categories) // MOST_NAMES))
        at = np.arange(0, len(axis.categories), stride)
        return at.astype(float), tuple(axis.categories[i] for i in at)
    # A tick at zero is a position, not a p-value below what is worth printing.
    form = NumberForm.STATISTIC if axis.form is NumberForm.PVALUE else axis.form
    for bins in range(most, 0, -1):
        if axis.scale is AxisScale.DATE:
            values, texts = _date_ticks(low, high, bins)
        else:
            values = _decades(low, high) if axis.scale is AxisScale.LOG else _round_values(low, high, bins)
            texts = _shortened([show(float(value), form) for value in values])
        if len(set(texts)) == len(texts):
            return values, tuple(texts)
    return np.empty(0), ()


def _round_values(low: float, high: float, bins: int) -> Floats:
    rough = (high - low) / bins
    if not rough > 0:
        return np.array([low])
    power = 10.0 ** np.floor(np.log10(rough))
    step = next(factor * power for factor in _STEPS if factor * power >= rough * (1 - 1e-9))
    first, last = np.ceil(low / step - 1e-9), np.floor(high / step + 1e-9)
    found: Floats = np.round(np.arange(first, last + 1) * step, 12) + 0.0  # no negative zero
    return found


def _decades(low: float, high: float) -> Floats:
    powers = np.arange(np.floor(np.log10(low)), np.ceil(np.log10(high)) + 1)
    values = np.outer(10.0**powers, [1.0, 2.0, 5.0] if len(powers) < 5 else [1.0]).ravel()
    return values[(values >= low) & (values <= high)]


def _date_ticks(low: float, high: float, bins: int) -> tuple[Floats, list[str]]:
    first, last = pd.Timestamp(low, unit="ms"), pd.Timestamp(high, unit="ms")
    months = (last - first).days / 30.44
    for step in (1, 3, 6, 12, 24, 60, 120, 240, 480):
        if months / step <= bins:
            break
    start = pd.Timestamp(first.year - first.year % max(step // 12, 1), 1, 1)
    stamps = pd.date_range(start, last, freq=pd.DateOffset(months=step))
    stamps = stamps[stamps >= first]
    texts = [show(stamp, NumberForm.DATE) for stamp in stamps]
    if all(text.endswith("-01") for text in texts):
        texts = [text.removesuffix("-01") for text in texts]
    return stamps.to_numpy().astype("datetime64[ms]").astype(np.int64).astype(float), texts


def _shortened(texts: list[str]) -> list[str]:
    while texts and all(_cut(text) for text in texts):
        texts = [_cut(text) for text in texts]
    return texts


def _cut(text: str) -> str:
    """One trailing zero less, or an empty text where there is none."""
    digits = text.rstrip("% bp")
    if "." not in digits or digits[-1] not in "0.":
        return ""
    return digits[:-1].rstrip(".") + text[len(digits) :]


def tick_key(value: float) -> str:
    """How a browser writes a number that it uses as the key of a tick's text."""
    if value == int(value) and abs(value) < 1e21:
        return str(int(value))
    if abs(value) >= 1e-6:
        return np.format_float_positional(value, trim="-")
    mantissa, exponent = repr(value).split("e")
    return f"{mantissa}e-{exponent.lstrip('-').lstrip('0')}"
