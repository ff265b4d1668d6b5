"""Work told in steps: a generator that says how far it is, so that whoever runs it can show, pause or stop it."""

from __future__ import annotations

from collections.abc import Generator
from dataclasses import dataclass
from typing import TypeVar

__all__ = ["Progress", "Steps", "drained"]

R = TypeVar("R")


@dataclass(frozen=True)
class Progress:
    """How far a piece of work is.

    Parameters
    ----------
    done, total : int
        Parts done and parts in all; a total of zero means that it is not known.
    message : str
        What is being done.
    """

    done: int
    total: int
    message: str


Steps = Generator[Progress, None, R]
"""Yields progress at least every 50 ms or so, and returns its result. Closing it stops the work."""


def drained(steps: Steps[R]) -> R:
    """Run work in steps to its end and return its result."""
    while True:
        try:
            next(steps)
        except StopIteration as end:
            result: R = end.value
            return result
