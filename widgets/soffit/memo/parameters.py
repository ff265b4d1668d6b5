"""Settings as the ``parameters`` cell of a notebook, and back. Cells are read, never run, to find out."""

from __future__ import annotations

import ast
from collections.abc import Iterable, Mapping
from datetime import date
from enum import StrEnum
from typing import Any

from soffit.errors import SettingError, nearest
from soffit.settings import ChoiceGroup, Settings

__all__ = ["check_names", "merged", "parameters_source", "read_parameters", "settings_from_parameters"]

_TAG = "parameters"


def parameters_source(settings: Settings) -> str:
    """Write settings as the source of a parameters cell.

    Groups are dictionaries, dates are text, empty settings are None.

    Returns
    -------
    str
        One assignment a line.
    """
    return "\n".join(f"{name} = {_plain(value)!r}" for name, value in settings.to_dict().items())


def settings_from_parameters(values: Mapping[str, Any]) -> Settings:
    """Settings from the variables of a parameters cell.

    Parameters
    ----------
    values : mapping
        Names of top-level settings and their values; other names are refused.

    Raises
    ------
    SettingError
        For an unknown name, with the nearest known one, or a value out of range.
    """
    check_names(values, Settings.model_fields)
    return Settings.from_dict(values)


def read_parameters(source: str) -> dict[str, Any]:
    """Read the assignments of a parameters cell without running it.

    Raises
    ------
    SettingError
        If the cell holds anything but plain values given to names.
    """
    try:
        tree = ast.parse(source)
    except SyntaxError as error:
        raise SettingError(f"The parameters cell is not Python ({error})") from error
    found: dict[str, Any] = {}
    for line in tree.body:
        target = line.targets[0] if isinstance(line, ast.Assign) and len(line.targets) == 1 else None
        target = line.target if isinstance(line, ast.AnnAssign) else target
        if isinstance(line, ast.Expr) and isinstance(line.value, ast.Constant):
            continue  # a text that explains
        if not isinstance(line, ast.Assign | ast.AnnAssign) or not isinstance(target, ast.Name):
            raise SettingError(
                f"Line {line.lineno} of the parameters cell is no plain assignment", allowed="name = value"
            )
        try:
            found[target.id] = ast.literal_eval(line.value) if line.value else None
        except ValueError as error:
            raise SettingError(
                f"Line {line.lineno} of the parameters cell computes '{target.id}'", allowed="a plain value"
            ) from error
    return found


def check_names(given: Iterable[str], known: Iterable[str]) -> None:
    """Refuse names that are not known.

    Raises
    ------
    SettingError
        With the nearest known names.
    """
    allowed = list(known)
    for name in given:
        if name not in allowed:
            raise SettingError(f"There is no parameter '{name}'", remedy=nearest(name, allowed))


def merged(base: Mapping[str, Any], sets: Mapping[str, Any]) -> dict[str, Any]:
    """Parameters with some changed; a dotted name changes one entry of a dictionary.

    Raises
    ------
    SettingError
        For an unknown name, with the nearest known one.
    """
    made = {name: dict(value) if isinstance(value, Mapping) else value for name, value in base.items()}
    known = [
        dotted
        for name, value in base.items()
        for dotted in ([name, *(f"{name}.{key}" for key in value)] if isinstance(value, Mapping) else [name])
    ]
    check_names(sets, known)
    for name, value in sets.items():
        head, _, tail = name.partition(".")
        if tail:
            made[head][tail] = _plain(value)
        else:
            made[head] = _plain(value)
    return made


def _plain(value: Any) -> Any:
    """A value as a notebook can hold it: no Enums, no dates, no tuples."""
    if isinstance(value, StrEnum):
        return str(value)
    if isinstance(value, date):
        return value.isoformat()
    if isinstance(value, ChoiceGroup):
        return _plain(value.model_dump())
    if isinstance(value, Mapping):
        return {str(name): _plain(item) for name, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    return value
