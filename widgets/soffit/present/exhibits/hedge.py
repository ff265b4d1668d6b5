"""The hedge in its own sample: ratios, what they take away, and what each leg saves against what it costs."""

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
    Segments,
    TableSpec,
)
from soffit.present.wording.hedge import hedge_finding, rule_phrase
from soffit.present.wording.numbers import plural, show
from soffit.present.wording.sample import sample_line
from soffit.settings import HedgeBeta
from soffit.study import FactorHedge, Study

__all__ = ["MOST_ROWS", "beta_sources", "exhibit", "legs_table", "ratios_table", "volatility_figure"]

# More rows than this do not fit a page.
MOST_ROWS = 40

_BETA_SOURCES = {
    HedgeBeta.PLAIN: (),
    HedgeBeta.VASICEK: ("vasicek-1973", "lally-1998"),
    HedgeBeta.DIMSON: ("dimson-1979",),
    HedgeBeta.RIDGE: ("hoerl-kennard-1970",),
}


def beta_sources(study: Study) -> tuple[str, ...]:
    """Sources of the hedge and of the betas that the settings choose."""
    return ("johnson-1960", "ederington-1979", *_BETA_SOURCES[study.settings.hedge.beta])


def exhibit(study: Study) -> Exhibit:
    """Build the exhibit of the hedge over the whole sample."""
    hedge = study.hedge()
    tables = [ratios_table(study, hedge)]
    if hedge.legs is not None:
        tables.append(legs_table(study, hedge))
    return Exhibit(
        key="hedge",
        title="Hedges with the factors",
        sample=f"{sample_line(study)} · {rule_phrase(study)}",
        finding=hedge_finding(hedge),
        figures=(volatility_figure(study, hedge),),
        tables=tuple(tables),
        sources=beta_sources(study),
        cautions=(
            "These hedges are fitted to the returns that they hedge: what they promise is not what they deliver.",
        ),
    )


def volatility_figure(study: Study, hedge: FactorHedge) -> FigureSpec:
    """Draw the volatility of each asset before and after its hedge."""
    table = hedge.table.sort_values("effectiveness", kind="stable")
    shown = table.iloc[:MOST_ROWS]
    at = np.arange(len(shown), dtype=float)
    names = tuple(str(name) for name in shown.index)
    before, after = shown["unhedged"].to_numpy(dtype=float), shown["volatility"].to_numpy(dtype=float)
    percent = NumberForm.PERCENT
    hover = tuple(
        f"{name}: {show(row.unhedged, percent)} unhedged, {show(row.volatility, percent)} hedged, "
        f"{show(row.effectiveness, NumberForm.SHARE)} of variance taken away"
        for name, row in zip(shown.index, shown.itertuples(), strict=True)
    )
    cut = f" The {MOST_ROWS} least effective hedges of {len(table):,}." if len(table) > len(shown) else ""
    return FigureSpec(
        key="hedge-volatility",
        title="Volatility before and after the hedge",
        x=Axis("Volatility, % a year", percent),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=names),
        marks=(
            Segments(
                "taken", at, np.minimum(before, after), np.maximum(before, after), Orientation.HORIZONTAL
            ),
            Points("unhedged", before, at, names, (Role.THIRD,), label="unhedged", selectable=True),
            Points("hedged", after, at, names, (Role.PROMISED,), hover, label="hedged", selectable=True),
        ),
        alt=(
            f"Volatility of {plural(len(shown), 'asset')} before and after the hedge; on average "
            f"{show(float(table['unhedged'].mean()), percent)} and "
            f"{show(float(table['volatility'].mean()), percent)} a year."
        ),
        footnote=f"{sample_line(study)}. {_sentence(rule_phrase(study))}{cut}",
        aspect=1.2,
    )


def _sentence(words: str) -> str:
    return f"{words[0].upper()}{words[1:]}."


def ratios_table(study: Study, hedge: FactorHedge) -> TableSpec:
    """Tabulate hedge ratios and what they promise."""
    percent, ratio = NumberForm.PERCENT, NumberForm.RATIO
    columns = (
        *(Column(f"ratio {name}", f"Sell {name}", ratio) for name in hedge.sample.factor_names),
        Column("gross", "Gross", ratio),
        Column("alpha", "Mean hedged, a year", percent),
        Column("unhedged", "Unhedged vol., a year", percent),
        Column("volatility", "Hedged vol., a year", percent),
        Column("effectiveness", "Effectiveness", NumberForm.SHARE),
        Column("appraisal", "Appraisal ratio, a year", ratio),
        Column("periods", "T", NumberForm.COUNT),
        Column("last", "Through", NumberForm.DATE),
    )
    return TableSpec(
        key="hedge-ratios",
        title="Hedge ratios",
        columns=columns,
        frame=hedge.table,
        footnote=(
            f"{sample_line(study)}. {_sentence(rule_phrase(study))} Ratios are units of a factor sold per unit of "
            "the asset, negative where bought. Effectiveness: share of variance taken away in sample. "
            "Volatilities are corrected for the degrees of freedom. A dash: nothing is left, or nothing moved."
        ),
    )


def legs_table(study: Study, hedge: FactorHedge) -> TableSpec:
    """Tabulate what each leg saves against what it costs."""
    legs = hedge.legs
    assert legs is not None
    frame = legs.reset_index("leg")
    frame["held"] = np.where(frame["held"], "held", "dropped")
    aversion = show(study.settings.hedge.risk_aversion, NumberForm.RATIO)
    columns = (
        Column("leg", "Leg", NumberForm.TEXT),
        Column("saving", "Saves, a year", NumberForm.BASIS_POINTS),
        Column("cost", "Costs, a year", NumberForm.BASIS_POINTS),
        Column("held", "", NumberForm.TEXT),
    )
    return TableSpec(
        key="hedge-legs",
        title="What each leg saves against what it costs",
        columns=columns,
        frame=frame,
        footnote=(
            f"{sample_line(study)}. Saving: the variance that the leg takes away beside all others, priced at a risk "
            f"aversion of {aversion}. Cost: a round trip a window length, and the borrow fee. The legs held are "
            "those whose subset has the lowest risk and cost together."
        ),
    )
