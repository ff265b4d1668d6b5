"""The pack: what is kept for a memo, in the analyst's order and words."""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any, Self, TypeVar

from soffit.errors import InputError, SettingError, nearest
from soffit.memo.inputs import Inputs
from soffit.memo.layout import Label, Memo, NumberedFigure, NumberedTable, Remark, Section
from soffit.memo.provenance import provenance_page, setting_text
from soffit.memo.text import Link, Runs, plain, runs
from soffit.present.cautions import cautions_for
from soffit.present.exhibits import build
from soffit.present.kept import Kept
from soffit.present.sources import cite, reference
from soffit.present.spec import Exhibit, FigureSpec, TableSpec
from soffit.settings import Settings
from soffit.study import Study

__all__ = ["FailedPart", "KeptPart", "Pack"]

S = TypeVar("S", FigureSpec, TableSpec)


@dataclass(frozen=True, eq=False)
class KeptPart:
    """A kept exhibit and the labels of its section."""

    kept: Kept
    labels: tuple[Label, ...] = ()

    @property
    def exhibit(self) -> Exhibit:
        """The exhibit."""
        return self.kept.exhibit

    @property
    def key(self) -> str:
        """Key of the exhibit."""
        return self.kept.exhibit.key


@dataclass(frozen=True)
class FailedPart:
    """A section that could not be made: it is named where it would stand, and the rest is delivered.

    Parameters
    ----------
    key : str
        Key of the exhibit.
    reason : str
        Why, in one sentence.
    settings : Settings
        The settings it was asked for with.
    labels : tuple of Label
        Labels of its section.
    """

    key: str
    reason: str
    settings: Settings
    labels: tuple[Label, ...] = ()


class Pack:
    """What was kept, to be written as one memo.

    It starts with what panels kept in ``study.kept``; more can be kept from code. Order, captions and words are the
    analyst's; numbers, footnotes, sources, cautions and provenance are not.

    Parameters
    ----------
    study : Study
        The study the memo is about.
    title : str
        Title of the memo.
    author, dated : str, optional
        Printed under the title. No date is taken from the clock: the same inputs give the same bytes.
    labels : iterable of Label, optional
        Labels of the whole memo.
    inputs : Inputs, optional
        The files the study was opened from, which an audit opens again; those the study remembers if left out.

    Examples
    --------
    >>> pack = Pack(study, title="Alphas under a ceiling").keep("ceiling")  # doctest: +SKIP
    >>> pack.caption("ceiling-p", "No ceiling below that of {ceiling-joint} survives.")  # doctest: +SKIP
    """

    def __init__(
        self,
        study: Study,
        *,
        title: str = "Alphas under a Sharpe ceiling",
        author: str = "",
        dated: str = "",
        labels: Iterable[Label] = (Label.HYPOTHETICAL, Label.INTERNAL),
        inputs: Inputs | None = None,
    ) -> None:
        self.study = study
        self.title, self.author, self.dated = title, author, dated
        self.labels = _labels(labels)
        self.inputs = inputs if inputs is not None else Inputs.of(study)
        self._parts: list[KeptPart | FailedPart | str] = [KeptPart(_kept(item, study)) for item in study.kept]
        self._captions: dict[str, str] = {}

    def __len__(self) -> int:
        return len(self._parts)

    def __repr__(self) -> str:
        kept = ", ".join(self.contents) or "nothing kept"
        return f"Pack({self.title!r}: {kept})"

    @property
    def contents(self) -> tuple[str, ...]:
        """What is in the pack, in order: keys of exhibits, and ``"words"`` for paragraphs."""
        return tuple("words" if isinstance(part, str) else part.key for part in self._parts)

    @property
    def failures(self) -> tuple[FailedPart, ...]:
        """The sections that could not be made."""
        return tuple(part for part in self._parts if isinstance(part, FailedPart))

    @property
    def parts(self) -> tuple[KeptPart | FailedPart | str, ...]:
        """The kept exhibits, the analyst's paragraphs and the sections that failed, in order."""
        return tuple(self._parts)

    @property
    def captions(self) -> dict[str, str]:
        """Captions that the analyst replaced, by key."""
        return dict(self._captions)

    @property
    def exhibits(self) -> tuple[Kept, ...]:
        """The kept exhibits with their settings, in order."""
        return tuple(part.kept for part in self._parts if isinstance(part, KeptPart))

    def keep(
        self, exhibit: Exhibit | Kept | str, *, labels: Iterable[Label] = (), study: Study | None = None
    ) -> Self:
        """Add an exhibit at the end.

        Parameters
        ----------
        exhibit : Exhibit, Kept or str
            An exhibit, or the key of one to build.
        labels : iterable of Label, optional
            Labels of this section beside those of the memo.
        study : Study, optional
            The study the exhibit comes from, if other settings were used than the pack's.

        Raises
        ------
        SettingError
            For a key that is not known.
        InputError
            If the study is on other data than the pack's.
        """
        origin = study or self.study
        if origin.panel.fingerprint != self.study.panel.fingerprint:
            raise InputError(
                "The exhibit comes from other data than the pack",
                allowed=f"a study with fingerprint {self.study.panel.fingerprint[:12]}",
                remedy="make a second pack",
            )
        made = build(exhibit, origin) if isinstance(exhibit, str) else exhibit
        self._parts.append(KeptPart(_kept(made, origin), _labels(labels)))
        return self

    def fail(
        self, key: str, reason: str, *, labels: Iterable[Label] = (), study: Study | None = None
    ) -> Self:
        """Say where a section would stand that it could not be made, and why."""
        settings = (study or self.study).settings
        self._parts.append(FailedPart(key, reason, settings, _labels(labels)))
        return self

    def say(self, text: str) -> Self:
        """Add a paragraph; ``{key}`` stands for the number of the figure or table of that key."""
        self._parts.append(text)
        return self

    def caption(self, key: str, text: str) -> Self:
        """Replace the caption of a figure or table; references as in :meth:`say`.

        Raises
        ------
        SettingError
            If no figure or table in the pack has this key.
        """
        known = self._keys()
        if key not in known:
            raise SettingError(
                f"No figure or table in the pack is called '{key}'", remedy=nearest(key, known)
            )
        self._captions[key] = text
        return self

    def move(self, position: int, to: int) -> Self:
        """Move a part from one position to another, counted from 0.

        Raises
        ------
        SettingError
            If there is no such position.
        """
        self._check(position)
        self._check(to)
        self._parts.insert(to, self._parts.pop(position))
        return self

    def drop(self, position: int) -> Self:
        """Take a part out of the pack; what panels kept stays in ``study.kept``.

        Raises
        ------
        SettingError
            If there is no such position.
        """
        self._check(position)
        del self._parts[position]
        return self

    def lay_out(self) -> Memo:
        """Number everything and add what no memo may leave out.

        Raises
        ------
        InputError
            If nothing was kept.
        SettingError
            If a text refers to a figure or table that is not there.
        """
        if not self.exhibits:
            raise InputError("Nothing was kept for the memo", remedy="keep at least one exhibit")
        items = [part for part in self._parts if isinstance(part, KeptPart)]
        references = cite(key for item in items for key in item.exhibit.sources)
        figures, tables, anchors = self._numbered(items)
        body: list[Section | Remark] = []
        done = 0
        for part in self._parts:
            if isinstance(part, str):
                body.append(Remark(runs(part, anchors)))
            elif isinstance(part, FailedPart):
                body.append(
                    Remark((plain(f"Not delivered: the section '{part.key}'. {part.reason}"),), failed=True)
                )
            else:
                body.append(self._section(done, part, figures[done], tables[done], references))
                done += 1
        return Memo(
            title=plain(self.title),
            author=plain(self.author),
            dated=plain(self.dated),
            span=plain(items[0].exhibit.sample),
            as_of=self.study.panel.dates[-1].date(),
            labels=self.labels,
            fees=_fees(self.study),
            body=tuple(body),
            references=tuple(references),
            cautions=tuple(plain(text) for text in cautions_for(item.exhibit for item in items)),
            provenance=provenance_page(self.study, self.inputs),
        )

    def _numbered(
        self, items: Sequence[KeptPart]
    ) -> tuple[list[tuple[NumberedFigure, ...]], list[tuple[NumberedTable, ...]], dict[str, Link]]:
        figures = _count([item.exhibit.figures for item in items])
        tables = _count([item.exhibit.tables for item in items])
        anchors: dict[str, Link] = {}
        for kind, groups in (("Figure", figures), ("Table", tables)):
            for number, spec in (pair for group in groups for pair in group):
                # Where an exhibit is kept twice, its first figure is the one a text refers to.
                anchors.setdefault(spec.key, Link(f"{kind} {number}", f"{kind.lower()}-{number}"))
        return (
            [tuple(NumberedFigure(n, s, self._caption(s, anchors)) for n, s in group) for group in figures],
            [tuple(NumberedTable(n, s, self._caption(s, anchors)) for n, s in group) for group in tables],
            anchors,
        )

    def _caption(self, spec: Any, anchors: dict[str, Link]) -> Runs:
        if spec.key in self._captions:
            return runs(self._captions[spec.key], anchors)
        return (plain(spec.title),)

    def _section(
        self,
        position: int,
        item: KeptPart,
        figures: tuple[NumberedFigure, ...],
        tables: tuple[NumberedTable, ...],
        references: list[str],
    ) -> Section:
        exhibit = item.exhibit
        cited = sorted(references.index(reference(key)) + 1 for key in set(exhibit.sources))
        return Section(
            number=position + 1,
            heading=plain(exhibit.title),
            sample=plain(exhibit.sample),
            finding=plain(exhibit.finding.text),
            where=_where(figures, tables),
            figures=figures,
            tables=tables,
            notes=tuple(plain(note) for note in exhibit.notes),
            labels=tuple(label for label in item.labels if label not in self.labels),
            cautions=tuple(plain(caution) for caution in exhibit.cautions),
            citations=tuple(cited),
            changes=_changes(item.kept.settings, self.study.settings),
        )

    def _keys(self) -> list[str]:
        return [spec.key for kept in self.exhibits for spec in kept.exhibit.figures] + [
            spec.key for kept in self.exhibits for spec in kept.exhibit.tables
        ]

    def _check(self, position: int) -> None:
        if not 0 <= position < len(self._parts):
            raise SettingError(
                f"The pack has no part {position}",
                allowed=f"0 to {len(self._parts) - 1}" if self._parts else "nothing is kept",
            )


def _count(groups: Sequence[Sequence[S]]) -> list[list[tuple[int, S]]]:
    """Number through all groups from 1."""
    numbers = itertools.count(1)
    return [[(next(numbers), spec) for spec in group] for group in groups]


def _kept(item: Any, study: Study) -> Kept:
    if isinstance(item, Kept):
        return item
    if isinstance(item, Exhibit):
        return Kept(item, study.settings)
    raise InputError(
        f"A {type(item).__name__} was kept",
        allowed="an Exhibit",
        remedy="keep what a panel or an exhibit builder gives",
    )


def _labels(labels: Iterable[Label]) -> tuple[Label, ...]:
    chosen = tuple(dict.fromkeys(Label(label) for label in labels))
    if Label.GROSS in chosen and Label.NET in chosen:
        raise SettingError(
            "The same figures are labelled both gross and net", remedy="label sections one by one in keep()"
        )
    return chosen


def _fees(study: Study) -> str:
    stated = {label.fees for label in study.panel.labels.values()} & {"gross", "net"}
    if not stated:
        return "whether returns are before or after fees was not stated"
    if len(stated) == 2:
        return "returns partly gross and partly net of fees"
    return f"returns {stated.pop()} of fees"


def _where(figures: tuple[NumberedFigure, ...], tables: tuple[NumberedTable, ...]) -> Runs:
    links = [Link(item.name, item.anchor) for item in figures] + [
        Link(item.name, item.anchor) for item in tables
    ]
    found: list[str | Link] = []
    for position, link in enumerate(links):
        found += [", " if position else "", link]
    return tuple(part for part in found if part)


def _changes(kept: Settings, common: Settings) -> tuple[str, ...]:
    """Settings of a section that differ from the memo's, in words."""
    found = []
    for name, _ in Settings.fields():
        if kept.get(name) != common.get(name):
            found.append(plain(f"{Settings.note(name).label}: {setting_text(kept.get(name))}"))
    return tuple(found)
