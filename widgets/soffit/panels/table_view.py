"""Tables on screen: sorted by their numbers, shown in the one format, copied as text."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from html import escape
from pathlib import Path
from typing import Any

import anywidget
import ipywidgets
import numpy as np
import numpy.typing as npt
import pandas as pd
from itables.widget import ITable
from traitlets import Unicode

from soffit.panels.styles import STATUS_ROLES, glyph, status_marker
from soffit.present.freeing import free
from soffit.present.plain import cells
from soffit.present.spec import NumberForm, TableSpec
from soffit.present.theme import look

__all__ = ["CopyText", "TableView", "sort_ranks"]

_STATIC = Path(__file__).parent / "static"

# Rows up to which a table is shown at once, without pages and search.
_AT_ONCE = 15
_PAGE = 15
# Characters from which a text may be broken into lines.
_LONG = 40


class CopyText(anywidget.AnyWidget):
    """A button that copies a text; also carries the style sheet of tables and desk."""

    _esm = _STATIC / "copy_text.js"
    _css = _STATIC / "desk.css"

    text = Unicode().tag(sync=True)
    label = Unicode("Copy as text").tag(sync=True)
    help = Unicode("Copy the table, tab-separated, for a spreadsheet or a message").tag(sync=True)


def sort_ranks(values: Sequence[Any]) -> npt.NDArray[np.int64]:
    """Rank values for sorting: numbers and dates by size, statuses from inside to outside, words by letter.

    Parameters
    ----------
    values : sequence
        A column of a table; may mix numbers with words.

    Returns
    -------
    ndarray, shape (n,)
        Equal values have equal ranks from 1. What does not exist has rank 0.
    """
    statuses = list(STATUS_ROLES)
    only_statuses = all(isinstance(value, str) and value in statuses for value in values)

    def place(value: Any) -> tuple[int, Any] | None:
        if isinstance(value, str):
            return (1, statuses.index(value)) if only_statuses else (2, value.casefold())
        if value is None or value is pd.NaT or value != value:
            return None
        if isinstance(value, bool | np.bool_ | int | float | np.number):
            return 0, float(value)
        return 0, pd.Timestamp(value).value

    places = [place(value) for value in values]
    order = {found: rank for rank, found in enumerate(sorted({p for p in places if p is not None}), start=1)}
    return np.array([0 if p is None else order[p] for p in places], dtype=np.int64)


class TableView:
    """The tables of an exhibit, one of them in view.

    Parameters
    ----------
    on_select : callable
        Called with the name of the asset whose row is clicked.
    guard : callable
        Wraps callbacks so that what they raise is shown.

    Attributes
    ----------
    widget : ipywidgets.VBox
        To be put in a layout.
    """

    def __init__(self, on_select: Callable[[str], None], guard: Callable[..., Any]) -> None:
        self._select = on_select
        self._specs: tuple[TableSpec, ...] = ()
        self._assets: frozenset[str] = frozenset()
        self._selected = ""
        self._shown: tuple[TableSpec, list[list[str]]] | None = None
        self._writing = False
        self._choice = ipywidgets.ToggleButtons(options=[])
        self._choice.observe(guard(self._on_choice), "index")
        self._title = ipywidgets.HTML()
        self.copy = CopyText()
        head = ipywidgets.Box([self._title, self._choice, self.copy])
        head.add_class("soffit-table-head")
        self._guard = guard
        self._plain = ipywidgets.HTML()
        self.table: ITable | None = None
        self._scroll = ipywidgets.Box([])
        self._scroll.add_class("soffit-table-scroll")
        self._footnote = ipywidgets.HTML()
        self._footnote.add_class("soffit-footnote")
        self.widget = ipywidgets.VBox([head, self._scroll, self._footnote])
        self.widget.add_class("soffit-table")

    def show(self, specs: tuple[TableSpec, ...], assets: Sequence[str]) -> None:
        """Show other tables; rows named like one of the assets select it."""
        key = self.in_view.key if self.in_view else ""
        self._specs, self._assets = specs, frozenset(assets)
        titles = tuple(spec.title for spec in specs)
        if tuple(self._choice.options) != titles:
            self._writing = True
            try:
                self._choice.options = titles
                keys = [spec.key for spec in specs]
                self._choice.index = (keys.index(key) if key in keys else 0) if specs else None
            finally:
                self._writing = False
        self._choice.layout.display = "flex" if len(specs) > 1 else "none"
        self.widget.layout.display = None if specs else "none"
        self._draw()

    @property
    def in_view(self) -> TableSpec | None:
        """The table in view."""
        return self._specs[self._choice.index or 0] if self._specs else None

    def select(self, name: str) -> None:
        """Mark the row of an asset; an empty or unknown name marks none."""
        self._selected = name
        if self.table is None or self._shown is None:
            return
        names = [str(one) for one in self._shown[0].frame.index]
        wanted = [names.index(name)] if name in names and name in self._assets else []
        if list(self.table.selected_rows) != wanted:
            self._writing = True
            try:
                self.table.selected_rows = wanted
            finally:
                self._writing = False

    def close(self) -> None:
        """Free the widgets."""
        free([self.widget, self._plain, self.table])

    def _on_choice(self, _: Any) -> None:
        if not self._writing:
            self._draw()

    def _draw(self) -> None:
        spec = self.in_view
        if spec is None:
            return
        written = cells(spec)
        if self._shown is not None and self._shown[0].key == spec.key and self._shown[1] == written:
            self.select(self._selected)
            return
        self._shown = spec, written
        self.copy.text = "\n".join("\t".join(row) for row in written)
        title = (
            "" if len(self._specs) > 1 else f'<span class="soffit-table-title">{escape(spec.title)}</span>'
        )
        self._title.value, self._title.layout.display = title, None if title else "none"
        self._footnote.value = escape(spec.footnote)
        self._footnote.layout.display = None if spec.footnote else "none"
        if spec.row_forms:  # unlike quantities, which no order compares
            self._plain.value = _plain_html(spec, written)
            self._put(self._plain)
            return
        frame, options = _sortable(spec, written)
        choosable = any(str(name) in self._assets for name in spec.frame.index)
        self._writing = True
        try:
            options["select"] = "single" if choosable else False
            if self.table is None:
                self.table = ITable(frame, **options)
                self.table.observe(self._guard(self._on_row), "selected_rows")
            else:
                self.table.update(frame, selected_rows=[], **options)
        finally:
            self._writing = False
        (self._scroll.add_class if choosable else self._scroll.remove_class)("soffit-choosable")
        self._put(self.table)
        self.select(self._selected)

    def _put(self, widget: Any) -> None:
        if tuple(self._scroll.children) != (widget,):
            self._scroll.children = (widget,)

    def _on_row(self, change: Any) -> None:
        if self._writing or self._shown is None or not change["new"]:
            return
        name = str(self._shown[0].frame.index[change["new"][0]])
        if name in self._assets:
            self._select(name)


def _words(spec: TableSpec) -> list[bool]:
    """Whether each column, the names first, holds words and so is set to the left."""
    return [True, *(column.form is NumberForm.TEXT for column in spec.columns)]


def _html(text: str) -> str:
    """A cell as HTML; a status gets its shape."""
    if text not in STATUS_ROLES:
        return escape(text)
    role = STATUS_ROLES[text]
    svg = glyph(role, status_marker(text), filled=look(role).filled and text != "undefined")
    return f'<span class="soffit-status">{svg}{text}</span>'


def _sortable(spec: TableSpec, written: list[list[str]]) -> tuple[pd.DataFrame, dict[str, Any]]:
    """A frame of HTML cells, each column followed by a hidden one of its ranks, and how it is to be shown."""
    head, *body = written
    raw = [list(spec.frame.index), *(spec.frame[column.key].tolist() for column in spec.columns)]
    columns: list[Any] = []
    rules: list[dict[str, Any]] = []
    for place, (values, words) in enumerate(zip(raw, _words(spec), strict=True)):
        texts = [row[place] for row in body]
        columns += [[_html(text) for text in texts], sort_ranks(values)]
        long = words and max(map(len, texts), default=0) > _LONG
        classes = [
            "soffit-first" if place == 0 else "",
            "soffit-words" if words else "",
            "soffit-long" if long else "",
        ]
        name = " ".join(part for part in classes if part)
        rules.append({"targets": [2 * place], "orderData": [2 * place + 1], "className": name})
    hidden = list(range(1, len(columns), 2))
    rules.append({"targets": hidden, "visible": False, "searchable": False})
    frame = pd.DataFrame(dict(enumerate(columns)))
    headings = [name for place, text in enumerate(head) for name in (escape(text), f"rank {place}")]
    frame.columns = pd.Index(headings)
    small = len(body) <= _AT_ONCE
    layout: dict[str, Any] = dict.fromkeys(("topStart", "topEnd", "bottomStart", "bottomEnd"))
    if not small:
        layout |= {"topStart": "search", "bottomStart": "info", "bottomEnd": "paging"}
    return frame, {
        "columnDefs": rules,
        "layout": layout,
        "paging": not small,
        "pageLength": _PAGE,
        "maxBytes": 0,
        "maxColumns": 0,
        "allow_html": True,  # every cell and heading is escaped above
        "showIndex": False,
        "autoWidth": False,
        "classes": "display compact",
        "style": "table-layout:auto;width:auto;margin:0",
        "text_in_header_can_be_selected": False,
    }


def _plain_html(spec: TableSpec, written: list[list[str]]) -> str:
    sides = [' class="soffit-words"' if words else "" for words in _words(spec)]
    head, *body = written
    top = "".join(
        f'<th scope="col"{side}>{escape(text)}</th>' for text, side in zip(head, sides, strict=True)
    )
    rows = []
    for first, *rest in body:
        row = "".join(f"<td{side}>{_html(text)}</td>" for text, side in zip(rest, sides[1:], strict=True))
        rows.append(f'<tr><th scope="row" class="soffit-words">{escape(first)}</th>{row}</tr>')
    return f'<table class="soffit-plain"><thead><tr>{top}</tr></thead><tbody>{"".join(rows)}</tbody></table>'
