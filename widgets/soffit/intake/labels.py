"""Currency and fees of each series: declared, or suggested by its name; a mismatch refused or labelled."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from enum import StrEnum
from typing import Any

from soffit.errors import InputError, nearest
from soffit.intake.options import Mismatch, Role, choice
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed

__all__ = ["Fees", "SeriesLabel", "settle_labels"]

_CURRENCIES = (
    "USD EUR GBP JPY CHF CAD AUD NZD SEK NOK DKK CNY HKD SGD KRW INR BRL MXN ZAR PLN CZK HUF TRY ILS TWD"
)
_CURRENCY = re.compile(rf"(?<![A-Za-z])({'|'.join(_CURRENCIES.split())})(?![A-Za-z])")
_FEES = re.compile(r"(?<![a-z])(gross|net)(?![a-z])", re.IGNORECASE)
_EVERY = "*"


class Fees(StrEnum):
    """Whether a return is before or after the manager's fees."""

    UNSTATED = "not stated"
    GROSS = "gross"
    NET = "net"


@dataclass(frozen=True)
class SeriesLabel:
    """What a series is besides its numbers.

    Parameters
    ----------
    currency : str
        Currency code such as ``"USD"``; empty if not stated.
    fees : Fees
        Gross or net of fees.
    source : str
        Where the series came from.
    """

    currency: str = ""
    fees: Fees = Fees.UNSTATED
    source: str = ""


def settle_labels(
    declared: Mapping[str, Any] | None,
    sources: Mapping[str, str],
    kinds: Mapping[str, Role],
    mismatch: Mismatch,
    record: RecordBuilder,
) -> dict[str, SeriesLabel]:
    """Labels of all series in use.

    Parameters
    ----------
    declared : mapping, optional
        Labels by series name; ``"*"`` stands for every series that is not named. A label is a `SeriesLabel` or a
        mapping with ``currency`` and ``fees``.
    sources : mapping of str to str
        Where each series came from.
    kinds : mapping of str to Role
        Role of each series.
    mismatch : Mismatch
        What happens when declared labels differ.
    record : RecordBuilder
        Where it is said.

    Raises
    ------
    InputError
        For a name that is no series, or labels that differ while `mismatch` is to refuse.
    SettingError
        For fees that are neither gross nor net.
    """
    stated = {str(name): _label(str(name), value) for name, value in (declared or {}).items()}
    for name in stated:
        if name != _EVERY and name not in sources:
            raise InputError(
                f"A label is declared for '{name}', but no column has that name",
                remedy=nearest(name, sources),
            )
    common = stated.get(_EVERY, SeriesLabel())
    labels = {name: replace(stated.get(name, common), source=source) for name, source in sources.items()}
    funded = [name for name in labels if kinds[name] in (Role.ASSET, Role.FACTOR, Role.RISK_FREE)]
    _compare("currencies", {name: labels[name].currency for name in funded}, "", mismatch, record)
    assets = [name for name in labels if kinds[name] is Role.ASSET]
    _compare(
        "fees", {name: labels[name].fees.value for name in assets}, Fees.UNSTATED.value, mismatch, record
    )
    if not stated:
        _suggest(funded, record)
    return labels


def _label(name: str, value: Any) -> SeriesLabel:
    if isinstance(value, SeriesLabel):
        return value
    if not isinstance(value, Mapping):
        raise InputError(f"The label of '{name}' is {value!r}", allowed="a mapping with currency and fees")
    for key in value:
        if key not in ("currency", "fees"):
            raise InputError(
                f"The label of '{name}' has '{key}'", remedy=nearest(str(key), ("currency", "fees"))
            )
    fees = choice(Fees, value.get("fees", Fees.UNSTATED), f"fees of '{name}'")
    return SeriesLabel(str(value.get("currency", "")).strip().upper(), fees)


def _compare(
    what: str, by_name: Mapping[str, str], unstated: str, mismatch: Mismatch, record: RecordBuilder
) -> None:
    groups: dict[str, list[str]] = {}
    for name, value in by_name.items():
        if value != unstated:
            groups.setdefault(value, []).append(name)
    if not groups:
        return
    shown = "; ".join(f"{value}: {listed(names)}" for value, names in groups.items())
    silent = [name for name, value in by_name.items() if value == unstated]
    if len(groups) > 1 and mismatch is Mismatch.REFUSE:
        raise InputError(
            f"The series differ in {what} ({shown})",
            remedy="bring them to one, or go on with each labelled: mismatch='label'",
        )
    if len(groups) > 1:
        record.add(
            EntryKind.LABELS,
            f"The series differ in {what} ({shown}); they were kept and labelled, as declared.",
            Severity.WARNING,
            series=list(by_name),
            rows=len(by_name),
        )
    else:
        record.add(
            EntryKind.LABELS,
            f"Declared {what}: {shown}.",
            series=list(by_name),
            rows=len(by_name) - len(silent),
        )
    if silent:
        record.add(EntryKind.LABELS, f"No {what} stated: {listed(silent)}.", series=silent, rows=len(silent))


def _suggest(names: Iterable[str], record: RecordBuilder) -> None:
    """Say so when names speak of different currencies or fees and nothing was declared."""
    for what, pattern in (("currencies", _CURRENCY), ("fees", _FEES)):
        groups: dict[str, list[str]] = {}
        for name in names:
            hit = pattern.search(name)
            if hit:
                groups.setdefault(hit[1].upper() if what == "currencies" else hit[1].lower(), []).append(name)
        if len(groups) > 1:
            shown = "; ".join(f"{value}: {listed(members)}" for value, members in groups.items())
            record.add(
                EntryKind.LABELS,
                f"By their names the series differ in {what} ({shown}). Declare it with labels=...",
                Severity.WARNING,
                rows=sum(map(len, groups.values())),
            )
