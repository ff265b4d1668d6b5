"""What a panel must not hold, and what its analyst should know: copies, constants, impossible values, gaps."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from soffit.errors import InputError
from soffit.intake.options import Frequency, Role
from soffit.intake.periods import month_text
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed
from soffit.intake.tables import Table

__all__ = ["check_assets", "check_copies", "check_factors", "check_losses", "check_one_name", "coverage_row"]

Floats = NDArray[np.float64]
_SAME = 1e-10


def check_losses(table: Table, roles: dict[str, Role], record: RecordBuilder) -> None:
    """Refuse assets that lose more than everything; say so of factors.

    Raises
    ------
    InputError
        If an asset's return is below -100%.
    """
    low = np.where(np.isnan(table.values), 0.0, table.values).min(axis=0, initial=0.0)
    for position in np.flatnonzero(low <= -1.0):
        name, role = table.names[position], roles[table.names[position]]
        if role is Role.NON_TRADED:
            continue
        column = table.values[:, position]
        row = int(np.flatnonzero(column <= -1.0)[0])
        if column[row] < -1.0 and role in (Role.ASSET, Role.RISK_FREE):
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
            for name in [n for n in tables[later].names if n in tables[earlier].names]:
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


def _agree(first: Table, second: Table, name: str) -> bool:
    a = pd.Series(first.values[:, first.names.index(name)], index=pd.DatetimeIndex(first.stamps))
    b = pd.Series(second.values[:, second.names.index(name)], index=pd.DatetimeIndex(second.stamps))
    both = pd.concat([a, b], axis=1, join="inner").dropna()
    return len(both) > 0 and bool(np.allclose(both.iloc[:, 0], both.iloc[:, 1], rtol=0, atol=1e-8))


def check_factors(factors: pd.DataFrame) -> None:
    """Refuse factors that are constant, copies of one another, or add up to one another.

    Raises
    ------
    InputError
        With the names of the factors at fault.
    """
    x = factors.to_numpy()
    names = list(factors.columns)
    spread = x.std(axis=0)
    for position in np.flatnonzero(spread <= 1e-14 + 1e-12 * np.abs(x).max(axis=0, initial=0.0)):
        raise InputError(
            f"The factor '{names[position]}' is constant ({x[0, position]:g}) over the dates in use",
            remedy=f"remove it, or ignore it with roles={{'{names[position]}': 'ignored'}}",
        )
    if len(names) < 2 or len(x) < 3:
        return
    z = (x - x.mean(axis=0)) / spread / np.sqrt(len(x))
    correlation = z.T @ z
    for i in range(len(names)):
        for j in range(i):
            if abs(correlation[i, j]) > 1 - _SAME:
                word = "a copy" if np.allclose(x[:, i], x[:, j], rtol=0, atol=1e-12) else "an exact multiple"
                raise InputError(
                    f"The factor '{names[i]}' is {word} of '{names[j]}'",
                    remedy=f"keep one: roles={{'{names[i]}': 'ignored'}}",
                )
    if len(x) > len(names):
        _, singular, right = np.linalg.svd(z, full_matrices=False)
        if singular[-1] < 1e-8 * singular[0]:
            parts = [names[k] for k in np.flatnonzero(np.abs(right[-1]) > 1e-4)]
            raise InputError(
                f"The factors {listed(parts)} are tied: each is an exact combination of the others",
                remedy="remove one of them",
            )


def check_copies(assets: pd.DataFrame, factors: pd.DataFrame, record: RecordBuilder) -> None:
    """Refuse an asset that is a factor; say which assets are copies of one another.

    Raises
    ------
    InputError
        If an asset equals a factor on all their dates.
    """
    values = assets.to_numpy()
    for name in factors.columns:
        target = factors[name].to_numpy()[:, None]
        off = np.nan_to_num(np.abs(values - target)).max(axis=0, initial=0.0)
        for position in map(int, np.flatnonzero((off < 1e-9) & ((~np.isnan(values)).sum(axis=0) > 1))):
            asset = assets.columns[position]
            raise InputError(
                f"The asset '{asset}' equals the factor '{name}' on every date: its alpha would "
                "be zero by construction",
                remedy=f"ignore one of them, such as roles={{'{asset}': 'ignored'}}",
            )
    seen: dict[bytes, str] = {}
    for column, name in enumerate(assets.columns):
        key = (np.round(values[:, column], 12) + 0.0).tobytes()
        if key in seen and not np.isnan(values[:, column]).all():
            record.add(
                EntryKind.COPIES,
                f"The asset '{name}' is a copy of '{seen[key]}'; both were kept, and no joint "
                "test exists with both.",
                Severity.WARNING,
                series=[seen[key], str(name)],
                rows=len(assets),
            )
        seen.setdefault(key, str(name))


def check_assets(assets: pd.DataFrame, frequency: Frequency, record: RecordBuilder) -> None:
    """Say which assets start late, end early, have gaps inside, or never move."""
    held = assets.notna().to_numpy()
    counts = held.sum(axis=0)
    first, last = held.argmax(axis=0), len(held) - 1 - held[::-1].argmax(axis=0)
    inside = last - first + 1 - counts
    names = [str(name) for name in assets.columns]
    dates = assets.index.to_numpy()
    short = np.flatnonzero((counts > 0) & ((first > 0) | (last < len(held) - 1)))
    if len(short):
        spans = [
            f"'{names[i]}' ({month_text(dates[first[i]], frequency)} to {month_text(dates[last[i]], frequency)})"
            for i in short
        ]
        record.add(
            EntryKind.HISTORY,
            f"Shorter than the panel: {listed(spans, quote='')}.",
            Severity.WARNING,
            series=[names[i] for i in short],
            rows=len(short),
        )
    gaps = np.flatnonzero(inside > 0)
    if len(gaps):
        shown = [f"'{names[i]}' ({inside[i]})" for i in gaps]
        record.add(
            EntryKind.GAPS,
            f"No value inside their history: {listed(shown, quote='')}. Nothing was filled in.",
            Severity.WARNING,
            series=[names[i] for i in gaps],
            rows=int(inside[gaps].sum()),
        )
    values = assets.to_numpy()
    flat = [names[i] for i in range(len(names)) if counts[i] > 1 and np.ptp(values[held[:, i], i]) <= 1e-14]
    if flat:
        record.add(
            EntryKind.CONSTANT,
            f"Never move: {listed(flat)}. They have no alpha to test.",
            Severity.WARNING,
            series=flat,
            rows=len(flat),
        )


def coverage_row(series: pd.Series[float], role: Role, unit: str, source: str) -> list[object]:
    """First and last date, number of values, gaps inside, role, unit and source of one series."""
    held = series.notna().to_numpy()
    if not held.any():
        return [pd.NaT, pd.NaT, 0, 0, role.value, unit, source]
    where = np.flatnonzero(held)
    return [
        series.index[where[0]],
        series.index[where[-1]],
        len(where),
        int(where[-1] - where[0] + 1 - len(where)),
        role.value,
        unit,
        source,
    ]
