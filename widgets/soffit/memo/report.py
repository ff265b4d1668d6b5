"""A report as it runs inside a notebook: one section a cell, shown without code, written as a pack at the end."""

from __future__ import annotations

import base64
import hashlib
import json
import traceback
from collections.abc import Iterable, Mapping
from dataclasses import replace
from html import escape
from pathlib import Path
from typing import Any, Self

from soffit.errors import InputError, SoffitError
from soffit.memo.exhibit_json import exhibit_from_json, exhibit_to_json
from soffit.memo.pack import Pack
from soffit.memo.parameters import settings_from_parameters
from soffit.memo.provenance import versions
from soffit.memo.study_file import Part, StudyFile
from soffit.memo.text import plain
from soffit.memo.writing import write
from soffit.present.cautions import cautions_for
from soffit.present.draw_mpl import png_bytes
from soffit.present.exhibits import build
from soffit.present.plain import cells
from soffit.present.spec import Exhibit, TableSpec
from soffit.settings import Settings
from soffit.study import Study

__all__ = ["RUN_FILE", "Report", "report_key"]

RUN_FILE = "run.json"
_MOST_ROWS = 40


class Shown:
    """Something that a notebook shows as HTML, with the same in plain text."""

    def __init__(self, html: str, text: str) -> None:
        self.html, self.text = html, text

    def __repr__(self) -> str:
        return self.text

    def _repr_html_(self) -> str:
        return self.html


class Report:
    """A study file that is being run.

    Parameters
    ----------
    plan : StudyFile
        Data, settings and parts.
    study : Study
        The opened data.
    out : Path
        Folder of the pack.
    cache : Path, optional
        Folder of finished sections; none are kept if left out.
    """

    def __init__(self, plan: StudyFile, study: Study, out: Path, cache: Path | None = None) -> None:
        self.plan, self.study, self.out, self.cache = plan, study, out, cache
        self.pack: Pack = plan.plan.empty_pack(study, plan.inputs)

    @classmethod
    def open(
        cls, study_file: str | Path, parameters: Mapping[str, Any], *, out: str | Path, cache: str | Path = ""
    ) -> Self:
        """Open a study file with the settings of a notebook's parameters.

        Parameters
        ----------
        study_file : path
            The study file.
        parameters : mapping
            The notebook's variables; those with names of settings count.
        out : path
            Folder of the pack.
        cache : path, optional
            Folder of finished sections.

        Raises
        ------
        SettingError
            For a setting out of range.
        InputError
            If the data cannot be used.
        """
        given = {name: parameters[name] for name in Settings.model_fields if name in parameters}
        plan = replace(StudyFile.load(study_file), settings=settings_from_parameters(given))
        study = plan.inputs.open(plan.settings)
        return cls(plan, study, Path(out), Path(cache) if cache else None)

    def front(self) -> Shown:
        """Title, labels and sample."""
        plan, panel = self.plan.plan, self.study.panel
        labels = " · ".join(plan.labels)
        about = f"{panel.assets.shape[1]:,} assets, {panel.factors.shape[1]:,} factors, {len(panel.dates):,} periods"
        html = f"<h1>{_safe(plan.title)}</h1><p><b>{_safe(labels)}</b></p><p>{_safe(about)}</p>"
        return Shown(html, f"{plan.title}\n{labels}\n{about}")

    def section(self, position: int) -> Shown:
        """Make one part of the report and keep it; a fault is named and does not stop the rest."""
        part = self.plan.plan.parts[position]
        if part.words:
            self.pack.say(part.words)
            return Shown(f"<p>{_safe(part.words)}</p>", part.words)
        study = self.study
        try:
            study = self.study.changed(part.values)
            exhibit = self._made(part, study)
        except SoffitError as error:
            return self._failed(part, study, str(error))
        except Exception as error:  # noqa: BLE001 - a fault of one section must not cost the others; it is shown whole
            traceback.print_exc()
            return self._failed(part, study, f"Unexpected {type(error).__name__}: {error}")
        self.pack.keep(exhibit, labels=part.labels, study=study)
        return _shown(exhibit)

    def finish(self) -> Shown:
        """Write the pack and say what was written and what failed."""
        for key, text in self.plan.plan.captions.items():
            if any(key == spec.key for kept in self.pack.exhibits for spec in kept.exhibit.figures) or any(
                key == spec.key for kept in self.pack.exhibits for spec in kept.exhibit.tables
            ):
                self.pack.caption(key, text)
        failures = {part.key: part.reason for part in self.pack.failures}
        files: list[str] = []
        if self.pack.exhibits:
            written = write(self.pack, self.out, self.plan.plan.formats)
            files = [path.relative_to(self.out).as_posix() for path in written]
        self.out.mkdir(parents=True, exist_ok=True)
        run = {"key": report_key(self.plan, self.study), "files": files, "failures": failures}
        (self.out / RUN_FILE).write_text(json.dumps(run, indent=1) + "\n", encoding="utf-8")
        said = [f"Written: {name}" for name in files] + [
            f"Not delivered: {key}. {why}" for key, why in failures.items()
        ]
        # The notebook is handed on as well: it must not go without what the memo says.
        cautions = cautions_for(kept.exhibit for kept in self.pack.exhibits)
        html = f"<h2>Cautions</h2>{_list(cautions)}<h2>Files</h2>{_list(said)}"
        return Shown(html, "\n".join(["Cautions", *cautions, "Files", *said]))

    def _made(self, part: Part, study: Study) -> Exhibit:
        """The exhibit, from the cache where the same data, settings and versions made it before."""
        if self.cache is None:
            return build(part.exhibit, study)
        path = self.cache / f"{_hash([part.exhibit, _state(study)])}.json"
        try:
            return exhibit_from_json(json.loads(path.read_text(encoding="utf-8")))
        except (OSError, ValueError, InputError):
            exhibit = build(part.exhibit, study)
        self.cache.mkdir(parents=True, exist_ok=True)
        # Written whole or not at all: another run may be reading.
        draft = path.with_suffix(".part")
        draft.write_text(json.dumps(exhibit_to_json(exhibit), allow_nan=False), encoding="utf-8")
        draft.replace(path)
        return exhibit

    def _failed(self, part: Part, study: Study, reason: str) -> Shown:
        self.pack.fail(part.exhibit, reason, labels=part.labels, study=study)
        text = f"Not delivered: the section '{part.exhibit}'. {reason}"
        return Shown(f'<p role="alert"><b>{_safe(text)}</b></p>', text)


def report_key(plan: StudyFile, study: Study) -> str:
    """Hash of all that decides what a report holds: data, settings, parts and versions."""
    return _hash([_state(study), plan.plan.to_dict()])


def _state(study: Study) -> dict[str, Any]:
    return {
        "data": study.panel.fingerprint,
        "settings": study.settings.model_dump(mode="json"),
        "versions": versions(),
    }


def _hash(values: Any) -> str:
    text = json.dumps(values, sort_keys=True, default=str)
    return hashlib.sha256(text.encode("utf-8")).hexdigest()


def _list(texts: Iterable[str]) -> str:
    return "<ul>" + "".join(f"<li>{_safe(text)}</li>" for text in texts) + "</ul>"


def _safe(text: str) -> str:
    return escape(plain(text))


def _shown(exhibit: Exhibit) -> Shown:
    parts = [
        f"<h2>{_safe(exhibit.title)}</h2>",
        f"<p>{_safe(exhibit.finding.text)}</p>",
        *(f"<p>Note: {_safe(note)}</p>" for note in exhibit.notes),
        *(f"<p>Caution: {_safe(caution)}</p>" for caution in exhibit.cautions),
    ]
    for figure in exhibit.figures:
        picture = base64.b64encode(png_bytes(figure)).decode("ascii")
        parts.append(f'<img alt="{_safe(figure.alt)}" src="data:image/png;base64,{picture}">')
    parts += [_table(table) for table in exhibit.tables]
    parts.append(f"<p><small>{_safe(exhibit.sample)}</small></p>")
    return Shown("\n".join(parts), f"{exhibit.title}\n{exhibit.finding.text}")


def _table(table: TableSpec) -> str:
    head, *body = cells(table)
    top = "".join(f'<th scope="col">{_safe(text)}</th>' for text in head)
    rows = "".join(
        f'<tr><th scope="row">{_safe(row[0])}</th>'
        + "".join(f"<td>{_safe(text)}</td>" for text in row[1:])
        + "</tr>"
        for row in body[:_MOST_ROWS]
    )
    left = len(body) - _MOST_ROWS
    more = f"<p><small>{left:,} more rows in the memo.</small></p>" if left > 0 else ""
    caption = f"<caption>{_safe(table.title)}</caption>"
    return f"<table>{caption}<thead><tr>{top}</tr></thead><tbody>{rows}</tbody></table>{more}"
