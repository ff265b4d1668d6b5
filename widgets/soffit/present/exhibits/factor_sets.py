"""Factor sets side by side: what each earns, what it leaves over, and what each factor adds to the others."""

from __future__ import annotations

import numpy as np

from soffit.estimate.statistic import NotApplicable
from soffit.present.spec import (
    Axis,
    AxisScale,
    Bars,
    Column,
    Exhibit,
    FigureSpec,
    Mark,
    NumberForm,
    Orientation,
    Points,
    Role,
    Rule,
    Segments,
    TableSpec,
)
from soffit.present.wording.factor_sets import factor_sets_finding
from soffit.present.wording.numbers import plural, show, show_range
from soffit.study import FactorSets, Study

__all__ = ["alpha_figure", "exhibit", "pairs_table", "sets_table", "sharpe_figure", "spanning_table"]

_SOURCES = (
    "gibbons-ross-shanken-1989",
    "jobson-korkie-1980",
    "hotelling-1931",
    "treynor-black-1973",
    "barillas-shanken-2017",
    "fama-french-2015",
)


def exhibit(study: Study) -> Exhibit:
    """Build the exhibit that compares factor sets."""
    found = study.factor_sets()
    pairs = found.pairs
    apart = bool(len(pairs)) and bool((pairs["distribution"] == "normal").any())
    tables = [sets_table(study, found), spanning_table(study, found)]
    if len(pairs):
        tables.append(pairs_table(study, found))
    reasons = dict.fromkeys(
        f"GRS test of '{each.name}': {each.joint.grs.reason}"
        for each in found.sets
        if isinstance(each.joint.grs, NotApplicable)
    )
    return Exhibit(
        key="factor-sets",
        title="Factor sets compared",
        sample=_sample(found, study),
        finding=factor_sets_finding(found),
        figures=(sharpe_figure(study, found), alpha_figure(study, found)),
        tables=tuple(tables),
        sources=(*_SOURCES, "barillas-kan-robotti-shanken-2020") if apart else _SOURCES,
        cautions=("The set that fits best was picked on this sample; it will look worse on the next one.",),
        notes=tuple(reasons),
    )


def _sample(found: FactorSets, study: Study) -> str:
    block = found.block
    return " · ".join(
        (
            show_range(block.dates[0], block.dates[-1], NumberForm.DATE),
            f"T = {plural(len(block.dates), study.sample().frequency.noun)}",
            f"N = {len(block.positions):,}",
            plural(len(found.sets), "factor set"),
        )
    )


def sharpe_figure(study: Study, found: FactorSets) -> FigureSpec:
    """Draw each set's Sharpe ratio with its interval, and the ceilings that its alphas need."""
    table = found.table.iloc[::-1]  # category axes run upwards: the first set comes on top
    at = np.arange(len(table), dtype=float)
    names = tuple(str(name) for name in table.index)
    ratio, ceiling = NumberForm.RATIO, study.settings.ceiling
    hover = tuple(
        f"{name} ({row.factors}): Sharpe ratio {show(row.sharpe, ratio)} in sample "
        f"({show_range(row.sharpe_low, row.sharpe_high, ratio)}), {show(row.sharpe_unbiased, ratio)} bias-adjusted; "
        f"with the assets {show(row.needed_together, ratio)}"
        for name, row in zip(names, table.itertuples(), strict=True)
    )

    def points(column: str, role: Role, label: str) -> Points | None:
        values = table[column].to_numpy(dtype=float)
        there = np.isfinite(values)
        if not there.any():
            return None
        chosen = np.flatnonzero(there)
        return Points(
            column,
            values[there],
            at[there],
            tuple(names[i] for i in chosen),
            (role,),
            tuple(hover[i] for i in chosen),
            label=label,
        )

    drawn = (
        points("sharpe", Role.FACTORS, "factors, in sample"),
        points("sharpe_unbiased", Role.SECOND, "factors, bias-adjusted"),
        points("needed_together", Role.ESTIMATE, "factors and assets"),
    )
    marks: list[Mark] = [
        Rule("ceiling", ceiling, Orientation.VERTICAL, Role.CEILING, f"ceiling {show(ceiling, ratio)}"),
        Segments(
            "intervals",
            at,
            table["sharpe_low"].to_numpy(dtype=float),
            table["sharpe_high"].to_numpy(dtype=float),
            Orientation.HORIZONTAL,
            (Role.FACTORS,),
        ),
        *(mark for mark in drawn if mark is not None),
    ]
    listed = "; ".join(
        f"{name} {show(value, ratio)}"
        for name, value in zip(names[::-1], table["sharpe"].iloc[::-1], strict=True)
    )
    return FigureSpec(
        key="factor-sets-sharpe",
        title="What each factor set earns, alone and with the assets",
        x=Axis("Sharpe ratio, a year", ratio),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=names),
        marks=tuple(marks),
        alt=f"Annual Sharpe ratios of {plural(len(table), 'factor set')} in sample: {listed}.",
        footnote=(
            f"{_sample(found, study)}. Exact {show(found.level, NumberForm.SHARE)} intervals of the factors' ratio."
        ),
        aspect=1.6,
    )


def alpha_figure(study: Study, found: FactorSets) -> FigureSpec:
    """Draw the mean absolute alpha that each set leaves."""
    table = found.table.iloc[::-1]
    names = tuple(str(name) for name in table.index)
    values = table["mean_abs_alpha"].to_numpy(dtype=float)
    percent = NumberForm.PERCENT
    listed = "; ".join(
        f"{name} {show(float(value), percent)}" for name, value in zip(names[::-1], values[::-1], strict=True)
    )
    return FigureSpec(
        key="factor-sets-alpha",
        title="Mean |alpha| that each factor set leaves",
        x=Axis("Mean |alpha|, % a year", percent),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=names),
        marks=(Bars("alpha", np.arange(len(names), dtype=float), values, names, Orientation.HORIZONTAL),),
        alt=f"Mean absolute alpha a year: {listed}.",
        footnote=f"{_sample(found, study)}.",
        aspect=2.0,
    )


def sets_table(study: Study, found: FactorSets) -> TableSpec:
    """Tabulate the sets."""
    ratio, pvalue, statistic = NumberForm.RATIO, NumberForm.PVALUE, NumberForm.STATISTIC
    level, size = show(found.level, NumberForm.SHARE), show(1.0 - found.level, NumberForm.SHARE)
    columns = (
        Column("factors", "Factors", NumberForm.TEXT),
        Column("sharpe", "Sharpe ratio, a year", ratio),
        Column("sharpe_low", f"{level} from", ratio),
        Column("sharpe_high", "to", ratio),
        Column("sharpe_unbiased", "Bias-adjusted", ratio),
        Column("grs", "GRS", statistic),
        Column("p", "p", pvalue),
        Column("mean_abs_alpha", "Mean |alpha|, a year", NumberForm.PERCENT),
        Column("alpha_share", "Of mean |return|", NumberForm.SHARE),
        Column("mean_r2", "Mean R²", NumberForm.SHARE),
        Column("needed_alone", "Ceiling needed, alone", ratio),
        Column("needed_on_factors", "on factors", ratio),
        Column("needed_together", "together", ratio),
        Column("lowest", f"Lowest not rejected at {size}", ratio),
        Column("excluded", "F of excluded factors", statistic),
        Column("excluded_p", "p", pvalue),
    )
    return TableSpec(
        key="factor-sets-table",
        title="Factor sets compared",
        columns=columns,
        frame=found.table,
        index_heading="Set",
        footnote=(
            f"{_sample(found, study)}. GRS: alphas of the assets. Bias-adjusted: root of the unbiased squared "
            "ratio, zero where that is negative. Ceilings needed: by the largest alpha alone and on top of the "
            "factors, and by all alphas together. F of excluded factors: GRS of the other sets' factors on this "
            "set. A dash: does not apply."
        ),
    )


def spanning_table(study: Study, found: FactorSets) -> TableSpec:
    """Tabulate the regressions of each factor on the others."""
    percent, ratio = NumberForm.PERCENT, NumberForm.RATIO
    level = show(found.level, NumberForm.SHARE)
    columns = (
        Column("alpha", "Alpha, a year", percent),
        Column("alpha_error", "Std error", percent),
        Column("t", "t", ratio),
        Column("p", "p", NumberForm.PVALUE),
        Column("r2", "R²", NumberForm.SHARE),
        Column("appraisal", "Appraisal ratio, a year", ratio),
        Column("appraisal_low", f"{level} from", ratio),
        Column("appraisal_high", "to", ratio),
        Column("contribution", "Added to squared ratio, a year", ratio),
    )
    return TableSpec(
        key="factor-sets-spanning",
        title="Each factor on the others",
        columns=columns,
        frame=found.spanning_table,
        index_heading="Factor",
        footnote=(
            f"{_sample(found, study)}. Standard errors: {study.settings.error_type}. Intervals are exact for normal "
            "residuals. Added: to the squared Sharpe ratio of the other factors, in sample, divisor T."
        ),
    )


def pairs_table(study: Study, found: FactorSets) -> TableSpec:
    """Tabulate the tests between pairs of sets."""
    columns = (
        Column("difference", "Squared ratio, first less second", NumberForm.RATIO),
        Column("distribution", "Distribution", NumberForm.TEXT),
        Column("statistic", "Statistic", NumberForm.STATISTIC),
        Column("p", "p", NumberForm.PVALUE),
    )
    frame = found.pairs.copy()
    frame.index = [f"{row.first} against {row.second}" for row in found.pairs.itertuples()]
    lags = f" with {plural(found.lags, 'Newey–West lag')}" if found.lags else ""
    return TableSpec(
        key="factor-sets-pairs",
        title="Tests between factor sets",
        columns=columns,
        frame=frame,
        index_heading="Sets",
        footnote=(
            f"{_sample(found, study)}. Squared Sharpe ratios a year, bias-adjusted. F: GRS of the factors that "
            f"the smaller set lacks; normal: sets neither of which is within the other{lags}. A dash: does not "
            "apply."
        ),
    )
