"""Clean tables to a Panel: one name, common dates, excess returns, the last checks and the fingerprint."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from soffit.errors import InputError
from soffit.intake.checks import Spans, check_copies, check_factors, check_histories, check_one_name
from soffit.intake.labels import settle_labels
from soffit.intake.options import Excess, Frequency, Mismatch, Role
from soffit.intake.panel import Panel, fingerprint
from soffit.intake.periods import month_text
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed
from soffit.intake.tables import PRICES, Table

__all__ = ["Assembly", "assemble"]

Floats = NDArray[np.float64]
Stamps = NDArray[np.datetime64]
_ROLES = (Role.ASSET, Role.FACTOR, Role.RISK_FREE, Role.NON_TRADED)


@dataclass(frozen=True)
class Assembly:
    """What was declared that matters when the sources come together.

    Parameters
    ----------
    excess : Excess
        Whether the assets' returns are in excess of the risk-free return.
    raw_factors : tuple of str
        Factors from which the risk-free return is to be taken off.
    labels : mapping, optional
        Currency and fees by series.
    mismatch : Mismatch
        What happens when labels differ.
    """

    excess: Excess
    raw_factors: tuple[str, ...]
    labels: Mapping[str, Any] | None
    mismatch: Mismatch


@dataclass(eq=False)
class _Part:
    names: list[str]
    values: Floats

    def keep(self, columns: Sequence[int]) -> None:
        self.names = [self.names[i] for i in columns]
        self.values = self.values[:, columns]

    def frame(self, dates: pd.DatetimeIndex) -> pd.DataFrame:
        return pd.DataFrame(self.values, index=dates, columns=pd.Index(self.names, dtype=object), copy=False)


def assemble(
    tables: list[Table], kinds: dict[str, Role], calendar: Frequency, how: Assembly, record: RecordBuilder
) -> Panel:
    """Bring clean tables together; they are used up.

    Raises
    ------
    InputError
        If names clash, no dates are common, or factors or labels cannot stand side by side.
    """
    check_one_name(tables, kinds, record)
    stamps = _common_dates(tables, kinds, calendar, record)
    units = {name: table.units.get(name, "as given") for table in tables for name in table.names}
    sources = {name: table.source for table in tables for name in table.names}
    parts = {role: _part(tables, kinds, role, stamps) for role in _ROLES}
    for table in tables:
        record.used(table.source, len(stamps))
        table.values = table.values[:0]
    rate = parts[Role.RISK_FREE].values[:, 0] if parts[Role.RISK_FREE].names else None
    _leave_out_empty(parts[Role.ASSET], kinds, record)
    _take_off(parts, rate, {name for name, unit in units.items() if unit == PRICES}, how, record)
    assets, factors = parts[Role.ASSET], parts[Role.FACTOR]
    if factors.names:
        check_factors(factors.names, factors.values)
    else:
        record.add(
            EntryKind.ROLES, "There is no traded factor: alphas are mean excess returns.", Severity.WARNING
        )
    if not assets.names:
        record.add(
            EntryKind.ROLES, "There is no test asset: only the factors can be studied.", Severity.WARNING
        )
    check_copies(assets.names, assets.values, factors.names, factors.values, record)
    check_histories(assets.names, assets.values, stamps, calendar, record)
    used = {name: source for name, source in sources.items() if kinds[name] is not Role.IGNORED}
    labels = settle_labels(how.labels, used, kinds, how.mismatch, record)
    dates = pd.DatetimeIndex(stamps.astype("datetime64[ns]"), name="date")
    free = None if rate is None else pd.Series(rate.copy(), index=dates, name=parts[Role.RISK_FREE].names[0])
    mark = fingerprint(calendar, stamps, {role: (part.names, part.values) for role, part in parts.items()})
    return Panel(
        assets=assets.frame(dates),
        factors=factors.frame(dates),
        risk_free=free,
        non_traded=parts[Role.NON_TRADED].frame(dates),
        frequency=calendar,
        record=record.finish(_coverage(parts, stamps, units, sources)),
        fingerprint=mark,
        labels=labels,
    )


def _common_dates(
    tables: list[Table], kinds: Mapping[str, Role], calendar: Frequency, record: RecordBuilder
) -> Stamps:
    """Dates on which all factors, the risk-free return and at least one asset have a value."""
    complete = [table.stamps[_complete(table, kinds)] for table in tables]
    dates = complete[0]
    for stamps in complete[1:]:
        dates = np.intersect1d(dates, stamps)
    together = dates
    holders = [table for table in tables if any(kinds[name] is Role.ASSET for name in table.names)]
    if holders:
        anything = [table.stamps[_any_asset(table, kinds)] for table in holders]
        dates = dates[np.isin(dates, np.concatenate(anything))]
    for table, stamps in zip(tables, complete, strict=True):
        lost = table.stamps[~np.isin(table.stamps, dates)]
        own = table.stamps[~np.isin(table.stamps, stamps)]
        alone = np.setdiff1d(stamps, together)
        bare = np.setdiff1d(np.intersect1d(stamps, together), dates)
        record.dropped(table.source, len(lost))
        _say_dropped(table, own, f"no value of {listed(_lacking(table, kinds, own))}", calendar, record)
        _say_dropped(table, alone, "the other sources have nothing to go with them", calendar, record)
        _say_dropped(table, bare, "no asset has a value", calendar, record)
    if len(dates) < 2:
        spans = " and ".join(
            f"{table.source} has {_span(one, calendar)}" for table, one in zip(tables, complete, strict=True)
        )
        raise InputError(
            f"The sources have {len(dates)} dates in common: {spans}",
            remedy="bring data that overlap in time",
        )
    return dates


def _complete(table: Table, kinds: Mapping[str, Role]) -> NDArray[np.bool_]:
    full = np.ones(len(table.stamps), dtype=bool)
    for position, name in enumerate(table.names):
        if kinds[name] in (Role.FACTOR, Role.RISK_FREE):
            full &= ~np.isnan(table.values[:, position])
    return full


def _any_asset(table: Table, kinds: Mapping[str, Role]) -> NDArray[np.bool_]:
    some = np.zeros(len(table.stamps), dtype=bool)
    for position, name in enumerate(table.names):
        if kinds[name] is Role.ASSET:
            some |= ~np.isnan(table.values[:, position])
    return some


def _lacking(table: Table, kinds: Mapping[str, Role], stamps: Stamps) -> list[str]:
    rows = np.isin(table.stamps, stamps)
    return [
        name
        for position, name in enumerate(table.names)
        if kinds[name] in (Role.FACTOR, Role.RISK_FREE) and np.isnan(table.values[rows, position]).any()
    ]


def _say_dropped(table: Table, stamps: Stamps, why: str, calendar: Frequency, record: RecordBuilder) -> None:
    if len(stamps):
        record.add(
            EntryKind.ALIGNMENT,
            f"{len(stamps)} rows were dropped: {why} ({_span(stamps, calendar)}).",
            Severity.WARNING,
            rows=len(stamps),
            source=table.source,
        )


def _span(stamps: Stamps, calendar: Frequency) -> str:
    if not len(stamps):
        return "no complete row"
    first, last = month_text(stamps[0], calendar), month_text(stamps[-1], calendar)
    return first if len(stamps) == 1 else f"{first} to {last}"


def _part(tables: list[Table], kinds: Mapping[str, Role], role: Role, stamps: Stamps) -> _Part:
    names = [name for table in tables for name in table.names if kinds[name] is role]
    values = np.empty((len(stamps), len(names)), order="F")
    column = 0
    for table in tables:
        rows = np.searchsorted(table.stamps, stamps)
        for position, name in enumerate(table.names):
            if kinds[name] is role:
                values[:, column] = table.values[rows, position]
                column += 1
    return _Part(names, values)


def _leave_out_empty(assets: _Part, kinds: dict[str, Role], record: RecordBuilder) -> None:
    empty = [name for i, name in enumerate(assets.names) if np.isnan(assets.values[:, i]).all()]
    if empty:
        record.add(
            EntryKind.HISTORY,
            f"No value on the dates in use: {listed(empty)}. They were left out.",
            Severity.WARNING,
            series=empty,
            rows=len(empty),
        )
        gone = set(empty)
        assets.keep([i for i, name in enumerate(assets.names) if name not in gone])
        kinds.update(dict.fromkeys(empty, Role.IGNORED))


def _take_off(
    parts: Mapping[Role, _Part], rate: Floats | None, priced: set[str], how: Assembly, record: RecordBuilder
) -> None:
    """Take the risk-free return off the assets, and off the factors that are declared raw."""
    assets, factors = parts[Role.ASSET], parts[Role.FACTOR]
    if rate is None:
        if how.excess is Excess.ALREADY:
            said, severity = "as declared", Severity.NOTE
        else:
            said, severity = (
                "for want of a risk-free return; if they are not, give one with risk_free=...",
                Severity.WARNING,
            )
        if assets.names:
            record.add(
                EntryKind.EXCESS,
                f"The assets' returns are taken as already in excess of the risk-free return, {said}.",
                severity,
                series=assets.names,
                rows=len(assets.names),
            )
    elif how.excess is Excess.ALREADY:
        record.add(
            EntryKind.EXCESS,
            f"The assets' returns are already in excess of the risk-free return, as declared; "
            f"'{parts[Role.RISK_FREE].names[0]}' was not taken off.",
            series=assets.names,
            rows=len(assets.names),
        )
    elif assets.names:
        free = parts[Role.RISK_FREE].names[0]
        _refuse_excess_names(assets.names, how.excess, free)
        assets.values -= rate[:, None]
        record.add(
            EntryKind.EXCESS,
            f"'{free}' was taken off the returns of {listed(assets.names)}.",
            Severity.NOTE if how.excess is Excess.RAW else Severity.REPAIRED,
            series=assets.names,
            rows=len(assets.names),
        )
    if how.raw_factors and rate is not None:
        for name in how.raw_factors:
            factors.values[:, factors.names.index(name)] -= rate
        record.add(
            EntryKind.EXCESS,
            f"'{parts[Role.RISK_FREE].names[0]}' was taken off the factors {listed(how.raw_factors)}, as declared.",
            series=how.raw_factors,
            rows=len(how.raw_factors),
        )
    kept = [name for name in factors.names if name not in how.raw_factors]
    if kept:
        record.add(
            EntryKind.EXCESS,
            f"The factors {listed(kept)} are taken as excess or long-short returns.",
            series=kept,
            rows=len(kept),
        )
    raw = [
        name for name in kept if name in priced or name.casefold() in ("mkt", "market", "benchmark", "index")
    ]
    if raw:
        record.add(
            EntryKind.EXCESS,
            f"{listed(raw)} may be raw: a price or a market return has the risk-free return in it. "
            f"If so, say raw_factors={raw[:3]}.",
            Severity.WARNING,
            series=raw,
            rows=len(raw),
        )


def _refuse_excess_names(names: Sequence[str], excess: Excess, free: str) -> None:
    endings = ("-rf", "_rf", " excess", "_excess", "-excess", "_xs")
    told = next((name for name in names if name.casefold().endswith(endings)), None)
    if told is not None and excess is Excess.DETECT:
        raise InputError(
            f"The name of '{told}' says that it is already an excess return, but there is a risk-free return "
            f"'{free}' to take off",
            remedy="say which with excess=True (already excess) or excess=False (take it off)",
        )


def _coverage(
    parts: Mapping[Role, _Part], stamps: Stamps, units: Mapping[str, str], sources: Mapping[str, str]
) -> pd.DataFrame:
    """First and last date, number of values, gaps inside, role, unit and source of each series."""
    pieces = []
    for role, part in parts.items():
        spans = Spans.of(part.values)
        empty = spans.count == 0
        pieces.append(
            pd.DataFrame(
                {
                    "first": pd.Series(stamps[spans.first]).mask(empty),
                    "last": pd.Series(stamps[spans.last]).mask(empty),
                    "count": spans.count,
                    "gaps": spans.gaps,
                    "role": [role.value] * len(part.names),
                    "unit": [units[name] for name in part.names],
                    "source": [sources[name] for name in part.names],
                }
            ).set_axis(pd.Index(part.names, name="series", dtype=object))
        )
    return pd.concat([piece for piece in pieces if len(piece)])
