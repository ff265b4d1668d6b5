"""Costs of the walked hedge: the ladder from gross to net alpha, break-even, and the ceiling on what is left."""

from __future__ import annotations

import numpy as np

from soffit.present.exhibits.hedge import beta_sources
from soffit.present.exhibits.hedge_walk import featured
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
    Role,
    Rule,
    TableSpec,
)
from soffit.present.wording.hedge import costs_finding, walk_phrase
from soffit.present.wording.numbers import show
from soffit.present.wording.sample import sample_line
from soffit.study import Study, WalkCosts

__all__ = ["ceiling_table", "costs_table", "exhibit", "ladder_figure"]

_BP = 1e-4


def exhibit(study: Study, asset: str | None = None, costs: WalkCosts | None = None) -> Exhibit:
    """Build the exhibit of the costs.

    Parameters
    ----------
    study : Study
        What it is about.
    asset : str, optional
        Asset whose ladder is drawn; the one with the largest promised alpha if None.
    costs : WalkCosts, optional
        Costs of other leg kinds or sides than the study's default, from ``study.costs(...)``.
    """
    costs = costs or study.costs()
    settings = study.settings
    name = asset or featured(costs.walk)
    return Exhibit(
        key="hedge-costs",
        title="What the hedges cost",
        sample=f"{sample_line(study)} · {walk_phrase(study, costs.walk)}",
        finding=costs_finding(costs, settings.ceiling, settings.ceiling_form),
        figures=(ladder_figure(study, costs, name),),
        tables=(costs_table(study, costs), ceiling_table(study, costs)),
        sources=(*beta_sources(study), "treynor-black-1973"),
        cautions=(
            "Costs are the analyst's figures, held constant; market impact, taxes and fees are not in them.",
            "Turnover is that of an asset held throughout and of legs traded at each re-hedge.",
        ),
        notes=(costs.walk.missing.reason,) if costs.walk.missing else (),
    )


def _footnote(study: Study, costs: WalkCosts) -> str:
    typed, bp = study.settings.costs, NumberForm.BASIS_POINTS
    kinds = ", ".join(
        f"{name} {kind}" for name, kind in zip(costs.walk.sample.factor_names, costs.rates.kinds, strict=True)
    )
    own = f", {len(typed.half_spreads)} set by name" if typed.half_spreads else ""
    return (
        f"{sample_line(study)}. Half-spreads {show(typed.asset_half_spread * _BP, bp)} on assets and "
        f"{show(typed.factor_half_spread * _BP, bp)} on legs{own}; financing {show(typed.financing * _BP, bp)} "
        f"and borrow {show(typed.borrow * _BP, bp)} a year. Legs: {kinds}."
    )


def ladder_figure(study: Study, costs: WalkCosts, asset: str) -> FigureSpec:
    """Draw one asset's alpha after each cost in turn, with the largest alpha that the ceiling sustains."""
    ladder = costs.ladder(asset)
    steps = ladder[::-1]  # the first category stands at the bottom
    names = tuple(str(name) for name in steps.index)
    roles = (Role.DELIVERED, *(Role.MUTED for _ in names[1:-1]), Role.PROMISED)
    marks: list[Mark] = [
        Bars(
            "ladder",
            np.arange(len(names), dtype=float),
            np.asarray(steps, dtype=np.float64),
            names,
            Orientation.HORIZONTAL,
            roles,
        ),
        Rule("zero", 0.0, Orientation.VERTICAL, Role.REFERENCE),
    ]
    under = costs.under(study.settings.ceiling, study.settings.ceiling_form)
    bound = float(under["bound"].get(asset, np.nan))
    if np.isfinite(bound):
        words = f"ceiling {show(study.settings.ceiling, NumberForm.RATIO)}"
        marks.append(Rule("ceiling", bound, Orientation.VERTICAL, Role.CEILING, words))
    listed = ", ".join(f"{name} {show(float(value), NumberForm.PERCENT)}" for name, value in ladder.items())
    return FigureSpec(
        key="hedge-costs-ladder",
        title=f"{asset}: alpha after each cost",
        x=Axis("Alpha, % a year", NumberForm.PERCENT),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=names),
        marks=tuple(marks),
        alt=f"Alpha of {asset} a year: {listed}.",
        footnote=_footnote(study, costs),
        aspect=2.0,
    )


def costs_table(study: Study, costs: WalkCosts) -> TableSpec:
    """Tabulate costs, gross and net alpha, and break-even."""
    percent, ratio, bp = NumberForm.PERCENT, NumberForm.RATIO, NumberForm.BASIS_POINTS
    columns = (
        Column("side", "Side", NumberForm.TEXT),
        Column("turnover", "Turnover of legs, a year", ratio),
        Column("leg_trading", "Trading legs, a year", bp),
        Column("asset_trading", "Trading asset", bp),
        Column("borrow", "Borrow", bp),
        Column("financing", "Financing", bp),
        Column("cost", "All costs", bp),
        Column("gross_alpha", "Gross alpha, a year", percent),
        Column("net_alpha", "Net alpha, a year", percent),
        Column("net_t", "t", ratio),
        Column("net_appraisal", "Net appraisal ratio, a year", ratio),
        Column("break_even_multiple", "Break-even, times costs", ratio),
        Column("break_even_half_spread", "Break-even half-spread", bp),
    )
    return TableSpec(
        key="hedge-costs",
        title="Costs and net alphas of the hedges",
        columns=columns,
        frame=costs.table,
        footnote=(
            f"{_footnote(study, costs)} Turnover in units of the asset's value, drift between re-hedges, opening and "
            "closing counted. Break-even half-spread: on every leg, other costs as they are. A dash: nothing "
            "breaks even, or too few hedged periods."
        ),
    )


def ceiling_table(study: Study, costs: WalkCosts) -> TableSpec:
    """Tabulate the net alphas under the study's ceiling."""
    percent, ratio = NumberForm.PERCENT, NumberForm.RATIO
    settings = study.settings
    columns = (
        Column("net_alpha", "Net alpha, a year", percent),
        Column("bound", "Largest alpha", percent),
        Column("needed", "Ceiling needed", ratio),
        Column("status", "Status", NumberForm.TEXT),
        Column("p", "Exact p", NumberForm.PVALUE),
    )
    return TableSpec(
        key="hedge-costs-ceiling",
        title=f"Net alphas under a Sharpe ceiling of {show(settings.ceiling, ratio)} a year",
        columns=columns,
        frame=costs.under(settings.ceiling, settings.ceiling_form),
        footnote=(
            f"{_footnote(study, costs)} Ceiling binding {settings.ceiling_form}, over the hedged dates; costs "
            "taken as known. Exact p: probability of so large an appraisal ratio where the true one is at the bound."
        ),
    )
