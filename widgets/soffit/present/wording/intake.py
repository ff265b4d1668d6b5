"""Sentences about what came in."""

from __future__ import annotations

from soffit.intake import Severity
from soffit.present.spec import Finding, NumberForm
from soffit.present.wording.numbers import plural, show
from soffit.present.wording.sample import span_phrase
from soffit.study import Study
from soffit.study.vintage import VintageEffect

__all__ = ["intake_finding", "vintage_finding"]


def intake_finding(study: Study) -> Finding:
    """Say what the panel holds, what was dropped, and how much needs a look."""
    record, panel = study.record, study.panel
    rows = record.rows
    into, used = int(rows["in"].sum()), int(rows["used"].sum())
    dropped, merged = record.dropped_rows, int(rows["merged"].sum())
    repaired = sum(entry.severity is Severity.REPAIRED for entry in record.entries)
    away = (
        f"{plural(dropped, 'row')} dropped and {merged:,} merged"
        if merged
        else f"{plural(dropped, 'row')} dropped"
    )
    return Finding(
        f"{plural(panel.assets.shape[1], 'asset')} and {plural(panel.factors.shape[1], 'traded factor')}, "
        f"{panel.frequency.value}, {span_phrase(study)}: of {into:,} rows read {used:,} are used, {away}. "
        f"The record holds {plural(len(record.warnings), 'warning')} and {plural(repaired, 'repair')}."
    )


def vintage_finding(effect: VintageEffect) -> Finding:
    """Say what changed between two vintages and what it does to the alphas."""
    comparison, table = effect.comparison, effect.table
    if not len(comparison.changes):
        return Finding("The two vintages agree in every value that both have; the alphas are the same.")
    series = comparison.changes["series"].nunique()
    place = int(table["change"].abs().to_numpy().argmax())
    worst, change = table.index[place], float(table["change"].iloc[place])
    return Finding(
        f"{plural(len(comparison.changes), 'value')} of {plural(series, 'factor')} changed between the vintages. "
        f"The largest change of an alpha is {show(change, NumberForm.PERCENT)} a year, "
        f"for {worst}."
    )
