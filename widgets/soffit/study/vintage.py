"""What another vintage of the factors does to the alphas."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import pandas as pd

from soffit.errors import InputError
from soffit.intake import Panel
from soffit.intake.vintages import VintageComparison, compare_vintages, open_vintage
from soffit.study.factor_regression import FactorRegression
from soffit.study.sample import Sample

if TYPE_CHECKING:
    from soffit.settings import Settings

__all__ = ["VintageEffect"]


@dataclass(frozen=True, eq=False)
class VintageEffect:
    """The same assets regressed on two vintages of the same factors, over the dates that both have.

    Parameters
    ----------
    comparison : VintageComparison
        What changed in the factors.
    old, new : FactorRegression
        The regressions on either vintage.
    """

    comparison: VintageComparison
    old: FactorRegression
    new: FactorRegression

    @classmethod
    def of(cls, panel: Panel, settings: Settings, vintage: Any) -> VintageEffect:
        """Compare the panel's factors with an earlier vintage of them.

        Raises
        ------
        InputError
            If the vintage cannot be read, or lacks a factor of the study.
        """
        opened = open_vintage(vintage)
        comparison = compare_vintages(opened, replace(panel, risk_free=None))
        names = list(settings.factors or panel.factors.columns)
        missing = [name for name in names if name not in opened.factors]
        if missing:
            raise InputError(
                f"The other vintage has no factor '{missing[0]}'",
                allowed=", ".join(f"'{name}'" for name in opened.factors),
                remedy="choose factors that both vintages have",
            )
        dates = panel.factors.index.intersection(opened.factors.index)
        then = replace(panel, assets=panel.assets.loc[dates], factors=opened.factors.loc[dates, names])
        now = replace(panel, assets=panel.assets.loc[dates], factors=panel.factors.loc[dates, names])
        regressions = [FactorRegression.of(Sample.of(one, settings), settings) for one in (then, now)]
        return cls(comparison, *regressions)

    @property
    def table(self) -> pd.DataFrame:
        """One row an asset: alpha and t on either vintage, and the change of alpha; decimal a year."""
        old, new = self.old.table, self.new.table
        return pd.DataFrame(
            {
                "alpha_old": old["alpha"],
                "t_old": old["t"],
                "alpha_new": new["alpha"],
                "t_new": new["t"],
                "change": new["alpha"] - old["alpha"],
                "periods": new["periods"],
            }
        )
