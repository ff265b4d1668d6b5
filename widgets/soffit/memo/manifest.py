"""The manifest: every number of a pack at full precision, and the fingerprints of its data and files."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from soffit.errors import InputError
from soffit.memo.exhibit_json import exhibit_to_json
from soffit.memo.inputs import file_fingerprint
from soffit.memo.layout import Memo
from soffit.memo.pack import Pack
from soffit.memo.provenance import versions
from soffit.memo.study_file import ReportPlan, StudyFile

__all__ = ["MANIFEST", "STUDY_FILE", "can_run_again", "make_manifest", "read_manifest", "study_toml"]

MANIFEST, STUDY_FILE = "manifest.json", "study.toml"
_VERSION = 1


def make_manifest(
    pack: Pack, memo: Memo, files: Mapping[str, bytes], formats: Sequence[str], folder: Path
) -> bytes:
    """Write what an audit needs to know.

    Parameters
    ----------
    pack : Pack
        What was kept.
    memo : Memo
        The same, laid out.
    files : mapping of str to bytes
        Every file of the pack by its name in the folder.
    formats : sequence of str
        What was written.
    folder : Path
        Where the pack stands; paths of inputs count from it.

    Returns
    -------
    bytes
        JSON; the same bytes for the same pack.
    """
    inputs = pack.inputs.seen_from(folder) if pack.inputs else None
    settings = pack.study.settings
    parts = [
        {
            "settings": kept.settings.model_dump(mode="json"),
            "figures": [figure.name for figure in section.figures],
            "tables": [table.name for table in section.tables],
            "exhibit": exhibit_to_json(kept.exhibit),
        }
        for kept, section in zip(pack.exhibits, memo.sections, strict=True)
    ]
    values = {
        "manifest": _VERSION,
        "title": pack.title,
        "versions": versions(),
        "data": {
            "fingerprint": pack.study.panel.fingerprint,
            "inputs": inputs.to_dict() if inputs else None,
            # A file may be gone by now; the memo is written all the same, and the audit says so.
            "files": {
                name: file_fingerprint(path) if path.is_file() else None
                for name, path in (inputs.files() if inputs else {}).items()
            },
        },
        "seed": settings.seed,
        "trials": settings.trials,
        "settings": settings.model_dump(mode="json"),
        "report": ReportPlan.of(pack, formats).to_dict(),
        "exhibits": parts,
        "files": {name: hashlib.sha256(data).hexdigest() for name, data in files.items()},
    }
    return (json.dumps(values, indent=1, ensure_ascii=True, allow_nan=False, default=str) + "\n").encode(
        "ascii"
    )


def read_manifest(directory: Path) -> dict[str, Any]:
    """Read the manifest of a pack.

    Raises
    ------
    InputError
        If there is none, or it is not one.
    """
    path = directory / MANIFEST
    try:
        values = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise InputError(f"'{directory}' holds no pack: {MANIFEST} cannot be read ({error})") from error
    needed = {"manifest", "data", "settings", "report", "exhibits", "files"}
    if not isinstance(values, dict) or not needed <= values.keys() or values["manifest"] != _VERSION:
        raise InputError(f"'{path}' is not a manifest that this version reads", allowed=f"version {_VERSION}")
    made: dict[str, Any] = values
    return made


def can_run_again(pack: Pack) -> bool:
    """Whether a study file can make the pack again: files to read, and only exhibits that can be built."""
    from soffit.present.exhibits import EXHIBITS

    return pack.inputs is not None and all(kept.exhibit.key in EXHIBITS for kept in pack.exhibits)


def study_toml(pack: Pack, formats: Sequence[str], folder: Path) -> bytes:
    """Study file that makes the pack again, for its place in the pack's folder."""
    return StudyFile.of(pack, formats).text(folder).encode("utf-8")
