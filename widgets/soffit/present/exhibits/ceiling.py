"""The ceiling exhibit: three views of the alphas under a Sharpe ceiling, and the table of verdicts."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.estimate.statistic import NotApplicable
from soffit.present.spec import (
    Axis,
    Band,
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
    TableSpec,
)
from soffit.present.wording.ceiling import ceiling_finding
from soffit.present.wording.numbers import plural, show, show_range
from soffit.present.wording.sample import sample_line
from soffit.settings import Settings
from soffit.study import CeilingMap, CeilingVerdict, Study

__all__ = ["CEILING_STEPS", "alpha_r2_figure", "alpha_sigma_figure", "ceiling_figures", "exhibit", "p_figure"]

Floats = npt.NDArray[np.float64]

_ROLES = {
    "inside": Role.INSIDE,
    "straddles": Role.STRADDLES,
    "outside": Role.OUTSIDE,
    "undefined": Role.MUTED,
}
_MOST_LABELS = 6
_SOURCES = (
    "gibbons-ross-shanken-1989",
    "treynor-black-1973",
    "ross-1976",
    "mackinlay-1995",
    "hansen-jagannathan-1991",
    "cochrane-saa-requejo-2000",
    "holm-1979",
    "benjamini-yekutieli-2001",
)


def _steps() -> Floats:
    note = Settings.note("ceiling")
    assert note.low is not None
    assert note.high is not None
    assert note.step is not None
    count = round((note.high - note.low) / note.step)
    return np.round(note.low + note.step * np.arange(count + 1), 10)


# Every ceiling that the slider can stop at, annual.
CEILING_STEPS = _steps()


def exhibit(study: Study) -> Exhibit:
    """Build the ceiling exhibit at the study's own ceiling."""
    verdict = study.ceiling()
    return Exhibit(
        key="ceiling",
        title="Alphas under a Sharpe ceiling",
        sample=sample_line(study),
        finding=ceiling_finding(verdict.facts),
        figures=ceiling_figures(study),
        tables=(verdict_table(study), joint_table(study)),
        sources=_SOURCES,
        cautions=("A ceiling is the analyst's judgement of a market, not a law.",),
        notes=_notes(verdict),
    )


def _notes(verdict: CeilingVerdict) -> tuple[str, ...]:
    joint = verdict.map.joint
    notes = [joint.grs.reason] if isinstance(joint.grs, NotApplicable) else []
    if joint.left_out:
        notes.append("left out of the joint test for short histories: " + ", ".join(joint.left_out))
    return tuple(notes)


def ceiling_figures(study: Study) -> tuple[FigureSpec, ...]:
    """Build the three views: alpha against σ, alpha over total volatility against R², p against S."""
    verdict = study.ceiling()
    return alpha_sigma_figure(study, verdict), alpha_r2_figure(study, verdict), p_figure(study, verdict)


def _footnote(study: Study, verdict: CeilingVerdict) -> str:
    level = show(study.settings.level, NumberForm.SHARE)
    return (
        f"{sample_line(study)}. Ceiling {show(verdict.ceiling, NumberForm.RATIO)} a year, binding "
        f"{verdict.form}. Status from exact {level} intervals of the appraisal ratios."
    )


def _hover(verdict: CeilingVerdict) -> tuple[str, ...]:
    table = verdict.table
    percent, ratio = NumberForm.PERCENT, NumberForm.RATIO
    return tuple(
        f"{name}: alpha {show(row.alpha, percent)} a year ({show_range(row.alpha_low, row.alpha_high, percent)}), "
        f"residual volatility {show(row.sigma, percent)}, R² {show(row.r2, NumberForm.SHARE)}, "
        f"appraisal ratio {show(row.appraisal, ratio)}, needs a ceiling of {show(row.needed, ratio)}"
        for name, row in zip(table.index, table.itertuples(), strict=True)
    )


def _points(study: Study, verdict: CeilingVerdict, x: Floats, y: Floats) -> Points:
    furthest = np.argsort(-verdict.needed.to_numpy(), kind="stable")[:_MOST_LABELS]
    return Points(
        key="assets",
        x=x,
        y=y,
        names=tuple(str(name) for name in verdict.status.index),
        roles=tuple(_ROLES[status] for status in verdict.status),
        hover=_hover(verdict),
        labelled=tuple(int(position) for position in sorted(furthest)),
        selectable=True,
    )


def _bound_marks(x: Floats, base: Floats, factor: float, ceiling: float) -> list[Mark]:
    """The band that a ceiling sustains: ±factor·base; nothing where the factors alone break the ceiling."""
    height = np.nan_to_num(factor, nan=0.0) * base
    return [
        Band("band", x, -height, height, Role.CEILING),
        Line("upper", x, height, Role.CEILING, label=f"ceiling {show(ceiling, NumberForm.RATIO)}"),
        Line("lower", x, -height, Role.CEILING),
        Rule("zero", 0.0, Orientation.HORIZONTAL, Role.REFERENCE),
    ]


def _around_zero(values: Floats, floor: float) -> tuple[float, float]:
    """Limits that hold zero, every value, and some room on either side."""
    finite = values[np.isfinite(values)]
    low, high = float(finite.min(initial=-floor)), float(finite.max(initial=floor))
    room = 0.12 * (high - low)
    return low - room, high + room


def _statuses(verdict: CeilingVerdict) -> str:
    counts = verdict.status.value_counts()
    return ", ".join(f"{counts[word]:,} {word}" for word in _ROLES if word in counts)


def alpha_sigma_figure(study: Study, verdict: CeilingVerdict) -> FigureSpec:
    """Draw alpha against residual volatility with the band ``|α| ≤ g(S)·σ``."""
    regression = verdict.map.regression
    sigma = np.asarray(regression.sigma, dtype=np.float64)
    alpha = np.asarray(regression.alpha, dtype=np.float64)
    reach = float(sigma.max(initial=0.0)) * 1.08 or 0.01
    x = np.array([0.0, reach])
    factor = float(verdict.map.factor([verdict.ceiling], verdict.form)[0])
    marks = [*_bound_marks(x, x, factor, verdict.ceiling), _points(study, verdict, sigma, alpha)]
    return FigureSpec(
        key="ceiling-alpha-sigma",
        title="Alpha against residual volatility",
        x=Axis("Residual volatility, % a year", NumberForm.PERCENT, (0.0, reach)),
        y=Axis("Alpha, % a year", NumberForm.PERCENT, _around_zero(alpha, 0.01)),
        marks=tuple(marks),
        alt=(
            f"Alphas of {plural(len(alpha), 'asset')} against their residual volatilities, with the band that a "
            f"Sharpe ceiling of {show(verdict.ceiling, NumberForm.RATIO)} sustains: {_statuses(verdict)}."
        ),
        footnote=_footnote(study, verdict),
    )


def alpha_r2_figure(study: Study, verdict: CeilingVerdict) -> FigureSpec:
    """Draw alpha over total volatility against R² with the curve ``g(S)·√(1 − R²)``."""
    regression = verdict.map.regression
    alphas, root = regression.alphas, float(np.sqrt(regression.periods_per_year))
    with np.errstate(divide="ignore", invalid="ignore"):
        y: Floats = np.where(alphas.total > 0, alphas.alpha / alphas.total, 0.0).astype(np.float64) * root
    # Dense near R² = 1, where the curve falls steeply.
    x = 1.0 - np.linspace(1.0, 0.0, 81) ** 2
    factor = float(verdict.map.factor([verdict.ceiling], verdict.form)[0])
    marks = [
        *_bound_marks(x, np.sqrt(1.0 - x), factor, verdict.ceiling),
        _points(study, verdict, alphas.r2, y),
    ]
    return FigureSpec(
        key="ceiling-alpha-r2",
        title="Alpha per unit of total volatility against R²",
        x=Axis("R²", NumberForm.SHARE, (0.0, 1.0)),
        y=Axis("Alpha / total volatility, a year", NumberForm.RATIO, _around_zero(y, 0.5)),
        marks=tuple(marks),
        alt=(
            f"Alphas of {plural(len(y), 'asset')} over their total volatilities against R², with the curve "
            f"{show(verdict.ceiling, NumberForm.RATIO)}·√(1−R²) in form: {_statuses(verdict)}."
        ),
        footnote=_footnote(study, verdict),
    )


def p_figure(study: Study, verdict: CeilingVerdict) -> FigureSpec:
    """Draw the joint p-value against the ceiling, with the Sharpe ratios that it lies between."""
    found, level = verdict.map, study.settings.level
    pvalues = found.pvalues(CEILING_STEPS)
    size = 1.0 - level
    marks: list[Mark] = [
        Rule("size", size, Orientation.HORIZONTAL, Role.REFERENCE, f"{show(size, NumberForm.SHARE)}", True),
        *_sharpe_rules(found),
        Rule(
            "ceiling",
            verdict.ceiling,
            Orientation.VERTICAL,
            Role.CEILING,
            f"ceiling {show(verdict.ceiling, NumberForm.RATIO)}",
        ),
    ]
    if isinstance(pvalues, NotApplicable):
        alt = f"No joint p-value: {pvalues.reason}."
    else:
        marks.insert(0, Line("p", CEILING_STEPS, pvalues, Role.ESTIMATE))
        assert not isinstance(found.lowest, NotApplicable)
        alt = (
            "Joint p-value of a best Sharpe ratio at most S, rising with S; at "
            f"{show(verdict.ceiling, NumberForm.RATIO)} it is {show(verdict.pvalue, NumberForm.PVALUE)}, and "
            f"{show(size, NumberForm.SHARE)} is reached at {show(found.lowest, NumberForm.RATIO)}."
        )
    return FigureSpec(
        key="ceiling-p",
        title="Joint p-value against the ceiling",
        x=Axis("Sharpe ceiling S, a year", NumberForm.RATIO, (0.0, float(CEILING_STEPS[-1]))),
        y=Axis("p-value of a best Sharpe ratio at most S", NumberForm.RATIO, (0.0, 1.0)),
        marks=tuple(marks),
        alt=alt,
        footnote=_footnote(study, verdict),
    )


def _sharpe_rules(found: CeilingMap) -> list[Mark]:
    rules: list[Mark] = []
    joint = found.joint

    def add(key: str, value: float, role: Role, label: str) -> None:
        text = f"{label} {show(value, NumberForm.RATIO)}"
        rules.append(Rule(key, value, Orientation.VERTICAL, role, text, dashed=True))

    single = joint.single_sharpe
    if len(single) > 1:
        add("market", float(single.iloc[0]), Role.MARKET, str(single.index[0]))
    if len(single):
        add("factors", joint.factors_sharpe, Role.FACTORS, "factors")
    if not isinstance(joint.combined_sharpe, NotApplicable):
        add("combined", joint.combined_sharpe, Role.ESTIMATE, "factors and assets")
    if not isinstance(found.lowest, NotApplicable) and joint.grs.pvalue < 1.0 - found.regression.level:
        add("lowest", found.lowest, Role.SECOND, "lowest not rejected")
    return rules


def verdict_table(study: Study) -> TableSpec:
    """Tabulate every alpha under the ceiling."""
    verdict = study.ceiling()
    percent, ratio = NumberForm.PERCENT, NumberForm.RATIO
    level = show(study.settings.level, NumberForm.SHARE)
    columns = (
        Column("alpha", "Alpha, a year", percent),
        Column("alpha_low", f"{level} from", percent),
        Column("alpha_high", "to", percent),
        Column("sigma", "Residual vol., a year", percent),
        Column("r2", "R²", NumberForm.SHARE),
        Column("appraisal", "Appraisal ratio, a year", ratio),
        Column("needed", "Ceiling needed", ratio),
        Column("bound", "Largest alpha", percent),
        Column("status", "Status", NumberForm.TEXT),
        Column("p", "Exact p", NumberForm.PVALUE),
        Column("p_holm", "Holm p", NumberForm.PVALUE),
        Column("periods", "T", NumberForm.COUNT),
    )
    frame = verdict.table.sort_values("needed", ascending=False, kind="stable")
    tests = max(len(frame), verdict.map.trials)
    return TableSpec(
        key="ceiling-verdicts",
        title=f"Alphas under a Sharpe ceiling of {show(verdict.ceiling, ratio)} a year",
        columns=columns,
        frame=frame,
        footnote=(
            f"{_footnote(study, verdict)} Exact p: probability of so large an appraisal ratio where the true one "
            f"is at the bound; Holm over {tests:,} tests. A dash: undefined, the factors alone break the ceiling."
        ),
    )


def joint_table(study: Study) -> TableSpec:
    """Tabulate the Sharpe ratios and ceilings that the alphas imply together."""
    verdict = study.ceiling()
    found, joint, level = verdict.map, verdict.map.joint, show(study.settings.level, NumberForm.SHARE)
    size, ratio = show(1.0 - study.settings.level, NumberForm.SHARE), NumberForm.RATIO
    rows: list[tuple[str, object, NumberForm]] = [
        ("Sharpe ratio of the factors, a year", joint.factors_sharpe, ratio),
    ]
    grs, interval = joint.grs, found.interval
    if isinstance(grs, NotApplicable) or isinstance(interval, NotApplicable):
        reason = grs.reason if isinstance(grs, NotApplicable) else ""
        rows.append(("GRS test", f"does not exist: {reason}", NumberForm.TEXT))
    else:
        rows += [
            ("Sharpe ratio of factors and assets, a year", joint.combined_sharpe, ratio),
            (f"{level} interval of it, from", interval.low, ratio),
            ("to", interval.high, ratio),
            (f"GRS, {grs.distribution.label}", grs.value, NumberForm.STATISTIC),
            ("p-value of zero alphas", grs.pvalue, NumberForm.PVALUE),
            (f"p-value of a ceiling of {show(verdict.ceiling, ratio)}", verdict.pvalue, NumberForm.PVALUE),
            (f"Lowest ceiling not rejected at {size}", found.lowest, ratio),
        ]
    frame = pd.DataFrame({"value": [value for _, value, _ in rows]}, index=[name for name, _, _ in rows])
    return TableSpec(
        key="ceiling-joint",
        title="The alphas together",
        columns=(Column("value", "Value", ratio),),
        frame=frame,
        index_heading="Quantity",
        footnote=_footnote(study, verdict),
        row_forms=tuple(form for _, _, form in rows),
    )
