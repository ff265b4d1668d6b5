"""Prices of risk: realised against fitted mean returns, and each price beside its factor's mean."""

from __future__ import annotations

import numpy as np
import pandas as pd

from soffit.estimate.cross_section import PremiumError
from soffit.estimate.cross_section_fit import R2Interval
from soffit.estimate.statistic import NotApplicable
from soffit.present.spec import (
    Axis,
    AxisScale,
    Column,
    Exhibit,
    FigureSpec,
    Line,
    NumberForm,
    Orientation,
    Points,
    Role,
    Rule,
    Segments,
    TableSpec,
)
from soffit.present.wording.numbers import plural, show, show_range
from soffit.present.wording.prices_of_risk import (
    errors_name,
    identification_cautions,
    prices_finding,
    prices_sample_line,
)
from soffit.settings import ErrorType, LagRule
from soffit.study import PricesOfRisk, Study

__all__ = [
    "asset_table",
    "exhibit",
    "fit_figure",
    "fit_table",
    "premium_figure",
    "premium_table",
    "statistics_table",
]

_MOST_LABELS = 6
_SOURCES = (
    "fama-macbeth-1973",
    "newey-west-1987",
    "hotelling-1931",
    "cragg-donald-1997",
    "kleibergen-paap-2006",
)
_FULL_SAMPLE_SOURCES = (
    "shanken-1985",
    "shanken-1992",
    "kan-robotti-shanken-2013",
    "lewellen-nagel-shanken-2010",
    "hansen-1982",
)


def exhibit(study: Study) -> Exhibit:
    """Build the exhibit of the prices of risk."""
    prices = study.prices_of_risk()
    sources = list(_SOURCES)
    if prices.fit.window is None:
        sources += _FULL_SAMPLE_SOURCES
    if study.settings.lag_rule is LagRule.AUTOMATIC:
        sources.append("newey-west-1994")
    return Exhibit(
        key="prices-of-risk",
        title="Do betas get paid?",
        sample=prices_sample_line(study, prices),
        finding=prices_finding(prices),
        figures=(fit_figure(study, prices), premium_figure(study, prices)),
        tables=(
            premium_table(study, prices),
            statistics_table(study, prices),
            fit_table(study, prices),
            asset_table(study, prices),
        ),
        sources=tuple(sources),
        cautions=(
            *identification_cautions(prices),
            "A price of risk is an average of past cross-sections; it rests on the test assets chosen.",
        ),
        notes=_notes(prices),
    )


def _notes(prices: PricesOfRisk) -> tuple[str, ...]:
    missing = [prices.fit.standard_errors(kind) for kind in PremiumError]
    found = [
        *missing,
        prices.fit.pricing_f,
        prices.identification.cragg_donald,
        prices.identification.kleibergen_paap,
        prices.fit.r2_gls,
        *(r2 if isinstance(r2, NotApplicable) else r2.interval for r2 in (prices.r2_ols, prices.r2_gls)),
    ]
    notes = [f"{item.name}: {item.reason}" for item in found if isinstance(item, NotApplicable)]
    if prices.left_out:
        notes.append("left out of the cross-sections for short histories: " + ", ".join(prices.left_out))
    return tuple(dict.fromkeys(notes))


def fit_figure(study: Study, prices: PricesOfRisk) -> FigureSpec:
    """Draw realised mean returns against those that betas and prices imply, with the line of equality."""
    table, percent = prices.asset_table, NumberForm.PERCENT
    fitted, mean = (table[name].to_numpy(dtype=float) for name in ("fitted", "mean"))
    low, high = float(min(fitted.min(), mean.min())), float(max(fitted.max(), mean.max()))
    room = 0.06 * (high - low) or 0.01
    ends = np.array([low - room, high + room])
    names = tuple(str(name) for name in table.index)
    error = table["error"].to_numpy(dtype=float)
    furthest = np.argsort(-np.abs(error), kind="stable")[:_MOST_LABELS]
    hover = tuple(
        f"{name}: mean {show(m, percent)} a year, fitted {show(f, percent)}, error {show(e, percent)}"
        for name, m, f, e in zip(names, mean, fitted, error, strict=True)
    )
    worst = int(furthest[0])
    return FigureSpec(
        key="prices-fit",
        title="Realised against fitted mean returns",
        x=Axis("Fitted mean excess return, % a year", percent, (float(ends[0]), float(ends[1]))),
        y=Axis("Realised mean excess return, % a year", percent, (float(ends[0]), float(ends[1]))),
        marks=(
            Line("equal", ends, ends, Role.REFERENCE, label="realised = fitted", dashed=True),
            Points(
                "assets",
                fitted,
                mean,
                names,
                (Role.ESTIMATE,),
                hover,
                labelled=tuple(int(position) for position in sorted(furthest)),
                selectable=True,
            ),
        ),
        alt=(
            f"Realised mean returns of {plural(len(names), 'asset')} against those that betas and prices of risk "
            f"imply, with the line of equality; the largest pricing error is {show(float(error[worst]), percent)} "
            f"a year ({names[worst]})."
        ),
        footnote=f"{prices_sample_line(study, prices)}.",
        aspect=1.2,
    )


def premium_figure(study: Study, prices: PricesOfRisk) -> FigureSpec:
    """Draw each price of risk with its interval beside the factor's own mean."""
    table = prices.table.loc[list(prices.factor_names)]
    names, percent = tuple(str(name) for name in table.index), NumberForm.PERCENT
    at = np.arange(len(names), dtype=float)
    premium, low, high, mean = (
        table[name].to_numpy(dtype=float) for name in ("premium", "low", "high", "factor_mean")
    )
    traded = np.isfinite(mean)
    level = show(prices.settings.level, NumberForm.SHARE)
    told = ", ".join(
        f"{name} {show(float(p), percent)}"
        + (f" against {show(float(m), percent)}" if np.isfinite(m) else "")
        for name, p, m in zip(names, premium, mean, strict=True)
    )
    hover = tuple(
        f"{name}: price of risk {show(float(p), percent)} a year ({show_range(float(a), float(b), percent)})"
        for name, p, a, b in zip(names, premium, low, high, strict=True)
    )
    return FigureSpec(
        key="prices-premia",
        title="Prices of risk beside factor means",
        x=Axis("Price of risk and mean, % a year", percent),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=names),
        marks=(
            Rule("zero", 0.0, Orientation.VERTICAL, Role.REFERENCE),
            Segments("intervals", at + 0.12, low, high, Orientation.HORIZONTAL, (Role.ESTIMATE,)),
            Points("premia", premium, at + 0.12, names, (Role.ESTIMATE,), hover, label="price of risk"),
            Points(
                "means",
                mean[traded],
                at[traded] - 0.12,
                tuple(name for name, there in zip(names, traded, strict=True) if there),
                (Role.FACTORS,),
                label="factor mean",
            ),
        ),
        alt=f"Annual prices of risk with {level} intervals against the factors' means: {told}.",
        footnote=f"{prices_sample_line(study, prices)}. Intervals at {level}, {errors_name(prices.headline)} errors.",
        aspect=2.0,
    )


def premium_table(study: Study, prices: PricesOfRisk) -> TableSpec:
    """Tabulate the prices of risk under every kind of error, beside the factor means."""
    percent, ratio = NumberForm.PERCENT, NumberForm.RATIO
    headline = errors_name(prices.headline)
    kinds = [k for k in PremiumError if not isinstance(prices.fit.standard_errors(k), NotApplicable)]
    columns = (
        Column("premium", "Price of risk, a year", percent),
        Column(f"error {prices.headline}", f"Std error ({headline})", percent),
        *(Column(f"t {kind}", f"t ({errors_name(kind)})", ratio) for kind in kinds),
        Column(f"p {prices.headline}", f"p ({headline})", NumberForm.PVALUE),
        Column("factor_mean", "Factor mean, a year", percent),
        Column("gap", "Price less mean", percent),
        Column("gap_t", "t of the gap", ratio),
        Column(
            "spread_p", "p of equal betas" if prices.fit.constant else "p of zero betas", NumberForm.PVALUE
        ),
    )
    return TableSpec(
        key="prices-premia-table",
        title="Prices of risk",
        columns=columns,
        frame=prices.table,
        index_heading="Premium",
        footnote=(
            f"{prices_sample_line(study, prices)}. Newey–West errors with {plural(prices.fit.lags, 'lag')}; gaps "
            f"with {headline} errors. The constant is the mean excess return of an asset with zero betas. Betas "
            "are tested over the whole sample. A dash: the number does not exist."
        ),
    )


def statistics_table(study: Study, prices: PricesOfRisk) -> TableSpec:
    """Tabulate tests of the model as a whole."""
    rows = []
    lagged = prices.settings.error_type is ErrorType.HAC
    allows = "heteroskedasticity" + (
        f" and autocorrelation over {plural(prices.fit.lags, 'lag')}" if lagged else ""
    )
    for test in prices.statistics.values():
        if isinstance(test, NotApplicable):
            null = f"does not exist: {test.reason}"
            rows.append({"value": np.nan, "distribution": "", "p": np.nan, "null": null})
        else:
            label = test.distribution.label
            rows.append({"value": test.value, "distribution": label, "p": test.pvalue, "null": test.null})
    return TableSpec(
        key="prices-statistics",
        title="Tests of the cross-section",
        columns=(
            Column("value", "Statistic", NumberForm.STATISTIC),
            Column("distribution", "Distribution", NumberForm.TEXT),
            Column("p", "p", NumberForm.PVALUE),
            Column("null", "Null hypothesis", NumberForm.TEXT),
        ),
        frame=pd.DataFrame(rows, index=list(prices.statistics)),
        index_heading="Test",
        footnote=f"{prices_sample_line(study, prices)}. The F and χ² tests of pricing errors carry "
        f"Shanken's correction; the GMM test allows for {allows}.",
    )


def fit_table(study: Study, prices: PricesOfRisk) -> TableSpec:
    """Tabulate the cross-sectional R² with its intervals."""
    share, level = NumberForm.SHARE, show(prices.settings.level, NumberForm.SHARE)

    def row(value: float | NotApplicable, found: R2Interval | NotApplicable) -> tuple[float, float, float]:
        interval = found if isinstance(found, NotApplicable) else found.interval
        middle = float("nan") if isinstance(value, NotApplicable) else value
        if isinstance(interval, NotApplicable):
            return middle, float("nan"), float("nan")
        return middle, interval.low, interval.high

    frame = pd.DataFrame(
        [row(prices.fit.r2_ols, prices.r2_ols), row(prices.fit.r2_gls, prices.r2_gls)],
        index=["OLS", "GLS"],
        columns=["value", "low", "high"],
    )
    against = "one mean for all assets" if prices.fit.constant else "zero"
    return TableSpec(
        key="prices-r2",
        title="Cross-sectional R²",
        columns=(
            Column("value", "R²", share),
            Column("low", f"{level} from", share),
            Column("high", "to", share),
        ),
        frame=frame,
        index_heading="Regression",
        footnote=(
            f"{prices_sample_line(study, prices)}. R² of mean returns against {against}; intervals from "
            f"{prices.settings.bootstrap_draws:,} bootstrap samples, seed {prices.settings.seed}. A dash: the number "
            "does not exist."
        ),
    )


def asset_table(study: Study, prices: PricesOfRisk) -> TableSpec:
    """Tabulate mean returns, what the model makes of them, and the betas."""
    percent = NumberForm.PERCENT
    betas = tuple(Column(f"beta {name}", f"β {name}", NumberForm.RATIO) for name in prices.factor_names)
    return TableSpec(
        key="prices-assets",
        title="Mean returns, realised and fitted",
        columns=(
            Column("mean", "Mean, a year", percent),
            Column("fitted", "Fitted, a year", percent),
            Column("error", "Pricing error, a year", percent),
            *betas,
        ),
        frame=prices.asset_table.sort_values("error", key=np.abs, ascending=False, kind="stable"),
        footnote=f"{prices_sample_line(study, prices)}."
        + ("" if prices.fit.window is None else " Betas are means of the rolling ones."),
    )
