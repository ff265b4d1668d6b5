"""The intake record: all that was assumed, converted, merged and dropped on the way to a panel."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from enum import StrEnum

import pandas as pd

__all__ = ["Entry", "EntryKind", "IntakeRecord", "RecordBuilder", "Severity", "listed"]


class Severity(StrEnum):
    """How much an entry matters to the analyst."""

    NOTE = "note"
    REPAIRED = "repaired"
    WARNING = "warning"


class EntryKind(StrEnum):
    """What an entry is about."""

    SOURCE = "source"
    LAYOUT = "layout"
    NAMES = "names"
    ROLES = "roles"
    DATES = "dates"
    ORDER = "order"
    DUPLICATES = "duplicates"
    NUMBERS = "numbers"
    MISSING = "missing values"
    GAPS = "gaps"
    FREQUENCY = "frequency"
    UNITS = "units"
    PRICES = "prices"
    EXCESS = "excess returns"
    IMPOSSIBLE = "impossible values"
    COPIES = "copies"
    CONSTANT = "constant stretches"
    STALE = "stale prices"
    OUTLIERS = "outliers"
    HISTORY = "histories"
    ALIGNMENT = "alignment"
    LABELS = "currency and fees"


@dataclass(frozen=True)
class Entry:
    """One assumption, conversion, repair or warning.

    Parameters
    ----------
    kind : EntryKind
        What it is about.
    series : str
        The series concerned, by name; empty when it concerns a whole source.
    rows : int
        Rows or values concerned; 0 where counting makes no sense.
    message : str
        One sentence in plain words.
    severity : Severity
        Note, repaired or warning.
    source : str
        Where the data came from; empty when it concerns the panel as a whole.
    """

    kind: EntryKind
    series: str
    rows: int
    message: str
    severity: Severity
    source: str = ""


@dataclass(frozen=True, eq=False)
class IntakeRecord:
    """What happened between the sources and the panel.

    Parameters
    ----------
    entries : tuple of Entry
        In the order in which things were done.
    coverage : DataFrame
        One row a series: ``first``, ``last``, ``count``, ``gaps``, ``role``, ``unit``, ``source``.
    rows : DataFrame
        One row a source: ``in``, ``used``, ``dropped``, ``merged``; counts of data rows.
    sources : DataFrame
        One row a source: ``label`` (which download it is) and ``fingerprint`` (SHA-256 of its content).
    """

    entries: tuple[Entry, ...]
    coverage: pd.DataFrame
    rows: pd.DataFrame
    sources: pd.DataFrame

    @property
    def table(self) -> pd.DataFrame:
        """The entries as a DataFrame."""
        columns = ["severity", "kind", "source", "series", "rows", "message"]
        return pd.DataFrame(
            [[str(getattr(e, c)) if c != "rows" else e.rows for c in columns] for e in self.entries],
            columns=columns,
        )

    @property
    def dropped_rows(self) -> int:
        """Rows dropped, over all sources. Merged rows are not dropped rows."""
        return int(self.rows["dropped"].sum())

    @property
    def warnings(self) -> tuple[Entry, ...]:
        """The entries that the analyst should read before relying on a number."""
        return tuple(entry for entry in self.entries if entry.severity is Severity.WARNING)

    def of(self, kind: EntryKind) -> tuple[Entry, ...]:
        """The entries of one kind."""
        return tuple(entry for entry in self.entries if entry.kind is kind)

    def reconciles(self) -> bool:
        """Whether rows in = rows used + dropped + merged, in every source."""
        rows = self.rows
        return bool((rows["in"] == rows["used"] + rows["dropped"] + rows["merged"]).all())


@dataclass
class _Count:
    into: int = 0
    dropped: int = 0
    merged: int = 0
    used: int = 0
    label: str = ""
    fingerprint: str = ""


@dataclass
class RecordBuilder:
    """Collects entries and counts rows while a panel is made."""

    _entries: list[Entry] = field(default_factory=list)
    _counts: dict[str, _Count] = field(default_factory=dict)

    def add(
        self,
        kind: EntryKind,
        message: str,
        severity: Severity = Severity.NOTE,
        *,
        series: str | Sequence[str] = "",
        rows: int = 0,
        source: str = "",
    ) -> None:
        """Add an entry."""
        name = series if isinstance(series, str) else listed(series, quote="")
        self._entries.append(Entry(kind, name, int(rows), message, severity, source))

    def rows_in(self, source: str, count: int, label: str = "", fingerprint: str = "") -> None:
        """Open the account of a source with the data rows it holds."""
        self._counts[source] = _Count(into=int(count), label=label, fingerprint=fingerprint)

    def dropped(self, source: str, count: int) -> None:
        """Book rows that were left out."""
        self._counts[source].dropped += int(count)

    def merged(self, source: str, count: int) -> None:
        """Book rows that were folded into another row."""
        self._counts[source].merged += int(count)

    def used(self, source: str, count: int) -> None:
        """Book the rows of the panel that a source filled."""
        self._counts[source].used = int(count)

    def finish(self, coverage: pd.DataFrame) -> IntakeRecord:
        """Close the accounts.

        Raises
        ------
        RuntimeError
            If the rows of a source do not add up: a fault of soffit, not of the data.
        """
        index = pd.Index(list(self._counts), name="source", dtype=object)
        counts = [[c.into, c.used, c.dropped, c.merged] for c in self._counts.values()]
        rows = pd.DataFrame(counts, index=index, columns=["in", "used", "dropped", "merged"])
        marks = [[c.label, c.fingerprint] for c in self._counts.values()]
        sources = pd.DataFrame(marks, index=index, columns=["label", "fingerprint"], dtype=object)
        record = IntakeRecord(tuple(self._entries), coverage, rows, sources)
        if not record.reconciles():
            raise RuntimeError(f"the intake lost count of its rows:\n{rows}")
        return record


def listed(names: Iterable[str], *, most: int = 8, quote: str = "'") -> str:
    """Names in a row, cut after `most` with the number of the rest."""
    known = [f"{quote}{name}{quote}" for name in names]
    if len(known) > most:
        return ", ".join(known[:most]) + f" and {len(known) - most} more"
    return ", ".join(known[:-1]) + " and " + known[-1] if len(known) > 1 else "".join(known)
