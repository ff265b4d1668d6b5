"""Sharpe ratios: every factor and asset with its interval, and the factors together."""

from __future__ import annotations

import numpy as np
import pandas as pd

from soffit.estimate.statistic import NotApplicable
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
from soffit.present.wording.sample import sample_line
from soffit.present.wording.sharpe_ratios import lags_phrase, sharpe_finding, sharpe_gap_finding
from soffit.study import SharpeGap, SharpeTable, Study

__all__ = ["exhibit", "factors_table", "gap_exhibit", "sharpe_figure", "sharpe_table"]

# More intervals than this do not fit a page.
_MOST_ROWS = 40
_SOURCES = (
    "lo-2002",
    "mertens-2002",
    "newey-west-1987",
    "hotelling-1931",
    "jobson-korkie-1980",
    "bailey-lopez-de-prado-2012",
    "bailey-lopez-de-prado-2014",
)


def exhibit(study: Study) -> Exhibit:
    """Build the exhibit of the Sharpe ratios."""
    found = study.sharpe_ratios()
    flat = [str(name) for name in found.table.index[found.table["sharpe"].isna()]]
    notes = [f"no Sharpe ratio, since the return does not vary: {', '.join(flat)}"] if flat else []
    notes += [each.reason for each in (found.squared.unbiased,) if isinstance(each, NotApplicable)]
    return Exhibit(
        key="sharpe-ratios",
        title="Sharpe ratios",
        sample=sample_line(study),
        finding=sharpe_finding(found),
        figures=(sharpe_figure(study, found),),
        tables=(sharpe_table(study, found), factors_table(study, found)),
        sources=_SOURCES,
        cautions=("In-sample Sharpe ratios of best combinations overstate what can be earned.",),
        notes=tuple(notes),
    )


def sharpe_figure(study: Study, found: SharpeTable) -> FigureSpec:
    """Draw the Sharpe ratios with their intervals, one row a series, beside the ceiling."""
    table = found.table[found.table["sharpe"].notna()]
    factors = table.index[table["role"] == "factor"]
    rest = table.drop(index=factors)["sharpe"].sort_values(ascending=False, kind="stable")
    kept = rest.index[: max(_MOST_ROWS - len(factors), 0)]
    shown = table.loc[[*factors, *kept]].sort_values("sharpe", kind="stable")
    ratio, level = NumberForm.RATIO, show(found.level, NumberForm.SHARE)
    names = tuple(str(name) for name in shown.index)
    roles = tuple(Role.FACTORS if role == "factor" else Role.ESTIMATE for role in shown["role"])
    at = np.arange(len(shown), dtype=float)
    hover = tuple(
        f"{name}: Sharpe ratio {show(row.sharpe, ratio)} a year ({show_range(row.low, row.high, ratio)}), "
        f"mean {show(row.mean, NumberForm.PERCENT)}, volatility {show(row.volatility, NumberForm.PERCENT)}"
        for name, row in zip(shown.index, shown.itertuples(), strict=True)
    )
    ceiling = study.settings.ceiling
    cut = f" The {len(kept)} highest of {len(rest):,} assets." if len(rest) > len(kept) else ""
    return FigureSpec(
        key="sharpe-intervals",
        title=f"Sharpe ratios with {level} intervals",
        x=Axis("Sharpe ratio, a year", ratio),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=names),
        marks=(
            Rule("zero", 0.0, Orientation.VERTICAL, Role.REFERENCE),
            Rule("ceiling", ceiling, Orientation.VERTICAL, Role.CEILING, f"ceiling {show(ceiling, ratio)}"),
            *_together(found),
            Segments(
                "intervals",
                at,
                shown["low"].to_numpy(dtype=float),
                shown["high"].to_numpy(dtype=float),
                Orientation.HORIZONTAL,
                roles,
            ),
            Points("ratios", shown["sharpe"].to_numpy(dtype=float), at, names, roles, hover, selectable=True),
        ),
        alt=(
            f"Sharpe ratios of {plural(len(factors), 'factor')} and {plural(len(kept), 'asset')} with {level} "
            f"intervals, from {show(float(shown['sharpe'].min()), ratio)} to "
            f"{show(float(shown['sharpe'].max()), ratio)} a year; "
            f"{int((shown['low'] > 0).sum())} intervals lie above zero."
        ),
        footnote=f"{sample_line(study)}. Intervals from {lags_phrase(found)}.{cut}",
        aspect=1.2,
    )


def _together(found: SharpeTable) -> list[Rule]:
    if found.squared.width < 2:
        return []  # a single factor has its own row
    label = f"factors together {show(found.factors, NumberForm.RATIO)}"
    return [Rule("factors", found.factors, Orientation.VERTICAL, Role.FACTORS, label, dashed=True)]


def sharpe_table(study: Study, found: SharpeTable) -> TableSpec:
    """Tabulate the Sharpe ratios with every kind of error, and what a record this long proves."""
    ratio, percent, share = NumberForm.RATIO, NumberForm.PERCENT, NumberForm.SHARE
    level = show(found.level, share)
    columns = (
        Column("role", "Role", NumberForm.TEXT),
        Column("mean", "Mean, a year", percent),
        Column("volatility", "Volatility, a year", percent),
        Column("sharpe", "Sharpe ratio, a year", ratio),
        Column("error", "HAC error", ratio),
        Column("low", f"{level} from", ratio),
        Column("high", "to", ratio),
        Column("exact_low", f"Exact {level} from", ratio),
        Column("exact_high", "to", ratio),
        Column("error_normal", "Normal iid error", ratio),
        Column("error_iid", "Iid error", ratio),
        Column("aggregated", "Aggregated", ratio),
        Column("autocorrelation", "First autocorrelation", ratio),
        Column("skewness", "Skewness", ratio),
        Column("kurtosis", "Kurtosis", ratio),
        Column("above_zero", "Probabilistic", share),
        Column("deflated", "Deflated", share),
        Column("record", "Years needed", ratio),
        Column("periods", "T", NumberForm.COUNT),
    )
    return TableSpec(
        key="sharpe-table",
        title="Sharpe ratios",
        columns=columns,
        frame=found.table,
        index_heading="Series",
        footnote=(
            f"{sample_line(study)}. Sharpe ratios divide by the standard deviation with T − 1. HAC: "
            f"{lags_phrase(found)}; exact: noncentral t, for independent normal returns; iid errors after Lo "
            "and after Mertens. Aggregated: to a year with the sample's own autocorrelations in place of "
            "the square root. Probabilistic: probability of a true ratio above zero; deflated: above the best of "
            f"{found.tests:,} trials without skill, whose ratios vary by 1/(T − 1). Years needed before the "
            f"probabilistic ratio reaches {level}. A dash: does not apply."
        ),
    )


def factors_table(study: Study, found: SharpeTable) -> TableSpec:
    """Tabulate the Sharpe ratio of the factors' best combination: in sample, unbiased, and its interval."""
    interval, unbiased = found.factors_interval, found.factors_unbiased
    low, high = (np.nan, np.nan) if isinstance(interval, NotApplicable) else (interval.low, interval.high)
    values = {
        "In sample": found.factors,
        "From the unbiased squared ratio": np.nan if isinstance(unbiased, NotApplicable) else unbiased,
        f"Exact {show(found.level, NumberForm.SHARE)} interval, from": low,
        "to": high,
    }
    return TableSpec(
        key="sharpe-factors",
        title="Sharpe ratio of the factors' best combination, a year",
        columns=(Column("value", "Sharpe ratio, a year", NumberForm.RATIO),),
        frame=pd.DataFrame({"value": list(values.values())}, index=list(values)),
        index_heading="Quantity",
        footnote=(
            f"{sample_line(study)}. Covariances divide by T. Interval: Hotelling, for independent normal returns. "
            "The unbiased squared ratio is taken as zero where it is negative."
        ),
    )


def gap_exhibit(study: Study, first: str, second: str) -> Exhibit:
    """Build the exhibit that compares the Sharpe ratios of two series."""
    gap = study.sharpe_difference(first, second)
    return Exhibit(
        key="sharpe-difference",
        title=f"Sharpe ratios of {first} and {second}",
        sample=sample_line(study),
        finding=sharpe_gap_finding(gap),
        tables=(gap_table(study, gap),),
        sources=("jobson-korkie-1981", "memmel-2003", "ledoit-wolf-2008", "newey-west-1987"),
        notes=(gap.bootstrap.reason,) if isinstance(gap.bootstrap, NotApplicable) else (),
    )


def gap_table(study: Study, gap: SharpeGap) -> TableSpec:
    """Tabulate the tests of equal Sharpe ratios."""
    columns = (
        Column("statistic", "Statistic", NumberForm.STATISTIC),
        Column("error", "Error, a year", NumberForm.RATIO),
        Column("p", "p", NumberForm.PVALUE),
    )
    settings = study.settings
    return TableSpec(
        key="sharpe-difference",
        title=f"Tests that {gap.first} and {gap.second} have equal Sharpe ratios",
        columns=columns,
        frame=gap.table,
        index_heading="Test",
        footnote=(
            f"{gap.found.periods:,} periods. Difference {show(gap.difference, NumberForm.RATIO)} a year. Newey–West "
            f"lags: {int(gap.found.lags[0])}. Bootstrap: {settings.bootstrap_draws:,} circular block samples, seed "
            f"{settings.seed}."
        ),
    )
