"""Intake: files and frames to a Panel, with a record of everything assumed, converted and dropped."""

from __future__ import annotations

from soffit.intake.opening import open_panel
from soffit.intake.options import Content, Excess, Frequency, Role, Units
from soffit.intake.panel import Panel, SeriesLabel
from soffit.intake.readers import Limits, Source
from soffit.intake.record import Entry, EntryKind, IntakeRecord, Severity

__all__ = [
    "Content",
    "Entry",
    "EntryKind",
    "Excess",
    "Frequency",
    "IntakeRecord",
    "Limits",
    "Panel",
    "Role",
    "SeriesLabel",
    "Severity",
    "Source",
    "Units",
    "open_panel",
]
