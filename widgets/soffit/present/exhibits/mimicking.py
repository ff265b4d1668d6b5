"""Mimicking portfolios as a page: weights, and how much of each non-traded factor they span."""

from __future__ import annotations

from soffit.present.spec import Column, Exhibit, NumberForm, TableSpec
from soffit.present.wording.hedge import mimicking_finding
from soffit.present.wording.numbers import plural, show
from soffit.study import Mimicking, Study

__all__ = ["exhibit", "weights_table"]


def exhibit(study: Study, found: Mimicking) -> Exhibit:
    """Build the exhibit of portfolios made by ``study.mimicking(...)``."""
    return Exhibit(
        key="hedge-mimicking",
        title="Mimicking portfolios of non-traded factors",
        sample=_sample(study, found),
        finding=mimicking_finding(found),
        tables=(weights_table(study, found),),
        sources=("breeden-gibbons-litzenberger-1989", "lamont-2001"),
        cautions=("A portfolio hedges only the part of a factor that its base assets span.",),
    )


def _sample(study: Study, found: Mimicking) -> str:
    dates = found.returns.index
    span = f"{show(dates[0], NumberForm.DATE)} to {show(dates[-1], NumberForm.DATE)}"
    noun = study.panel.frequency.noun
    return f"{span} · weights from {plural(found.periods, noun)} · {plural(found.weights.shape[1], 'base asset')}"


def weights_table(study: Study, found: Mimicking) -> TableSpec:
    """Tabulate the weights, one row a non-traded factor."""
    frame = found.weights.copy()
    frame.insert(0, "r2", found.r2)
    frame.insert(1, "p", [found.tests[str(name)].pvalue for name in frame.index])
    columns = (
        Column("r2", "Spanned", NumberForm.SHARE),
        Column("p", "p of none", NumberForm.PVALUE),
        *(Column(str(name), str(name), NumberForm.RATIO) for name in found.weights),
    )
    return TableSpec(
        key="hedge-mimicking",
        title="Mimicking portfolios",
        columns=columns,
        frame=frame,
        index_heading="Factor",
        footnote=(
            f"{_sample(study, found)}. Weights are slopes on a constant and the base's excess returns; one unit "
            "moves one for one with the spanned part of the factor. p: F test that the base does not move with "
            "the factor."
        ),
    )
