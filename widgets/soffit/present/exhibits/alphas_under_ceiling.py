"""Alphas that may be used under a ceiling: shrunk beside estimated, and what the data say of zero alphas."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.estimate.statistic import NotApplicable
from soffit.present.exhibits.ceiling import CEILING_STEPS
from soffit.present.spec import (
    Axis,
    AxisScale,
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
from soffit.present.wording.alpha_under_ceiling import alpha_under_ceiling_finding, odds_phrase
from soffit.present.wording.joint import joint_sample
from soffit.present.wording.numbers import plural, show, show_range
from soffit.present.wording.sample import sample_line
from soffit.study import AlphaUnderCeiling, Study

__all__ = ["alphas_figure", "alphas_table", "exhibit", "odds_figure", "odds_table"]

Floats = npt.NDArray[np.float64]

_MOST_ROWS = 25
_APART = 0.16  # of a row: the estimate stands above its row's middle, the shrunk alpha below
_TABLE_STEP = 20  # every so many steps of the ceiling's slider have a row in the table


def exhibit(study: Study) -> Exhibit:
    """Build the exhibit of alphas under the study's own ceiling."""
    result = study.alpha_under_ceiling()
    return Exhibit(
        key="alphas-under-ceiling",
        title="Alphas that may be used under the ceiling",
        sample=sample_line(study),
        finding=alpha_under_ceiling_finding(result),
        figures=(alphas_figure(study, result), odds_figure(study, result)),
        tables=(alphas_table(study, result), odds_table(study, result)),
        sources=(
            "pastor-stambaugh-1999",
            "pastor-stambaugh-2000",
            "mackinlay-1995",
            "barillas-shanken-2018",
        ),
        cautions=(
            "Shrunk alphas follow from the ceiling that the analyst chose: another ceiling gives others.",
        ),
        notes=_notes(result),
    )


def _notes(result: AlphaUnderCeiling) -> tuple[str, ...]:
    reasons = [
        item.reason
        for item in (result.shrunk, result.nearest, result.log_bayes_factors(result.ceiling))
        if isinstance(item, NotApplicable)
    ]
    if result.joint.left_out:
        reasons.append("left out for short histories: " + ", ".join(result.joint.left_out))
    return tuple(dict.fromkeys(reasons))


def _footnote(study: Study, result: AlphaUnderCeiling) -> str:
    level, ceiling = show(result.level, NumberForm.SHARE), show(result.ceiling, NumberForm.RATIO)
    basis = (
        ""
        if isinstance(result.shrunk, NotApplicable)
        else f", {result.shrunk.basis}, t({result.shrunk.df:g})"
    )
    return (
        f"{joint_sample(study)} Ceiling {ceiling} a year. Estimated alphas with {level} confidence intervals, shrunk "
        f"ones with {level} credible intervals{basis}."
    )


def alphas_figure(study: Study, result: AlphaUnderCeiling) -> FigureSpec:
    """Draw each estimated alpha with its interval and, below it, the shrunk one with its own."""
    table = result.table
    chosen = table["alpha"].abs().sort_values(ascending=False, kind="stable").index[:_MOST_ROWS]
    shown = table.loc[chosen].sort_values("alpha", kind="stable")
    names = tuple(str(name) for name in shown.index)
    at = np.arange(len(shown), dtype=float)
    marks: list[Mark] = [Rule("zero", 0.0, Orientation.VERTICAL, Role.REFERENCE)]
    marks += _row_marks("estimated", shown, "alpha", at + _APART, names, Role.MUTED)
    kept = "no alpha may be used"
    if not isinstance(result.weight, NotApplicable):
        marks += _row_marks("shrunk", shown, "shrunk", at - _APART, names, Role.ESTIMATE)
        kept = f"{show(result.weight, NumberForm.SHARE)} of each is kept"
    cut = f" The {_MOST_ROWS} largest alphas of {len(table):,} assets." if len(table) > len(shown) else ""
    ceiling = show(result.ceiling, NumberForm.RATIO)
    return FigureSpec(
        key="alphas-under-ceiling",
        title=f"Estimated alphas, and shrunk under a ceiling of {ceiling}",
        x=Axis("Alpha, % a year", NumberForm.PERCENT),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=names),
        marks=tuple(marks),
        alt=(
            f"Estimated alphas of {plural(len(shown), 'asset')} with intervals, and the same under a Sharpe ceiling "
            f"of {ceiling} a year: {kept}."
        ),
        footnote=f"{_footnote(study, result)}{cut}",
        aspect=1.2,
    )


def _row_marks(
    key: str, shown: pd.DataFrame, column: str, at: Floats, names: tuple[str, ...], role: Role
) -> list[Mark]:
    low, value, high = (shown[f"{column}{end}"].to_numpy(dtype=float) for end in ("_low", "", "_high"))
    percent = NumberForm.PERCENT
    hover = tuple(
        f"{name}, {key}: {show(v, percent)} a year ({show_range(a, b, percent)})"
        for name, a, v, b in zip(names, low, value, high, strict=True)
    )
    return [
        Segments(f"{key}-intervals", at, low, high, Orientation.HORIZONTAL, (role,)),
        Points(key, value, at, names, (role,), hover, label=key, selectable=True),
    ]


def odds_figure(study: Study, result: AlphaUnderCeiling) -> FigureSpec:
    """Draw the posterior odds on zero alphas against the ceiling."""
    ratio = NumberForm.RATIO
    marks: list[Mark] = [
        Rule("even", 0.0, Orientation.HORIZONTAL, Role.REFERENCE, "even odds", dashed=True),
        _ceiling_rule("factors", result.joint.factors_sharpe, Role.FACTORS, "factors", dashed=True),
        _ceiling_rule("ceiling", result.ceiling, Role.CEILING, "ceiling"),
    ]
    factors, best = result.log_bayes_factors(CEILING_STEPS), result.best_supported
    if isinstance(factors, NotApplicable) or isinstance(best, NotApplicable):
        reason = factors.reason if isinstance(factors, NotApplicable) else ""
        alt = f"No odds on zero alphas: {reason}."
    else:
        defined = np.isfinite(factors)
        odds = factors[defined] / np.log(10.0)
        marks.insert(0, Line("odds", CEILING_STEPS[defined], odds, Role.ESTIMATE))
        if best <= CEILING_STEPS[-1]:
            marks.append(_ceiling_rule("best", best, Role.SECOND, "most support for alphas", dashed=True))
        alt = _odds_alt(result, best)
    return FigureSpec(
        key="alphas-odds",
        title="Odds that all alphas are zero, against the ceiling",
        x=Axis("Sharpe ceiling S, a year", ratio, (0.0, float(CEILING_STEPS[-1]))),
        y=Axis("Posterior odds on zero alphas, log10", ratio),
        marks=tuple(marks),
        alt=alt,
        footnote=(
            f"{joint_sample(study)} Even odds beforehand; the alternative expects the squared Sharpe ratio of the "
            "ceiling. Undefined below what the factors alone earn."
        ),
    )


def _ceiling_rule(key: str, at: float, role: Role, label: str, *, dashed: bool = False) -> Rule:
    return Rule(key, at, Orientation.VERTICAL, role, f"{label} {show(at, NumberForm.RATIO)}", dashed)


def _odds_alt(result: AlphaUnderCeiling, best: float) -> str:
    ratio = NumberForm.RATIO
    here, there = (result.log_bayes_factors(s) for s in (result.ceiling, best))
    assert not isinstance(here, NotApplicable)
    assert not isinstance(there, NotApplicable)
    at = (
        "undefined"
        if isinstance(result.weight, NotApplicable)
        else f"{odds_phrase(float(here))} at {show(result.ceiling, ratio)}"
    )
    lowest = f"{odds_phrase(float(there))} at {show(best, ratio)}"
    return f"Posterior odds on zero alphas against the ceiling: {at}, {lowest}."


def alphas_table(study: Study, result: AlphaUnderCeiling) -> TableSpec:
    """Tabulate estimated alphas, and the three answers to what may be used."""
    percent = NumberForm.PERCENT
    columns = (
        Column("alpha", "Alpha, a year", percent),
        Column("shrunk", "Shrunk", percent),
        Column("shrunk_low", "from", percent),
        Column("shrunk_high", "to", percent),
        Column("bound", "Hard bound", percent),
        Column("bounded", "Within the bound", percent),
        Column("bounded_low", "from", percent),
        Column("bounded_high", "to", percent),
        Column("nearest", "Nearest that fit together", percent),
    )
    return TableSpec(
        key="alphas-under-ceiling-table",
        title=f"Alphas under a Sharpe ceiling of {show(result.ceiling, NumberForm.RATIO)} a year",
        columns=columns,
        frame=result.table.sort_values("alpha", key=np.abs, ascending=False, kind="stable"),
        footnote=(
            f"{_footnote(study, result)} Shrunk: a prior that expects the ceiling's squared Sharpe ratio from all "
            f"assets together. Within the bound: all alphas up to it equally likely beforehand, the ceiling binding "
            f"{result.form}. Nearest: all estimates scaled to satisfy the joint ceiling. A dash: undefined."
        ),
    )


def odds_table(study: Study, result: AlphaUnderCeiling) -> TableSpec:
    """Tabulate shares kept, Bayes factors and probabilities over ceilings."""
    grid = np.unique(np.append(CEILING_STEPS[::_TABLE_STEP], result.ceiling))
    factors, probability = result.log_bayes_factors(grid), result.probability_of_zero(grid)
    absent = isinstance(factors, NotApplicable) or isinstance(probability, NotApplicable)
    nothing = np.full(len(grid), np.nan)
    frame = pd.DataFrame(
        {
            "kept": result.weights(grid),
            "log10_factor": nothing if absent else np.asarray(factors) / np.log(10.0),
            "probability": nothing if absent else probability,
        },
        index=[show(float(s), NumberForm.RATIO) for s in grid],
    )
    return TableSpec(
        key="alphas-bayes-factors",
        title="Zero alphas against the prior of a ceiling",
        columns=(
            Column("kept", "Share of alpha kept", NumberForm.SHARE),
            Column("log10_factor", "Bayes factor for zero, log10", NumberForm.RATIO),
            Column("probability", "Probability of zero alphas", NumberForm.PVALUE),
        ),
        frame=frame,
        index_heading="Ceiling, a year",
        footnote=(
            f"{joint_sample(study)} Even odds beforehand. A dash: the factors alone break "
            "the ceiling, or there is no joint test."
        ),
    )
