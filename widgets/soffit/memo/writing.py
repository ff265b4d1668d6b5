"""Write a pack into a folder, in the formats a desk asks for."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from enum import StrEnum
from importlib import import_module
from pathlib import Path

from soffit.errors import InputError, SettingError, nearest
from soffit.memo.layout import Memo
from soffit.memo.manifest import MANIFEST, STUDY_FILE, can_run_again, make_manifest, study_toml
from soffit.memo.pack import Pack

__all__ = ["Format", "render", "write"]


class Format(StrEnum):
    """What a pack can be written as."""

    HTML = "html"
    WORD = "docx"
    PDF = "pdf"
    EXCEL = "xlsx"
    SLIDES = "pptx"
    MARKDOWN = "md"
    LATEX = "tex"
    PNG = "png"
    SVG = "svg"
    PDF_FIGURES = "pdf figures"


def _one(name: str, module: str, function: str) -> Callable[[Memo], Mapping[str, bytes]]:
    def one(memo: Memo) -> Mapping[str, bytes]:
        made = getattr(import_module(module), function)(memo)
        return {name: made.encode("utf-8") if isinstance(made, str) else made}

    return one


def _many(module: str, function: str) -> Callable[[Memo], Mapping[str, bytes]]:
    def several(memo: Memo) -> Mapping[str, bytes]:
        made: Mapping[str, bytes] = getattr(import_module(module), function)(memo)
        return made

    return several


def _markdown(memo: Memo) -> Mapping[str, bytes]:
    from soffit.memo.markdown import markdown, table_files

    return {"memo.md": markdown(memo).encode("utf-8"), **table_files(memo)}


# Writers are imported when they are asked for: Word, Excel and the rest are an extra.
_WRITERS: dict[Format, Callable[[Memo], Mapping[str, bytes]]] = {
    Format.HTML: _one("memo.html", "soffit.memo.html", "html"),
    Format.WORD: _one("memo.docx", "soffit.memo.word", "word"),
    Format.PDF: _one("memo.pdf", "soffit.memo.pdf", "pdf"),
    Format.EXCEL: _one("memo.xlsx", "soffit.memo.excel", "excel"),
    Format.SLIDES: _one("memo.pptx", "soffit.memo.slides", "slides"),
    Format.MARKDOWN: _markdown,
    Format.LATEX: _many("soffit.memo.latex", "table_files"),
    Format.PNG: _many("soffit.memo.images", "png_files"),
    Format.SVG: _many("soffit.memo.images", "svg_files"),
    Format.PDF_FIGURES: _many("soffit.memo.images", "pdf_files"),
}


def render(memo: Memo, formats: Iterable[Format | str]) -> dict[str, bytes]:
    """Make the files of a memo without writing them.

    Parameters
    ----------
    memo : Memo
        As laid out.
    formats : iterable of Format or str
        What to make.

    Returns
    -------
    dict of str to bytes
        Each file by its name in the pack's folder; the same bytes for the same memo.

    Raises
    ------
    SettingError
        For an unknown format.
    InputError
        If a format's library is not installed.
    """
    files: dict[str, bytes] = {}
    for form in dict.fromkeys(_format(name) for name in formats):
        try:
            files.update(_WRITERS[form](memo))
        except ModuleNotFoundError as error:
            raise InputError(
                f"'{form}' needs the package {error.name}", remedy='pip install "soffit[memo]"'
            ) from error
    return files


def write(
    pack: Pack, directory: str | Path, formats: Iterable[Format | str] = (Format.HTML, Format.PNG)
) -> list[Path]:
    """Write a pack.

    Beside the formats stands ``manifest.json`` with every number at full precision, and, where the pack knows its
    files, ``study.toml``, which makes it again.

    Parameters
    ----------
    pack : Pack
        What was kept.
    directory : path
        Folder; made if it is not there. Files of the same names are replaced.
    formats : iterable of Format or str
        What to write.

    Returns
    -------
    list of Path
        The files written, in the order of the formats.

    Raises
    ------
    SettingError
        For an unknown format.
    InputError
        If nothing was kept, the folder cannot be written, or a format's library is not installed.
    """
    chosen = tuple(dict.fromkeys(_format(name) for name in formats))
    memo, folder = pack.lay_out(), Path(directory)
    files = render(memo, chosen)
    if can_run_again(pack):
        files[STUDY_FILE] = study_toml(pack, chosen, folder)
    files[MANIFEST] = make_manifest(pack, memo, files, chosen, folder)
    return [_save(folder / name, data) for name, data in files.items()]


def _format(name: Format | str) -> Format:
    try:
        return Format(name)
    except ValueError as error:
        raise SettingError(f"There is no format '{name}'", remedy=nearest(str(name), list(Format))) from error


def _save(path: Path, data: bytes) -> Path:
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(data)
    except OSError as error:
        raise InputError(f"The file '{path}' cannot be written ({error})") from error
    return path
