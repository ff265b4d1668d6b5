"""Units of each column: declared, or told from the numbers and said."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from soffit.errors import InputError
from soffit.intake.columns import column_blocks, column_medians
from soffit.intake.options import Frequency, Role, Units
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed
from soffit.intake.tables import PRICES, Table

__all__ = ["to_decimals"]

Floats = NDArray[np.float64]

# Median absolute return, scaled to a month: below the first a column is decimal, above the second per cent.
# A decimal 8% is an annual volatility of about 40%; a per-cent 0.5 is one of about 2.6%. Between the two a
# column could be either, and its neighbours in the source decide. Common practice, no source.
_SURELY_DECIMAL, _SURELY_PERCENT, _BEYOND_PERCENT = 0.08, 0.5, 45.0
_SCALE = {Units.DECIMAL: 1.0, Units.PERCENT: 100.0, Units.BASIS_POINTS: 10_000.0}
_LEAST = 6


def to_decimals(
    tables: Sequence[Table],
    declared: tuple[Units, Mapping[str, Units]],
    roles: Mapping[str, Role],
    record: RecordBuilder,
) -> None:
    """Make all returns decimal, in place, by the units that are declared or told from their size.

    A column whose size does not tell follows the plain ones of its source; a risk-free return that stands alone
    follows those of the other sources.

    Raises
    ------
    InputError
        If a column could be decimal or per cent and its neighbours do not tell.
    """
    guesses = [_guess(table, declared, roles, record) for table in tables]
    for table, guess in zip(tables, guesses, strict=True):
        others = {unit for one in guesses if one is not guess for unit in one.told}
        _neighbours(table, guess, others, roles, record)
        _say_units(table, guess.found, declared, record)
    for table, guess in zip(tables, guesses, strict=True):
        for position, name in enumerate(table.names):
            unit = guess.found.get(name)
            if unit is not None:
                table.units.setdefault(name, unit.value)
                if table.units[name] != PRICES and unit is not Units.DECIMAL:
                    table.values[:, position] /= _SCALE[unit]


@dataclass(eq=False)
class _Guess:
    """Units found so far, series whose size does not tell, and the units that the plain ones of the source tell."""

    found: dict[str, Units]
    unclear: list[str]
    told: set[Units]


def _guess(
    table: Table,
    declared: tuple[Units, Mapping[str, Units]],
    roles: Mapping[str, Role],
    record: RecordBuilder,
) -> _Guess:
    default, named = declared
    guess = _Guess({}, [], set())
    against: dict[str, list[str]] = {}
    sizes = _sizes(table)
    for position, name in enumerate(table.names):
        stated = named.get(name, default)
        if roles[name] is Role.NON_TRADED and stated is Units.DETECT:
            continue
        if table.units.get(name) == PRICES or np.isnan(sizes.not_zero[position]):
            guess.found[name] = Units.DECIMAL
            continue
        if name in table.signs:
            unit: Units | None = Units.PERCENT
            if stated not in (Units.DETECT, Units.PERCENT):
                raise InputError(
                    f"'{name}' of {table.source} has per-cent signs but is declared {stated.value}",
                    remedy=f"leave its unit to its signs, or say units={{'{name}': 'percent'}}",
                )
        else:
            unit = _unit(table, position, roles[name], sizes, refuse=stated is Units.DETECT)
        if stated is not Units.DETECT:
            if unit is not None and unit is not stated:
                against.setdefault(f"declared {stated.value} but {unit.value} by their size", []).append(name)
            unit = stated
        if unit is None:
            guess.unclear.append(name)
        else:
            guess.found[name] = unit
            guess.told.add(unit)
    for what, names in against.items():
        record.add(
            EntryKind.UNITS,
            f"{listed(names)}: {what}; the declaration was followed.",
            Severity.WARNING,
            series=names,
            rows=len(names),
            source=table.source,
        )
    return guess


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


def _unit(table: Table, position: int, role: Role, sizes: _Sizes, *, refuse: bool) -> Units | None:
    """The unit of one column by its size; None when it could be either, or is too large and not to be refused."""
    x = table.values[:, position]
    per_year = (table.frequency or Frequency.MONTHLY).periods_per_year
    if role is Role.RISK_FREE or (sizes.negative[position] <= 0.05 and _like_a_rate(x[~np.isnan(x)])):
        # Rates do not scale with the root of time, and a low rate in per cent looks like a high one in decimals.
        yearly = float(sizes.all_values[position]) * per_year
        return Units.DECIMAL if 0 < yearly < 0.04 else Units.PERCENT if yearly > 0.5 else None
    middle = float(sizes.not_zero[position]) * np.sqrt(per_year / 12)
    if middle > _BEYOND_PERCENT and not refuse:
        return None
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


def _neighbours(
    table: Table, guess: _Guess, others: set[Units], roles: Mapping[str, Role], record: RecordBuilder
) -> None:
    """Let the columns that are plain decide for those that are not."""
    if not guess.unclear:
        return
    told, where = guess.told, "the other columns of the source"
    if not told and all(roles[name] is Role.RISK_FREE for name in guess.unclear):
        told, where = others, "the returns of the other sources"
    if len(told) != 1:
        x = table.values[:, table.names.index(guess.unclear[0])]
        size = float(np.nanmedian(np.abs(x)))
        raise InputError(
            f"{listed(guess.unclear)} in {table.source} could be decimal or per cent: a typical value is "
            f"{size:g}, that is {size:.0%} or {size:.2g}%",
            remedy="say which with units='decimal' or units='percent'",
        )
    unit = next(iter(told))
    guess.found.update(dict.fromkeys(guess.unclear, unit))
    record.add(
        EntryKind.UNITS,
        f"{listed(guess.unclear)} could be decimal or per cent by their size; they were taken as {unit.value}, "
        f"like {where}.",
        Severity.NOTE,
        series=guess.unclear,
        rows=len(guess.unclear),
        source=table.source,
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
