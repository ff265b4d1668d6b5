"""One control for each setting, made from what the setting says of itself."""

from __future__ import annotations

import types
from collections.abc import Callable
from datetime import date
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Any, Union, get_args, get_origin

import anywidget
import ipywidgets
from traitlets import Bool, Float, Int, Unicode

from soffit.present.freeing import free
from soffit.settings import FieldNote, Settings

if TYPE_CHECKING:
    from soffit.panels.session import Session

__all__ = ["Control", "NumberSlider"]

_STATIC = Path(__file__).parent / "static"


class NumberSlider(anywidget.AnyWidget):
    """A slider with a typed number beside it.

    The value is sent while the slider is dragged, at most once a frame, with `dragging` true; the last message
    of a drag has it false. A typed number may lie beyond the slider's range.
    """

    _esm = _STATIC / "number_slider.js"

    value = Float(None, allow_none=True).tag(sync=True)
    dragging = Bool(False).tag(sync=True)
    label = Unicode().tag(sync=True)
    help = Unicode().tag(sync=True)
    unit = Unicode().tag(sync=True)
    low = Float(0.0).tag(sync=True)
    high = Float(1.0, help="The slider is left out where this is not above `low`.").tag(sync=True)
    step = Float(0.01).tag(sync=True)
    decimals = Int(2).tag(sync=True)
    optional = Bool(False, help="Whether an empty entry means no value.").tag(sync=True)
    disabled = Bool(False).tag(sync=True)


class Control:
    """The control of one setting in one session.

    Parameters
    ----------
    session : Session
        Where changes are proposed.
    name : str
        Dotted name of the setting.

    Attributes
    ----------
    widget : ipywidgets.DOMWidget
        Holds the value.
    view : ipywidgets.DOMWidget
        To be put in a layout, in any number of panels: the widget with its label.
    """

    def __init__(self, session: Session, name: str) -> None:
        self.session, self.name = session, name
        self._writing = False
        kind, self.optional = _type_of(name)
        note = Settings.note(name)
        self.widget, self._read, self._shown = _make(kind, note, session, name, optional=self.optional)
        self.view = self.widget
        if isinstance(self.widget, ipywidgets.TagsInput):
            self.view = ipywidgets.HBox([ipywidgets.Label(note.label, tooltip=note.help), self.widget])
        self.write(session.settings.get(name))
        watched = ["value", "dragging"] if isinstance(self.widget, NumberSlider) else ["value"]
        self.widget.observe(session.guard(self._moved), watched)

    def _moved(self, _: Any) -> None:
        if self._writing:
            return
        dragging = isinstance(self.widget, NumberSlider) and self.widget.dragging
        try:
            value = self._read(self.widget.value)
        except ValueError as error:
            self.session.refuse(str(error))
            return
        if dragging and value == self.session.settings.get(self.name):
            return
        self.session.propose({self.name: value}, settle=not dragging)

    def write(self, value: Any) -> None:
        """Show a value; proposes nothing."""
        shown = self._shown(value)
        if self.widget.value != shown:
            self._writing = True
            try:
                self.widget.value = shown
            finally:
                self._writing = False

    def close(self) -> None:
        """Free the widget."""
        free([self.view])


def _type_of(name: str) -> tuple[Any, bool]:
    """Type of a setting, and whether it may be empty."""
    annotation = dict(Settings.fields())[name].annotation
    if get_origin(annotation) in (types.UnionType, Union):
        parts = [part for part in get_args(annotation) if part is not type(None)]
        return parts[0], len(parts) < len(get_args(annotation))
    return annotation, False


_Made = tuple[ipywidgets.DOMWidget, Callable[[Any], Any], Callable[[Any], Any]]


def _make(kind: Any, note: FieldNote, session: Session, name: str, *, optional: bool) -> _Made:
    """Widget, how its value is read as a setting, and how a setting is shown in it."""
    plain = {"description": note.label, "tooltip": note.help, "style": {"description_width": "initial"}}
    if kind is bool:
        return ipywidgets.Checkbox(indent=False, **plain), bool, bool
    if kind in (int, float):
        return _number(kind, note, optional=optional)
    if isinstance(kind, type) and issubclass(kind, StrEnum):
        options = [str(option) for option in kind]
        menu = ipywidgets.Dropdown(options=options, layout={"width": "auto"}, **plain)
        return menu, kind, str
    if kind is date:
        text = ipywidgets.Text(
            placeholder="YYYY-MM", continuous_update=False, layout={"width": "150px"}, **plain
        )
        return text, lambda typed: _month(typed, note.label), _written
    if get_origin(kind) is tuple:
        frame = session.study.panel.factors if name == "factors" else session.study.panel.assets
        tags = ipywidgets.TagsInput(
            allowed_tags=[str(column) for column in frame.columns],
            allow_duplicates=False,
            placeholder=note.label,
            tooltip=note.help,
        )
        return tags, lambda value: tuple(value) or None, lambda value: list(value or ())
    raise TypeError(f"There is no control for the setting '{name}'")


def _number(kind: type, note: FieldNote, *, optional: bool) -> _Made:
    step = note.step or 1.0
    decimals = 0 if kind is int else max(0, len(f"{step:.10f}".rstrip("0").partition(".")[2]))
    slider = NumberSlider(
        label=note.label,
        help=note.help,
        unit=note.unit,
        low=note.low or 0.0,
        high=note.high or 0.0,
        step=step,
        decimals=decimals,
        optional=optional,
    )

    def read(value: float | None) -> float | int | None:
        # A fraction typed for a count is left for the settings to refuse.
        return int(value) if kind is int and value is not None and value == int(value) else value

    return slider, read, lambda value: None if value is None else float(value)


def _written(value: date | None) -> str:
    if value is None:
        return ""
    return f"{value:%Y-%m}" if value.day == 1 else value.isoformat()


def _month(typed: str, label: str) -> date | None:
    text = typed.strip()
    if not text:
        return None
    try:
        return date.fromisoformat(text if len(text) > 7 else f"{text}-01")
    except ValueError as error:
        raise ValueError(
            f"'{typed}' is not a month for '{label}'. Allowed: a year and a month, such as 1990-01, "
            "or nothing for the whole sample."
        ) from error
