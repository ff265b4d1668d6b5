"""The provenance page: data, settings, seed, trials, versions, intake record, and the command that re-runs it."""

from __future__ import annotations

import platform
from collections.abc import Sequence
from enum import StrEnum
from importlib.metadata import PackageNotFoundError, version
from typing import Any

from soffit.memo.inputs import Inputs
from soffit.memo.layout import ProvenancePage, SimpleTable
from soffit.memo.text import plain
from soffit.present.spec import NumberForm
from soffit.present.wording import show
from soffit.settings import Settings
from soffit.study import Study

__all__ = ["COMMAND", "provenance_page", "setting_text", "versions"]

COMMAND = "soffit report study.toml"
_PACKAGES = ("soffit", "numpy", "pandas", "scipy", "statsmodels", "linearmodels", "matplotlib")


def versions() -> dict[str, str]:
    """Versions of Python and of the packages that make the numbers and pictures."""
    found = {"python": platform.python_version()}
    for name in _PACKAGES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            found[name] = "not installed"
    return found


def setting_text(value: Any) -> str:
    """Write one setting as an analyst would."""
    if value is None or value == {} or value == ():
        return "not set"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, StrEnum):
        return str(value)
    if isinstance(value, dict):
        return "; ".join(f"{name}: {setting_text(item)}" for name, item in value.items())
    if isinstance(value, tuple | list):
        return ", ".join(str(item) for item in value)
    return f"{value:g}" if isinstance(value, float) else str(value)


def provenance_page(study: Study, inputs: Inputs | None) -> ProvenancePage:
    """Collect what a reader needs to make the memo again.

    Parameters
    ----------
    study : Study
        The study the memo is about.
    inputs : Inputs, optional
        The files it was opened from.
    """
    panel, settings = study.panel, study.settings
    dates = panel.dates
    rows = [
        ("Data fingerprint (SHA-256)", panel.fingerprint),
        (
            "Data from",
            ", ".join(inputs.names) if inputs else "not recorded; there are no files to read again",
        ),
        (
            "Panel",
            f"{show(dates[0], NumberForm.DATE)} to {show(dates[-1], NumberForm.DATE)}, {len(dates):,} "
            f"{panel.frequency.noun}s, {panel.assets.shape[1]:,} assets, {panel.factors.shape[1]:,} traded factors",
        ),
        ("Seed", str(settings.seed)),
        ("Trials stated", f"{settings.trials:,}"),
        ("Rows dropped at intake", f"{study.record.dropped_rows:,}"),
        ("Versions", ", ".join(f"{name} {number}" for name, number in versions().items())),
    ]
    facts = SimpleTable("Data, seed and versions", ("What", "Value"), _plain(rows))
    return ProvenancePage(
        facts, (_settings_table(settings), *_intake_tables(study)), COMMAND if inputs else ""
    )


def _plain(rows: Sequence[tuple[str, ...]]) -> tuple[tuple[str, ...], ...]:
    return tuple(tuple(plain(text) for text in row) for row in rows)


def _settings_table(settings: Settings) -> SimpleTable:
    default = Settings()
    rows = []
    for name, _ in Settings.fields():
        note, value = Settings.note(name), settings.get(name)
        unit = note.unit if isinstance(value, int | float) and not isinstance(value, bool) else ""
        unit = unit.removesuffix("s") if value == 1 and unit == "periods" else unit
        changed = "" if value == default.get(name) else "changed"
        rows.append((name, note.label, f"{setting_text(value)} {unit}".strip(), changed))
    return SimpleTable("Settings", ("Name", "Setting", "Value", "From default"), _plain(rows))


def _intake_tables(study: Study) -> tuple[SimpleTable, ...]:
    record = study.record
    counts = [
        (str(source), *(f"{int(row[name]):,}" for name in ("in", "used", "dropped", "merged")))
        for source, row in record.rows.iterrows()
    ]
    entries = [
        (str(entry.severity), str(entry.kind), entry.series or entry.source, f"{entry.rows:,}", entry.message)
        for entry in record.entries
    ]
    return (
        SimpleTable("Rows at intake", ("Source", "In", "Used", "Dropped", "Merged"), _plain(counts)),
        SimpleTable(
            "Intake record",
            ("Severity", "About", "Series or source", "Rows", "What was done"),
            _plain(entries),
        ),
    )
