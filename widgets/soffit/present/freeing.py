"""Freeing widgets with all that belongs to them."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import ipywidgets

__all__ = ["free"]


def free(widgets: Iterable[Any], *, sparing: Iterable[Any] = ()) -> None:
    """Close widgets, what they contain, and their layouts and styles, which would otherwise stay in the browser.

    Parameters
    ----------
    widgets : iterable of ipywidgets.Widget or None
        What to close.
    sparing : iterable of ipywidgets.Widget
        What to leave alone, though it may be contained.
    """
    spared = {id(widget) for widget in sparing}
    for widget in widgets:
        if widget is None or id(widget) in spared or widget.comm is None:
            continue
        free(getattr(widget, "children", ()), sparing=sparing)
        widget.unobserve_all()
        for part in (getattr(widget, "layout", None), getattr(widget, "style", None)):
            if isinstance(part, ipywidgets.Widget):
                part.close()
        widget.close()
