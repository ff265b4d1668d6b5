"""The choices of the intake, as Enums, and the one place where a string becomes one."""

from __future__ import annotations

from collections.abc import Mapping
from enum import StrEnum
from typing import Any, TypeVar

from soffit.errors import SettingError, nearest

__all__ = ["Content", "Excess", "Frequency", "Layout", "Mismatch", "Role", "Units", "choice", "per_series"]


class Frequency(StrEnum):
    """How often a series is observed."""

    DAILY = "daily"
    WEEKLY = "weekly"
    MONTHLY = "monthly"
    QUARTERLY = "quarterly"
    ANNUAL = "annual"

    @property
    def periods_per_year(self) -> int:
        """Periods in a year, by the trade's convention for days."""
        return {"daily": 252, "weekly": 52, "monthly": 12, "quarterly": 4, "annual": 1}[self.value]

    @property
    def noun(self) -> str:
        """The period as a noun: 'day', 'week', 'month', 'quarter' or 'year'."""
        return {
            "daily": "day",
            "weekly": "week",
            "monthly": "month",
            "quarterly": "quarter",
            "annual": "year",
        }[self.value]


class Units(StrEnum):
    """Unit of a column of returns."""

    DETECT = "detect"
    DECIMAL = "decimal"
    PERCENT = "percent"
    BASIS_POINTS = "basis points"


class Content(StrEnum):
    """What a column of numbers is."""

    DETECT = "detect"
    RETURNS = "returns"
    PRICES = "prices"


class Excess(StrEnum):
    """Whether the assets' returns come with the risk-free return already taken off."""

    DETECT = "detect"
    ALREADY = "already excess"
    RAW = "raw"


class Layout(StrEnum):
    """How a table is laid out."""

    DETECT = "detect"
    WIDE = "wide"
    LONG = "long"


class Mismatch(StrEnum):
    """What happens when series are declared in different currencies, or some gross and some net of fees."""

    REFUSE = "refuse"
    LABEL = "label"


class Role(StrEnum):
    """What a column is in a study."""

    ASSET = "asset"
    FACTOR = "traded factor"
    NON_TRADED = "non-traded factor"
    RISK_FREE = "risk-free"
    IGNORED = "ignored"


E = TypeVar("E", bound=StrEnum)


def choice(kind: type[E], value: Any, argument: str) -> E:
    """Turn what an analyst typed into a member of an Enum.

    Parameters
    ----------
    kind : type of StrEnum
        The Enum.
    value : Any
        A member, or its string value in any case.
    argument : str
        Name of the argument, for the error.

    Raises
    ------
    SettingError
        For anything else, with the nearest allowed value.
    """
    if isinstance(value, kind):
        return value
    folded = {member.value.casefold(): member for member in kind}
    if isinstance(value, str) and value.strip().casefold() in folded:
        return folded[value.strip().casefold()]
    allowed = [member.value for member in kind]
    raise SettingError(
        f"{argument}={value!r} is not known",
        allowed=", ".join(f"'{name}'" for name in allowed),
        remedy=nearest(str(value), allowed),
    )


def per_series(kind: type[E], value: Any, argument: str, default: E) -> tuple[E, dict[str, E]]:
    """Read a choice given once for all series, or by name.

    Returns
    -------
    tuple of (E, dict of str to E)
        The choice for series that are not named, and those that are.
    """
    if isinstance(value, Mapping):
        return default, {
            str(name): choice(kind, item, f"{argument}[{name!r}]") for name, item in value.items()
        }
    return choice(kind, value, argument), {}
