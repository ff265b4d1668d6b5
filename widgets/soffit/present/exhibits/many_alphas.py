"""Many alphas at once: t ratios beside the hurdles, and adjusted p-values."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.estimate.statistic import NotApplicable
from soffit.judge.multiplicity import USUAL, Adjustment
from soffit.present.spec import (
    Axis,
    Column,
    Exhibit,
    FigureSpec,
    Line,
    NumberForm,
    Orientation,
    Points,
    Role,
    Rule,
    TableSpec,
)
from soffit.present.wording.many_alphas import many_alphas_finding, tests_phrase
from soffit.present.wording.numbers import join_names, plural, show
from soffit.present.wording.sample import sample_line
from soffit.settings import Histories
from soffit.study import ManyAlphas, Study

__all__ = ["adjusted_table", "exhibit", "hurdle_figure", "methods_table"]

_MOST_POINTS = 1000
_MOST_LABELS = 6
_SOURCES = (
    "bonferroni-1936",
    "holm-1979",
    "benjamini-hochberg-1995",
    "benjamini-yekutieli-2001",
)


def exhibit(study: Study) -> Exhibit:
    """Build the exhibit of the alphas' multiple tests."""
    found = study.many_alphas()
    share = found.share
    missing = (share.reason,) if isinstance(share, NotApplicable) else ()
    return Exhibit(
        key="many-alphas",
        title="Many alphas at once",
        sample=sample_line(study),
        finding=many_alphas_finding(found),
        figures=(hurdle_figure(study, found),) if found.tests.count else (),
        tables=(adjusted_table(study, found), methods_table(study, found)),
        sources=_SOURCES if missing else (*_SOURCES, "storey-2002"),
        cautions=("An adjustment counts the trials that were stated, not those that were forgotten.",),
        notes=missing,
    )


def hurdle_figure(study: Study, found: ManyAlphas) -> FigureSpec:
    """Draw the absolute t ratios in order, with the hurdles of one test, of all, and step by step."""
    table = found.table[found.table["p"].notna()]
    ranked = table["t"].abs().sort_values(ascending=False, kind="stable").iloc[:_MOST_POINTS]
    rank = np.arange(1.0, len(ranked) + 1.0)
    strict, alone = set(found.names(Adjustment.HOLM)), set(found.names())
    ratio, size = NumberForm.RATIO, show(found.tests.size, NumberForm.SHARE)
    top = max(float(ranked.max()), found.hurdle) * 1.1
    return FigureSpec(
        key="many-alphas-hurdles",
        title=f"t ratios of the alphas and their hurdles at {size}",
        x=Axis("Rank of |t|", NumberForm.COUNT, (0.0, len(ranked) + 1.0)),
        y=Axis("|t| of alpha", ratio, (0.0, top)),
        marks=(
            Rule("single", found.single_hurdle, Orientation.HORIZONTAL, Role.REFERENCE, "one test", True),
            Rule("bonferroni", found.hurdle, Orientation.HORIZONTAL, Role.CEILING, "Bonferroni"),
            Line(
                "stepwise",
                rank,
                found.stepwise_hurdles[: len(rank)],
                Role.ESTIMATE,
                label="Benjamini–Hochberg",
                dashed=True,
            ),
            *_points(table, ranked, strict, alone),
        ),
        alt=(
            f"Absolute t ratios of {plural(len(ranked), 'alpha')} in descending order: {len(alone):,} pass the "
            f"hurdle of a single test, {show(found.single_hurdle, ratio)}, and {len(strict):,} are rejected after "
            "Holm's adjustment."
        ),
        footnote=_footnote(study, found),
    )


def _points(table: pd.DataFrame, ranked: pd.Series[float], strict: set[str], alone: set[str]) -> list[Points]:
    """One mark for each verdict, so that its legend says in words what its shape and colour mean."""
    names = [str(name) for name in ranked.index]
    groups = (
        ("after Holm", Role.SECOND, [name in strict for name in names]),
        ("one at a time only", Role.THIRD, [name in alone and name not in strict for name in names]),
        ("not apart from zero", Role.MUTED, [name not in alone and name not in strict for name in names]),
    )
    pvalue, marks = NumberForm.PVALUE, []
    rank: npt.NDArray[np.float64] = np.arange(1.0, len(ranked) + 1.0)
    for label, role, chosen in groups:
        places = np.flatnonzero(chosen)
        if not places.size:
            continue
        rows = table.loc[ranked.index[places]]
        heights: npt.NDArray[np.float64] = np.asarray(ranked.to_numpy()[places], dtype=np.float64)
        hover = tuple(
            f"{name}: |t| {show(float(height), NumberForm.RATIO)}, p {show(p, pvalue)}, Holm p {show(holm, pvalue)}"
            for name, height, p, holm in zip(rows.index, heights, rows["p"], rows["p_holm"], strict=True)
        )
        marks.append(
            Points(
                label.replace(" ", "-"),
                rank[places],
                heights,
                tuple(names[place] for place in places),
                (role,),
                hover,
                labelled=tuple(int(i) for i in np.flatnonzero(places < _MOST_LABELS)),
                label=label,
                selectable=True,
            )
        )
    return marks


def _footnote(study: Study, found: ManyAlphas) -> str:
    shortest = " Hurdles for the shortest history." if study.settings.histories is Histories.OWN else ""
    return f"{sample_line(study)}. {tests_phrase(found)}; unseen trials count as p-values of one.{shortest}"


def adjusted_table(study: Study, found: ManyAlphas) -> TableSpec:
    """Tabulate every alpha's p-value with its adjustments."""
    pvalue = NumberForm.PVALUE
    columns = (
        Column("alpha", "Alpha, a year", NumberForm.PERCENT),
        Column("t", "t", NumberForm.RATIO),
        Column("p", "p", pvalue),
        Column("p_bonferroni", "Bonferroni p", pvalue),
        Column("p_holm", "Holm p", pvalue),
        Column("p_bh", "Benjamini–Hochberg p", pvalue),
        Column("p_by", "Benjamini–Yekutieli p", pvalue),
        Column("hurdle", "|t| to pass", NumberForm.RATIO),
    )
    return TableSpec(
        key="many-alphas-adjusted",
        title="Alphas with adjusted p-values",
        columns=columns,
        frame=found.table.sort_values("p", kind="stable"),
        footnote=f"{_footnote(study, found)} |t| to pass: Bonferroni. A dash: the factors replicate the asset.",
    )


def methods_table(study: Study, found: ManyAlphas) -> TableSpec:
    """Tabulate how many alphas each method rejects."""
    columns = (
        Column("controls", "Controls", NumberForm.TEXT),
        Column("rejected", "Alphas apart from zero", NumberForm.COUNT),
        Column("names", "Which", NumberForm.TEXT),
    )
    frame = found.summary.copy()
    frame["names"] = [join_names(found.names(method)) for method in (None, *USUAL)]
    return TableSpec(
        key="many-alphas-methods",
        title=f"Alphas apart from zero at {show(found.tests.size, NumberForm.SHARE)}",
        columns=columns,
        frame=frame,
        index_heading="Method",
        footnote=_footnote(study, found),
    )
