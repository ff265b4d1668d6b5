"""Open a panel: sources in, one Panel out, with a record of everything in between."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from soffit.errors import InputError, nearest
from soffit.intake.checks import (
    check_assets,
    check_copies,
    check_factors,
    check_losses,
    check_one_name,
    coverage_row,
)
from soffit.intake.frequency import tell_frequency, to_one_calendar
from soffit.intake.numbers import Missing
from soffit.intake.options import Content, Excess, Frequency, Role, Units, choice, per_series
from soffit.intake.panel import Panel, SeriesLabel, fingerprint
from soffit.intake.readers import Limits, RawTable, read
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed
from soffit.intake.roles import looks_like_factor, looks_like_risk_free, read_roles
from soffit.intake.tables import Table, clean_table
from soffit.intake.units import apply_units, prices_to_returns, settle_content, settle_units

__all__ = ["open_panel"]


def open_panel(
    returns: Any,
    factors: Any = None,
    *,
    risk_free: str | pd.Series[float] | None = None,
    excess: bool | Excess | str | None = None,
    raw_factors: Iterable[str] = (),
    roles: Mapping[str, Any] | str | Path | None = None,
    units: Units | str | Mapping[str, Units | str] = Units.DETECT,
    content: Content | str | Mapping[str, Content | str] = Content.DETECT,
    frequency: Frequency | str | None = None,
    missing: Iterable[float | str] | None = None,
    limits: Limits | None = None,
) -> Panel:
    """Read returns and factors, check them, and bring them on one calendar.

    Parameters
    ----------
    returns : path, DataFrame or Source
        Test assets; with `factors` left out, factors are looked for in it by their published names.
    factors : path, DataFrame or Source, optional
        Traded factors.
    risk_free : str or Series, optional
        Name of the risk-free column in either source, or the risk-free return itself.
    excess : bool, Excess or str, optional
        True if the assets' returns are already in excess of the risk-free return, False if it is still to be
        taken off. Left out, it is taken off when there is a risk-free column. Factors are taken as excess.
    raw_factors : iterable of str, optional
        Traded factors from which the risk-free return is still to be taken off, such as a market return.
    roles : mapping or path, optional
        Roles by column name, or a TOML file with a table ``[roles]``.
    units : Units, str or mapping, optional
        Decimal, per cent or basis points, for all columns or by name.
    content : Content, str or mapping, optional
        Returns or prices, for all columns or by name.
    frequency : Frequency or str, optional
        The frequency of the panel; the coarsest of the sources if left out.
    missing : iterable of float or str, optional
        Missing codes, in place of the usual numbers (-99.99, -999, -999.99, -9999) and beside the usual texts.
    limits : Limits, optional
        The largest source that is read.

    Returns
    -------
    Panel
        Decimal excess returns at period ends.

    Raises
    ------
    InputError
        If the data cannot be used as they are; the message names the column, the row and the remedy.
    SettingError
        If an argument is not one of its allowed values.
    """
    settled = _excess_choice(excess)
    told_units = per_series(Units, units, "units", Units.DETECT)
    told_content = per_series(Content, content, "content", Content.DETECT)
    asked = choice(Frequency, frequency, "frequency") if frequency is not None else None
    record = RecordBuilder()
    raws = _read_all(returns, factors, risk_free, limits or Limits(), record)
    given_rf = _risk_free_name(risk_free, raws)
    kinds = _roles(raws, roles, given_rf, list(raw_factors), settled, factors is not None, record)
    _known_names("units", told_units[1], kinds)
    _known_names("content", told_content[1], kinds)
    tables = [clean_table(raw, kinds, Missing.of(missing), record) for raw in raws]
    for table in tables:
        tell_frequency(table, asked, record)
        prices_to_returns(table, settle_content(table, told_content, kinds), record)
        apply_units(table, settle_units(table, told_units, kinds, record))
        check_losses(table, kinds, record)
    calendar = to_one_calendar(tables, kinds, asked, record)
    check_one_name(tables, kinds, record)
    return _assemble(tables, kinds, calendar, settled, list(raw_factors), record)


def _excess_choice(excess: bool | Excess | str | None) -> Excess:
    if isinstance(excess, (bool, np.bool_)):
        return Excess.ALREADY if excess else Excess.RAW
    return Excess.DETECT if excess is None else choice(Excess, excess, "excess")


def _read_all(
    returns: Any, factors: Any, risk_free: Any, limits: Limits, record: RecordBuilder
) -> list[RawTable]:
    raws = [read(returns, "returns", limits)]
    if factors is not None:
        raws.append(read(factors, "factors", limits))
    if isinstance(risk_free, pd.Series):
        raws.append(read(risk_free.to_frame(str(risk_free.name or "RF")), "risk-free", limits))
    elif risk_free is not None and not isinstance(risk_free, str):
        raise InputError(
            f"risk_free is a {type(risk_free).__name__}",
            allowed="the name of a column, or a Series with dates",
        )
    for position, raw in enumerate(raws):
        if raw.source in [other.source for other in raws[:position]]:
            raw.source = f"{raw.source} ({position + 1})"
        record.rows_in(raw.source, raw.rows_in)
        record.dropped(raw.source, raw.rows_in - len(raw.rows))
        record.add(
            EntryKind.SOURCE,
            f"Read {raw.rows_in:,} rows and {raw.frame.shape[1]:,} columns.",
            rows=raw.rows_in,
            source=raw.source,
        )
        for kind, message, severity, rows in raw.notes:
            record.add(kind, message, severity, rows=rows, source=raw.source)
    return raws


def _risk_free_name(risk_free: Any, raws: list[RawTable]) -> str | None:
    if isinstance(risk_free, pd.Series):
        return str(raws[-1].frame.columns[0])
    if risk_free is None:
        return None
    columns = [str(name) for raw in raws for name in raw.frame.columns]
    if risk_free not in columns:
        raise InputError(f"There is no risk-free column '{risk_free}'", remedy=nearest(risk_free, columns))
    return str(risk_free)


def _known_names(argument: str, named: Mapping[str, Any], kinds: Mapping[str, Role]) -> None:
    for name in named:
        if name not in kinds:
            raise InputError(
                f"{argument} names '{name}', but no column has that name", remedy=nearest(name, kinds)
            )


def _roles(
    raws: list[RawTable],
    declared: Any,
    risk_free: str | None,
    raw_factors: list[str],
    excess: Excess,
    two: bool,
    record: RecordBuilder,
) -> dict[str, Role]:
    """The role of every column: declared, or by its source and name, and said."""
    columns = [str(name) for raw in raws for name in raw.frame.columns]
    stated = read_roles(declared, columns)
    if risk_free is not None:
        if stated.get(risk_free, Role.RISK_FREE) is not Role.RISK_FREE:
            raise InputError(
                f"'{risk_free}' is both the risk-free return and declared {stated[risk_free].value}",
                remedy="keep one of the two",
            )
        stated[risk_free] = Role.RISK_FREE
    has_rf = Role.RISK_FREE in stated.values()
    kinds: dict[str, Role] = {}
    suggested: list[str] = []
    for position, raw in enumerate(raws):
        for name in (str(label) for label in raw.frame.columns):
            if name in stated:
                kinds[name] = stated[name]
            elif looks_like_risk_free(name) and not has_rf:
                kinds[name] = Role.RISK_FREE
                record.add(
                    EntryKind.ROLES,
                    f"'{name}' was taken as the risk-free return by its name.",
                    Severity.NOTE,
                    series=name,
                    source=raw.source,
                )
            elif looks_like_risk_free(name) and has_rf:
                kinds[name] = Role.IGNORED
                record.add(
                    EntryKind.ROLES,
                    f"'{name}' has the name of a risk-free return, but another one was declared; it was left out.",
                    Severity.WARNING,
                    series=name,
                    source=raw.source,
                )
            elif not two and looks_like_factor(name):
                kinds[name] = Role.FACTOR
                suggested.append(name)
            else:
                kinds[name] = Role.FACTOR if two and position == 1 else Role.ASSET
    if suggested:
        record.add(
            EntryKind.ROLES,
            f"Taken as traded factors by their published names: {listed(suggested)}.",
            series=suggested,
            rows=len(suggested),
        )
    ignored = [name for name, role in kinds.items() if role is Role.IGNORED and name in stated]
    if ignored:
        record.add(
            EntryKind.ROLES, f"Left out as declared: {listed(ignored)}.", series=ignored, rows=len(ignored)
        )
    free = [name for name, role in kinds.items() if role is Role.RISK_FREE]
    if len(free) > 1:
        raise InputError(
            f"{listed(free)} could all be the risk-free return",
            remedy=f"say which with risk_free='{free[0]}'",
        )
    for name in raw_factors:
        if kinds.get(name) is not Role.FACTOR:
            raise InputError(
                f"raw_factors names '{name}', which is no traded factor",
                remedy=nearest(name, [one for one, role in kinds.items() if role is Role.FACTOR]),
            )
    if not free and (excess is Excess.RAW or raw_factors):
        raise InputError(
            "Returns are declared raw, but there is no risk-free return to take off",
            remedy="name its column with risk_free='...', or give it as a Series",
        )
    return kinds


def _assemble(
    tables: list[Table],
    kinds: dict[str, Role],
    calendar: Frequency,
    excess: Excess,
    raw_factors: list[str],
    record: RecordBuilder,
) -> Panel:
    frames = {
        table.source: pd.DataFrame(
            table.values,
            index=pd.DatetimeIndex(table.stamps, name="date"),
            columns=pd.Index(table.names, dtype=object),
        )
        for table in tables
    }
    dates = _common_dates(tables, frames, kinds, calendar, record)
    pieces = [frame.reindex(dates) for frame in frames.values()]
    whole = pd.concat(pieces, axis=1) if len(pieces) > 1 else pieces[0]
    parts = {
        role: whole[[name for name in whole.columns if kinds[str(name)] is role]]
        for role in (Role.ASSET, Role.FACTOR, Role.RISK_FREE, Role.NON_TRADED)
    }
    free = parts[Role.RISK_FREE].iloc[:, 0] if parts[Role.RISK_FREE].shape[1] else None
    parts[Role.ASSET] = _without_empty(parts[Role.ASSET], kinds, record)
    _take_off(parts, free, excess, raw_factors, record)
    if parts[Role.FACTOR].shape[1]:
        check_factors(parts[Role.FACTOR])
    else:
        record.add(
            EntryKind.ROLES, "There is no traded factor: alphas are mean excess returns.", Severity.WARNING
        )
    if parts[Role.ASSET].shape[1] == 0:
        record.add(
            EntryKind.ROLES, "There is no test asset: only the factors can be studied.", Severity.WARNING
        )
    check_copies(parts[Role.ASSET], parts[Role.FACTOR], record)
    check_assets(parts[Role.ASSET], calendar, record)
    for table in tables:
        record.used(table.source, len(dates))
    return Panel(
        assets=parts[Role.ASSET],
        factors=parts[Role.FACTOR],
        risk_free=free,
        non_traded=parts[Role.NON_TRADED],
        frequency=calendar,
        record=record.finish(_coverage(tables, parts)),
        fingerprint=fingerprint(calendar, dates, parts),
        labels={name: SeriesLabel(source=table.source) for table in tables for name in table.names},
    )


def _common_dates(
    tables: list[Table],
    frames: Mapping[str, pd.DataFrame],
    kinds: Mapping[str, Role],
    calendar: Frequency,
    record: RecordBuilder,
) -> pd.DatetimeIndex:
    """Dates on which all factors, the risk-free return and at least one asset have a value."""
    full = {table.source: _usable(frames[table.source], kinds) for table in tables}
    dates: pd.DatetimeIndex = pd.DatetimeIndex(frames[tables[0].source].index)
    for table in tables:
        dates = dates.intersection(full[table.source])
    dates = pd.DatetimeIndex(dates, name="date")
    for table in tables:
        index = pd.DatetimeIndex(frames[table.source].index)
        lost = index.difference(dates)
        if not len(lost):
            continue
        record.dropped(table.source, len(lost))
        own = index.difference(full[table.source])
        if len(own):
            empty = frames[table.source].loc[own]
            needed = [
                str(n)
                for n in empty.columns
                if kinds[str(n)] in (Role.FACTOR, Role.RISK_FREE) and empty[n].isna().any()
            ]
            why = f"no value of {listed(needed)}" if needed else "no asset with a value"
            record.add(
                EntryKind.ALIGNMENT,
                f"{len(own)} rows were dropped: {why} ({_span(own, calendar)}).",
                Severity.WARNING,
                series=needed,
                rows=len(own),
                source=table.source,
            )
        other = lost.difference(own)
        if len(other):
            record.add(
                EntryKind.ALIGNMENT,
                f"{len(other)} rows were dropped: the other sources have nothing to go with them "
                f"({_span(other, calendar)}).",
                Severity.WARNING,
                rows=len(other),
                source=table.source,
            )
    if len(dates) < 2:
        spans = " and ".join(f"{source} runs from {_span(index, calendar)}" for source, index in full.items())
        raise InputError(
            f"The sources have {len(dates)} dates in common: {spans}",
            remedy="bring data that overlap in time",
        )
    return dates


def _usable(frame: pd.DataFrame, kinds: Mapping[str, Role]) -> pd.DatetimeIndex:
    needed = [name for name in frame.columns if kinds[str(name)] in (Role.FACTOR, Role.RISK_FREE)]
    assets = [name for name in frame.columns if kinds[str(name)] is Role.ASSET]
    keep = frame[needed].notna().all(axis=1) if needed else pd.Series(True, index=frame.index)
    if assets:
        keep &= frame[assets].notna().any(axis=1)
    return pd.DatetimeIndex(frame.index[keep])


def _span(index: pd.DatetimeIndex, calendar: Frequency) -> str:
    if not len(index):
        return "no date"
    first, last = month_of(index[0], calendar), month_of(index[-1], calendar)
    return first if len(index) == 1 else f"{first} to {last}"


def month_of(day: pd.Timestamp, calendar: Frequency) -> str:
    """A date as short as the frequency allows."""
    from soffit.intake.periods import month_text

    return month_text(day.to_datetime64(), calendar)


def _without_empty(assets: pd.DataFrame, kinds: dict[str, Role], record: RecordBuilder) -> pd.DataFrame:
    empty = [str(name) for name in assets.columns if assets[name].isna().all()]
    if empty:
        record.add(
            EntryKind.HISTORY,
            f"No value on the dates in use: {listed(empty)}. They were left out.",
            Severity.WARNING,
            series=empty,
            rows=len(empty),
        )
        for name in empty:
            kinds[name] = Role.IGNORED
    return assets.drop(columns=empty)


def _take_off(
    parts: dict[Role, pd.DataFrame],
    free: pd.Series[float] | None,
    excess: Excess,
    raw_factors: list[str],
    record: RecordBuilder,
) -> None:
    """Take the risk-free return off the assets, and off the factors that are declared raw."""
    assets = parts[Role.ASSET]
    names = [str(name) for name in assets.columns]
    if free is None:
        said = (
            "as declared"
            if excess is Excess.ALREADY
            else "since there is no risk-free return; declare risk_free='...' if they are not"
        )
        severity = Severity.NOTE if excess is Excess.ALREADY else Severity.WARNING
        if names:
            record.add(
                EntryKind.EXCESS,
                f"The assets' returns are taken as already in excess of the risk-free return, {said}.",
                severity,
                series=names,
                rows=len(names),
            )
    elif excess is Excess.ALREADY:
        record.add(
            EntryKind.EXCESS,
            "The assets' returns are already in excess of the risk-free return, as declared; "
            f"'{free.name}' was not taken off.",
            series=names,
            rows=len(names),
        )
    elif names:
        _refuse_excess_names(names, excess, str(free.name))
        parts[Role.ASSET] = assets.sub(free, axis=0)
        record.add(
            EntryKind.EXCESS,
            f"'{free.name}' was taken off the returns of {listed(names)}.",
            Severity.NOTE if excess is Excess.RAW else Severity.REPAIRED,
            series=names,
            rows=len(names),
        )
    factors = [str(name) for name in parts[Role.FACTOR].columns]
    if raw_factors and free is not None:
        parts[Role.FACTOR] = parts[Role.FACTOR].assign(
            **{name: parts[Role.FACTOR][name] - free for name in raw_factors}
        )
        record.add(
            EntryKind.EXCESS,
            f"'{free.name}' was taken off the factors {listed(raw_factors)}, as declared.",
            series=raw_factors,
            rows=len(raw_factors),
        )
    kept = [name for name in factors if name not in raw_factors]
    if kept:
        record.add(
            EntryKind.EXCESS,
            f"The factors {listed(kept)} are taken as excess or long-short returns.",
            series=kept,
            rows=len(kept),
        )


def _refuse_excess_names(names: list[str], excess: Excess, free: str) -> None:
    told = [
        name
        for name in names
        if name.casefold().endswith(("-rf", "_rf", " excess", "_excess", "-excess", "_xs"))
    ]
    if told and excess is Excess.DETECT:
        raise InputError(
            f"The name of '{told[0]}' says that it is already an excess return, but there is a "
            f"risk-free return '{free}' to take off",
            remedy="say which with excess=True (already excess) or excess=False (take it off)",
        )


def _coverage(tables: list[Table], parts: Mapping[Role, pd.DataFrame]) -> pd.DataFrame:
    units = {name: table.units.get(name, "as given") for table in tables for name in table.names}
    sources = {name: table.source for table in tables for name in table.names}
    names = [(str(name), role, part[name]) for role, part in parts.items() for name in part.columns]
    return pd.DataFrame(
        [coverage_row(series, role, units[name], sources[name]) for name, role, series in names],
        index=pd.Index([name for name, _, _ in names], name="series", dtype=object),
        columns=["first", "last", "count", "gaps", "role", "unit", "source"],
    )
