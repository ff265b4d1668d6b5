"""The only place where a number becomes text: screen and memo show the same string."""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any

import pandas as pd

from soffit.present.spec import NumberForm

__all__ = ["DASH", "MINUS", "join_names", "plural", "show", "show_range"]

DASH = "–"
MINUS = "−"

_PLAIN = {
    NumberForm.RATIO: ".2f",
    NumberForm.STATISTIC: ".3f",
    NumberForm.COUNT: ",.0f",
    NumberForm.MONEY: ",.0f",
}


def show(value: Any, form: NumberForm) -> str:
    """Write one value in the trade's format.

    Parameters
    ----------
    value : float, int, str, date, bool or None
        The value, in the unit that the form expects (rates as decimals).
    form : NumberForm
        How this kind of number is written.

    Returns
    -------
    str
        The text; a dash for a value that does not exist. Negative numbers carry a true minus sign.
    """
    if isinstance(value, bool):
        return "yes" if value else "no"
    if value is None or value is pd.NaT or (isinstance(value, float) and math.isnan(value)):
        return DASH
    if form is NumberForm.TEXT or isinstance(value, str):
        return str(value)
    if form is NumberForm.DATE:
        return _month(value)
    return _number(float(value), form)


def _number(number: float, form: NumberForm) -> str:
    if math.isinf(number):
        return "no limit" if number > 0 else f"{MINUS}no limit"
    if form is NumberForm.PVALUE:
        return _pvalue(number)
    if form is NumberForm.PERCENT:
        text = f"{100 * number:.2f}%"
    elif form is NumberForm.SHARE:
        text = f"{100 * number:.0f}%"
    elif form is NumberForm.BASIS_POINTS:
        text = f"{10_000 * number:.1f} bp"
    else:
        text = format(number, _PLAIN[form])
    return _true_minus(text)


def _true_minus(text: str) -> str:
    if not text.startswith("-"):
        return text
    bare = text[1:]
    if not any(digit in bare for digit in "123456789"):
        return bare  # no negative zero
    return MINUS + bare


def _pvalue(number: float) -> str:
    if number < 0.0001:
        return "<0.0001"
    if number < 0.01:
        return f"{number:.4f}"
    return f"{number:.3f}"


def _month(value: Any) -> str:
    return f"{pd.Timestamp(value):%Y-%m}"


def show_range(low: Any, high: Any, form: NumberForm) -> str:
    """Write an interval: ``0.41 to 1.20``."""
    return f"{show(low, form)} to {show(high, form)}"


def plural(count: int, noun: str, many: str = "") -> str:
    """Write a count with its noun: ``1 alpha``, ``3 alphas``, ``no alphas``."""
    words = many or noun + "s"
    if count == 1:
        return f"1 {noun}"
    return f"{count:,} {words}" if count else f"no {words}"


def join_names(names: Iterable[str], *, most: int = 4) -> str:
    """Join names for a sentence, saying how many are left out beyond `most`."""
    listed = list(names)
    shown = listed[:most]
    rest = len(listed) - len(shown)
    if rest:
        return ", ".join(shown) + f" and {rest:,} more"
    if len(shown) < 2:
        return "".join(shown)
    return ", ".join(shown[:-1]) + " and " + shown[-1]
