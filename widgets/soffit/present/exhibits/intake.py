"""The intake: coverage over time, and everything that was assumed, converted and dropped."""

from __future__ import annotations

import numpy as np
import pandas as pd

from soffit.intake import Severity
from soffit.present.spec import (
    Axis,
    AxisScale,
    Column,
    Exhibit,
    FigureSpec,
    Line,
    Mark,
    NumberForm,
    Role,
    TableSpec,
)
from soffit.present.wording.intake import intake_finding
from soffit.present.wording.numbers import plural
from soffit.present.wording.sample import span_phrase
from soffit.study import Study

__all__ = ["coverage_figure", "exhibit"]

# More rows than this do not fit a page: the figure then counts the series over time.
_MOST_ROWS = 40


def exhibit(study: Study) -> Exhibit:
    """Build the intake exhibit."""
    return Exhibit(
        key="intake",
        title="What came in",
        sample=_line(study),
        finding=intake_finding(study),
        figures=(coverage_figure(study),),
        tables=(_entries(study), _rows(study), _coverage(study)),
        notes=tuple(entry.message for entry in study.record.warnings),
    )


def _line(study: Study) -> str:
    panel = study.panel
    return (
        f"{span_phrase(study)} · {len(panel.dates):,} {panel.frequency.noun}s · "
        f"{plural(panel.assets.shape[1], 'asset')} · {plural(panel.factors.shape[1], 'traded factor')} · "
        f"fingerprint {panel.fingerprint[:12]}"
    )


def coverage_figure(study: Study) -> FigureSpec:
    """Draw which series has values when: one row a series, or their number over time."""
    panel = study.panel
    frame = pd.concat([panel.assets, panel.factors], axis=1)
    dates = panel.dates.to_numpy()
    there = frame.notna().to_numpy()
    if frame.shape[1] > _MOST_ROWS:
        return _count_figure(study, dates, there)
    names = tuple(str(name) for name in reversed(frame.columns))
    height = {name: float(place) for place, name in enumerate(names)}
    marks: list[Mark] = []
    for column, name in enumerate(frame.columns):
        role = Role.ESTIMATE if column < panel.assets.shape[1] else Role.FACTORS
        at = np.where(there[:, column], height[str(name)], np.nan)
        marks.append(Line(f"series-{column}", dates, at, role))
    short = int((~there).any(axis=0).sum())
    return FigureSpec(
        key="intake-coverage",
        title="Coverage over time",
        x=Axis("", NumberForm.DATE, scale=AxisScale.DATE),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=names),
        marks=tuple(marks),
        alt=f"Dates with values for {plural(len(names), 'series', 'series')}; {short} lack values on some dates.",
        footnote=f"{_line(study)}.",
        aspect=1.3,
    )


def _count_figure(study: Study, dates: np.ndarray, there: np.ndarray) -> FigureSpec:
    count = there.sum(axis=1).astype(float)
    return FigureSpec(
        key="intake-coverage",
        title="Series with a value, by date",
        x=Axis("", NumberForm.DATE, scale=AxisScale.DATE),
        y=Axis("Series", NumberForm.COUNT, (0.0, float(count.max()) * 1.05)),
        marks=(Line("count", dates, count, Role.ESTIMATE),),
        alt=f"Number of series with a value, from {int(count.min()):,} to {int(count.max()):,}.",
        footnote=f"{_line(study)}.",
    )


def _entries(study: Study) -> TableSpec:
    order = {str(Severity.WARNING): 0, str(Severity.REPAIRED): 1, str(Severity.NOTE): 2}
    table = study.record.table
    table = table.sort_values("severity", key=lambda column: column.map(order), kind="stable")
    frame = table.set_index("severity")
    return TableSpec(
        key="intake-record",
        title="Intake record",
        columns=(
            Column("kind", "About", NumberForm.TEXT),
            Column("source", "Source", NumberForm.TEXT),
            Column("rows", "Rows or values", NumberForm.COUNT),
            Column("message", "What was seen and done", NumberForm.TEXT),
        ),
        frame=frame,
        index_heading="Weight",
        footnote=f"{_line(study)}.",
    )


def _rows(study: Study) -> TableSpec:
    rows = study.record.rows
    frame = pd.concat([rows, rows.sum().to_frame("all sources").T])
    return TableSpec(
        key="intake-rows",
        title="Rows read and used",
        columns=tuple(
            Column(key, heading, NumberForm.COUNT)
            for key, heading in [
                ("in", "Read"),
                ("used", "Used"),
                ("dropped", "Dropped"),
                ("merged", "Merged"),
            ]
        ),
        frame=frame,
        index_heading="Source",
        footnote="Rows read are rows used, dropped and merged.",
    )


def _coverage(study: Study) -> TableSpec:
    return TableSpec(
        key="intake-series",
        title="Series",
        columns=(
            Column("role", "Role", NumberForm.TEXT),
            Column("unit", "Unit as read", NumberForm.TEXT),
            Column("first", "First", NumberForm.DATE),
            Column("last", "Last", NumberForm.DATE),
            Column("count", "Values", NumberForm.COUNT),
            Column("gaps", "Gaps", NumberForm.COUNT),
            Column("source", "Source", NumberForm.TEXT),
        ),
        frame=study.record.coverage,
        index_heading="Series",
        footnote=f"{_line(study)}.",
    )
