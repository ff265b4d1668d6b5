"""The memo: what was kept, numbered, captioned, sourced, written in a desk's formats, and checked again."""

from __future__ import annotations

from soffit.memo.inputs import Inputs
from soffit.memo.layout import Label, Memo
from soffit.memo.pack import Pack
from soffit.memo.writing import Format, write

__all__ = ["Format", "Inputs", "Label", "Memo", "Pack", "write"]
