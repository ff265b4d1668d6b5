"""Text from outside made safe to set: names come from other people's files."""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from soffit.errors import SettingError, nearest

__all__ = ["Link", "Runs", "flat", "plain", "runs"]

# Embeddings and overrides end with PDF, isolates with PDI (Unicode Standard Annex 9).
_EMBEDDINGS, _ISOLATES = "‪‫‭‮", "⁦⁧⁨"
_POP_EMBEDDING, _POP_ISOLATE = "‬", "⁩"
_REFERENCE = re.compile(r"\{([A-Za-z0-9][\w.-]*)\}")


@dataclass(frozen=True)
class Link:
    """A cross-reference: the words and the anchor they point to."""

    text: str
    anchor: str


Runs = tuple[str | Link, ...]


def plain(text: object) -> str:
    """Text on one line that no format chokes on and that cannot turn its surroundings round.

    Characters that XML forbids become U+FFFD; line breaks become spaces; directional embeddings, overrides and
    isolates that the text opens are closed at its end.
    """
    kept: list[str] = []
    waiting: list[str] = []
    for char in str(text):
        if char.isspace():
            kept.append(" ")
            continue
        if unicodedata.category(char) in {"Cc", "Cs"} or char in "￾￿":
            kept.append("�")
            continue
        if char in _EMBEDDINGS:
            waiting.append(_POP_EMBEDDING)
        elif char in _ISOLATES:
            waiting.append(_POP_ISOLATE)
        elif char in (_POP_EMBEDDING, _POP_ISOLATE):
            if not waiting or waiting[-1] != char:
                continue  # a closing mark without its opening would close one of ours
            waiting.pop()
        kept.append(char)
    return " ".join(("".join(kept) + "".join(reversed(waiting))).split())


def runs(text: str, anchors: Mapping[str, Link]) -> Runs:
    """Split an analyst's text at its references, such as ``{ceiling-p}``.

    Parameters
    ----------
    text : str
        Plain text; a key in braces stands for the number of that figure or table.
    anchors : mapping of str to Link
        What each key is called.

    Raises
    ------
    SettingError
        For a key that is not in the memo, with the nearest that are.
    """
    found: list[str | Link] = []
    start = 0
    for match in _REFERENCE.finditer(text):
        key = match.group(1)
        if key not in anchors:
            raise SettingError(
                f"The text refers to '{{{key}}}', which is not in the memo", remedy=nearest(key, anchors)
            )
        found += [plain_part(text[start : match.start()]), anchors[key]]
        start = match.end()
    found.append(plain_part(text[start:]))
    return tuple(part for part in found if part)


def plain_part(text: str) -> str:
    """:func:`plain`, keeping a space at either end, where another run follows."""
    if not text:
        return ""
    lead, trail = " " * text[0].isspace(), " " * text[-1].isspace()
    bare = plain(text)
    return f"{lead}{bare}{trail}" if bare else " "


def flat(parts: Iterable[str | Link]) -> str:
    """The words of a text without its links."""
    return "".join(part if isinstance(part, str) else part.text for part in parts)
