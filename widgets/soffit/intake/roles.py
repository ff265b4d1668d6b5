"""Which column is an asset, a factor, the risk-free return, or nothing to the study."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping, Sequence
from difflib import get_close_matches
from pathlib import Path
from typing import Any

from soffit.errors import InputError, nearest
from soffit.intake.options import Excess, Role, choice
from soffit.intake.record import EntryKind, RecordBuilder, Severity, listed
from soffit.intake.sources import RawTable

__all__ = ["read_mapping", "settle_roles", "with_roles"]

_RISK_FREE = (
    "rf",
    "riskfree",
    "riskfreerate",
    "riskfreereturn",
    "rfrate",
    "tbill",
    "tbill1m",
    "1mtbill",
    "rfree",
)
_FACTORS = (
    "mktrf",
    "mkt",
    "market",
    "smb",
    "hml",
    "rmw",
    "cma",
    "mom",
    "umd",
    "wml",
    "bab",
    "qmj",
    "strev",
    "ltrev",
)
_SECTIONS = ("roles", "labels")
_FEW = 300


def _bare(name: str) -> str:
    return re.sub(r"[^a-z0-9]", "", name.casefold())


def read_mapping(
    given: Mapping[str, Any] | str | Path | None,
) -> tuple[Mapping[str, Any], Mapping[str, Any] | None]:
    """Roles and labels as declared: a mapping of roles, or a TOML file with tables ``[roles]`` and ``[labels]``.

    Raises
    ------
    InputError
        If the file cannot be read, or holds something else.
    """
    if given is None:
        return {}, None
    if isinstance(given, Mapping):
        return given, None
    path = Path(given)
    try:
        content = tomllib.loads(path.read_text(encoding="utf-8-sig"))
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            f"The mapping file '{path}' cannot be read ({error})", remedy="check the path"
        ) from error
    except tomllib.TOMLDecodeError as error:
        raise InputError(
            f"The mapping file '{path}' is not TOML: {error}",
            remedy="put names with blanks or dashes in quotes",
        ) from error
    for section, table in content.items():
        if section not in _SECTIONS or not isinstance(table, Mapping):
            raise InputError(
                f"The mapping file '{path}' has '{section}'",
                allowed="tables [roles] and [labels]",
                remedy=nearest(section, _SECTIONS),
            )
    return content.get("roles", {}), content.get("labels")


def with_roles(given: Mapping[str, Any], changes: Mapping[str, Role]) -> dict[str, Role]:
    """Declared roles with some changed, as one role a name.

    Raises
    ------
    SettingError
        For an unknown role.
    """
    flat: dict[str, Role] = {}
    for key, value in given.items():
        if isinstance(value, (list, tuple)):
            flat.update({str(name): choice(Role, key, "role") for name in value})
        else:
            flat[str(key)] = choice(Role, value, f"roles[{key!r}]")
    return {**flat, **changes}


def _declared(roles: Mapping[str, Any], columns: Sequence[str]) -> dict[str, Role]:
    """Roles by column, from names to roles or from roles to lists of names."""
    declared: dict[str, Role] = {}
    known = set(columns)
    for key, value in roles.items():
        if isinstance(value, (list, tuple)):
            pairs = [(str(name), choice(Role, key, "role")) for name in value]
        else:
            pairs = [(str(key), choice(Role, value, f"roles[{key!r}]"))]
        for name, role in pairs:
            if name not in known:
                raise InputError(
                    f"A role is declared for '{name}', but no column has that name",
                    remedy=nearest(name, columns),
                )
            if declared.get(name, role) is not role:
                raise InputError(
                    f"'{name}' is declared both {declared[name].value} and {role.value}",
                    remedy="keep one of the two",
                )
            declared[name] = role
    return declared


def settle_roles(
    raws: Sequence[RawTable],
    roles: Mapping[str, Any],
    risk_free: str | None,
    raw_factors: Sequence[str],
    excess: Excess,
    record: RecordBuilder,
) -> dict[str, Role]:
    """The role of every column: declared, or by its source and its name, and said.

    Parameters
    ----------
    raws : sequence of RawTable
        Returns, then factors, then a risk-free Series, as far as they were given.
    roles : mapping
        What was declared.
    risk_free : str, optional
        The risk-free column, when it was named.
    raw_factors : sequence of str
        Factors from which the risk-free return is to be taken off.
    excess : Excess
        What was declared of the assets.
    record : RecordBuilder
        Where it is said.

    Raises
    ------
    InputError
        If roles contradict one another, or a risk-free return is needed and there is none.
    """
    columns = [name for raw in raws for name in raw.columns]
    stated = _declared(roles, columns)
    if risk_free is not None:
        if stated.get(risk_free, Role.RISK_FREE) is not Role.RISK_FREE:
            raise InputError(
                f"'{risk_free}' is both the risk-free return and declared {stated[risk_free].value}",
                remedy="keep one of the two",
            )
        stated[risk_free] = Role.RISK_FREE
    kinds = _by_name(raws, stated, record)
    _say_near_names(columns, stated, record)
    ignored = [name for name, role in stated.items() if role is Role.IGNORED]
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
    factors = [name for name, role in kinds.items() if role is Role.FACTOR]
    for name in raw_factors:
        if name not in factors:
            raise InputError(
                f"raw_factors names '{name}', which is no traded factor", remedy=nearest(name, factors)
            )
    if not free and (excess is Excess.RAW or raw_factors):
        raise InputError(
            "Returns are declared raw, but there is no risk-free return to take off",
            remedy="name its column with risk_free='...', or give it as a Series",
        )
    return kinds


def _by_name(raws: Sequence[RawTable], stated: Mapping[str, Role], record: RecordBuilder) -> dict[str, Role]:
    kinds: dict[str, Role] = {}
    suggested: list[str] = []
    has_rate = Role.RISK_FREE in stated.values()
    several = len(raws) > 1 and raws[1].slot == "factors"
    for raw in raws:
        for name in raw.columns:
            rate = _bare(name) in _RISK_FREE
            if name in stated:
                kinds[name] = stated[name]
            elif rate and not has_rate:
                kinds[name] = Role.RISK_FREE
                record.add(
                    EntryKind.ROLES,
                    f"'{name}' was taken as the risk-free return by its name.",
                    series=name,
                    source=raw.source,
                )
            elif rate:
                kinds[name] = Role.IGNORED
                record.add(
                    EntryKind.ROLES,
                    f"'{name}' has the name of a risk-free return, but another one was declared; it was left out.",
                    Severity.WARNING,
                    series=name,
                    source=raw.source,
                )
            elif not several and _bare(name) in _FACTORS:
                kinds[name] = Role.FACTOR
                suggested.append(name)
            else:
                kinds[name] = Role.FACTOR if raw.slot == "factors" else Role.ASSET
    if suggested:
        record.add(
            EntryKind.ROLES,
            f"Taken as traded factors by their published names: {listed(suggested)}.",
            series=suggested,
            rows=len(suggested),
        )
    return kinds


def _say_near_names(columns: Sequence[str], stated: Mapping[str, Role], record: RecordBuilder) -> None:
    """Say so when a name is nearly that of the risk-free return."""
    if (
        len(columns) > _FEW
        or Role.RISK_FREE in stated.values()
        or any(_bare(name) in _RISK_FREE for name in columns)
    ):
        return
    for name in columns:
        bare = _bare(name)
        near = name not in stated and (
            get_close_matches(bare, _RISK_FREE[1:], n=1, cutoff=0.8) or bare in ("rfr", "rff", "r_f", "cash")
        )
        if near:
            record.add(
                EntryKind.ROLES,
                f"'{name}' may be the risk-free return by its name; if so, say risk_free='{name}'.",
                Severity.WARNING,
                series=name,
            )
