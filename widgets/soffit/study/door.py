"""The study: a panel and settings; every result computed once, when it is asked for."""

from __future__ import annotations

from collections.abc import Callable, Hashable, Mapping
from functools import wraps
from pathlib import Path
from typing import TYPE_CHECKING, Any, Concatenate, ParamSpec, TypeVar, cast

import pandas as pd

from soffit.intake import Panel, open_panel
from soffit.settings import CeilingForm, Settings
from soffit.study.ceiling_verdict import CeilingMap, CeilingVerdict
from soffit.study.factor_regression import FactorRegression
from soffit.study.joint_test import JointTest
from soffit.study.sample import Sample

if TYPE_CHECKING:
    from soffit.intake import IntakeRecord

__all__ = ["Study", "computed"]

P = ParamSpec("P")
R = TypeVar("R")

# What decides which numbers enter an estimate, and how regressions measure their errors.
SAMPLE = ("start", "end", "factors", "assets", "histories")
REGRESSION = (*SAMPLE, "error_type", "lag_rule", "lags", "reference", "level")


def computed(
    *depends: str,
) -> Callable[[Callable[Concatenate[Study, P], R]], Callable[Concatenate[Study, P], R]]:
    """Compute a result once for each value of the settings it depends on.

    Parameters
    ----------
    *depends : str
        Dotted names of those settings. Arguments of the method, which must be hashable, count as well.
    """
    for name in depends:
        Settings.note(name)

    def decorate(method: Callable[Concatenate[Study, P], R]) -> Callable[Concatenate[Study, P], R]:
        @wraps(method)
        def once(self: Study, *args: P.args, **kwargs: P.kwargs) -> R:
            chosen = tuple(_hashable(self.settings.get(name)) for name in depends)
            key = (method.__qualname__, chosen, args, tuple(sorted(kwargs.items())))
            if key not in self._results:
                self._results[key] = method(self, *args, **kwargs)
            found: R = self._results[key]
            return found

        return cast("Callable[Concatenate[Study, P], R]", once)

    return decorate


def _hashable(value: Any) -> Hashable:
    if isinstance(value, Mapping):
        return tuple((name, _hashable(item)) for name, item in value.items())
    if isinstance(value, list):
        return tuple(value)
    return value if isinstance(value, Hashable) else repr(value)


class Study:
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
    """

    def __init__(self, panel: Panel, settings: Settings | None = None) -> None:
        self.panel = panel
        self.settings = settings or Settings()
        self.kept: list[Any] = []
        self._results: dict[Hashable, Any] = {}

    @classmethod
    def open(
        cls,
        returns: str | Path | pd.DataFrame,
        factors: str | Path | pd.DataFrame | None = None,
        *,
        settings: Settings | str | Path | None = None,
        **options: Any,
    ) -> Study:
        """Open files or frames as a study.

        Parameters
        ----------
        returns : path or DataFrame
            Returns of the assets (and of anything else, told apart by roles).
        factors : path or DataFrame, optional
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
        return cls(open_panel(returns, factors, **options), settings)

    @property
    def record(self) -> IntakeRecord:
        """What the intake assumed, converted and dropped."""
        return self.panel.record

    def changed(self, values: Mapping[str, Any] | None = None, /, **more: Any) -> Study:
        """Study on the same panel with some settings changed; see :meth:`soffit.settings.Settings.changed`.

        Raises
        ------
        SettingError
            For an unknown name or a value out of range.
        """
        return self.with_settings(self.settings.changed(values, **more))

    def with_settings(self, settings: Settings) -> Study:
        """Study on the same panel with other settings; shares results and what was kept."""
        if settings == self.settings:
            return self
        other = type(self)(self.panel, settings)
        other.kept, other._results = self.kept, self._results
        return other

    def __repr__(self) -> str:
        shape = f"{self.panel.assets.shape[1]} assets, {self.panel.factors.shape[1]} factors"
        dates = self.panel.dates
        return (
            f"Study({shape}, {dates[0]:%Y-%m} to {dates[-1]:%Y-%m}, ceiling {self.settings.ceiling:g} a year)"
        )

    @computed(*SAMPLE)
    def sample(self) -> Sample:
        """Rows, assets and factors that the settings choose."""
        return Sample.of(self.panel, self.settings)

    @computed(*REGRESSION)
    def regression(self) -> FactorRegression:
        """Regress every asset on the factors."""
        return FactorRegression.of(self.sample(), self.settings)

    @computed(*REGRESSION)
    def joint_test(self) -> JointTest:
        """Test that all alphas are zero."""
        return JointTest.of(self.regression(), self.settings)

    @computed(*REGRESSION)
    def ceiling_map(self) -> CeilingMap:
        """What the alphas say about ceilings, before one is named."""
        return CeilingMap(self.regression(), self.joint_test())

    def ceiling(self, ceiling: float | None = None, form: CeilingForm | None = None) -> CeilingVerdict:
        """Hold a Sharpe ceiling against the alphas.

        Parameters
        ----------
        ceiling : float, optional
            Highest Sharpe ratio a year; from the settings if None.
        form : CeilingForm, optional
            Which portfolio the ceiling binds; from the settings if None.
        """
        chosen = self.settings if ceiling is None and form is None else None
        if chosen is None:
            values = {"ceiling": ceiling, "ceiling_form": form}
            chosen = self.settings.changed(
                {name: value for name, value in values.items() if value is not None}
            )
        return self.ceiling_map().at(chosen.ceiling, chosen.ceiling_form)
