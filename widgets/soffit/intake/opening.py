"""Open a panel: sources in, one Panel out, with a record of everything in between."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from soffit.errors import InputError, SettingError, nearest
from soffit.intake.assemble import Assembly, assemble
from soffit.intake.cells import Missing
from soffit.intake.checks import check_losses
from soffit.intake.frequency import consecutive, tell_frequency, to_one_calendar
from soffit.intake.options import Content, Excess, Frequency, Mismatch, Role, Units, choice, per_series
from soffit.intake.panel import Panel
from soffit.intake.prices import mark_prices, prices_to_returns
from soffit.intake.progress import Tick, progress_bar
from soffit.intake.quality import check_quality, drop_first_periods
from soffit.intake.readers import read
from soffit.intake.record import EntryKind, RecordBuilder
from soffit.intake.roles import read_mapping, settle_roles
from soffit.intake.sources import Limits, RawTable
from soffit.intake.tables import Table, clean_table
from soffit.intake.units import to_decimals

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
    skip_first: int = 0,
    labels: Mapping[str, Any] | None = None,
    mismatch: Mismatch | str = Mismatch.REFUSE,
    limits: Limits | None = None,
    progress: bool = True,
) -> Panel:
    """Read returns and factors, check them, and bring them on one calendar.

    Parameters
    ----------
    returns : path, DataFrame, database URL or Source
        Test assets; with `factors` left out, factors are looked for in it by their published names.
    factors : path, DataFrame, database URL or Source, optional
        Traded factors.
    risk_free : str or Series, optional
        Name of the risk-free column in either source, or the risk-free return itself.
    excess : bool, Excess or str, optional
        True if the assets' returns are already in excess of the risk-free return, False if it is still to be
        taken off. Left out, it is taken off when there is a risk-free return. Factors are taken as excess.
    raw_factors : iterable of str, optional
        Traded factors from which the risk-free return is still to be taken off, such as a market return.
    roles : mapping or path, optional
        Roles by column name (or lists of names by role), or a TOML file with tables ``[roles]`` and ``[labels]``.
    units : Units, str or mapping, optional
        Decimal, per cent or basis points, for all columns or by name.
    content : Content, str or mapping, optional
        Returns or prices, for all columns or by name.
    frequency : Frequency or str, optional
        The frequency of the panel; the coarsest of the sources if left out. Nothing is made finer.
    missing : iterable of float or str, optional
        Missing codes, in place of the usual numbers (-99.99, -999, -999.99, -9999) and beside the usual texts.
    skip_first : int, optional
        Values to take out at the start of every asset's history, where backfilled returns would stand.
    labels : mapping, optional
        Currency and fees by series name, ``"*"`` for all: ``{"*": {"currency": "USD", "fees": "net"}}``.
    mismatch : Mismatch or str, optional
        Whether different currencies or fees are refused or kept with their labels.
    limits : Limits, optional
        The largest source that is read.
    progress : bool, optional
        Whether a progress bar shows when reading takes longer than a second.

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
    differing = choice(Mismatch, mismatch, "mismatch")
    if isinstance(skip_first, bool) or not isinstance(skip_first, (int, np.integer)) or skip_first < 0:
        raise SettingError(
            f"skip_first={skip_first!r} is no number of values", allowed="a whole number from 0"
        )
    codes = Missing.of(missing)
    stated_roles, filed_labels = read_mapping(roles)
    if labels is not None and filed_labels is not None:
        raise SettingError(
            "Labels are declared both by argument and in the mapping file", remedy="keep one of the two"
        )
    raw_names = tuple(raw_factors)
    record = RecordBuilder()
    with progress_bar("Reading", None, progress) as bar:
        raws = _read_all(returns, factors, risk_free, limits or Limits(), codes, record, bar.update)
    kinds = settle_roles(raws, stated_roles, _rate_name(risk_free, raws), raw_names, settled, record)
    _known_names("units", told_units[1], kinds)
    _known_names("content", told_content[1], kinds)
    tables: list[Table] = []
    with progress_bar("Checking", sum(len(raw.columns) for raw in raws), progress) as bar:
        while raws:
            table = clean_table(raws.pop(0), kinds, codes, record, bar.update)
            tell_frequency(table, asked, record)
            mark_prices(table, told_content, kinds)
            tables.append(table)
    to_decimals(tables, told_units, kinds, record)
    for table in tables:
        check_losses(table, kinds, record)
    calendar = to_one_calendar(tables, kinds, asked, record)
    for table in tables:
        prices_to_returns(table, consecutive(table.stamps, calendar), record)
        check_quality(table, kinds, record)
        drop_first_periods(table, kinds, int(skip_first), record)
    how = Assembly(settled, raw_names, labels if labels is not None else filed_labels, differing)
    return assemble(tables, kinds, calendar, how, record)


def _excess_choice(excess: bool | Excess | str | None) -> Excess:
    if isinstance(excess, (bool, np.bool_)):
        return Excess.ALREADY if excess else Excess.RAW
    return Excess.DETECT if excess is None else choice(Excess, excess, "excess")


def _read_all(
    returns: Any,
    factors: Any,
    risk_free: Any,
    limits: Limits,
    missing: Missing,
    record: RecordBuilder,
    tick: Tick,
) -> list[RawTable]:
    raws = [read(returns, "returns", limits, missing, tick)]
    if factors is not None:
        raws.append(read(factors, "factors", limits, missing, tick))
    if isinstance(risk_free, pd.Series):
        raws.append(read(risk_free.to_frame(str(risk_free.name or "RF")), "risk-free", limits, missing))
    elif risk_free is not None and not isinstance(risk_free, str):
        raise InputError(
            f"risk_free is a {type(risk_free).__name__}",
            allowed="the name of a column, or a Series with dates",
        )
    for position, raw in enumerate(raws):
        if raw.source in [other.source for other in raws[:position]]:
            raw.source = f"{raw.source} ({raw.slot})"
        record.rows_in(raw.source, raw.rows_in, raw.label, raw.fingerprint)
        record.dropped(raw.source, raw.rows_in - raw.merged - len(raw.rows))
        record.merged(raw.source, raw.merged)
        record.add(
            EntryKind.SOURCE,
            f"Read {raw.rows_in:,} rows; {len(raw.columns):,} series.",
            rows=raw.rows_in,
            source=raw.source,
        )
        for kind, message, severity, rows in raw.notes:
            record.add(kind, message, severity, rows=rows, source=raw.source)
    return raws


def _rate_name(risk_free: Any, raws: list[RawTable]) -> str | None:
    """The risk-free column, when it was named or given."""
    if isinstance(risk_free, pd.Series):
        return next(iter(raws[-1].columns))
    if risk_free is None:
        return None
    columns = [name for raw in raws for name in raw.columns]
    if risk_free not in columns:
        raise InputError(f"There is no risk-free column '{risk_free}'", remedy=nearest(risk_free, columns))
    return str(risk_free)


def _known_names(argument: str, named: Mapping[str, Any], kinds: Mapping[str, Role]) -> None:
    for name in named:
        if name not in kinds:
            raise InputError(
                f"{argument} names '{name}', but no column has that name", remedy=nearest(name, kinds)
            )
