"""Reports without a browser: a study file or a notebook, its parameters checked, run to files."""

from __future__ import annotations

import json
import os
import tempfile
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import nbformat

from soffit.errors import EstimationError, InputError, SettingError
from soffit.memo.parameters import merged, parameters_source, read_parameters, settings_from_parameters
from soffit.memo.report import RUN_FILE, report_key
from soffit.memo.study_file import StudyFile
from soffit.settings import Settings

__all__ = ["ReportRun", "report_notebook", "run_report"]

NOTEBOOK = "report.ipynb"
CACHE = ".sections"


@dataclass(frozen=True)
class ReportRun:
    """What a run of a report gave.

    Parameters
    ----------
    folder : Path
        Where the files are.
    files : tuple of Path
        What was written.
    failures : mapping of str to str
        Sections that could not be made, with the reasons; the rest was delivered.
    resumed : bool
        Whether the report was there already, made from the same data, settings, parts and versions.
    """

    folder: Path
    files: tuple[Path, ...]
    failures: Mapping[str, str] = field(default_factory=dict)
    resumed: bool = False

    @property
    def ok(self) -> bool:
        """Whether every section was delivered."""
        return not self.failures


def run_report(
    source: str | Path,
    sets: Mapping[str, Any] | None = None,
    out: str | Path = "report",
    *,
    progress: bool = True,
    resume: bool = True,
    cache: str | Path = "",
) -> ReportRun:
    """Run a study file, or a notebook with a parameters cell, and write what it gives.

    Parameters
    ----------
    source : path
        A study file (``.toml``) or a notebook (``.ipynb``).
    sets : mapping, optional
        Parameters to change, by dotted name: ``{"hedge.window": 48}``.
    out : path
        Folder for the files.
    progress : bool
        Whether a bar tells how far it is.
    resume : bool
        Whether what an earlier run finished from the same content is taken from it.
    cache : path, optional
        Folder of finished sections; inside `out` if left out.

    Returns
    -------
    ReportRun
        The files, and the sections that failed.

    Raises
    ------
    SettingError
        For an unknown or misspelt parameter, with the nearest known one, before anything is run.
    InputError
        If the source or the data cannot be read.
    EstimationError
        If a notebook of the analyst's own stops with an error.
    """
    path, folder = Path(source), Path(out)
    if path.suffix.casefold() == ".ipynb":
        return _run_own(path, sets or {}, folder, progress=progress)
    plan = StudyFile.load(path).with_settings(sets or {})
    # Opened here as well, so that faults of the data come before any kernel and with their own names.
    key = report_key(plan, plan.inputs.open(plan.settings))
    done = _finished(folder, key) if resume else None
    if done:
        return done
    folder.mkdir(parents=True, exist_ok=True)
    (folder / RUN_FILE).unlink(missing_ok=True)
    sections = Path(cache) if cache else folder / CACHE
    with tempfile.TemporaryDirectory() as name:
        book = report_notebook(plan, path, folder, sections if resume else None)
        made = _executed(book, Path(name), path.parent, progress=progress)
    _save(made, folder / NOTEBOOK)
    run = json.loads((folder / RUN_FILE).read_text(encoding="utf-8"))
    return ReportRun(folder, _files(folder, run), run["failures"])


def report_notebook(
    plan: StudyFile, study_file: str | Path, out: str | Path, cache: str | Path | None = None
) -> nbformat.NotebookNode:
    """Make the notebook that a report is run as: a parameters cell, then a cell a section.

    Parameters
    ----------
    plan : StudyFile
        What is run; its settings stand in the parameters cell.
    study_file : path
        Where the data and the parts are read from; its folder is the notebook's working folder.
    out : path
        Folder of the pack.
    cache : path, optional
        Folder of finished sections.

    Returns
    -------
    NotebookNode
        With the code hidden.
    """
    home = Path(study_file).resolve().parent
    where = {"study_file": Path(study_file).name, "out": _relative(out, home)}
    where["cache"] = _relative(cache, home) if cache else ""
    sources = [
        parameters_source(plan.settings),
        "from soffit.memo.report import Report\n\n"
        f"report = Report.open({where['study_file']!r}, globals(), out={where['out']!r}, cache={where['cache']!r})\n"
        "report.front()",
        *(f"report.section({position})" for position in range(len(plan.plan.parts))),
        "report.finish()",
    ]
    book: nbformat.NotebookNode = nbformat.v4.new_notebook()  # type: ignore[no-untyped-call]
    for number, text in enumerate(sources):
        cell = nbformat.v4.new_code_cell(text, id=f"cell-{number}")  # type: ignore[no-untyped-call]
        cell.metadata["jupyter"] = {"source_hidden": True}
        book.cells.append(cell)
    book.cells[0].metadata["tags"] = ["parameters"]
    book.metadata["kernelspec"] = {"name": "python3", "display_name": "Python 3", "language": "python"}
    return book


def _relative(path: str | Path, home: Path) -> str:
    try:
        return Path(os.path.relpath(Path(path).resolve(), home)).as_posix()
    except ValueError:  # another drive
        return Path(path).resolve().as_posix()


def _finished(folder: Path, key: str) -> ReportRun | None:
    """An earlier run of the same content whose files are all there and unchanged."""
    from soffit.memo.inputs import file_fingerprint
    from soffit.memo.manifest import read_manifest

    try:
        run = json.loads((folder / RUN_FILE).read_text(encoding="utf-8"))
        if run["key"] != key or run["failures"]:
            return None
        stored = read_manifest(folder)["files"]
        if any(file_fingerprint(folder / name) != kept for name, kept in stored.items()):
            return None
    except (OSError, ValueError, KeyError, InputError):
        return None
    return ReportRun(folder, _files(folder, run), resumed=True)


def _files(folder: Path, run: Mapping[str, Any]) -> tuple[Path, ...]:
    return tuple(folder / name for name in [*run["files"], NOTEBOOK])


def _run_own(path: Path, sets: Mapping[str, Any], folder: Path, *, progress: bool) -> ReportRun:
    """Run an analyst's own notebook: parameters checked first, no code in the page."""
    try:
        book = nbformat.read(path, as_version=4)  # type: ignore[no-untyped-call]
    except (OSError, ValueError, nbformat.reader.NotJSONError) as error:
        raise InputError(f"The notebook '{path}' cannot be read ({error})") from error
    cell = next((one for one in book.cells if "parameters" in one.metadata.get("tags", [])), None)
    if cell is None:
        if sets:
            raise SettingError(
                f"The notebook '{path}' has no parameters",
                remedy="give one of its cells the tag 'parameters'",
            )
    else:
        changed = merged(read_parameters(cell.source), sets)
        settings_from_parameters({name: changed[name] for name in changed if name in Settings.model_fields})
        cell.source = "\n".join(f"{name} = {value!r}" for name, value in changed.items())
    folder.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory() as name:
        made = _executed(book, Path(name), path.parent, progress=progress)
    saved = _save(made, folder / path.name)
    page = folder / f"{path.stem}.html"
    page.write_text(_page(made), encoding="utf-8")
    return ReportRun(folder, (page, saved))


def _executed(
    book: nbformat.NotebookNode, folder: Path, home: Path, *, progress: bool
) -> nbformat.NotebookNode:
    """Run a notebook in a kernel of its own and give it back without traces of when and where."""
    import papermill

    source, target = folder / "in.ipynb", folder / "out.ipynb"
    nbformat.write(book, source)  # type: ignore[no-untyped-call]
    try:
        papermill.execute_notebook(
            str(source),
            str(target),
            cwd=str(home) or ".",
            kernel_name="python3",
            progress_bar=progress,
            store_widget_state=False,
            # A note about the transport on every start is no news to an analyst; errors still come through.
            extra_arguments=["--log-level=40"],
        )
    except papermill.exceptions.PapermillExecutionError as error:
        where = f"Cell {error.exec_count} of the notebook stopped"
        raise EstimationError(f"{where}: {error.ename}: {error.evalue}") from error
    return _clean(nbformat.read(target, as_version=4))  # type: ignore[no-untyped-call]


def _clean(book: nbformat.NotebookNode) -> nbformat.NotebookNode:
    for name in ("papermill", "widgets"):
        book.metadata.pop(name, None)
    for cell in book.cells:
        for name in ("papermill", "execution"):
            cell.metadata.pop(name, None)
        if not cell.metadata.get("tags", ["kept"]):
            cell.metadata.pop("tags")
        if cell.cell_type == "code":
            cell.execution_count = None
            for output in cell.outputs:
                if "execution_count" in output:
                    output["execution_count"] = None
    return book


def _save(book: nbformat.NotebookNode, path: Path) -> Path:
    nbformat.write(book, path)  # type: ignore[no-untyped-call]
    return path


def _page(book: nbformat.NotebookNode) -> str:
    """A notebook as one page without code that loads nothing from the network."""
    from nbconvert import HTMLExporter

    nowhere: Iterable[str] = (
        *("mathjax_url", "require_js_url", "jquery_url", "mermaid_js_url", "mermaid_layout_elk_js_url"),
        *("widget_renderer_url", "jupyter_widgets_base_url"),
    )
    exporter = HTMLExporter(  # type: ignore[no-untyped-call]
        exclude_input=True, exclude_input_prompt=True, exclude_output_prompt=True, embed_images=True
    )
    for name in nowhere:
        if exporter.has_trait(name):
            exporter.set_trait(name, "")
    page: str = exporter.from_notebook_node(book)[0]
    return page
