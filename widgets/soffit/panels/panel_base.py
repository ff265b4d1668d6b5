"""What every panel has: the sample, controls, a figure, the finding, a way into the memo, and a problem strip."""

from __future__ import annotations

import asyncio
from abc import ABC, abstractmethod
from collections.abc import Sequence
from html import escape
from pathlib import Path
from typing import Any, ClassVar
from weakref import WeakSet

import anywidget
import ipywidgets
from IPython import get_ipython
from IPython.display import HTML, DisplayHandle, display
from traitlets import Dict, Unicode

from soffit.intake.record import Severity
from soffit.panels.session import Session
from soffit.panels.still import LIVE, still_html
from soffit.panels.styles import glyph, stylesheet
from soffit.present.draw_bqplot import DrawnFigure
from soffit.present.freeing import free
from soffit.present.spec import Exhibit, FigureSpec, Points, Role, Segments
from soffit.present.theme import look
from soffit.study import Study

__all__ = ["FindingLine", "Panel"]

# Seconds of rest before the still picture is drawn again.
_REST = 1.5


class FindingLine(anywidget.AnyWidget):
    """The finding, copyable; also carries the style sheet and the figures' text alternatives."""

    _esm = Path(__file__).parent / "static" / "finding_line.js"
    _css = stylesheet()

    text = Unicode().tag(sync=True)
    alts = Dict(help="Text alternative of each figure, by its CSS class.").tag(sync=True)


class Panel(ABC):
    """Base of the panels.

    A subclass names its controls and computes its exhibit; all the rest is here. Display it as the last line of a
    cell, or put `widget` into a layout.

    Parameters
    ----------
    study : Study
        The study; panels on the same study share settings and selection.

    Attributes
    ----------
    session : Session
        The shared state.
    widget : ipywidgets.VBox
        The whole panel.
    computed, drawn : int
        How often results were computed and drawn; for tests.
    """

    controls: ClassVar[tuple[str, ...]] = ()
    moving: ClassVar[frozenset[str]] = frozenset()

    def __init__(self, study: Study) -> None:
        self.session = Session.of(study)
        self.computed = self.drawn = 0
        self._figures: dict[str, DrawnFigure] = {}
        self._specs: tuple[FigureSpec, ...] = ()
        self._pending: asyncio.TimerHandle | None = None
        self._stills: list[DisplayHandle] = []
        self._build()
        first = self.compute(self.session.study)
        self.show(first)
        self.session.follow(self)
        self.session.observe(self._on_problem, "problem")
        self.session.observe(self._on_selected, "selected")
        self._on_problem()
        self._on_selected()

    # What a subclass says

    @abstractmethod
    def exhibit(self) -> Exhibit:
        """What the panel shows now, in full, as a memo takes it."""

    @abstractmethod
    def compute(self, study: Study) -> Any:
        """Compute what :meth:`show` draws."""

    @abstractmethod
    def show(self, computed: Any) -> None:
        """Draw what :meth:`compute` gave."""

    # Parts

    def _build(self) -> None:
        guard = self.session.guard
        self._sample = ipywidgets.HTML()
        self._sample.add_class("soffit-sample")
        self._views = ipywidgets.ToggleButtons(options=[])
        self._views.add_class("soffit-views")
        self._views.observe(guard(self._on_view), "index")
        self._key = ipywidgets.HTML()
        self._place = ipywidgets.VBox([])
        self._finding = FindingLine()
        self._notes = ipywidgets.HTML()
        self._notes.add_class("soffit-notes")
        self._keep = ipywidgets.Button(
            description="Keep for memo", tooltip="Keep this exhibit, as shown, for the memo of this study"
        )
        self._keep.on_click(guard(self._on_keep))
        self._said = ipywidgets.HTML()
        self._said.add_class("soffit-said")
        self._problem = ipywidgets.HTML()
        self._problem.add_class("soffit-problem")
        controls = ipywidgets.Box([self.session.control(name).view for name in self.controls])
        controls.add_class("soffit-controls")
        foot = ipywidgets.Box([self._keep, self._said])
        foot.add_class("soffit-foot")
        self.widget = ipywidgets.VBox(
            [
                self._sample,
                controls,
                *self._between(),
                self._views,
                self._key,
                self._place,
                *self._below(),
                self._finding,
                self._notes,
                foot,
                self._problem,
            ]
        )
        for name in ("soffit-panel", LIVE):
            self.widget.add_class(name)

    def _between(self) -> Sequence[ipywidgets.DOMWidget]:
        """Further widgets between the controls and the figure."""
        return ()

    def _below(self) -> Sequence[ipywidgets.DOMWidget]:
        """Further widgets between the figure and the finding."""
        return ()

    # Figures

    def _show_figures(self, specs: tuple[FigureSpec, ...]) -> None:
        """Draw or update figures; only the one in view has marks in the browser."""
        self._specs = specs
        titles = tuple(spec.title for spec in specs)
        if tuple(self._views.options) != titles:
            self._views.options = titles
            self._views.index = 0
        _set(self._views.layout, "display", "flex" if len(specs) > 1 else "none")
        self._show_view()
        alts = {self.css(spec.key): spec.alt for spec in specs}
        _set(self._finding, "alts", alts)

    def _show_view(self) -> None:
        if not self._specs:
            return
        spec = self._specs[self._views.index or 0]
        figure = self._figures.get(spec.key)
        if figure is None:
            figure = self._figures[spec.key] = DrawnFigure(spec, moving=self.moving)
            figure.widget.add_class(self.css(spec.key))
            figure.widget.layout.height = "400px"
            figure.on_select(self.session.guard(self.session.select))
            self._figure_made(figure)
        elif figure.spec is not spec:
            figure.update(spec)
        figure.ring(self.session.selected)
        _set(self._key, "value", self.key_html(spec))
        if tuple(self._place.children) != (figure.widget,):
            self._place.children = (figure.widget,)

    def _figure_made(self, figure: DrawnFigure) -> None:  # noqa: B027  a subclass may do nothing here
        """A view was opened for the first time."""

    @staticmethod
    def css(key: str) -> str:
        """CSS class of the figure with this key."""
        return f"soffit-fig-{key}"

    def key_html(self, spec: FigureSpec) -> str:
        """Legend of what is not labelled in the figure itself."""
        entries: dict[str, str] = {}
        for mark in spec.marks:
            if isinstance(mark, Points | Segments):  # bars are named by their axis
                roles = sorted(set(mark.roles), key=list(Role).index)
                for role in roles:
                    text = mark.label if len(roles) == 1 else look(role).word or mark.label
                    if text:
                        entries[text] = glyph(role, look(role).marker, filled=look(role).filled)
        if not entries:
            return ""
        parts = "".join(f"<span>{svg}{escape(text)}</span>" for text, svg in entries.items())
        return f'<div class="soffit-key">{parts}</div>'

    def _show_texts(self, sample: str, finding: str, notes: tuple[str, ...] = ()) -> None:
        _set(self._sample, "value", _sample_html(sample, self.session.study))
        _set(self._finding, "text", finding)
        listed = "".join(f"<li>{escape(note)}</li>" for note in notes)
        _set(self._notes, "value", f"<ul>{listed}</ul>" if listed else "")
        _set(self._notes.layout, "display", None if listed else "none")

    # Events

    def _on_view(self, _: Any) -> None:
        self._show_view()
        self._redraw_still()

    def _on_keep(self, _: Any) -> None:
        number = self.session.keep(self.exhibit())
        self._said.value = f"Kept as exhibit {number} of the memo."

    def _on_problem(self, _: Any = None) -> None:
        text = self.session.problem
        self._problem.value = (
            f'<div role="alert"><strong>Not done.</strong> {escape(text)}</div>' if text else ""
        )
        self._problem.layout.display = None if text else "none"

    def _on_selected(self, _: Any = None) -> None:
        for figure in self._figures.values():
            figure.ring(self.session.selected)

    # Life

    def _ipython_display_(self) -> None:
        _displayed(self)
        # Where a live view cannot be shown, the picture says it all: no text in its place.
        live = {**(self.widget._repr_mimebundle_() or {}), "text/plain": ""}
        display(live, raw=True)  # type: ignore[no-untyped-call]
        handle = display(HTML(self._still()), display_id=True)  # type: ignore[no-untyped-call]
        if handle is not None:
            self._stills = [handle]

    def _still(self) -> str:
        return still_html(self._in_view(), self._finding.text)

    def _in_view(self) -> tuple[FigureSpec, ...]:
        """The figure in view, as it is described in full; none where the panel has none."""
        return self._specs[self._views.index or 0 : (self._views.index or 0) + 1]

    def _redraw_still(self) -> None:
        """Draw the still picture again after a rest, so that a saved notebook is up to date."""
        if not self._stills:
            return
        try:
            loop = asyncio.get_running_loop()
        except RuntimeError:
            return
        if self._pending is not None:
            self._pending.cancel()
        self._pending = loop.call_later(_REST, self.session.guard(self._update_stills))

    def _update_stills(self) -> None:
        for handle in self._stills:
            handle.update(HTML(self._still()))  # type: ignore[no-untyped-call]

    def close(self) -> None:
        """Leave the session and free everything in the browser."""
        if self._pending is not None:
            self._pending.cancel()
        self.session.unobserve(self._on_problem, "problem")
        self.session.unobserve(self._on_selected, "selected")
        for figure in self._figures.values():
            figure.close()
        self._figures.clear()
        free([self.widget], sparing=[self.session.control(name).view for name in self.controls])
        self.session.leave(self)


# Panels by the cell that displayed them, so that running a cell again frees what it showed before.
_cells: dict[str, tuple[str, WeakSet[Panel]]] = {}


def _displayed(panel: Panel) -> None:
    shell = get_ipython()
    parent = shell.get_parent() if shell is not None and hasattr(shell, "get_parent") else {}
    cell = str(parent.get("metadata", {}).get("cellId", ""))
    message = str(parent.get("header", {}).get("msg_id", ""))
    if not cell:
        return
    before, earlier = _cells.get(cell, ("", WeakSet()))
    if before != message:
        elsewhere = {id(one) for other, (_, panels) in _cells.items() if other != cell for one in panels}
        for one in list(earlier):
            if one is not panel and id(one) not in elsewhere:
                one.close()
        earlier = WeakSet()
    earlier.add(panel)
    _cells[cell] = (message, earlier)


def _set(target: Any, name: str, value: Any) -> None:
    if getattr(target, name) != value:
        setattr(target, name, value)


def _sample_html(sample: str, study: Study) -> str:
    """The sample in one line; opened, the warnings and repairs of the intake."""
    record = study.record
    entries = [entry for entry in record.entries if entry.severity is not Severity.NOTE]
    more = len(record.entries) - len(entries)
    listed = "".join(
        f"<li>{escape(f'{entry.series}: ' if entry.series else '')}{escape(entry.message)}</li>"
        for entry in entries[:30]
    )
    rest = [f"{len(entries) - 30:,} more such entries"] if len(entries) > 30 else []
    rest += [f"{more:,} notes"] if more else []
    tail = f"<li>{escape(' and '.join(rest))}; all in <code>study.record.table</code></li>" if rest else ""
    tip = escape("What the intake assumed, converted and dropped")
    head = f'<summary title="{tip}">{escape(sample)} · <u>intake record</u></summary>'
    return f"<details>{head}<ul>{listed}{tail}</ul></details>"
