"""The factor regressions: every alpha with its interval, and the table behind them."""

from __future__ import annotations

import numpy as np

from soffit.present.spec import (
    Axis,
    AxisScale,
    Column,
    Exhibit,
    FigureSpec,
    NumberForm,
    Orientation,
    Points,
    Role,
    Rule,
    Segments,
    TableSpec,
)
from soffit.present.wording.numbers import plural, show, show_range
from soffit.present.wording.regression import regression_finding
from soffit.present.wording.sample import sample_line
from soffit.settings import ErrorType, LagRule
from soffit.study import FactorRegression, Study

__all__ = ["alphas_figure", "exhibit", "regression_table"]

# More intervals than this do not fit a page: the figure then shows the largest t ratios.
_MOST_ROWS = 40

_ERROR_SOURCES = {
    ErrorType.HC0: ("white-1980",),
    ErrorType.HC1: ("white-1980", "mackinnon-white-1985"),
    ErrorType.HC2: ("mackinnon-white-1985",),
    ErrorType.HC3: ("mackinnon-white-1985",),
    ErrorType.HAC: ("newey-west-1987",),
}


def exhibit(study: Study) -> Exhibit:
    """Build the exhibit of the factor regressions."""
    regression = study.regression()
    sources = ["treynor-black-1973", *_ERROR_SOURCES.get(regression.choice.kind, ())]
    if regression.choice.kind is ErrorType.HAC and regression.choice.lag_rule is LagRule.AUTOMATIC:
        sources.append("newey-west-1994")
    return Exhibit(
        key="regression",
        title="Factor regressions",
        sample=sample_line(study),
        finding=regression_finding(regression),
        figures=(alphas_figure(study, regression),),
        tables=(regression_table(study, regression),),
        sources=tuple(sources),
        cautions=("Alphas are estimates from past returns, before the costs of the hedge.",),
    )


def alphas_figure(study: Study, regression: FactorRegression) -> FigureSpec:
    """Draw the alphas with their intervals, one row an asset."""
    table = regression.table
    chosen = table["t"].abs().sort_values(ascending=False, kind="stable").index[:_MOST_ROWS]
    shown = table.loc[chosen].sort_values("alpha", kind="stable")
    at = np.arange(len(shown), dtype=float)
    apart = (shown["alpha_low"] > 0) | (shown["alpha_high"] < 0)
    roles = tuple(Role.SECOND if away else Role.ESTIMATE for away in apart)
    percent, level = NumberForm.PERCENT, show(regression.level, NumberForm.SHARE)
    hover = tuple(
        f"{name}: alpha {show(row.alpha, percent)} a year "
        f"({show_range(row.alpha_low, row.alpha_high, percent)}), t {show(row.t, NumberForm.RATIO)}"
        for name, row in zip(shown.index, shown.itertuples(), strict=True)
    )
    names = tuple(str(name) for name in shown.index)
    cut = f" The {_MOST_ROWS} largest t ratios of {len(table):,} assets." if len(table) > len(shown) else ""
    return FigureSpec(
        key="regression-alphas",
        title=f"Alphas with {level} intervals",
        x=Axis("Alpha, % a year", percent),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=names),
        marks=(
            Rule("zero", 0.0, Orientation.VERTICAL, Role.REFERENCE),
            Segments(
                "intervals",
                at,
                shown["alpha_low"].to_numpy(dtype=float),
                shown["alpha_high"].to_numpy(dtype=float),
                Orientation.HORIZONTAL,
                roles,
            ),
            Points("alphas", shown["alpha"].to_numpy(dtype=float), at, names, roles, hover, selectable=True),
        ),
        alt=(
            f"Alphas of {plural(len(shown), 'asset')} with {level} intervals; "
            f"{int(apart.sum())} intervals do not contain zero."
        ),
        footnote=f"{sample_line(study)}. Diamonds: the interval does not hold zero.{cut}",
        aspect=1.2,
    )


def regression_table(study: Study, regression: FactorRegression) -> TableSpec:
    """Tabulate alphas, betas, fit and appraisal ratios."""
    percent, ratio = NumberForm.PERCENT, NumberForm.RATIO
    level = show(regression.level, NumberForm.SHARE)
    betas = tuple(Column(f"beta {name}", f"β {name}", ratio) for name in regression.sample.factor_names)
    columns = (
        Column("mean", "Mean, a year", percent),
        Column("alpha", "Alpha, a year", percent),
        Column("alpha_error", "Std error", percent),
        Column("t", "t", ratio),
        Column("p", "p", NumberForm.PVALUE),
        *betas,
        Column("r2", "R²", NumberForm.SHARE),
        Column("sigma", "Residual vol., a year", percent),
        Column("appraisal", "Appraisal ratio, a year", ratio),
        Column("appraisal_low", f"{level} from", ratio),
        Column("appraisal_high", "to", ratio),
        Column("periods", "T", NumberForm.COUNT),
    )
    return TableSpec(
        key="regression-table",
        title="Factor regressions",
        columns=columns,
        frame=regression.table,
        footnote=(
            f"{sample_line(study)}. Alpha, mean and volatility a year; intervals of appraisal ratios are exact for "
            "normal residuals. A dash: the factors replicate the asset."
        ),
    )
