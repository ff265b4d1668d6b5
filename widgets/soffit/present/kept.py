"""What was kept for the memo: an exhibit and the settings it was made with."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from soffit.present.spec import Exhibit
from soffit.settings import Settings

if TYPE_CHECKING:
    from soffit.study import Study

__all__ = ["Kept", "keep"]


@dataclass(frozen=True, eq=False)
class Kept:
    """An exhibit with the settings of the study it came from.

    Parameters
    ----------
    exhibit : Exhibit
        What was on screen.
    settings : Settings
        The settings at that moment; an audit recomputes the exhibit from them.
    """

    exhibit: Exhibit
    settings: Settings


def keep(study: Study, exhibit: Exhibit) -> Kept:
    """Keep an exhibit for the memo of a study and of all studies changed from it.

    Parameters
    ----------
    study : Study
        The study the exhibit was built from.
    exhibit : Exhibit
        What to keep.

    Returns
    -------
    Kept
        What now stands last in ``study.kept``.
    """
    kept = Kept(exhibit, study.settings)
    study.kept.append(kept)
    return kept
