"""Sweeps: one report for each value of a setting, and a page that compares them."""

from __future__ import annotations

import itertools
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from soffit.errors import SettingError, SoffitError
from soffit.memo.exhibit_json import exhibit_from_json
from soffit.memo.manifest import read_manifest
from soffit.memo.notebook import CACHE, ReportRun, run_report
from soffit.memo.pack import Pack
from soffit.memo.provenance import setting_text
from soffit.memo.study_file import StudyFile
from soffit.memo.writing import write
from soffit.present.spec import (
    Axis,
    Column,
    Exhibit,
    FigureSpec,
    Finding,
    Line,
    Mark,
    NumberForm,
    Role,
    TableSpec,
)
from soffit.present.wording import join_names, plural
from soffit.settings import Settings

__all__ = ["Sweep", "run_sweep"]


@dataclass(frozen=True)
class Sweep:
    """What a sweep gave.

    Parameters
    ----------
    name : str
        Dotted name of the swept setting.
    runs : tuple of (str, ReportRun)
        The value as text, and its report.
    failures : mapping of str to str
        Values without a report, with the reasons.
    comparison : tuple of Path
        Files of the page that compares them.
    """

    name: str
    runs: tuple[tuple[str, ReportRun], ...]
    failures: Mapping[str, str]
    comparison: tuple[Path, ...]

    @property
    def ok(self) -> bool:
        """Whether every report and every section was delivered."""
        return not self.failures and all(run.ok for _, run in self.runs)


def run_sweep(
    study_file: str | Path,
    name: str,
    values: Iterable[Any],
    out: str | Path = "sweep",
    *,
    sets: Mapping[str, Any] | None = None,
    progress: bool = True,
    resume: bool = True,
) -> Sweep:
    """Run a study file once for each value of a setting, and compare.

    Parameters
    ----------
    study_file : path
        The study file.
    name : str
        Dotted name of the setting; ``"factor_sets"`` runs each named set of factors.
    values : iterable
        Its values; for ``"factor_sets"`` the names of the sets, all if empty.
    out : path
        One folder a value, and ``comparison``.
    sets : mapping, optional
        Other settings to change.
    progress : bool
        Whether a bar tells how far it is.
    resume : bool
        Whether reports that an earlier sweep finished from the same content are kept.

    Raises
    ------
    SettingError
        For an unknown setting, no value, or a value out of range, before anything is run.
    """
    from tqdm import tqdm

    plan, folder = StudyFile.load(study_file).with_settings(sets or {}), Path(out)
    points = _points(plan.settings, name, list(values))
    changes = [(text, {**(sets or {}), **change}) for text, change in points]
    for _, change in changes:
        plan.with_settings(change)
    runs: list[tuple[str, ReportRun]] = []
    failures: dict[str, str] = {}
    for number, (text, change) in enumerate(tqdm(changes, desc=name, disable=not progress), start=1):
        place = folder / f"{number:02d}-{_slug(f'{name}-{text}')}"
        try:
            run = run_report(
                study_file,
                change,
                place,
                progress=False,
                resume=resume,
                cache=folder / CACHE if resume else "",
            )
        except SoffitError as error:
            failures[text] = str(error)
            continue
        runs.append((text, run))
    compared = _compare(plan, name, runs, failures, folder / "comparison") if runs else ()
    return Sweep(name, tuple(runs), failures, compared)


def _points(settings: Settings, name: str, values: Sequence[Any]) -> list[tuple[str, dict[str, Any]]]:
    """Each value as text, with the settings it stands for."""
    if name == "factor_sets":
        chosen = [str(value) for value in values] or list(settings.factor_sets)
        unknown = [value for value in chosen if value not in settings.factor_sets]
        if unknown or not chosen:
            raise SettingError(
                f"There is no factor set '{unknown[0]}'"
                if unknown
                else "The study file names no factor sets",
                allowed=join_names(settings.factor_sets) or "sets under [settings.factor_sets]",
            )
        return [(value, {"factors": list(settings.factor_sets[value])}) for value in chosen]
    Settings.note(name)
    if not values:
        raise SettingError(f"The sweep over '{name}' has no values", allowed="at least one")
    return [(setting_text(value), {name: value}) for value in values]


def _slug(text: str) -> str:
    return re.sub(r"[^A-Za-z0-9.]+", "-", text).strip("-.")[:60] or "value"


def _compare(
    plan: StudyFile,
    name: str,
    runs: Sequence[tuple[str, ReportRun]],
    failures: Mapping[str, str],
    folder: Path,
) -> tuple[Path, ...]:
    """Write the comparison as a memo of its own."""
    study = plan.inputs.open(plan.settings)
    label = "Factors" if name == "factor_sets" else Settings.note(name).label
    pack = Pack(
        study, title=f"{plan.plan.title}, compared over the setting '{label}'", labels=plan.plan.labels
    )
    while len(pack):
        pack.drop(0)
    kept = {text: _exhibits(run) for text, run in runs}
    keys = dict.fromkeys(key for exhibits in kept.values() for key in exhibits)
    for key in keys:
        found = {text: exhibits[key] for text, exhibits in kept.items() if key in exhibits}
        pack.keep(_compared(key, label, found))
    missing = [f"{text}: {key}. {why}" for text, run in runs for key, why in run.failures.items()]
    missing += [f"{text}: the whole report. {why}" for text, why in failures.items()]
    for line in missing:
        pack.fail(label, line)
    if not keys:
        return ()
    return tuple(write(pack, folder, ("html", "md")))


def _exhibits(run: ReportRun) -> dict[str, Exhibit]:
    """The first exhibit of each key in a report."""
    if not any(path.name == "manifest.json" for path in run.files):
        return {}
    found: dict[str, Exhibit] = {}
    for part in read_manifest(run.folder)["exhibits"]:
        exhibit = exhibit_from_json(part["exhibit"])
        found.setdefault(exhibit.key, exhibit)
    return found


def _compared(key: str, label: str, found: Mapping[str, Exhibit]) -> Exhibit:
    first = next(iter(found.values()))
    samples = {exhibit.sample for exhibit in found.values()}
    sample = (
        first.sample if len(samples) == 1 else "The samples of the reports differ; each report names its own."
    )
    findings = pd.DataFrame(
        {"finding": [exhibit.finding.text for exhibit in found.values()]}, index=list(found)
    )
    tables = [
        TableSpec(
            f"sweep-{key}-findings",
            f"{first.title}: findings",
            (Column("finding", "Finding", NumberForm.TEXT),),
            findings,
            label,
            sample,
        )
    ]
    figures: list[FigureSpec] = []
    for table in first.tables:
        group = {
            text: other
            for text, exhibit in found.items()
            for other in exhibit.tables
            if other.key == table.key
        }
        made = _quantities(label, group) if table.row_forms else _statuses(label, group, first.title)
        if made is not None:
            tables.append(made)
            figures += _drawn(label, made) if not table.row_forms else []
    return Exhibit(
        key=f"sweep-{key}",
        title=first.title,
        sample=sample,
        finding=Finding(
            f"'{first.title}' for {plural(len(found), 'value')} of '{label}': {join_names(found, most=12)}."
        ),
        figures=tuple(figures),
        tables=tuple(tables),
        sources=first.sources,
        cautions=first.cautions,
    )


def _quantities(label: str, group: Mapping[str, TableSpec]) -> TableSpec | None:
    """Tables of unlike quantities turned on their side: a row a value, a column a quantity."""
    first = next(iter(group.values()))
    if len(first.columns) != 1 or any(len(table.frame) != len(first.frame) for table in group.values()):
        return None
    column = first.columns[0].key
    frame = pd.DataFrame(
        {
            str(row): [table.frame[column].iloc[row] for table in group.values()]
            for row in range(len(first.frame))
        },
        index=list(group),
    )
    columns = tuple(
        Column(
            str(row), _common([str(table.frame.index[row]) for table in group.values()]), first.row_forms[row]
        )
        for row in range(len(first.frame))
    )
    return TableSpec(f"sweep-{first.key}", first.title, columns, frame, label)


def _common(names: Sequence[str]) -> str:
    """What names that carry the swept value have in common."""
    same = [
        letters[0]
        for letters in itertools.takewhile(lambda letters: len(set(letters)) == 1, zip(*names, strict=False))
    ]
    if len(same) == max(map(len, names)):
        return names[0]
    return re.sub(r"[\s\d.,(−-]+$", "", "".join(same)) or names[0]


def _statuses(label: str, group: Mapping[str, TableSpec], title: str) -> TableSpec | None:
    """How many rows carry each word of a column of verdicts."""
    first = next(iter(group.values()))
    column = next((column for column in first.columns if column.key == "status"), None)
    if column is None:
        return None
    words = sorted({str(word) for table in group.values() for word in table.frame[column.key]})
    counts = {
        word: [int((table.frame[column.key].astype(str) == word).sum()) for table in group.values()]
        for word in words
    }
    columns = tuple(Column(word, word, NumberForm.COUNT) for word in words)
    frame = pd.DataFrame(counts, index=list(group))
    return TableSpec(f"sweep-{first.key}", f"{title}: number by {column.heading}", columns, frame, label)


def _drawn(label: str, table: TableSpec) -> list[FigureSpec]:
    """Counts against the swept value, where it is a number."""
    try:
        x = np.array([float(text) for text in table.frame.index])
    except ValueError:
        return []
    if len(x) < 2:
        return []
    roles = {role.value: role for role in (Role.INSIDE, Role.STRADDLES, Role.OUTSIDE)}
    spare = itertools.cycle([Role.MUTED, Role.MARKET, Role.FACTORS, Role.CEILING])
    order = np.argsort(x)
    marks: tuple[Mark, ...] = tuple(
        Line(
            word,
            x[order],
            table.frame[word].to_numpy(dtype=float)[order],
            roles.get(word) or next(spare),
            word,
        )
        for word in (column.key for column in table.columns)
    )
    title = table.title
    return [
        FigureSpec(
            f"{table.key}-lines",
            title,
            Axis(label),
            Axis("Number", NumberForm.COUNT),
            marks,
            f"{title}, against {label}.",
            table.footnote,
        )
    ]
