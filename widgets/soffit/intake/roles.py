"""Which column is an asset, a factor, the risk-free return, or nothing to the study."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from soffit.errors import InputError, nearest
from soffit.intake.options import Role, choice

__all__ = ["looks_like_factor", "looks_like_risk_free", "read_roles"]

_RISK_FREE = re.compile(r"rf|riskfree|riskfreerate|rfrate|tbill|tbill1m|1mtbill|rfree", re.ASCII)
_FACTORS = {
    "mktrf", "mkt", "market", "smb", "hml", "rmw", "cma", "mom", "umd", "wml", "hmlfx", "bab", "qmj", "hmldevil",
    "strev", "ltrev",
}  # fmt: skip


def _bare(name: str) -> str:
    return re.sub(r"[^a-z0-9]", "", name.casefold())


def looks_like_risk_free(name: str) -> bool:
    """Whether a column's name says that it is the risk-free return."""
    return _RISK_FREE.fullmatch(_bare(name)) is not None


def looks_like_factor(name: str) -> bool:
    """Whether a column has the published name of a traded factor, such as 'Mkt-RF' or 'SMB'."""
    return _bare(name) in _FACTORS


def read_roles(roles: Mapping[str, Any] | str | Path | None, known: Iterable[str]) -> dict[str, Role]:
    """Roles by column name, from a mapping or a TOML file.

    A mapping goes from names to roles, or from roles to lists of names; a file holds the same in a table
    ``[roles]``.

    Parameters
    ----------
    roles : mapping, path or None
        What the analyst declared.
    known : iterable of str
        The columns there are.

    Raises
    ------
    InputError
        If the file cannot be read, or a name is not a column, with the nearest that is.
    SettingError
        If a role is not known.
    """
    if roles is None:
        return {}
    if isinstance(roles, (str, Path)):
        roles = _from_file(Path(roles))
    declared: dict[str, Role] = {}
    columns = list(known)
    for key, value in roles.items():
        if isinstance(value, (list, tuple)):
            pairs = [(str(name), choice(Role, key, "role")) for name in value]
        else:
            pairs = [(str(key), choice(Role, value, f"roles[{key!r}]"))]
        for name, role in pairs:
            if name not in columns:
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


def _from_file(path: Path) -> Mapping[str, Any]:
    try:
        content = tomllib.loads(path.read_text(encoding="utf-8-sig"))
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"The roles file '{path}' cannot be read ({error})") from error
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"The roles file '{path}' is not TOML: {error}") from error
    table = content.get("roles")
    if not isinstance(table, Mapping):
        raise InputError(
            f"The roles file '{path}' has no table [roles]",
            remedy='write [roles] and below it lines such as "SMB" = "traded factor"',
        )
    return table
