"""The walked hedge: promise beside delivery, where the difference came from, and one asset's path."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from soffit.estimate.statistic import NotApplicable
from soffit.present.exhibits.hedge import MOST_ROWS, beta_sources
from soffit.present.spec import (
    Axis,
    AxisScale,
    Bars,
    Column,
    Exhibit,
    FigureSpec,
    Line,
    Mark,
    NumberForm,
    Orientation,
    Points,
    Role,
    Rule,
    Segments,
    TableSpec,
)
from soffit.present.wording.hedge import GAP_IN_PRINT, walk_finding, walk_phrase
from soffit.present.wording.numbers import plural, show
from soffit.present.wording.sample import sample_line
from soffit.study import HedgeWalk, Study

__all__ = [
    "cumulative_figure",
    "delivery_figure",
    "exhibit",
    "featured",
    "gap_figure",
    "gap_table",
    "promise_table",
    "residual_beta_figure",
]

_LINES = (Role.ESTIMATE, Role.SECOND, Role.THIRD, Role.MARKET, Role.MUTED)
_PARTS = {
    "estimation": "estimation error",
    "drift": "betas that moved",
    "residual_risk": "change in residual risk",
    "holding": "ratios that drifted",
    "rule": "rule beside plain betas",
}
_PRINT = ("dahlgran-2009", "fama-french-1997", "lewellen-nagel-2006", "lien-2006", "wang-wu-yang-2015")


def featured(walk: HedgeWalk) -> str:
    """Asset whose path is shown when none is chosen: the one with the largest promised alpha."""
    return str(walk.table["promised_alpha"].idxmax())


def exhibit(study: Study, asset: str | None = None) -> Exhibit:
    """Build the exhibit of the walked hedge.

    Parameters
    ----------
    study : Study
        What it is about.
    asset : str, optional
        Asset whose path is drawn; the one with the largest promised alpha if None.
    """
    walk = study.walk_forward()
    name = asset or featured(walk)
    figures = [delivery_figure(study, walk), cumulative_figure(study, walk, name), gap_figure(study, walk)]
    notes = [walk.missing.reason] if walk.missing else []
    rolling = residual_beta_figure(study, walk, name)
    if isinstance(rolling, NotApplicable):
        notes.append(f"{rolling.name}: {rolling.reason}")
    else:
        figures.insert(2, rolling)
    return Exhibit(
        key="hedge-walk",
        title="Walk-forward: promise and delivery",
        sample=f"{sample_line(study)} · {walk_phrase(study, walk)}",
        finding=walk_finding(walk),
        figures=tuple(figures),
        tables=(promise_table(study, walk), gap_table(study, walk)),
        sources=(*beta_sources(study), *_PRINT),
        cautions=("Delivered returns are before costs.", GAP_IN_PRINT),
        notes=tuple(notes),
    )


def _footnote(study: Study, walk: HedgeWalk) -> str:
    words = walk_phrase(study, walk)
    return f"{sample_line(study)}. {words[0].upper()}{words[1:]}."


def delivery_figure(study: Study, walk: HedgeWalk) -> FigureSpec:
    """Draw promised and delivered volatility of each hedge."""
    table = walk.table.loc[~walk.report.short]
    wide = (
        (table["volatility"] - table["promised_volatility"]).abs().sort_values(ascending=False, kind="stable")
    )
    shown = table.loc[wide.index[:MOST_ROWS]].sort_values("volatility", kind="stable")
    at = np.arange(len(shown), dtype=float)
    names = tuple(str(name) for name in shown.index)
    said, came = (shown[key].to_numpy(dtype=float) for key in ("promised_volatility", "volatility"))
    percent = NumberForm.PERCENT
    hover = tuple(
        f"{name}: {show(row.promised_volatility, percent)} promised, {show(row.volatility, percent)} delivered"
        for name, row in zip(shown.index, shown.itertuples(), strict=True)
    )
    cut = f" The {MOST_ROWS} widest differences of {len(table):,} assets." if len(table) > len(shown) else ""
    return FigureSpec(
        key="hedge-walk-volatility",
        title="Volatility left by the hedge: promised and delivered",
        x=Axis("Volatility of the hedged return, % a year", percent),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=names),
        marks=(
            Segments("gap", at, np.minimum(said, came), np.maximum(said, came), Orientation.HORIZONTAL),
            Points("promised", said, at, names, (Role.PROMISED,), hover, label="promised", selectable=True),
            Points(
                "delivered", came, at, names, (Role.DELIVERED,), hover, label="delivered", selectable=True
            ),
        ),
        alt=(
            f"Promised and delivered volatility of {plural(len(shown), 'hedge')}; {int((came > said).sum())} "
            "delivered more than promised."
        ),
        footnote=f"{_footnote(study, walk)}{cut}",
        aspect=1.2,
    )


def cumulative_figure(study: Study, walk: HedgeWalk, asset: str) -> FigureSpec:
    """Draw cumulative returns of one asset: unhedged, promised and delivered."""
    total = walk.path(asset).cumsum()
    dates = total.index.to_numpy()
    lines = (
        ("unhedged", Role.MUTED, "unhedged", False),
        ("promised", Role.PROMISED, "in-sample hedge", True),
        ("delivered", Role.DELIVERED, "delivered", False),
    )
    last = ", ".join(
        f"{words} {show(float(total[key].iloc[-1]), NumberForm.SHARE)}" for key, _, words, _ in lines
    )
    return FigureSpec(
        key="hedge-walk-cumulative",
        title=f"{asset}: cumulative returns",
        x=Axis("", NumberForm.DATE, scale=AxisScale.DATE),
        y=Axis("Sum of excess returns, %", NumberForm.SHARE),
        marks=(
            Rule("zero", 0.0, Orientation.HORIZONTAL, Role.REFERENCE),
            *(Line(key, dates, total[key].to_numpy(), role, words, dash) for key, role, words, dash in lines),
        ),
        alt=f"Sums of excess returns of {asset} over the hedged dates end at: {last}.",
        footnote=(
            f"{_footnote(study, walk)} The in-sample hedge has the constant betas that fit these dates best, "
            "known only afterwards. Before costs."
        ),
    )


def residual_beta_figure(study: Study, walk: HedgeWalk, asset: str) -> FigureSpec | NotApplicable:
    """Draw the betas that one asset's hedged return still has, over rolling windows."""
    found = walk.residual_betas(asset)
    if isinstance(found, NotApplicable):
        return found
    beta, error = found
    chosen = beta.abs().mean().sort_values(ascending=False, kind="stable").index[: len(_LINES)]
    names = [str(name) for name in beta if name in set(chosen)]
    away = (beta.abs() > 2.0 * error).mean()
    dates = beta.index.to_numpy()
    marks: list[Mark] = [Rule("zero", 0.0, Orientation.HORIZONTAL, Role.REFERENCE)]
    for name, role in zip(names, _LINES, strict=False):
        marks.append(Line(f"beta {name}", dates, beta[name].to_numpy(), role, name))
    listed = ", ".join(f"{name} {show(float(away[name]), NumberForm.SHARE)}" for name in names)
    cut = f" The {len(names)} largest of {beta.shape[1]} legs." if beta.shape[1] > len(names) else ""
    window = plural(walk.walk.schedule.window, walk.sample.frequency.noun)
    return FigureSpec(
        key="hedge-walk-residual-beta",
        title=f"{asset}: betas left in the hedged return",
        x=Axis("", NumberForm.DATE, scale=AxisScale.DATE),
        y=Axis("Residual beta", NumberForm.RATIO),
        marks=tuple(marks),
        alt=(
            f"Betas of the hedged return of {asset} over rolling windows of {window}. Share of windows with a "
            f"beta more than two standard errors from zero: {listed}."
        ),
        footnote=f"{_footnote(study, walk)} Windows of {window} of hedged returns, at their last date.{cut}",
    )


def _parts(walk: HedgeWalk) -> dict[str, str]:
    """Parts of the gap that this walk can have."""
    hidden = {"holding"} if walk.walk.schedule.hold == 1 else set()
    if walk.walk.rule.is_plain:
        hidden.add("rule")
    return {key: words for key, words in _PARTS.items() if key not in hidden}


def gap_figure(study: Study, walk: HedgeWalk) -> FigureSpec:
    """Draw where the difference between delivered and promised variance came from, on average."""
    parts = _parts(walk)
    mean = walk.gap.loc[~walk.report.short].mean()
    # The first category stands at the bottom.
    values: npt.NDArray[np.float64] = np.array([mean["whole"], *(mean[key] for key in reversed(parts))])
    names = ("together", *reversed(parts.values()))
    listed = ", ".join(
        f"{name} {show(float(value), NumberForm.SHARE)}" for name, value in zip(names, values, strict=True)
    )
    roles = (Role.MUTED, *(Role.DELIVERED for _ in parts))
    return FigureSpec(
        key="hedge-walk-gap",
        title="Where the difference in variance came from",
        x=Axis("Share of the promised variance, mean over the assets", NumberForm.SHARE),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=names),
        marks=(
            Bars("parts", np.arange(len(names), dtype=float), values, names, Orientation.HORIZONTAL, roles),
            Rule("zero", 0.0, Orientation.VERTICAL, Role.REFERENCE),
        ),
        alt=f"Delivered less promised variance as a share of the promised: {listed}.",
        footnote=f"{_footnote(study, walk)} {_METHOD}",
        aspect=2.0,
    )


_METHOD = (
    "Estimation error: the average of σ²·f'S⁻¹f, what errors in constant betas add to a prediction's variance. "
    "Residual risk: residual variance within blocks of hedged periods less that of the windows. Betas that moved: "
    "the rest."
)


def promise_table(study: Study, walk: HedgeWalk) -> TableSpec:
    """Tabulate promise beside delivery."""
    percent, ratio, share = NumberForm.PERCENT, NumberForm.RATIO, NumberForm.SHARE
    columns = (
        Column("promised_volatility", "Vol. promised, a year", percent),
        Column("volatility", "delivered", percent),
        Column("promised_effectiveness", "Effectiveness promised", share),
        Column("effectiveness", "delivered", share),
        Column("promised_alpha", "Alpha promised, a year", percent),
        Column("mean", "Mean delivered", percent),
        Column("alpha", "Alpha delivered", percent),
        Column("t", "t", ratio),
        Column("promised_appraisal", "Appraisal ratio promised, a year", ratio),
        Column("appraisal", "delivered", ratio),
        *(Column(f"beta {name}", f"Residual β {name}", ratio) for name in walk.sample.factor_names),
        Column("periods", "Hedged periods", NumberForm.COUNT),
    )
    return TableSpec(
        key="hedge-walk-promise",
        title="Promise and delivery of the hedges",
        columns=columns,
        frame=walk.table,
        footnote=(
            f"{_footnote(study, walk)} Promised: averages over the estimation windows, volatility corrected for "
            "the degrees of freedom. Alpha and appraisal ratio delivered are after the residual betas. Before "
            "costs. A dash: too few hedged periods."
        ),
    )


def gap_table(study: Study, walk: HedgeWalk) -> TableSpec:
    """Tabulate where the difference in variance came from."""
    percent, share = NumberForm.PERCENT, NumberForm.SHARE
    columns = (
        Column("promised", "Vol. promised, a year", percent),
        Column("delivered", "Vol. delivered, a year", percent),
        Column("whole", "Variance over promise", share),
        *(Column(key, f"{words[0].upper()}{words[1:]}", share) for key, words in _parts(walk).items()),
        Column("drift_t", "t of betas that moved", NumberForm.RATIO),
    )
    return TableSpec(
        key="hedge-walk-gap",
        title="Where the difference in variance came from",
        columns=columns,
        frame=walk.gap,
        footnote=(
            f"{_footnote(study, walk)} Shares of the variance that plain betas promised; the parts add up to the "
            f"whole. {_METHOD} Its t ratio comes from its spread over blocks of time; a dash: too few blocks."
        ),
    )
