"""The command line: the main job, its messages and its exit codes."""

from __future__ import annotations

import subprocess
import sys
from html import unescape
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from soffit.cli import main
from soffit.demo import demo_frames, demo_study
from soffit.present.exhibits import build


@pytest.fixture
def files(tmp_path: Path) -> tuple[Path, Path]:
    returns, factors = demo_frames()
    paths = tmp_path / "returns.csv", tmp_path / "factors.csv"
    returns.to_csv(paths[0])
    factors.to_csv(paths[1])
    return paths


def _run(*arguments: str | Path) -> Result:
    return CliRunner().invoke(main, [str(argument) for argument in arguments], catch_exceptions=False)


def test_judge_prints_the_findings_that_the_panel_shows(files: tuple[Path, Path]) -> None:
    result = _run(
        "judge", files[0], "--factors", files[1], "--risk-free", "Cash", "--ceiling", "1.4",
        "--set", "histories='own history'",
    )  # fmt: skip
    assert result.exit_code == 0
    study = demo_study().changed(ceiling=1.4)
    for key in ("regression", "joint", "ceiling"):
        assert build(key, study).finding.text in result.output
    assert "Larch Steady Income" in result.output
    assert "Past returns do not tell future ones." in result.output
    assert "not investment advice" in result.output


def test_demo_writes_a_memo_and_its_data(tmp_path: Path) -> None:
    result = _run("demo", "--out", tmp_path / "memo")
    assert result.exit_code == 0
    written = {path.name for path in (tmp_path / "memo").rglob("*") if path.is_file()}
    assert {"memo.html", "returns.csv", "factors.csv"} <= written
    page = unescape((tmp_path / "memo" / "memo.html").read_text(encoding="utf-8"))
    assert build("ceiling", demo_study()).finding.text in page
    assert {".png", ".svg"} <= {Path(name).suffix for name in written}
    audit = _run("verify", tmp_path / "memo")
    assert audit.exit_code == 0, audit.output
    assert "nothing differs" in audit.output


@pytest.mark.parametrize(
    ("arguments", "code", "message"),
    [
        (["--ceiling", "-1"], 2, "'ceiling' is -1.0"),
        (["--set", "cieling=1"], 2, "did you mean 'ceiling'"),
        (["--set", "ceiling"], 2, "has no '='"),
        (["--set", "error_type=HC7"], 2, "HC3"),
        (["--units", "permille"], 2, "percent"),
        (["--risk-free", "Kash"], 3, "Cash"),
        (["--set", "start=2024-09-01"], 4, "rows"),
    ],
)
def test_refusals_have_their_exit_codes(
    files: tuple[Path, Path], arguments: list[str], code: int, message: str
) -> None:
    result = _run("judge", files[0], "--factors", files[1], *arguments)
    assert result.exit_code == code, result.output
    assert message in result.output
    assert "Traceback" not in result.output


def test_missing_and_empty_files(files: tuple[Path, Path], tmp_path: Path) -> None:
    result = _run("judge", tmp_path / "retruns.csv", "--factors", files[1])
    assert result.exit_code == 3
    assert "returns.csv" in result.output
    empty = tmp_path / "empty.csv"
    empty.write_text("")
    result = _run("judge", empty, "--factors", files[1])
    assert result.exit_code == 3
    assert "empty" in result.output


def test_verify_names_what_was_tampered_with(files: tuple[Path, Path], tmp_path: Path) -> None:
    out = tmp_path / "memo"
    assert _run("judge", files[0], "--factors", files[1], "--out", out, "--format", "html").exit_code == 0
    page = out / "memo.html"
    page.write_text(page.read_text(encoding="utf-8").replace("240", "241", 1), encoding="utf-8")
    result = _run("verify", out)
    assert result.exit_code == 5
    assert "memo.html" in result.output or "Table" in result.output
    nothing = _run("verify", tmp_path)
    assert nothing.exit_code == 3
    assert "no pack" in nothing.output.casefold()


def test_report_refuses_a_misspelt_parameter_before_it_runs(files: tuple[Path, Path], tmp_path: Path) -> None:
    study = tmp_path / "study.toml"
    study.write_text('[data]\nreturns = "returns.csv"\nfactors = "factors.csv"\n', encoding="utf-8")
    result = _run("report", study, "--set", "cieling=0.8", "--out", tmp_path / "report")
    assert result.exit_code == 2
    assert "did you mean 'ceiling'" in result.output
    assert not (tmp_path / "report").exists()


def test_help_names_the_commands_and_the_exit_codes() -> None:
    result = _run("--help")
    assert result.exit_code == 0
    assert all(
        word in result.output for word in ("demo", "judge", "Exit codes", "3  the data cannot be used")
    )
    assert "soffit judge returns.csv --factors factors.csv --ceiling 1.0" in _run("judge", "--help").output


def test_import_loads_nothing_heavy() -> None:
    # `import soffit` stays quick because nothing heavy is imported until a name is used.
    code = "import soffit, sys; print([m for m in ('pandas', 'numpy', 'bqplot', 'statsmodels') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_unknown_public_name_is_refused_with_the_nearest() -> None:
    import soffit

    with pytest.raises(AttributeError, match="CeilingPanel"):
        _ = soffit.CeilngPanel
    assert set(dir(soffit)) >= {"Study", "Settings", "CeilingPanel", "Pack"}
