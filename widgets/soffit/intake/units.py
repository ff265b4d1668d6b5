"""Units of each column, and returns or prices: declared, or told from the numbers and said."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from soffit.errors import InputError
from soffit.intake.columns import column_blocks, column_medians
from soffit.intake.options import Content, Frequency, Role, Units
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed
from soffit.intake.tables import PRICES, Table

__all__ = ["apply_units", "mark_prices", "prices_to_returns", "settle_units"]

Floats = NDArray[np.float64]

# Median absolute return, scaled to a month: below the first a column is decimal, above the second per cent.
# A decimal 8% is an annual volatility of about 40%; a per-cent 0.5 is one of about 2.6%. Between the two a
# column could be either, and its neighbours in the source decide. Common practice, no source.
_SURELY_DECIMAL, _SURELY_PERCENT, _BEYOND_PERCENT = 0.08, 0.5, 45.0
_SCALE = {Units.DECIMAL: 1.0, Units.PERCENT: 100.0, Units.BASIS_POINTS: 10_000.0}
_LEAST = 6


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
                remedy="correct it, or leave the cell empty",
            )
        table.units[name] = PRICES


def _content(table: Table, position: int) -> Content:
    x = table.values[:, position]
    x = x[~np.isnan(x)]
    if len(x) < _LEAST or table.names[position] in table.signs:
        return Content.RETURNS
    middle = float(np.median(x))
    steps = float(np.median(np.abs(np.diff(x)) / x[:-1]))
    if steps > 0.25 or middle < _SURELY_DECIMAL:
        return Content.RETURNS
    if middle > 5.0 or (float(x.min()) > 0.5 and middle > 0.8 and len(x) >= 12):
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


def settle_units(
    table: Table,
    declared: tuple[Units, Mapping[str, Units]],
    roles: Mapping[str, Role],
    record: RecordBuilder,
) -> dict[str, Units]:
    """Say the unit of each column of returns, declared or told from its numbers.

    Raises
    ------
    InputError
        If a column could be decimal or per cent and its neighbours do not tell.
    """
    default, named = declared
    found: dict[str, Units] = {}
    unclear: list[str] = []
    sizes = _sizes(table)
    for position, name in enumerate(table.names):
        told = named.get(name, default)
        if roles[name] is Role.NON_TRADED and told is Units.DETECT:
            continue
        if table.units.get(name) == PRICES:
            found[name] = Units.DECIMAL
        elif told is not Units.DETECT:
            found[name] = told
        elif name in table.signs:
            found[name] = Units.PERCENT
        else:
            unit = _unit(table, position, roles[name], sizes)
            if unit is None:
                unclear.append(name)
            else:
                found[name] = unit
    _neighbours(table, found, unclear, record)
    _say_units(table, found, declared, record)
    return found


@dataclass(frozen=True, eq=False)
class _Sizes:
    """Medians of the absolute values of all columns: of all values, and of those that are not zero."""

    all_values: Floats
    not_zero: Floats
    negative: Floats


def _sizes(table: Table) -> _Sizes:
    count = len(table.names)
    sizes = _Sizes(np.empty(count), np.empty(count), np.empty(count))
    for span in column_blocks(count):
        x = table.values[:, span]
        size = np.abs(x)
        sizes.all_values[span] = column_medians(size)
        sizes.not_zero[span] = column_medians(np.where(size > 0, size, np.nan))
        sizes.negative[span] = (x < 0).sum(axis=0) / np.maximum((~np.isnan(x)).sum(axis=0), 1)
    return sizes


def _unit(table: Table, position: int, role: Role, sizes: _Sizes) -> Units | None:
    """The unit of one column by its size; None when it could be either."""
    if np.isnan(sizes.not_zero[position]):
        return None
    x = table.values[:, position]
    per_year = (table.frequency or Frequency.MONTHLY).periods_per_year
    if role is Role.RISK_FREE or (sizes.negative[position] <= 0.05 and _like_a_rate(x[~np.isnan(x)])):
        # Rates do not scale with the root of time, and a low rate in per cent looks like a high one in decimals.
        yearly = float(sizes.all_values[position]) * per_year
        return Units.DECIMAL if 0 < yearly < 0.04 else Units.PERCENT if yearly > 0.5 else None
    middle = float(sizes.not_zero[position]) * np.sqrt(per_year / 12)
    if middle > _BEYOND_PERCENT:
        name = table.names[position]
        raise InputError(
            f"Column '{name}' of {table.source} is too large for returns in per cent "
            f"(median {sizes.all_values[position]:g})",
            remedy=f"say what it is: content={{'{name}': 'prices'}}, units={{'{name}': 'basis points'}} or "
            f"roles={{'{name}': 'non-traded factor'}}",
        )
    if middle < _SURELY_DECIMAL:
        return Units.DECIMAL
    # Between the two, several values below -1 can only be per cent: no asset loses more than everything.
    return Units.PERCENT if middle > _SURELY_PERCENT or int((x < -1.0).sum()) >= 3 else None


def _like_a_rate(x: Floats) -> bool:
    """Whether a column that is hardly ever negative also hardly moves from one period to the next, as cash does."""
    return len(x) >= _LEAST and float(np.median(np.abs(np.diff(x)))) < 0.3 * float(np.median(x))


def _neighbours(table: Table, found: dict[str, Units], unclear: list[str], record: RecordBuilder) -> None:
    """Let the columns that are plain decide for those that are not."""
    zero = [name for name in unclear if not np.nan_to_num(table.values[:, table.names.index(name)]).any()]
    found.update(dict.fromkeys(zero, Units.DECIMAL))
    open_ = [name for name in unclear if name not in zero]
    told = {unit for name, unit in found.items() if table.units.get(name) != PRICES and name not in zero}
    if not open_:
        return
    if len(told) == 1:
        unit = told.pop()
        found.update(dict.fromkeys(open_, unit))
        record.add(
            EntryKind.UNITS,
            f"{listed(open_)} could be decimal or per cent by their size; they were taken as {unit.value}, "
            "like the other columns of the source.",
            Severity.NOTE,
            series=open_,
            rows=len(open_),
            source=table.source,
        )
        return
    x = table.values[:, table.names.index(open_[0])]
    size = float(np.nanmedian(np.abs(x)))
    raise InputError(
        f"{listed(open_)} in {table.source} could be decimal or per cent: a typical value is {size:g}, that is "
        f"{size:.0%} or {size:.2g}%",
        remedy="say which with units='decimal' or units='percent'",
    )


def _say_units(
    table: Table,
    found: Mapping[str, Units],
    declared: tuple[Units, Mapping[str, Units]],
    record: RecordBuilder,
) -> None:
    returns = {name: unit for name, unit in found.items() if table.units.get(name) != PRICES}
    several = len(set(returns.values())) > 1
    for unit in dict.fromkeys(returns.values()):
        names = [name for name, one in returns.items() if one is unit]
        stated = all(declared[1].get(name, declared[0]) is not Units.DETECT for name in names)
        how = (
            "as declared"
            if stated
            else "told from their size"
            if not set(names) <= table.signs
            else "by their per-cent signs"
        )
        act = "" if unit is Units.DECIMAL else f" and divided by {_SCALE[unit]:,.0f}"
        severity = Severity.NOTE if unit is Units.DECIMAL or stated else Severity.REPAIRED
        record.add(
            EntryKind.UNITS,
            f"Returns taken as {unit.value}, {how}{act}: {listed(names)}.",
            Severity.WARNING if several and not stated and unit is not Units.DECIMAL else severity,
            series=names,
            rows=len(names),
            source=table.source,
        )


def apply_units(table: Table, found: Mapping[str, Units]) -> None:
    """Make all returns decimal, in place."""
    for position, name in enumerate(table.names):
        unit = found.get(name)
        if unit is not None:
            table.units.setdefault(name, unit.value)
            if table.units[name] != PRICES and unit is not Units.DECIMAL:
                table.values[:, position] /= _SCALE[unit]
