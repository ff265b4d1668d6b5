"""What a panel must not hold, and what its analyst should know: copies, constants, impossible values, gaps."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from soffit.errors import InputError
from soffit.intake.columns import column_blocks
from soffit.intake.options import Frequency, Role
from soffit.intake.periods import month_text
from soffit.intake.quality import check_late_starters, check_survivors
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed
from soffit.intake.tables import Table

__all__ = ["Spans", "check_copies", "check_factors", "check_histories", "check_losses", "check_one_name"]

Floats = NDArray[np.float64]
_SAME = 1e-10
_EQUAL = 1e-9


def check_losses(table: Table, roles: dict[str, Role], record: RecordBuilder) -> None:
    """Refuse assets that lose more than everything; say so of factors.

    Raises
    ------
    InputError
        If an asset's return is below -100%.
    """
    low = np.fmin.reduce(table.values, axis=0)
    for position in np.flatnonzero(low <= -1.0):
        name, role = table.names[position], roles[table.names[position]]
        if role is Role.NON_TRADED:
            continue
        column = table.values[:, position]
        worst = float(low[position])
        row = int(np.flatnonzero(column <= (worst if worst < -1.0 else -1.0))[0])
        if worst < -1.0 and role in (Role.ASSET, Role.RISK_FREE):
            raise InputError(
                f"'{name}' returns {column[row]:.1%} in {table.place(row)}: nothing loses more than all its value",
                remedy="correct it, declare a missing code with missing=(...), or the unit with "
                f"units={{'{name}': 'percent'}}",
            )
        count = int((column <= -1.0).sum())
        record.add(
            EntryKind.IMPOSSIBLE,
            f"'{name}' returns {column[row]:.1%} in {table.place(row)}; kept.",
            Severity.WARNING,
            series=name,
            rows=count,
            source=table.source,
        )


def check_one_name(tables: list[Table], roles: dict[str, Role], record: RecordBuilder) -> None:
    """Refuse a name that two sources share; a risk-free return given twice is taken once if it is the same.

    Raises
    ------
    InputError
        If two sources have a column of the same name.
    """
    for later in range(1, len(tables)):
        for earlier in range(later):
            for name in _shared(tables[earlier].names, tables[later].names):
                first, second = tables[earlier], tables[later]
                if roles[name] is Role.RISK_FREE and _agree(first, second, name):
                    record.add(
                        EntryKind.ROLES,
                        f"'{name}' is in {first.source} and in {second.source} with the same "
                        "values; it was taken once.",
                        series=name,
                        source=second.source,
                    )
                    position = second.names.index(name)
                    second.names.pop(position)
                    second.values = np.delete(second.values, position, axis=1)
                    continue
                raise InputError(
                    f"'{name}' is a column of {first.source} and of {second.source}",
                    remedy="rename it in one of them, or remove it from one",
                )


def _shared(first: list[str], second: list[str]) -> list[str]:
    known = set(first)
    return [name for name in second if name in known]


def _agree(first: Table, second: Table, name: str) -> bool:
    a = pd.Series(first.values[:, first.names.index(name)], index=pd.DatetimeIndex(first.stamps))
    b = pd.Series(second.values[:, second.names.index(name)], index=pd.DatetimeIndex(second.stamps))
    both = pd.concat([a, b], axis=1, join="inner").dropna()
    return len(both) > 0 and bool(np.allclose(both.iloc[:, 0], both.iloc[:, 1], rtol=0, atol=1e-8))


def check_factors(names: list[str], x: Floats) -> None:
    """Refuse factors that are constant, copies of one another, or add up to one another.

    Parameters
    ----------
    names : list of str
        K names.
    x : ndarray
        T×K returns without NaN.

    Raises
    ------
    InputError
        With the names of the factors at fault.
    """
    spread = x.std(axis=0)
    for position in np.flatnonzero(spread <= 1e-14 + 1e-12 * np.abs(x).max(axis=0, initial=0.0)):
        raise InputError(
            f"The factor '{names[position]}' is constant ({x[0, position]:g}) over the dates in use",
            remedy=f"remove it, or ignore it with roles={{'{names[position]}': 'ignored'}}",
        )
    if len(names) < 2 or len(x) < 3:
        return
    z = (x - x.mean(axis=0)) / spread / np.sqrt(len(x))
    alike = np.argwhere(np.tril(np.abs(z.T @ z) > 1 - _SAME, k=-1))
    for later, earlier in alike:
        same = np.allclose(x[:, later], x[:, earlier], rtol=0, atol=1e-12)
        raise InputError(
            f"The factor '{names[later]}' is {'a copy' if same else 'an exact multiple'} of '{names[earlier]}'",
            remedy=f"keep one: roles={{'{names[later]}': 'ignored'}}",
        )
    if len(x) > len(names):
        _, singular, right = np.linalg.svd(z, full_matrices=False)
        if singular[-1] < 1e-8 * singular[0]:
            tied = [names[k] for k in np.flatnonzero(np.abs(right[-1]) > 1e-4)]
            raise InputError(
                f"The factors {listed(tied)} are tied: each is an exact combination of the others",
                remedy="remove one of them",
            )


def check_copies(names: list[str], x: Floats, factors: list[str], f: Floats, record: RecordBuilder) -> None:
    """Refuse an asset that is a factor; say which assets are copies of one another.

    Parameters
    ----------
    names, factors : list of str
        N assets and K factors.
    x, f : ndarray
        T×N and T×K returns; the assets may have NaN.
    record : RecordBuilder
        Where it is said.

    Raises
    ------
    InputError
        If an asset equals a factor on all their dates.
    """
    seen: dict[bytes, str] = {}
    for span in column_blocks(len(names)):
        block = x[:, span]
        held = (~np.isnan(block)).sum(axis=0)
        for k, factor in enumerate(factors):
            off = np.fmax.reduce(np.abs(block - f[:, k : k + 1]), axis=0)
            for i in np.flatnonzero((off < _EQUAL) & (held > 1)).tolist():
                asset = names[span][i]
                raise InputError(
                    f"The asset '{asset}' equals the factor '{factor}' on every date: "
                    "its alpha would be zero by construction",
                    remedy=f"ignore one of them, such as roles={{'{asset}': 'ignored'}}",
                )
        rounded = np.asfortranarray(np.round(block, 12) + 0.0)
        for i, name in enumerate(names[span]):
            key = rounded[:, i].tobytes()
            if key in seen and held[i] > 1:
                record.add(
                    EntryKind.COPIES,
                    f"The asset '{name}' is a copy of '{seen[key]}'; both were kept, and no joint "
                    "test exists with both.",
                    Severity.WARNING,
                    series=[seen[key], name],
                    rows=len(x),
                )
            seen.setdefault(key, name)


@dataclass(frozen=True, eq=False)
class Spans:
    """Where the values of n series stand.

    Parameters
    ----------
    first, last : ndarray of int
        Position of the first and last value; 0 and -1 for a series without values.
    count, gaps : ndarray of int
        Number of values, and of periods without one between the first and the last.
    """

    first: NDArray[np.int64]
    last: NDArray[np.int64]
    count: NDArray[np.int64]
    gaps: NDArray[np.int64]

    @classmethod
    def of(cls, x: Floats) -> Spans:
        """The spans of the columns of a T×n array."""
        held = ~np.isnan(x)
        count = held.sum(axis=0)
        first = held.argmax(axis=0)
        last = np.where(count > 0, len(held) - 1 - held[::-1].argmax(axis=0), -1)
        return cls(first, last, count, np.where(count > 0, last - first + 1 - count, 0))


def check_histories(
    names: list[str], x: Floats, dates: NDArray[np.datetime64], frequency: Frequency, record: RecordBuilder
) -> None:
    """Say which assets start late, end early, have gaps inside, or never move; ask about survivors and backfill."""
    spans = Spans.of(x)
    short = np.flatnonzero((spans.first > 0) | (spans.last < len(x) - 1))
    if len(short):
        shown = [
            f"'{names[i]}' ({month_text(dates[spans.first[i]], frequency)} to "
            f"{month_text(dates[spans.last[i]], frequency)})"
            for i in short
        ]
        record.add(
            EntryKind.HISTORY,
            f"Shorter than the panel: {listed(shown, quote='')}.",
            Severity.WARNING,
            series=[names[i] for i in short],
            rows=len(short),
        )
    gaps = np.flatnonzero(spans.gaps > 0)
    if len(gaps):
        shown = [f"'{names[i]}' ({spans.gaps[i]})" for i in gaps]
        record.add(
            EntryKind.GAPS,
            f"No value inside their history: {listed(shown, quote='')}. Nothing was filled in.",
            Severity.WARNING,
            series=[names[i] for i in gaps],
            rows=int(spans.gaps[gaps].sum()),
        )
    lone = [names[i] for i in np.flatnonzero(spans.count == 1)]
    if lone:
        record.add(
            EntryKind.HISTORY,
            f"Only one value: {listed(lone)}.",
            Severity.WARNING,
            series=lone,
            rows=len(lone),
        )
    range_ = np.fmax.reduce(x, axis=0) - np.fmin.reduce(x, axis=0)
    flat = [names[i] for i in np.flatnonzero((spans.count > 1) & (range_ <= 1e-14))]
    if flat:
        record.add(
            EntryKind.CONSTANT,
            f"Never move: {listed(flat)}. They have no alpha to test.",
            Severity.WARNING,
            series=flat,
            rows=len(flat),
        )
    check_survivors(spans.first, spans.last, len(x), record)
    check_late_starters(x, spans.first, record)
