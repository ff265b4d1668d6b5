"""A study file: the data, the settings and the parts of a report, as one TOML file."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from soffit.errors import InputError, SettingError, nearest
from soffit.memo.inputs import Inputs
from soffit.memo.layout import Label
from soffit.memo.pack import FailedPart, KeptPart, Pack
from soffit.present.exhibits import EXHIBITS
from soffit.settings import Settings
from soffit.study import Study

__all__ = ["Part", "ReportPlan", "StudyFile"]

_USUAL = ("ceiling", "joint", "regression")


@dataclass(frozen=True)
class Part:
    """One part of a report: an exhibit, or a paragraph of the analyst's.

    Parameters
    ----------
    exhibit : str
        Key of the exhibit; empty for a paragraph.
    words : str
        The paragraph; empty for an exhibit.
    settings : mapping
        Settings of this exhibit that differ from the study's, by dotted name.
    unset : tuple of str
        Settings that the study has and this exhibit leaves empty.
    failed : str
        Why the section could not be made, in a pack that says so; it is tried again when the file is run.
    labels : tuple of Label
        Labels of this section.
    """

    exhibit: str = ""
    words: str = ""
    settings: Mapping[str, Any] = field(default_factory=dict)
    labels: tuple[Label, ...] = ()
    unset: tuple[str, ...] = ()
    failed: str = ""

    @classmethod
    def of(cls, part: KeptPart | FailedPart | str, common: Settings) -> Part:
        """Part of a report that makes a part of a pack again."""
        if isinstance(part, str):
            return cls(words=part)
        failed = part.reason if isinstance(part, FailedPart) else ""
        changed = _differences(part.settings if isinstance(part, FailedPart) else part.kept.settings, common)
        given = {name: value for name, value in changed.items() if value is not None}
        unset = tuple(name for name in changed if name not in given)
        return cls(part.key, "", given, part.labels, unset, failed)

    @property
    def values(self) -> dict[str, Any]:
        """Settings to change, by dotted name; None empties one."""
        return {**self.settings, **dict.fromkeys(self.unset)}

    def to_dict(self) -> dict[str, Any]:
        """Plain values; what is empty is left out."""
        if self.words:
            return {"words": self.words}
        values: dict[str, Any] = {"exhibit": self.exhibit}
        if self.settings:
            values["settings"] = dict(self.settings)
        if self.labels:
            values["labels"] = [str(label) for label in self.labels]
        if self.unset:
            values["unset"] = list(self.unset)
        if self.failed:
            values["failed"] = self.failed
        return values

    @classmethod
    def from_dict(cls, values: Mapping[str, Any]) -> Part:
        """Part from plain values.

        Raises
        ------
        SettingError
            For an unknown name.
        """
        _check(values, ("exhibit", "words", "settings", "labels", "unset", "failed"), "a part of the report")
        if bool(values.get("exhibit")) == bool(values.get("words")):
            raise SettingError("A part of the report is either an exhibit or words", allowed="one of the two")
        return cls(
            values.get("exhibit", ""),
            values.get("words", ""),
            dict(values.get("settings", {})),
            _labels(values.get("labels", ())),
            tuple(values.get("unset", ())),
            values.get("failed", ""),
        )


@dataclass(frozen=True)
class ReportPlan:
    """What a report holds besides numbers.

    Parameters
    ----------
    title, author, dated : str
        As typed; the title of a pack if empty.
    labels : tuple of Label
        Labels of the whole memo.
    parts : tuple of Part
        In order.
    captions : mapping of str to str
        Captions by key of the figure or table.
    formats : tuple of str
        What is written.
    """

    title: str = "Alphas under a Sharpe ceiling"
    author: str = ""
    dated: str = ""
    labels: tuple[Label, ...] = (Label.HYPOTHETICAL, Label.INTERNAL)
    parts: tuple[Part, ...] = tuple(Part(key) for key in _USUAL)
    captions: Mapping[str, str] = field(default_factory=dict)
    formats: tuple[str, ...] = ("html", "png")

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        values: dict[str, Any] = {
            "title": self.title,
            "author": self.author,
            "dated": self.dated,
            "labels": [str(label) for label in self.labels],
            "formats": [str(form) for form in self.formats],
        }
        if self.captions:
            values["captions"] = dict(self.captions)
        values["parts"] = [part.to_dict() for part in self.parts]
        return values

    @classmethod
    def of(cls, pack: Pack, formats: Sequence[str] = ("html", "png")) -> ReportPlan:
        """Plan of what a pack holds."""
        parts = tuple(Part.of(part, pack.study.settings) for part in pack.parts)
        return cls(pack.title, pack.author, pack.dated, pack.labels, parts, pack.captions, tuple(formats))

    def empty_pack(self, study: Study, inputs: Inputs | None) -> Pack:
        """Pack with this title and these labels; what was kept in the study is left out."""
        pack = Pack(
            study, title=self.title, author=self.author, dated=self.dated, labels=self.labels, inputs=inputs
        )
        while len(pack):
            pack.drop(0)
        return pack

    @classmethod
    def from_dict(cls, values: Mapping[str, Any]) -> ReportPlan:
        """Plan from plain values; what is not named keeps its default.

        ``exhibits = ["ceiling", "joint"]`` is short for parts without settings of their own.

        Raises
        ------
        SettingError
            For an unknown name or exhibit.
        """
        names = ("title", "author", "dated", "labels", "formats", "captions", "parts", "exhibits")
        _check(values, names, "the table [report]")
        given: dict[str, Any] = {
            name: values[name] for name in ("title", "author", "dated") if name in values
        }
        if "labels" in values:
            given["labels"] = _labels(values["labels"])
        if "formats" in values:
            given["formats"] = tuple(str(form) for form in values["formats"])
        if "captions" in values:
            given["captions"] = dict(values["captions"])
        if "parts" in values and "exhibits" in values:
            raise SettingError("The table [report] has both parts and exhibits", allowed="one of the two")
        if "parts" in values:
            given["parts"] = tuple(Part.from_dict(part) for part in values["parts"])
        if "exhibits" in values:
            given["parts"] = tuple(Part(str(key)) for key in values["exhibits"])
        return cls(**given)


@dataclass(frozen=True)
class StudyFile:
    """Everything that makes a report again.

    Parameters
    ----------
    inputs : Inputs
        Where the data are.
    settings : Settings
        Every choice.
    plan : ReportPlan
        Title, parts, captions, formats.
    """

    inputs: Inputs
    settings: Settings = field(default_factory=Settings)
    plan: ReportPlan = field(default_factory=ReportPlan)

    @classmethod
    def load(cls, path: str | Path) -> StudyFile:
        """Read a study file.

        Raises
        ------
        SettingError
            If it is missing, is not TOML, or holds an unknown name or a value out of range.
        """
        try:
            values = tomllib.loads(Path(path).read_text(encoding="utf-8-sig"))
        except (OSError, UnicodeDecodeError) as error:
            raise SettingError(f"The study file '{path}' cannot be read ({error})") from error
        except tomllib.TOMLDecodeError as error:
            raise SettingError(f"The study file '{path}' is not TOML: {error}") from error
        return cls.from_dict(values, Path(path).parent)

    @classmethod
    def from_dict(cls, values: Mapping[str, Any], folder: Path = Path()) -> StudyFile:
        """Study file from plain values.

        Raises
        ------
        SettingError
            For an unknown name or a value out of range.
        """
        _check(values, ("data", "settings", "report"), "the study file")
        plan = ReportPlan.from_dict(values.get("report", {}))
        for part in plan.parts:
            if part.exhibit and part.exhibit not in EXHIBITS:
                raise SettingError(
                    f"There is no exhibit '{part.exhibit}'", remedy=nearest(part.exhibit, EXHIBITS)
                )
        inputs = Inputs.from_dict(values.get("data", {}), folder)
        return cls(inputs, Settings.from_dict(values.get("settings", {})), plan)

    def to_dict(self) -> dict[str, Any]:
        """Plain values; every setting is named, so that later defaults change nothing."""
        return {
            "data": self.inputs.to_dict(),
            "settings": _given(self.settings.to_dict()),
            "report": self.plan.to_dict(),
        }

    def save(self, path: str | Path) -> Path:
        """Write the study file; paths count from its own folder."""
        target = Path(path)
        target.write_text(self.text(target.parent), encoding="utf-8")
        return target

    def text(self, folder: Path) -> str:
        """The study file as TOML, for a place in `folder`."""
        import tomlkit

        return tomlkit.dumps(replace(self, inputs=self.inputs.seen_from(folder)).to_dict())

    def with_settings(self, values: Mapping[str, Any]) -> StudyFile:
        """Copy with some settings changed, by dotted name.

        Raises
        ------
        SettingError
            For an unknown name, with the nearest known one, or a value out of range.
        """
        return replace(self, settings=self.settings.changed(values))

    def pack(self) -> Pack:
        """Open the data and build every part.

        Raises
        ------
        InputError
            If the data cannot be used.
        """
        study = self.inputs.open(self.settings)
        pack = self.plan.empty_pack(study, self.inputs)
        for part in self.plan.parts:
            if part.words:
                pack.say(part.words)
            else:
                pack.keep(part.exhibit, labels=part.labels, study=study.changed(part.values))
        for key, text in self.plan.captions.items():
            pack.caption(key, text)
        return pack

    @classmethod
    def of(cls, pack: Pack, formats: Sequence[str] = ("html", "png")) -> StudyFile:
        """Study file that makes a pack again.

        Raises
        ------
        InputError
            If the pack does not know which files its data came from.
        """
        if pack.inputs is None:
            raise InputError("The pack does not say which files its data came from", remedy="give it inputs")
        return cls(pack.inputs, pack.study.settings, ReportPlan.of(pack, formats))


def _given(values: Mapping[str, Any]) -> dict[str, Any]:
    """Nested values as TOML can hold them; empty ones left out."""
    return {
        name: _given(value) if isinstance(value, Mapping) else toml_value(value)
        for name, value in values.items()
        if value is not None
    }


def _differences(settings: Settings, base: Settings) -> dict[str, Any]:
    """Dotted names and values that differ from the base."""
    return {
        name: toml_value(settings.get(name))
        for name, _ in Settings.fields()
        if settings.get(name) != base.get(name)
    }


def toml_value(value: Any) -> Any:
    """A setting as TOML can hold it."""
    if isinstance(value, str):
        return str(value)
    if isinstance(value, Mapping):
        return {name: toml_value(item) for name, item in value.items()}
    if isinstance(value, Sequence):
        return [toml_value(item) for item in value]
    return value


def _labels(values: Any) -> tuple[Label, ...]:
    try:
        return tuple(Label(value) for value in values)
    except ValueError as error:
        allowed = ", ".join(f"'{label}'" for label in Label)
        raise SettingError(f"The labels are {list(values)!r}", allowed=allowed) from error


def _check(values: Mapping[str, Any], known: Sequence[str], where: str) -> None:
    for name in values:
        if name not in known:
            raise SettingError(f"There is no '{name}' in {where}", remedy=nearest(str(name), known))
