"""Reports without a browser: parameters, failing sections, resuming, sweeps, an analyst's own notebook."""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from datetime import date
from html import escape
from pathlib import Path
from typing import Any

import nbformat
import pytest
from hypothesis import given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st

from soffit.errors import EstimationError, InputError, SettingError
from soffit.memo import notebook, report, verify
from soffit.memo.notebook import report_notebook, run_report
from soffit.memo.parameters import (
    merged,
    parameters_source,
    read_parameters,
    settings_from_parameters,
)
from soffit.memo.study_file import StudyFile
from soffit.memo.sweep import run_sweep
from soffit.present.cautions import CAUTIONS
from soffit.settings import CeilingForm, ErrorType, Settings

from .conftest import invented

STUDY = """
[data]
returns = "data/returns.csv"
factors = "data/factors.csv"
units = "decimal"
excess = true

[settings]
ceiling = 0.9

[settings.factor_sets]
one = ["MktRF"]
both = ["MktRF", "SMB"]

[report]
title = "Desk report"
exhibits = ["ceiling", "joint"]
formats = ["md"]
"""


@pytest.fixture
def desk(tmp_path: Path) -> Path:
    (tmp_path / "data").mkdir()
    returns, factors = invented()
    returns.to_csv(tmp_path / "data" / "returns.csv")
    factors.to_csv(tmp_path / "data" / "factors.csv")
    (tmp_path / "study.toml").write_text(STUDY)
    return tmp_path


@pytest.fixture
def no_kernel(monkeypatch: pytest.MonkeyPatch) -> list[int]:
    """Run a report's cells in this process; counts the notebooks that were run."""
    runs: list[int] = []

    def executed(book: Any, folder: Path, home: Path, *, progress: bool) -> Any:
        runs.append(len(book.cells))
        names: dict[str, Any] = {}
        with pytest.MonkeyPatch.context() as patch:
            patch.chdir(home)
            for cell in book.cells:
                exec(cell.source, names)
        return book

    monkeypatch.setattr(notebook, "_executed", executed)
    return runs


# ---- parameters
def test_settings_and_a_parameters_cell_are_the_same_thing() -> None:
    chosen = Settings(
        start=date(2001, 1, 1),
        factors=("MktRF", "HML"),
        factor_sets={"a b": ("MktRF",)},
        error_type=ErrorType.HAC,
        ceiling_form=CeilingForm.TOGETHER,
    ).changed({"hedge.window": 48, "costs.half_spreads": {"Fund": 3.0}})
    assert settings_from_parameters(read_parameters(parameters_source(chosen))) == chosen
    names: dict[str, Any] = {}
    exec(parameters_source(chosen), names)
    assert settings_from_parameters({name: names[name] for name in Settings.model_fields}) == chosen


@hypothesis_settings(deadline=None, max_examples=30)
@given(
    ceiling=st.floats(0, 5),
    seed=st.integers(0, 10**9),
    kind=st.sampled_from(ErrorType),
    name=st.text(max_size=20),
)
def test_any_settings_survive_the_parameters_cell(
    ceiling: float, seed: int, kind: ErrorType, name: str
) -> None:
    chosen = Settings(ceiling=ceiling, seed=seed, error_type=kind, factor_sets={name: (name,)})
    assert settings_from_parameters(read_parameters(parameters_source(chosen))) == chosen


@pytest.mark.parametrize(
    "source", ["import os", "x = open('f')", "x, y = 1, 2", "x += 1", "x = = 1", "x = a"]
)
def test_a_parameters_cell_is_read_and_never_run(source: str) -> None:
    with pytest.raises(SettingError, match="parameters cell"):
        read_parameters(source)


def test_a_parameters_cell_may_explain_itself() -> None:
    assert read_parameters('"""Words."""\n# more\nx: float = 1.0\ny = [1, 2]') == {"x": 1.0, "y": [1, 2]}


def test_unknown_and_misspelt_parameters_are_refused_with_the_nearest() -> None:
    base = {"ceiling": 1.0, "hedge": {"window": 60}}
    assert merged(base, {"hedge.window": 48, "ceiling": 0.8}) == {"ceiling": 0.8, "hedge": {"window": 48}}
    assert base["hedge"] == {"window": 60}
    for name, near in {"cieling": "ceiling", "hedge.windw": "hedge.window"}.items():
        with pytest.raises(SettingError, match=f"no parameter '{name}'.*'{near}'"):
            merged(base, {name: 1})
    with pytest.raises(SettingError, match="no parameter 'celing'.*'ceiling'"):
        settings_from_parameters({"celing": 1.0})


def test_a_report_refuses_a_misspelt_setting_before_anything_runs(desk: Path, no_kernel: list[int]) -> None:
    with pytest.raises(SettingError, match="did you mean 'ceiling'"):
        run_report(desk / "study.toml", {"ceilng": 0.8}, desk / "out", progress=False)
    with pytest.raises(SettingError, match="ceiling"):
        run_report(desk / "study.toml", {"ceiling": -1}, desk / "out", progress=False)
    (desk / "data" / "returns.csv").unlink()
    with pytest.raises(InputError, match="returns.csv"):
        run_report(desk / "study.toml", {}, desk / "out", progress=False)
    assert no_kernel == []
    assert not (desk / "out").exists()


# ---- a report in a kernel of its own
def test_a_report_runs_in_a_kernel_and_shows_no_code(desk: Path) -> None:
    run = run_report(desk / "study.toml", {"ceiling": 0.7}, desk / "out", progress=False)
    assert run.ok
    assert not run.resumed
    assert {path.name for path in run.files} >= {"memo.md", "manifest.json", "study.toml", "report.ipynb"}
    assert all(path.is_file() for path in run.files)
    book = nbformat.read(desk / "out" / "report.ipynb", as_version=4)
    nbformat.validate(book)
    assert "widgets" not in book.metadata
    assert all(cell.metadata["jupyter"]["source_hidden"] for cell in book.cells)
    assert book.cells[0].metadata["tags"] == ["parameters"]
    assert settings_from_parameters(read_parameters(book.cells[0].source)).ceiling == 0.7
    text = (desk / "out" / "report.ipynb").read_text()
    assert str(desk) not in text
    assert not re.search(r"20\d\d-\d\d-\d\dT\d\d:\d\d", text)
    assert "Desk report" in text
    last = book.cells[-1].outputs[0].data["text/html"]
    assert all(escape(caution) in last for caution in CAUTIONS)
    assert StudyFile.load(desk / "out" / "study.toml").settings.ceiling == 0.7
    audit = verify(desk / "out")
    assert audit.ok, str(audit)


def test_an_own_notebook_takes_parameters_and_gives_a_page_without_code(desk: Path) -> None:
    book = nbformat.v4.new_notebook()
    cell = nbformat.v4.new_code_cell("ceiling = 1.0\nlabel = 'desk'", id="p")
    cell.metadata["tags"] = ["parameters"]
    shown = "import ipywidgets\nprint(f'{label} {ceiling:.2f}')\nipywidgets.IntSlider(description='w')"
    book.cells = [cell, nbformat.v4.new_code_cell(shown, id="s")]
    nbformat.write(book, desk / "own.ipynb")
    run = run_report(desk / "own.ipynb", {"ceiling": 0.8, "label": "<b>"}, desk / "out", progress=False)
    page = (desk / "out" / "own.html").read_text(encoding="utf-8")
    assert "&lt;b&gt; 0.80" in page
    assert "ipywidgets" not in page.split("<body")[1]
    assert not re.findall(r"""(?:src|href)=["']https?:""", page)
    assert not re.findall(r"""(?:from|import|url)\s*\(?["']https?:""", page)
    made = nbformat.read(desk / "out" / "own.ipynb", as_version=4)
    assert "widgets" not in made.metadata
    assert {path.name for path in run.files} == {"own.html", "own.ipynb"}


def test_an_own_notebook_that_stops_is_said(desk: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    book = nbformat.v4.new_notebook()
    book.cells = [nbformat.v4.new_code_cell("1 / 0", id="a")]
    nbformat.write(book, desk / "own.ipynb")
    with pytest.raises(SettingError, match="tag 'parameters'"):
        run_report(desk / "own.ipynb", {"ceiling": 0.8}, desk / "out", progress=False)
    with pytest.raises(EstimationError, match="ZeroDivisionError"):
        run_report(desk / "own.ipynb", {}, desk / "out", progress=False)
    (desk / "own.ipynb").write_text("{")
    with pytest.raises(InputError, match="cannot be read"):
        run_report(desk / "own.ipynb", {}, desk / "out", progress=False)


def test_an_own_notebook_refuses_what_it_has_no_parameter_for(desk: Path) -> None:
    book = nbformat.v4.new_notebook()
    cell = nbformat.v4.new_code_cell("ceiling = 1.0\nhedge = {'window': 60}", id="p")
    cell.metadata["tags"] = ["parameters"]
    book.cells = [cell]
    nbformat.write(book, desk / "own.ipynb")
    for sets, match in (
        ({"cieling": 1}, "'ceiling'"),
        ({"hedge.windows": 48}, "'hedge.window'"),
        ({"ceiling": "high"}, "ceiling"),
    ):
        with pytest.raises(SettingError, match=match):
            run_report(desk / "own.ipynb", sets, desk / "out", progress=False)


# ---- failing sections, resuming
def test_a_section_that_fails_is_named_and_the_rest_is_delivered(
    desk: Path, no_kernel: list[int], monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    build = report.build

    def faulty(key: str, study: Any) -> Any:
        if key == "joint":
            raise EstimationError("The test has no answer")
        if key == "regression":
            raise ZeroDivisionError("division by zero")
        return build(key, study)

    monkeypatch.setattr(report, "build", faulty)
    text = STUDY.replace('["ceiling", "joint"]', '["joint", "ceiling", "regression"]')
    (desk / "study.toml").write_text(text)
    run = run_report(desk / "study.toml", {}, desk / "out", progress=False)
    assert not run.ok
    assert run.failures == {
        "joint": "The test has no answer.",
        "regression": "Unexpected ZeroDivisionError: division by zero",
    }
    assert "Traceback" in capsys.readouterr().err
    memo = (desk / "out" / "memo.md").read_text()
    assert "Not delivered: the section 'joint'. The test has no answer." in memo
    assert "## 1. Alphas under a Sharpe ceiling" in memo
    parts = StudyFile.load(desk / "out" / "study.toml").plan.parts
    assert [part.exhibit for part in parts] == ["joint", "ceiling", "regression"]
    assert verify(desk / "out").ok
    monkeypatch.setattr(report, "build", build)
    again = run_report(desk / "study.toml", {}, desk / "out", progress=False)
    assert again.ok
    assert not again.resumed


def test_when_every_section_fails_there_is_no_memo_but_a_word(
    desk: Path, no_kernel: list[int], monkeypatch: pytest.MonkeyPatch
) -> None:
    def faulty(key: str, study: Any) -> Any:
        raise EstimationError("No answer")

    monkeypatch.setattr(report, "build", faulty)
    run = run_report(desk / "study.toml", {}, desk / "out", progress=False)
    assert set(run.failures) == {"ceiling", "joint"}
    assert [path.name for path in run.files] == ["report.ipynb"]


def test_a_finished_report_is_not_run_again_unless_its_content_changed(
    desk: Path, no_kernel: list[int]
) -> None:
    def run(**sets: Any) -> bool:
        return run_report(desk / "study.toml", sets, desk / "out", progress=False).resumed

    assert not run()
    assert run()
    assert not run(ceiling=0.5)
    assert not run()
    (desk / "out" / "memo.md").write_text("touched")
    assert not run()
    (desk / "study.toml").write_text(STUDY.replace("Desk report", "Other"))
    assert not run()
    frame = (desk / "data" / "returns.csv").read_text()
    (desk / "data" / "returns.csv").write_text(
        frame.replace("2010-01-31,0.", "2010-01-31,0.1", 1).replace("2010-01-31,-0.", "2010-01-31,-0.1", 1)
    )
    assert not run()
    assert len(no_kernel) == 6


def test_finished_sections_are_taken_from_the_cache_and_faults_in_it_are_not_trusted(
    desk: Path, no_kernel: list[int], monkeypatch: pytest.MonkeyPatch
) -> None:
    built: list[str] = []
    build = report.build

    def counted(key: str, study: Any) -> Any:
        built.append(key)
        return build(key, study)

    monkeypatch.setattr(report, "build", counted)
    run_report(desk / "study.toml", {}, desk / "out", progress=False)
    first = (desk / "out" / "memo.md").read_bytes()
    (desk / "out" / "run.json").unlink()
    run_report(desk / "study.toml", {}, desk / "out", progress=False)
    assert built == ["ceiling", "joint"]
    assert (desk / "out" / "memo.md").read_bytes() == first
    for path in (desk / "out" / ".sections").glob("*.json"):
        path.write_text('{"kind": "Exhibit"}')
    (desk / "out" / "run.json").unlink()
    run_report(desk / "study.toml", {}, desk / "out", progress=False)
    assert built == ["ceiling", "joint"] * 2
    assert (desk / "out" / "memo.md").read_bytes() == first
    run_report(desk / "study.toml", {}, desk / "out", progress=False, resume=False)
    assert len(built) == 6


# ---- sweeps
def test_a_sweep_gives_a_report_a_value_and_a_page_that_compares(desk: Path, no_kernel: list[int]) -> None:
    sweep = run_sweep(desk / "study.toml", "ceiling", [0.9, 1.4], desk / "sweep", progress=False)
    assert sweep.ok
    assert [text for text, _ in sweep.runs] == ["0.9", "1.4"]
    assert {path.name for path in (desk / "sweep").iterdir()} >= {
        "01-ceiling-0.9",
        "02-ceiling-1.4",
        "comparison",
    }
    page = (desk / "sweep" / "comparison" / "memo.md").read_text()
    for run in (run for _, run in sweep.runs):
        finding = json.loads((run.folder / "manifest.json").read_text())["exhibits"][0]["exhibit"]["finding"][
            "text"
        ]
        assert finding in page.replace("\\", "")
    assert "number by Status" in page
    assert "p-value of a ceiling of" in page
    again = run_sweep(desk / "study.toml", "ceiling", [0.9, 1.4], desk / "sweep", progress=False)
    assert all(run.resumed for _, run in again.runs)
    assert len(no_kernel) == 2


def test_factor_sets_are_swept_by_name(desk: Path, no_kernel: list[int]) -> None:
    sweep = run_sweep(desk / "study.toml", "factor_sets", [], desk / "sweep", progress=False)
    assert [text for text, _ in sweep.runs] == ["one", "both"]
    factors = [StudyFile.load(run.folder / "study.toml").settings.factors for _, run in sweep.runs]
    assert factors == [("MktRF",), ("MktRF", "SMB")]
    with pytest.raises(SettingError, match="no factor set 'two'"):
        run_sweep(desk / "study.toml", "factor_sets", ["two"], desk / "sweep", progress=False)


def test_a_value_that_fails_is_named_and_the_others_are_compared(desk: Path, no_kernel: list[int]) -> None:
    sweep = run_sweep(
        desk / "study.toml", "start", ["2011-01-01", "2017-12-01"], desk / "sweep", progress=False
    )
    assert not sweep.ok
    page = (desk / "sweep" / "comparison" / "memo.md").read_text()
    assert "Not delivered" in page
    assert "2017-12-01" in page


@pytest.mark.parametrize(
    ("name", "values", "match"),
    [
        ("celing", [1.0], "did you mean 'ceiling'"),
        ("ceiling", [], "no values"),
        ("ceiling", [1.0, -1.0], "ceiling"),
    ],
)
def test_a_sweep_is_checked_before_anything_runs(
    desk: Path, no_kernel: list[int], name: str, values: list[float], match: str
) -> None:
    with pytest.raises(SettingError, match=match):
        run_sweep(desk / "study.toml", name, values, desk / "sweep", progress=False)
    assert no_kernel == []


def test_the_notebook_of_a_report_names_no_place_outside_its_folder(desk: Path) -> None:
    book = report_notebook(StudyFile.load(desk / "study.toml"), desk / "study.toml", desk / "a" / "out")
    source: Callable[[int], str] = lambda number: book.cells[number].source  # noqa: E731
    assert "Report.open('study.toml', globals(), out='a/out', cache='')" in source(1)
    assert [source(number) for number in (2, 3, 4)] == [
        "report.section(0)",
        "report.section(1)",
        "report.finish()",
    ]
