"""The command line: the main job on the analyst's files, or on the demo, without a browser."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from soffit import __version__
from soffit.errors import EstimationError, InputError, SettingError, SoffitError, nearest

if TYPE_CHECKING:
    from soffit.memo import Inputs
    from soffit.present.spec import Exhibit
    from soffit.settings import Settings
    from soffit.study import Study

__all__ = ["main"]

EXIT_CODES = """
\b
Exit codes:
  0  done
  2  wrong usage, or a setting that is unknown or out of range
  3  the data cannot be used as they are
  4  the sample does not identify what was asked
  5  done in part: a section failed or a check differs
"""

_CODES: tuple[tuple[type[SoffitError], int], ...] = ((SettingError, 2), (InputError, 3), (EstimationError, 4))


class _Guarded(click.Group):
    """Turns the package's own errors into one line and an exit code; other errors keep their traceback."""

    def invoke(self, ctx: click.Context) -> Any:
        try:
            return super().invoke(ctx)
        except SoffitError as error:
            click.secho("Error: ", err=True, nl=False, fg="red")
            click.echo(str(error), err=True)
            ctx.exit(next((code for kind, code in _CODES if isinstance(error, kind)), 4))


@click.group(
    cls=_Guarded,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    epilog=EXIT_CODES,
)
@click.version_option(__version__, prog_name="soffit")
def main() -> None:
    """Hold a Sharpe ceiling against the alphas that factors leave over.

    soffit regresses the returns of funds, strategies or portfolios on traded factors, tests the alphas, says how
    high a Sharpe ratio the market would have to leave on the table for each to be true, and writes a memo.
    """


def _study_options(command: Callable[..., None]) -> Callable[..., None]:
    options = [
        click.option(
            "--settings", "settings_file", type=click.Path(path_type=Path), help="A TOML file of settings."
        ),
        click.option(
            "--set",
            "sets",
            multiple=True,
            metavar="NAME=VALUE",
            help="Change one setting, such as error_type=HAC or hedge.window=48. May be repeated.",
        ),
        click.option(
            "--ceiling", type=float, help="Highest Sharpe ratio, a year, that this market could sustain."
        ),
        click.option("--out", type=click.Path(file_okay=False, path_type=Path), help="Folder for the memo."),
        click.option(
            "--format",
            "formats",
            multiple=True,
            metavar="FORMAT",
            help="html, docx, pdf, xlsx, md, tex, png, svg, pdf figures; html, png and svg if none. Repeatable.",
        ),
    ]
    for option in reversed(options):
        command = option(command)
    return command


@main.command()
@_study_options
def demo(
    settings_file: Path | None,
    sets: tuple[str, ...],
    ceiling: float | None,
    out: Path | None,
    formats: tuple[str, ...],
) -> None:
    """Do the main job on an invented desk and write its memo.

    The scenario is generated with a fixed seed: fourteen strategies, four traded factors, twenty years of months.
    Its files are written beside the memo, so that every number can be re-run with 'soffit judge'.
    """
    from soffit.demo import demo_frames
    from soffit.memo import Inputs
    from soffit.settings import Histories, Settings

    wanted = _formats(formats)
    folder = out or Path("soffit-memo")
    folder.mkdir(parents=True, exist_ok=True)
    returns, factors = demo_frames()
    returns.to_csv(folder / "returns.csv", float_format="%.8f")
    factors.to_csv(folder / "factors.csv", float_format="%.8f")
    base = Settings.load(settings_file) if settings_file else Settings(histories=Histories.OWN)
    inputs = Inputs("returns.csv", "factors.csv", {"risk_free": "Cash"}, folder)
    _judge(inputs, _with(base, sets, ceiling), folder, wanted)


@main.command()
@click.argument("returns", type=click.Path(path_type=Path))
@click.option("--factors", type=click.Path(path_type=Path), help="File of the traded factors' returns.")
@click.option("--risk-free", metavar="COLUMN", help="Column of the risk-free return, in either file.")
@click.option("--excess/--raw", default=None, help="Whether the risk-free return is already taken off.")
@click.option(
    "--units", metavar="UNIT", help="decimal, percent or basis points; told from the data if left out."
)
@click.option("--roles", type=click.Path(path_type=Path), help="A TOML file that says what each column is.")
@_study_options
def judge(
    returns: Path,
    factors: Path | None,
    risk_free: str | None,
    excess: bool | None,
    units: str | None,
    roles: Path | None,
    settings_file: Path | None,
    sets: tuple[str, ...],
    ceiling: float | None,
    out: Path | None,
    formats: tuple[str, ...],
) -> None:
    r"""Judge the alphas in RETURNS against a Sharpe ceiling.

    RETURNS holds one row a period and one column a series, the dates first. With --out a memo is written.

    \b
    Example:
      soffit judge returns.csv --factors factors.csv --ceiling 1.0 --out memo
    """
    from soffit.memo import Inputs
    from soffit.settings import Settings

    wanted = _formats(formats)
    settings = _with(Settings.load(settings_file) if settings_file else Settings(), sets, ceiling)
    options: dict[str, Any] = {"risk_free": risk_free, "excess": excess, "units": units}
    options["roles"] = str(roles) if roles else None
    given = {name: value for name, value in options.items() if value is not None}
    _judge(Inputs(str(returns), str(factors or ""), given), settings, out, wanted)


@main.command()
@click.argument("source", type=click.Path(path_type=Path))
@click.option(
    "--set",
    "sets",
    multiple=True,
    metavar="NAME=VALUE",
    help="Change one parameter, such as ceiling=0.8 or hedge.window=48. May be repeated.",
)
@click.option(
    "--sweep",
    metavar="NAME=VALUES",
    help="One report for each value, such as ceiling=[0.6,0.8,1.0], and a page that compares them.",
)
@click.option(
    "--out", type=click.Path(file_okay=False, path_type=Path), default=Path("report"), help="Folder."
)
@click.option("--fresh", is_flag=True, help="Compute everything again, whatever an earlier run finished.")
def report(source: Path, sets: tuple[str, ...], sweep: str | None, out: Path, fresh: bool) -> None:
    r"""Run a study file, or a notebook with a parameters cell, without a browser.

    An unknown or misspelt parameter is refused before anything runs. A section that fails is named in the report;
    the rest is delivered, with exit code 5.

    \b
    Example:
      soffit report study.toml --set ceiling=0.8 --out report
    """
    from soffit.memo.notebook import run_report
    from soffit.memo.sweep import run_sweep

    values = dict(_parsed(item) for item in sets)
    if sweep is None:
        run = run_report(source, values, out, resume=not fresh)
        _say_run(run.folder, run.files, run.failures, run.resumed)
        raise SystemExit(0 if run.ok else 5)
    name, swept = _parsed(sweep)
    done = run_sweep(
        source, name, swept if isinstance(swept, list) else [swept], out, sets=values, resume=not fresh
    )
    for value, run in done.runs:
        click.secho(f"{name} = {value}", bold=True)
        _say_run(run.folder, run.files, run.failures, run.resumed)
    _say_run(out / "comparison", done.comparison, done.failures, False)
    raise SystemExit(0 if done.ok else 5)


@main.command()
@click.argument("pack", type=click.Path(path_type=Path))
def verify(pack: Path) -> None:
    """Recompute every number in the folder PACK from its inputs, and say which differ."""
    from soffit.memo import verify as audit

    found = audit(pack)
    click.echo(str(found))
    raise SystemExit(0 if found.ok else 5)


def _say_run(folder: Path, files: Iterable[Path], failures: Mapping[str, str], resumed: bool) -> None:
    if resumed:
        click.echo(f"Nothing changed since the last run in {folder}.")
    for path in files:
        click.echo(f"Wrote {path}")
    for section, reason in failures.items():
        click.secho(f"Not delivered: {section}. {reason}", err=True, fg="red")


def _with(settings: Settings, sets: tuple[str, ...], ceiling: float | None) -> Settings:
    values: dict[str, Any] = dict(_parsed(item) for item in sets)
    if ceiling is not None:
        values["ceiling"] = ceiling
    return settings.changed(values)


def _formats(names: tuple[str, ...]) -> tuple[str, ...]:
    """Check the formats before anything is computed."""
    from soffit.memo import Format

    if not names:
        return Format.HTML, Format.PNG, Format.SVG
    for name in names:
        if name not in list(Format):
            raise SettingError(f"There is no format '{name}'", remedy=nearest(name, list(Format)))
    return names


def _parsed(item: str) -> tuple[str, Any]:
    """Read NAME=VALUE; the value is TOML where it can be, else plain text."""
    import tomllib

    name, equals, text = item.partition("=")
    if not equals:
        raise SettingError(f"--set {item} has no '='", allowed="NAME=VALUE, such as ceiling=0.8")
    try:
        return name.strip(), tomllib.loads(f"value = {text}")["value"]
    except tomllib.TOMLDecodeError:
        return name.strip(), text.strip()


def _judge(inputs: Inputs, settings: Settings, out: Path | None, formats: tuple[str, ...]) -> None:
    """Print the sample, the findings and the verdicts, and write the memo where one is asked for."""
    from soffit.present.cautions import CAUTIONS
    from soffit.present.exhibits import build
    from soffit.present.plain import table_text

    study = inputs.open(settings)
    exhibits = [build(key, study) for key in ("regression", "joint", "ceiling")]
    click.echo(exhibits[-1].sample)
    for exhibit in exhibits:
        click.echo()
        click.secho(exhibit.title, bold=True)
        click.echo(exhibit.finding.text)
        for note in exhibit.notes:
            click.echo(f"Note: {note}")
    click.echo()
    click.echo(table_text(exhibits[-1].tables[0], most=40))
    warnings = [entry for entry in study.record.entries if entry.severity != "note"]
    if warnings:
        click.echo()
        click.secho("Intake", bold=True)
        for entry in warnings:
            click.echo(f"{entry.severity}: {entry.message}")
    if out is not None:
        _write_memo(study, inputs, exhibits, out, formats)
    click.echo()
    click.echo(" ".join((CAUTIONS[0], *CAUTIONS[-2:])))


def _write_memo(
    study: Study, inputs: Inputs, exhibits: list[Exhibit], out: Path, formats: tuple[str, ...]
) -> None:
    from soffit.memo import Pack, write

    pack = Pack(study, title="Alphas under a Sharpe ceiling", inputs=inputs)
    for exhibit in exhibits:
        pack.keep(exhibit)
    click.echo()
    for path in write(pack, out, formats):
        click.echo(f"Wrote {path}")


if __name__ == "__main__":
    sys.exit(main())
