"""Returns or prices: declared, or told from the numbers and said."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from soffit.errors import InputError
from soffit.intake.options import Content, Role
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed
from soffit.intake.tables import PRICES, Table

__all__ = ["mark_prices", "prices_to_returns"]

# A column of positive numbers is one of prices when its level is above the first, or near the second or above and
# never far below it. Common practice, no source.
_SURELY_PRICES, _INDEX_LEVEL, _INDEX_FLOOR = 5.0, 0.8, 0.5
_SURELY_RETURNS = 0.08
_LARGE_STEP = 0.25
_LEAST, _LEAST_INDEX = 6, 12


def mark_prices(
    table: Table, declared: tuple[Content, Mapping[str, Content]], roles: Mapping[str, Role]
) -> None:
    """Mark the columns that are prices; they become returns once all sources share a calendar.

    A column is taken for prices when all its values are positive, each is close to the one before, and their
    level is far above any return. What could be either is refused.

    Raises
    ------
    InputError
        If a column could be prices or returns, or a price is not positive.
    """
    default, named = declared
    positive = np.fmin.reduce(table.values, axis=0) > 0
    for position, name in enumerate(table.names):
        told = named.get(name, default)
        if told is Content.DETECT and not positive[position]:
            continue
        if roles[name] in (Role.NON_TRADED, Role.RISK_FREE) and name not in named:
            continue
        if (_content(table, position) if told is Content.DETECT else told) is not Content.PRICES:
            continue
        wrong = np.flatnonzero(table.values[:, position] <= 0)
        if len(wrong):
            raise InputError(
                f"The price of '{name}' is {table.values[wrong[0], position]:g} in {table.place(int(wrong[0]))}",
                allowed="prices above zero",
                remedy="correct it, leave the cell empty, or say which columns are prices: "
                "content={'...': 'prices'}",
            )
        table.units[name] = PRICES


def _content(table: Table, position: int) -> Content:
    x = table.values[:, position]
    x = x[~np.isnan(x)]
    if len(x) < _LEAST or table.names[position] in table.signs:
        return Content.RETURNS
    middle = float(np.median(x))
    steps = float(np.median(np.abs(np.diff(x)) / x[:-1]))
    if steps > _LARGE_STEP or middle < _SURELY_RETURNS:
        return Content.RETURNS
    like_an_index = float(x.min()) > _INDEX_FLOOR and middle > _INDEX_LEVEL and len(x) >= _LEAST_INDEX
    if middle > _SURELY_PRICES or like_an_index:
        return Content.PRICES
    raise InputError(
        f"Column '{table.names[position]}' of {table.source} is always positive and moves little "
        f"(median {middle:g}): "
        "it could be prices or returns",
        remedy=f"say which with content={{'{table.names[position]}': 'prices'}} or 'returns'",
    )


def prices_to_returns(table: Table, consecutive: NDArray[np.bool_], record: RecordBuilder) -> None:
    """Turn price columns into simple returns; the first price is the base.

    Parameters
    ----------
    table : Table
        On its final calendar; changed in place.
    consecutive : ndarray of bool
        T-1; whether each period follows the one before without a gap.
    record : RecordBuilder
        Where it is said.
    """
    priced = [position for position, name in enumerate(table.names) if table.units.get(name) == PRICES]
    if not priced:
        return
    across = 0
    for position in priced:
        prices = table.values[:, position].copy()
        held = ~np.isnan(prices)
        table.values[0, position] = np.nan
        table.values[1:, position] = np.where(consecutive, prices[1:] / prices[:-1] - 1.0, np.nan)
        after = held[1:] & ~(held[:-1] & consecutive)
        across += int(after[int(held.argmax()) :].sum())
    names = [table.names[position] for position in priced]
    record.add(
        EntryKind.PRICES,
        f"Read as prices and turned into simple returns: {listed(names)}. The first price is the base.",
        Severity.REPAIRED,
        series=names,
        rows=len(names),
        source=table.source,
    )
    if across:
        record.add(
            EntryKind.PRICES,
            f"{across} prices follow a gap and so have no return.",
            Severity.WARNING,
            series=names,
            rows=across,
            source=table.source,
        )
    if len(priced) == len(table.names):
        record.dropped(table.source, 1)
        record.add(
            EntryKind.PRICES,
            f"The row of the first prices, {table.place(0)}, has no return and was dropped.",
            Severity.REPAIRED,
            rows=1,
            source=table.source,
        )
        table.take(np.arange(1, len(table.stamps)))
