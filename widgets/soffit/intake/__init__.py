"""Intake: files and frames to a Panel, with a record of everything assumed, converted and dropped."""

from __future__ import annotations

from soffit.intake.labels import Fees, SeriesLabel
from soffit.intake.opening import open_panel
from soffit.intake.options import Content, Excess, Frequency, Layout, Mismatch, Role, Units
from soffit.intake.panel import Panel
from soffit.intake.record import Entry, EntryKind, IntakeRecord, Severity
from soffit.intake.sources import Limits, Source
from soffit.intake.vintages import VintageComparison, compare_vintages

__all__ = [
    "Content",
    "Entry",
    "EntryKind",
    "Excess",
    "Fees",
    "Frequency",
    "IntakeRecord",
    "Layout",
    "Limits",
    "Mismatch",
    "Panel",
    "Role",
    "SeriesLabel",
    "Severity",
    "Source",
    "Units",
    "VintageComparison",
    "compare_vintages",
    "open_panel",
]
