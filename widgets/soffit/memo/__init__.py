"""The memo: what was kept, numbered, captioned, sourced, written in a desk's formats, and checked again."""

from __future__ import annotations

from soffit.memo.audit import Audit, Difference, verify
from soffit.memo.inputs import Inputs
from soffit.memo.layout import Label, Memo
from soffit.memo.pack import Pack
from soffit.memo.study_file import ReportPlan, StudyFile
from soffit.memo.writing import Format, write

__all__ = [
    "Audit",
    "Difference",
    "Format",
    "Inputs",
    "Label",
    "Memo",
    "Pack",
    "ReportPlan",
    "StudyFile",
    "verify",
    "write",
]
