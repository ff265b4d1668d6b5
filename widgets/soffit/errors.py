"""The family of errors and warnings: each says what came, what is allowed and what to do."""

from __future__ import annotations

from collections.abc import Iterable
from difflib import get_close_matches

__all__ = [
    "EstimationError",
    "InputError",
    "NotApplicableError",
    "SettingError",
    "SoffitError",
    "SoffitWarning",
    "nearest",
]


class SoffitError(Exception):
    """Base of every error that soffit raises on purpose.

    Parameters
    ----------
    what : str
        What came, with the name, row or value that is at fault.
    allowed : str, optional
        What would have been allowed.
    remedy : str, optional
        What the analyst can do about it.
    """

    def __init__(self, what: str, *, allowed: str = "", remedy: str = "") -> None:
        self.what = what
        self.allowed = allowed
        self.remedy = remedy
        parts = [what, f"Allowed: {allowed}" if allowed else "", f"To mend it: {remedy}" if remedy else ""]
        super().__init__(
            " ".join(part if part.endswith((".", "?", "!")) else part + "." for part in parts if part)
        )


class InputError(SoffitError, ValueError):
    """Data that cannot be used as they are."""


class SettingError(SoffitError, ValueError):
    """A setting with an unknown name or a value out of its range."""


class EstimationError(SoffitError, ValueError):
    """An estimate that the data at hand do not identify."""


class NotApplicableError(SoffitError, LookupError):
    """A number was asked of a result that does not exist for this sample."""


class SoffitWarning(UserWarning):
    """Something the analyst should know before relying on a number."""


def nearest(name: str, allowed: Iterable[str]) -> str:
    """Say which of the allowed names come closest to a wrong one.

    Parameters
    ----------
    name : str
        The name that was not recognised.
    allowed : iterable of str
        Every name that would have been.

    Returns
    -------
    str
        A phrase for an error message, such as ``"did you mean 'MktRF'?"``.
    """
    known = list(allowed)
    folded = {option.casefold(): option for option in known}
    close = [folded[hit] for hit in get_close_matches(name.casefold(), list(folded), n=3, cutoff=0.5)]
    if close:
        return "did you mean " + " or ".join(f"'{option}'" for option in close) + "?"
    shown = ", ".join(f"'{option}'" for option in known[:12])
    return f"the known names are {shown}" + (f" and {len(known) - 12} more" if len(known) > 12 else "")
