"""Progress of readings that take longer than a second."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

__all__ = ["Tick", "progress_bar", "quiet"]

Tick = Callable[[int], object]
"""Called with the number of lines, rows or series that were just dealt with."""

_DELAY = 1.0


def quiet(count: int) -> None:
    """A tick that shows nothing."""


def progress_bar(what: str, total: int | None, shown: bool) -> Any:
    """A bar that shows itself after a second, in a terminal or a notebook.

    Parameters
    ----------
    what : str
        What is being done.
    total : int, optional
        How much there is of it, when that is known.
    shown : bool
        Whether it may show at all.

    Returns
    -------
    tqdm
        A context manager with ``update(count)``.
    """
    from tqdm.auto import tqdm

    return tqdm(desc=what, total=total, delay=_DELAY, leave=False, disable=not shown)
