"""The example notebooks run from top to bottom, and open well without being run."""

from __future__ import annotations

from pathlib import Path

import nbformat
import pytest
from nbclient import NotebookClient

FOLDER = Path(__file__).resolve().parents[1] / "example_notebooks"
NOTEBOOKS = sorted(FOLDER.glob("*.ipynb"))


def test_there_are_examples() -> None:
    assert {"first_look.ipynb"} <= {path.name for path in NOTEBOOKS}


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_runs_from_top_to_bottom(path: Path, tmp_path: Path) -> None:
    book = nbformat.read(path, as_version=4)
    NotebookClient(
        book, timeout=240, kernel_name="python3", resources={"metadata": {"path": str(tmp_path)}}
    ).execute()
    shown = [output for cell in book.cells for output in cell.get("outputs", [])]
    assert not [output for output in shown if output.output_type == "error"]
    assert not [output for output in shown if output.get("name") == "stderr" and "Error" in output.text]
    pictures = [
        output for output in shown if "data:image/png" in str(output.get("data", {}).get("text/html", ""))
    ]
    assert pictures, "no still picture of a panel"
    assert list(tmp_path.rglob("memo.html")), "no memo was written"


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_holds_no_widget_state_and_no_machine_path(path: Path) -> None:
    book = nbformat.read(path, as_version=4)
    assert "widgets" not in book.metadata
    text = path.read_text(encoding="utf-8")
    assert "/home/" not in text
    assert "/tmp/" not in text
    assert not [
        output for cell in book.cells for output in cell.get("outputs", []) if output.output_type == "error"
    ]
