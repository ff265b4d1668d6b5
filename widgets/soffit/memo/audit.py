"""The audit: recompute every number of a pack from its inputs and say which differ."""

from __future__ import annotations

import hashlib
import io
import re
import zipfile
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any
from xml.etree import ElementTree as ET

import numpy as np
import pandas as pd

from soffit.errors import InputError, SoffitError
from soffit.memo.exhibit_json import exhibit_from_json
from soffit.memo.inputs import Inputs, file_fingerprint
from soffit.memo.manifest import STUDY_FILE, read_manifest, study_toml
from soffit.memo.pack import Pack
from soffit.memo.provenance import versions
from soffit.memo.study_file import ReportPlan
from soffit.memo.writing import render
from soffit.present.exhibits import EXHIBITS, build
from soffit.present.kept import Kept
from soffit.present.spec import Exhibit, FigureSpec, TableSpec
from soffit.settings import Settings
from soffit.study import Study

__all__ = ["Audit", "Difference", "verify"]

# Another machine's linear algebra differs in the last digits; what a memo shows has far fewer.
_RELATIVE, _ABSOLUTE = 1e-7, 1e-10
_WORD = "{http://schemas.openxmlformats.org/wordprocessingml/2006/main}"
_EXCEL = "{http://schemas.openxmlformats.org/spreadsheetml/2006/main}"
_ANCHOR = re.compile(r"(?:id=\"|\*\*|<h2>|w:name=\")(figure|table)[-_ ](\d+)", re.IGNORECASE)


@dataclass(frozen=True)
class Difference:
    """One thing that is not what the inputs give.

    Parameters
    ----------
    where : str
        The figure, table, section or file: ``"Table 2"``.
    what : str
        What stands there and what should.
    """

    where: str
    what: str

    def __str__(self) -> str:
        return f"{self.where}: {self.what}"


@dataclass(frozen=True)
class Audit:
    """What an audit found.

    Parameters
    ----------
    numbers : int
        Numbers that were recomputed.
    files : int
        Files that were compared.
    differences : tuple of Difference
        What differs.
    unchecked : tuple of str
        What could not be recomputed, with the reason.
    """

    numbers: int
    files: int
    differences: tuple[Difference, ...]
    unchecked: tuple[str, ...]

    @property
    def ok(self) -> bool:
        """Whether everything was checked and nothing differs."""
        return not self.differences and not self.unchecked

    def __str__(self) -> str:
        head = f"{self.numbers:,} numbers recomputed, {self.files} files compared: "
        count = len(self.differences)
        verdict = "nothing differs" if not count else f"{count} {'differs' if count == 1 else 'differ'}"
        lines = [f"{head}{verdict}.", *(str(one) for one in self.differences)]
        return "\n".join(lines + [f"Not checked: {reason}" for reason in self.unchecked])


def verify(directory: str | Path, *, study: Study | None = None) -> Audit:
    """Recompute every number of a pack from its inputs, and compare its files.

    Parameters
    ----------
    directory : path
        Folder that a pack was written to.
    study : Study, optional
        The data, where the pack was made from tables in memory.

    Returns
    -------
    Audit
        What differs, by figure, table and file.

    Raises
    ------
    InputError
        If the folder holds no pack, or its data cannot be read and are not given.
    """
    folder = Path(directory)
    manifest = read_manifest(folder)
    return _Check(folder, manifest, study).run()


class _Check:
    def __init__(self, folder: Path, manifest: Mapping[str, Any], study: Study | None) -> None:
        self.folder, self.manifest = folder, manifest
        self.differences: list[Difference] = []
        self.unchecked: list[str] = []
        self.numbers = 0
        self.inputs = self._inputs()
        self.study = self._study(study)

    def run(self) -> Audit:
        self._data()
        made = [self._exhibit(part) for part in self.manifest["exhibits"]]
        files = self._files([kept for kept in made if kept], complete=all(made))
        return Audit(self.numbers, files, tuple(self.differences), tuple(self.unchecked))

    def differ(self, where: str, what: str) -> None:
        self.differences.append(Difference(where, what))

    # ---- the data
    def _inputs(self) -> Inputs | None:
        stored = self.manifest["data"]["inputs"]
        return Inputs.from_dict(stored, self.folder) if stored else None

    def _study(self, study: Study | None) -> Study:
        settings = Settings.from_dict(self.manifest["settings"])
        if study is not None:
            return study.with_settings(settings)
        if self.inputs is None:
            raise InputError(
                "The pack was made from tables in memory", remedy="give verify() the study, or its data again"
            )
        return self.inputs.open(settings)

    def _data(self) -> None:
        stored = self.manifest["data"]
        for name, kept in stored["files"].items():
            found = file_fingerprint((self.folder / name).resolve())
            if kept is None:
                self.unchecked.append(f"the file {name} was not there when the pack was written")
            elif found != kept:
                self.differ(f"Data file {name}", f"its fingerprint is {found[:12]}, the pack's {kept[:12]}")
        found = self.study.panel.fingerprint
        if found != stored["fingerprint"]:
            self.differ("Data", f"their fingerprint is {found[:12]}, the pack's {stored['fingerprint'][:12]}")

    # ---- the numbers
    def _exhibit(self, part: Mapping[str, Any]) -> Kept | None:
        """Compare one kept exhibit with what the inputs give, and return that."""
        kept = exhibit_from_json(part["exhibit"])
        where = ", ".join([*part["figures"], *part["tables"]]) or kept.title
        if kept.key not in EXHIBITS:
            self.unchecked.append(f"{where}: the exhibit '{kept.key}' was made by hand")
            return None
        settings = Settings.from_dict(part["settings"])
        try:
            made = build(kept.key, self.study.with_settings(settings))
        except SoffitError as error:
            self.differ(where, f"the inputs do not give it: {error}")
            return None
        self._words(kept, made)
        self._specs(kept.figures, made.figures, part["figures"], self._figure)
        self._specs(kept.tables, made.tables, part["tables"], self._table)
        return Kept(made, settings)

    def _words(self, kept: Exhibit, made: Exhibit) -> None:
        for name in ("title", "sample", "finding", "sources", "cautions", "notes"):
            if getattr(kept, name) != getattr(made, name):
                self.differ(
                    f"Section '{kept.title}'",
                    f"its {name} is '{getattr(kept, name)}'; the inputs give '{getattr(made, name)}'",
                )

    def _specs(
        self, kept: Any, made: Any, names: list[str], compare: Callable[[str, Any, Any], None]
    ) -> None:
        by_key = {spec.key: spec for spec in made}
        for name, spec in zip(names, kept, strict=False):
            if spec.key in by_key:
                compare(name, spec, by_key[spec.key])
            else:
                self.differ(name, f"the inputs give nothing called '{spec.key}'")

    def _figure(self, name: str, kept: FigureSpec, made: FigureSpec) -> None:
        for item in ("title", "alt", "footnote"):
            if getattr(kept, item) != getattr(made, item):
                self.differ(name, f"its {item} is '{getattr(kept, item)}', not '{getattr(made, item)}'")
        for axis in ("x", "y"):
            if getattr(kept, axis).label != getattr(made, axis).label:
                self.differ(name, f"its {axis} axis is called otherwise")
        if [mark.key for mark in kept.marks] != [mark.key for mark in made.marks]:
            self.differ(name, "it has other marks")
            return
        for old, new in zip(kept.marks, made.marks, strict=True):
            for part in fields(old):
                for what in self._values(getattr(old, part.name), getattr(new, part.name, None)):
                    self.differ(name, f"mark '{old.key}', {part.name}{what}")

    def _table(self, name: str, kept: TableSpec, made: TableSpec) -> None:
        for item in ("title", "footnote", "columns", "index_heading", "row_forms"):
            if getattr(kept, item) != getattr(made, item):
                self.differ(name, f"its {item.replace('_', ' ')} differs from what the inputs give")
        if list(kept.frame.index.astype(str)) != list(made.frame.index.astype(str)):
            self.differ(name, "it has other rows")
            return
        for column in kept.frame:
            if column not in made.frame:
                self.differ(name, f"the inputs give no column '{column}'")
                continue
            pairs = zip(kept.frame.index, kept.frame[column], made.frame[column], strict=True)
            for row, old, new in pairs:
                for what in self._values(old, new):
                    self.differ(name, f"row '{row}', column '{column}'{what}")

    def _values(self, kept: Any, made: Any) -> Iterator[str]:
        """What differs between two values, arrays or texts."""
        if isinstance(kept, np.ndarray) or isinstance(made, np.ndarray):
            old, new = np.asarray(kept), np.asarray(made)
            if old.shape != new.shape:
                yield f" has {old.size} values, not {new.size}"
                return
            for position, (one, other) in enumerate(zip(old.ravel(), new.ravel(), strict=True)):
                for what in self._values(one, other):
                    yield f"[{position}]{what}"
            return
        if _is_number(kept) and _is_number(made):
            self.numbers += 1
            if not np.isclose(kept, made, rtol=_RELATIVE, atol=_ABSOLUTE, equal_nan=True):
                yield f" is {kept!s}; the inputs give {made!s}"
            return
        old, new = _bare(kept), _bare(made)
        if old != new:
            yield f" is {old!s}; the inputs give {new!s}"

    # ---- the files
    def _files(self, made: list[Kept], *, complete: bool) -> int:
        stored: dict[str, str] = self.manifest["files"]
        again = self._rendered(made) if complete else {}
        for name, kept in stored.items():
            path = self.folder / name
            if not path.is_file():
                self.differ(name, "the file is missing")
                continue
            data = path.read_bytes()
            if name in again and data != again[name]:
                self.differ(
                    _place(name, data, again[name], self.manifest), f"{name} is not what the inputs give"
                )
            elif hashlib.sha256(data).hexdigest() != kept:
                self.differ(name, "its fingerprint is not the one in the manifest")
        return len(stored)

    def _rendered(self, made: list[Kept]) -> dict[str, bytes]:
        """Every file again, where the same versions are at hand."""
        if self.manifest.get("versions") != versions():
            self.unchecked.append(
                "pictures and documents were made with other versions of the packages and are compared by their "
                "recorded fingerprints only"
            )
            return {}
        plan = ReportPlan.from_dict(self.manifest["report"])
        pack = self._pack(plan, iter(made))
        files = render(pack.lay_out(), plan.formats)
        if STUDY_FILE in self.manifest["files"]:
            files[STUDY_FILE] = study_toml(pack, plan.formats, self.folder)
        return files

    def _pack(self, plan: ReportPlan, made: Iterator[Kept]) -> Pack:
        pack = plan.empty_pack(self.study, self.inputs)
        for part in plan.parts:
            if part.words:
                pack.say(part.words)
            elif part.failed:
                study = self.study.changed(part.values)
                pack.fail(part.exhibit, part.failed, labels=part.labels, study=study)
            else:
                pack.keep(next(made), labels=part.labels)
        for key, text in plan.captions.items():
            pack.caption(key, text)
        return pack


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float | np.integer | np.floating) and not isinstance(value, bool)


def _bare(value: Any) -> Any:
    if isinstance(value, np.generic) and not isinstance(value, np.datetime64):
        value = value.item()
    if isinstance(value, np.datetime64):
        return pd.Timestamp(value)
    return None if value is pd.NaT or value is pd.NA else value


# ---- which figure or table a file's first difference belongs to
def _place(name: str, kept: bytes, made: bytes, manifest: Mapping[str, Any]) -> str:
    match = re.search(r"(figure|table)-0*(\d+)-", name)
    if match:
        return f"{match.group(1).capitalize()} {match.group(2)}"
    if name.endswith((".docx", ".xlsx", ".pptx")):
        return _place_in_archive(name, kept, made, manifest)
    return _place_in_text(kept, made) or name


def _place_in_text(kept: bytes, made: bytes) -> str:
    old, new = kept.decode("utf-8", "replace"), made.decode("utf-8", "replace")
    first = next(
        (position for position, (a, b) in enumerate(zip(old, new, strict=False)) if a != b),
        min(len(old), len(new)),
    )
    # The anchor of the thing stands before it, and its own name may hold the difference.
    found = list(_ANCHOR.finditer(new[:first]))
    return f"{found[-1].group(1).capitalize()} {found[-1].group(2)}" if found else ""


def _place_in_archive(name: str, kept: bytes, made: bytes, manifest: Mapping[str, Any]) -> str:
    """Compare what is written, not how: an office program that saved the file again moves everything."""
    names = [table for part in manifest["exhibits"] for table in part["tables"]]
    try:
        with zipfile.ZipFile(io.BytesIO(kept)) as old, zipfile.ZipFile(io.BytesIO(made)) as new:
            old_tables, new_tables = _tables_in(old), _tables_in(new)
            pictures = [entry for entry in new.namelist() if entry.startswith("word/media/")]
            changed = [
                entry for entry in pictures if entry in old.namelist() and old.read(entry) != new.read(entry)
            ]
    except (zipfile.BadZipFile, ET.ParseError, KeyError, ValueError):
        return name
    for position, (table, before, after) in enumerate(zip(names, old_tables, new_tables, strict=False)):
        if before != after:
            return str(table) if position < len(names) else name
    number = re.search(r"(\d+)\.png$", changed[0]) if changed else None
    return f"Figure {number.group(1)}" if number else name


def _tables_in(archive: zipfile.ZipFile) -> list[list[str]]:
    """Texts and numbers of each table, in order, of a document or a workbook."""
    names = archive.namelist()
    if "word/document.xml" in names:
        body = ET.fromstring(archive.read("word/document.xml"))
        return [[part.text or "" for part in table.iter(_WORD + "t")] for table in body.iter(_WORD + "tbl")]
    shared: list[str] = []
    if "xl/sharedStrings.xml" in names:
        texts = ET.fromstring(archive.read("xl/sharedStrings.xml"))
        shared = ["".join(item.itertext()) for item in texts.iter(_EXCEL + "si")]
    count = sum(name.startswith("xl/worksheets/sheet") for name in names)
    sheets = (archive.read(f"xl/worksheets/sheet{number}.xml") for number in range(2, count + 1))
    return [_cells(ET.fromstring(sheet), shared) for sheet in sheets]


def _cells(sheet: ET.Element, shared: list[str]) -> list[str]:
    found = []
    for cell in sheet.iter(_EXCEL + "c"):
        text = "".join(cell.itertext())
        if not text:
            continue
        if cell.get("t") == "s":
            text = shared[int(text)]
        elif cell.get("t", "n") == "n":
            text = f"{float(text):.12g}"  # programs write the last digits differently
        found.append(f"{cell.get('r')}={text}")
    return found
