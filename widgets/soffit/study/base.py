"""What every study is: a panel, settings, and results that are computed once."""

from __future__ import annotations

from collections.abc import Callable, Hashable, Mapping
from functools import wraps
from pathlib import Path
from typing import TYPE_CHECKING, Any, Concatenate, ParamSpec, Self, TypeVar, cast

import pandas as pd

from soffit.errors import InputError
from soffit.estimate.steps import Steps
from soffit.intake import Panel, Role, Source, open_panel
from soffit.intake.options import choice
from soffit.intake.roles import read_mapping, with_roles
from soffit.settings import Settings

if TYPE_CHECKING:
    from soffit.intake import IntakeRecord

__all__ = ["COSTS", "CROSS_SECTION", "PREMIA", "REGRESSION", "SAMPLE", "StudyBase", "computed", "in_steps"]

S = TypeVar("S", bound="StudyBase")
P = ParamSpec("P")
R = TypeVar("R")

# What decides which numbers enter an estimate, and how regressions measure their errors.
SAMPLE = ("start", "end", "factors", "assets", "histories")
REGRESSION = (*SAMPLE, "error_type", "lag_rule", "lags", "reference", "level")
PREMIA = (*SAMPLE, "lag_rule", "lags", "reference", "level")
CROSS_SECTION = (
    *PREMIA,
    "error_type",
    "cross_section.second_pass",
    "cross_section.constant",
    "cross_section.betas",
    "cross_section.window",
    "bootstrap_draws",
    "seed",
)
COSTS = tuple(name for name, _ in Settings.fields() if name.startswith("costs."))


def computed(
    *depends: str,
) -> Callable[[Callable[Concatenate[S, P], R]], Callable[Concatenate[S, P], R]]:
    """Compute a result once for each value of the settings it depends on.

    Parameters
    ----------
    *depends : str
        Dotted names of those settings. Arguments of the method, which must be hashable, count as well.
    """
    for name in depends:
        Settings.note(name)

    def decorate(method: Callable[Concatenate[S, P], R]) -> Callable[Concatenate[S, P], R]:
        @wraps(method)
        def once(self: S, *args: P.args, **kwargs: P.kwargs) -> R:
            chosen = tuple(_hashable(self.settings.get(name)) for name in depends)
            key = (method.__qualname__, chosen, args, tuple(sorted(kwargs.items())))
            if key not in self._results:
                self._results[key] = method(self, *args, **kwargs)
            found: R = self._results[key]
            return found

        return cast("Callable[Concatenate[S, P], R]", once)

    return decorate


def in_steps(
    *depends: str,
) -> Callable[[Callable[[S], Steps[R]]], Callable[[S], Steps[R]]]:
    """Like :func:`computed`, for a method that works in steps: what was once worked out takes no further step."""
    for name in depends:
        Settings.note(name)

    def decorate(method: Callable[[S], Steps[R]]) -> Callable[[S], Steps[R]]:
        @wraps(method)
        def once(self: S) -> Steps[R]:
            key = (method.__qualname__, tuple(_hashable(self.settings.get(name)) for name in depends))
            if key not in self._results:
                self._results[key] = yield from method(self)
            found: R = self._results[key]
            return found

        return once

    return decorate


def _hashable(value: Any) -> Hashable:
    if isinstance(value, Mapping):
        return tuple((name, _hashable(item)) for name, item in value.items())
    if isinstance(value, list):
        return tuple(value)
    return value if isinstance(value, Hashable) else repr(value)


class StudyBase:
    """A panel of returns and the settings to judge it by.

    Change settings with :meth:`changed`, which gives another study on the same panel; results that the change
    does not touch are shared, not computed again.

    Parameters
    ----------
    panel : Panel
        Aligned, decimal, excess returns.
    settings : Settings, optional
        Every choice; defaults otherwise.

    Attributes
    ----------
    panel : Panel
    settings : Settings
    kept : list
        What was kept for the memo, in order; shared by all studies changed from this one.
    opened_from : mapping
        Files and options that :meth:`open` was given; empty where the data came from memory.
    """

    def __init__(self, panel: Panel, settings: Settings | None = None) -> None:
        self.panel = panel
        self.settings = settings or Settings()
        self.kept: list[Any] = []
        self.opened_from: Mapping[str, Any] = {}
        self._given: tuple[Any, Any, dict[str, Any]] | None = None
        self._results: dict[Hashable, Any] = {}

    @classmethod
    def open(
        cls,
        returns: str | Path | pd.DataFrame | Source,
        factors: str | Path | pd.DataFrame | Source | None = None,
        *,
        settings: Settings | str | Path | None = None,
        **options: Any,
    ) -> Self:
        """Open files or frames as a study.

        Parameters
        ----------
        returns : path, DataFrame or Source
            Returns of the assets (and of anything else, told apart by roles).
        factors : path, DataFrame or Source, optional
            Returns of the traded factors.
        settings : Settings or path, optional
            Settings, or a TOML file of them.
        **options
            Passed to :func:`soffit.intake.open_panel`: units, excess, risk_free, roles and more.

        Raises
        ------
        InputError
            If the data cannot be used as they are; the message says how to mend them.
        """
        if isinstance(settings, str | Path):
            settings = Settings.load(settings)
        study = cls(open_panel(returns, factors, **options), settings)
        study._given = returns, factors, options
        if all(isinstance(source, str | Path) for source in (returns, "" if factors is None else factors)):
            study.opened_from = {
                "returns": str(returns),
                "factors": "" if factors is None else str(factors),
                "options": options,
            }
        return study

    @property
    def record(self) -> IntakeRecord:
        """What the intake assumed, converted and dropped."""
        return self.panel.record

    def changed(self, values: Mapping[str, Any] | None = None, /, **more: Any) -> Self:
        """Study on the same panel with some settings changed; see :meth:`soffit.settings.Settings.changed`.

        Raises
        ------
        SettingError
            For an unknown name or a value out of range.
        """
        return self.with_settings(self.settings.changed(values, **more))

    def with_settings(self, settings: Settings) -> Self:
        """Study on the same panel with other settings; shares results and what was kept."""
        if settings == self.settings:
            return self
        other = type(self)(self.panel, settings)
        other.kept, other._results, other.opened_from = self.kept, self._results, self.opened_from
        other._given = self._given
        return other

    def with_roles(self, roles: Mapping[str, Role | str]) -> Self:
        """Read the same sources again with some roles changed; settings and what was kept stay.

        Parameters
        ----------
        roles : mapping of str to Role
            Roles of the series that change: asset, traded factor, non-traded factor, risk-free or ignored.

        Raises
        ------
        SettingError
            For an unknown role.
        InputError
            If the data cannot be used so, or this study was not opened from sources.
        """
        if self._given is None:
            raise InputError(
                "This study was made from a panel, not from sources",
                remedy="open the sources with Study.open, with roles",
            )
        returns, factors, options = self._given
        stated, labels = read_mapping(options.get("roles"))
        changes = {name: choice(Role, role, f"roles[{name!r}]") for name, role in roles.items()}
        again = {**options, "roles": with_roles(stated, changes)}
        if labels is not None:
            again["labels"] = labels
        study = type(self).open(returns, factors, settings=self.settings, **again)
        study.kept = self.kept
        return study

    def __repr__(self) -> str:
        shape = f"{self.panel.assets.shape[1]} assets, {self.panel.factors.shape[1]} factors"
        dates = self.panel.dates
        span = f"{dates[0]:%Y-%m} to {dates[-1]:%Y-%m}"
        return f"{type(self).__name__}({shape}, {span}, ceiling {self.settings.ceiling:g} a year)"
