"""A progress bar for readings that take longer than a second."""

from __future__ import annotations

from typing import Any

__all__ = ["progress_bar"]

_DELAY = 1.0


def progress_bar(total: int, shown: bool) -> Any:
    """A bar over columns that shows itself after a second, in a terminal or a notebook.

    Parameters
    ----------
    total : int
        Number of columns to come.
    shown : bool
        Whether it may show at all.

    Returns
    -------
    tqdm
        A context manager with ``update()``.
    """
    from tqdm.auto import tqdm

    return tqdm(total=total, desc="Reading", unit="series", delay=_DELAY, leave=False, disable=not shown)
