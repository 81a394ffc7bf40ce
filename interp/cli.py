"""The command `rockhead`: picks to depths, reports and tables, the whole line, and picking's own commands.

A command parses, calls one step and ends with its status. Numerical libraries are loaded inside the commands.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from picker.cli import load, load_options, override, pick
from picker.terminal import EXIT_FINDINGS, CommandGroup, echo_findings, needs_a_look, survey_argument, units_option

if TYPE_CHECKING:
    from interp.interpretation import InterpretSettings

_LEAST_DRAWS = 200  # fewer make the ends of the 90 % intervals themselves uncertain by more than 0.15 sigma
_DIR = click.Path(path_type=Path)


@click.group(cls=CommandGroup)
@click.version_option(package_name="rockhead", prog_name="rockhead")
def main() -> None:
    """Turn refraction shot records into depths and velocities with error bars.

    \b
    Shortest way, from shot records to tables and a report:
      rockhead process records/*.sgy --out result
    Try it on a survey of known truth:
      rockhead demo

    Ends with 0 done, 1 done with findings that a person must look at, 2 the input could not be used.
    """  # noqa: D301 - click wants the character


def interpret_options(command: Any) -> Any:
    """Give a command the options of interpreting."""
    options = (
        click.option(
            "--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Seed of the random draws."
        ),
        click.option(
            "--draws",
            type=click.IntRange(min=_LEAST_DRAWS),
            default=1000,
            show_default=True,
            help="Joint draws of depths and velocities; more make the intervals' ends steadier.",
        ),
    )
    for option in reversed(options):
        command = option(command)
    return command


def _settings(seed: int, draws: int) -> InterpretSettings:
    """What was chosen."""
    from interp.interpretation import InterpretSettings

    return InterpretSettings(seed=seed, draws=draws)


@main.command()
@survey_argument
@interpret_options
@units_option
def interpret(survey: Path, seed: int, draws: int, units: str) -> None:
    """Turn the kept picks of a survey into depths and velocities with 90 % intervals.

    The result is printed and kept in the survey file with its settings; earlier ones stay there. The same picks,
    settings and seed give the same result. The first run compiles the numerical parts, which takes a while once.

    \b
    Example:
      rockhead interpret mill_lane.survey
      rockhead interpret mill_lane.survey --draws 4000 --units ft
    """  # noqa: D301 - click wants the character
    from interp.process import interpret_stage
    from picker.stages import echo_compiling
    from picker.survey import Survey

    with Survey.open(survey) as opened:
        echo_compiling()
        section = interpret_stage(opened, _settings(seed, draws), units)
    if section.warnings:
        raise click.exceptions.Exit(EXIT_FINDINGS)


@main.command()
@survey_argument
@click.argument("directory", type=_DIR, metavar="DIR")
@units_option
@click.option("--title", help="Heading of the report; the name of the survey file if left out.")
def report(survey: Path, directory: Path, units: str, title: str | None) -> None:
    """Write the last interpretation as a report (report.html) and figures (figures/*.png) into DIR.

    The report is one file that needs nothing else; the records must be where they were when they were loaded.

    \b
    Example:
      rockhead report mill_lane.survey report
    """  # noqa: D301 - click wants the character
    from interp.process import out_of_date, report_stage
    from picker.survey import Survey

    with Survey.open(survey) as opened:
        report_stage(opened, directory, units, title or survey.stem)
        findings = out_of_date(opened)
    echo_findings(findings)
    if needs_a_look(findings):
        raise click.exceptions.Exit(EXIT_FINDINGS)


@main.command()
@survey_argument
@click.argument("directory", type=_DIR, metavar="DIR")
@units_option
def export(survey: Path, directory: Path, units: str) -> None:
    """Write picks.csv, depths.csv, bounds.csv, velocities.csv and section.json into DIR.

    Depths are those of the last interpretation; before the first one only picks.csv is written. With --units ft the
    tables are in feet and their columns say so; section.json is in metres always.

    \b
    Example:
      rockhead export mill_lane.survey tables
      rockhead export mill_lane.survey tables_ft --units ft
    """  # noqa: D301 - click wants the character
    from interp.process import export_stage, out_of_date
    from picker.survey import Survey

    with Survey.open(survey) as opened:
        export_stage(opened, directory, units)
        findings = out_of_date(opened)
    echo_findings(findings)
    if needs_a_look(findings):
        raise click.exceptions.Exit(EXIT_FINDINGS)


@main.command()
@click.argument("files", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="FILE...")
@click.option("--out", "directory", required=True, type=_DIR, metavar="DIR", help="Folder for everything made.")
@load_options
@interpret_options
@units_option
@click.option("--title", help="Heading of the report; the name of the folder if left out.")
def process(
    files: tuple[Path, ...],
    directory: Path,
    sigma_ms: float | None,
    interval_us: float | None,
    geometry: Path | None,
    seed: int,
    draws: int,
    units: str,
    title: str | None,
) -> None:
    """Take shot records (SEG-Y, SEG-2) or picks (.csv) the whole way: load, pick, interpret, export and report.

    DIR gets the survey file line.survey, the tables, the figures and report.html. A survey file that is there
    already is added to, and what was changed in it by hand stays. Picks that come in from a file are used as they
    are. The first run compiles the numerical parts, which takes a while once.

    \b
    Example:
      rockhead process records/*.sgy --out result
      rockhead process records/*.sgy --geometry positions.csv --out result --units ft
      rockhead process picks.csv --sigma-ms 1 --out result
    """  # noqa: D301 - click wants the character
    from interp.process import process_files

    section, findings = process_files(
        files,
        directory,
        _settings(seed, draws),
        sigma_ms=sigma_ms,
        interval_us=interval_us,
        geometry=geometry,
        units=units,
        title=title or directory.resolve().name,
    )
    if section.warnings or needs_a_look(findings):
        raise click.exceptions.Exit(EXIT_FINDINGS)


@main.command()
@click.argument("directory", type=_DIR, metavar="[DIR]", default="rockhead-demo")
@click.option("--seed", type=click.IntRange(min=0), help="Seed of the field noise; the shipped one if left out.")
@units_option
def demo(directory: Path, seed: int | None, units: str) -> None:
    """Write the shot records of an invented survey into DIR and take them the whole way.

    The records go into DIR/records, as a crew would hand them over, the results into DIR/result. The last line
    says how the result stands against the truth, which is known here.

    \b
    Example:
      rockhead demo
      rockhead demo another_day --seed 7
    """  # noqa: D301 - click wants the character
    from interp.demo import RECORDS, RESULT, compared_with_truth, write_records
    from interp.interpretation import InterpretSettings
    from interp.process import process_files
    from synthetic_gathers.demo_survey import DEFAULT_SEED

    recorded, files = write_records(directory / RECORDS, DEFAULT_SEED if seed is None else seed)
    click.echo(f"Shot records of the demo survey: {directory / RECORDS} (see README.txt there)")
    section, findings = process_files(
        files,
        directory / RESULT,
        InterpretSettings(),
        sigma_ms=None,
        interval_us=None,
        geometry=None,
        units=units,
        title="Larch Rise, refraction line 1 (demo)",
    )
    click.echo(compared_with_truth(recorded, section, units))
    click.echo(f"The same by hand: rockhead process {directory / RECORDS}/*.sgy --out {directory / RESULT}")
    if section.warnings or needs_a_look(findings):
        raise click.exceptions.Exit(EXIT_FINDINGS)


for command in (load, pick, override):
    main.add_command(command)
