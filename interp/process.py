"""The steps from picks to tables and report as a person sees them, and the whole line in one go.

Each step works on the survey file, prints what came of it, and leaves whole files only.
"""

from __future__ import annotations

import contextlib
import dataclasses
import datetime
import os
import sys
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import click

from picker.errors import InputError
from picker.stages import echo_compiling, load_stage, pick_stage
from picker.terminal import count_words, echo_findings, table_lines

if TYPE_CHECKING:
    from interp.interpretation import InterpretSettings
    from interp.section import DepthSection
    from interp.section_text import TextTable
    from picker.findings import Finding
    from picker.records import ShotRecord
    from picker.survey import Survey

SURVEY_NAME = "line.survey"
_CHANGES_OF_PICKS = ("pick", "import", "override", "drop", "undo", "redo")


def interpret_stage(survey: Survey, settings: InterpretSettings, units: str) -> DepthSection:
    """Interpret the kept picks of a survey, keep the result in it and print it.

    Parameters
    ----------
    survey : Survey
        Open.
    settings : InterpretSettings
        What was chosen.
    units : str
        `m` or `ft`, for what is printed.

    Returns
    -------
    DepthSection
        The result; its warnings have been printed.

    Raises
    ------
    InputError
        If the picks cannot carry an interpretation.
    """
    from interp.interpretation import interpret
    from interp.section_json import section_from_json, section_to_json

    picks = survey.picks()
    if not picks.kept.any():
        raise InputError(
            "the survey has no kept picks to interpret",
            file=survey.path,
            remedy=f"Pick its records (rockhead pick {survey.path}) or load picks (rockhead load {survey.path} FILE)",
        )
    with click.progressbar(length=settings.draws, label="Interpreting", file=sys.stderr) as bar:
        try:
            section = interpret(picks, settings, progress=lambda done, _all: bar.update(done - bar.pos))
        except ValueError as error:
            raise InputError(
                f"the picks cannot be interpreted: {error}",
                file=survey.path,
                remedy=f"Look at them with: rockhead export {survey.path} DIR, which writes picks.csv",
            ) from error
    text = section_to_json(section)
    section = section_from_json(text)  # as it is kept, so that every table of it says the same
    _echo_section(section, units)
    latest = survey.latest_interpretation()
    if latest is not None and latest[2] == text:
        click.echo(f"The same as interpretation {latest[0]} in {survey.path}: nothing changed.")
    else:
        number = survey.store_interpretation(dataclasses.asdict(settings), text)
        click.echo(f"Kept in {survey.path} as interpretation {number}.")
    return section


def _echo_section(section: DepthSection, units: str) -> None:
    """Print depths, velocities, warnings and the check."""
    from interp.section_text import depth_table, plane_check_line, quality_line, velocity_table
    from picker.findings import Finding

    click.echo("\nDepth below ground under every geophone, median and 90 % interval")
    _echo_table(depth_table(section, units))
    click.echo("\nLayer velocities")
    _echo_table(velocity_table(section, units))
    click.echo(f"\n{quality_line(section)}")
    click.echo(plane_check_line(section, units))
    echo_findings([Finding("look", warning) for warning in section.warnings])


def _echo_table(table: TextTable) -> None:
    """Print a table and its notes."""
    for line in table_lines(table.header, table.rows):
        click.echo(line.rstrip())
    for note in table.notes:
        click.echo(f"  {note}")


def latest_section(survey: Survey) -> DepthSection:
    """Give the result of the last interpretation of a survey.

    Raises
    ------
    InputError
        If there is none.
    """
    from interp.section_json import section_from_json

    latest = survey.latest_interpretation()
    if latest is None:
        raise InputError(
            "the survey has not been interpreted yet",
            file=survey.path,
            remedy=f"Run: rockhead interpret {survey.path}",
        )
    return section_from_json(latest[2], file=survey.path)


def survey_findings(survey: Survey) -> list[Finding]:
    """Collect what a reader of the results must know that neither the section nor its tables say."""
    from picker.findings import Finding

    findings = survey.findings()
    assumed = sum("assumed" in note for note in survey.picks().note.tolist())
    if assumed:
        findings.append(Finding("note", f"{count_words(assumed, 'pick')} came in without an error; it was assumed."))
    return findings


def out_of_date(survey: Survey) -> list[Finding]:
    """Give a finding where there is no interpretation yet, or picks were changed after the last one."""
    from picker.findings import Finding

    kinds = [entry.kind for entry in survey.log()]
    if "interpret" not in kinds:
        text = "The survey has not been interpreted yet: there are no depths and velocities."
    elif any(kind in _CHANGES_OF_PICKS for kind in kinds[len(kinds) - kinds[::-1].index("interpret") :]):
        text = "Picks have been changed since the last interpretation; depths and velocities do not show it yet."
    else:
        return []
    return [Finding("look", text, f"Run: rockhead interpret {survey.path}")]


def export_stage(survey: Survey, directory: Path, units: str) -> None:
    """Write `picks.csv`, `depths.csv`, `bounds.csv`, `velocities.csv` and `section.json` into a folder.

    Parameters
    ----------
    survey : Survey
        Open. Without an interpretation only its picks are written.
    directory : Path
        Made where it is not there. Files of these names are replaced where this program wrote them.
    units : str
        `m` or `ft`: of the tables; `section.json` is in metres always.

    Raises
    ------
    InputError
        If a file is in the way.
    """
    from interp.section_json import section_to_json
    from interp.section_tables import bound_columns, depth_columns, to_csv, velocity_columns
    from picker.picks_csv import picks_to_csv
    from picker.units import columns_in

    texts = {"picks.csv": picks_to_csv(survey.picks(), units)}
    if survey.latest_interpretation() is not None:
        section = latest_section(survey)
        texts |= {
            "depths.csv": to_csv(columns_in(units, depth_columns(section))),
            "bounds.csv": to_csv(columns_in(units, bound_columns(section))),
            "velocities.csv": to_csv(columns_in(units, velocity_columns(section))),
            "section.json": section_to_json(section),
        }
    make_folder(directory)
    for name, text in texts.items():
        _refuse_foreign(directory / name, text)
    for name, text in texts.items():
        _write_whole(directory / name, text)
    click.echo(f"Wrote {', '.join(texts)} into {directory}.")


def make_folder(directory: Path) -> None:
    """Make a folder where it is not there; InputError where something else is."""
    if directory.exists() and not directory.is_dir():
        raise InputError(
            "is not a folder",
            file=directory,
            expected="a folder to write into",
            found="a file",
            remedy="Name another folder",
        )
    directory.mkdir(parents=True, exist_ok=True)


def _refuse_foreign(path: Path, text: str) -> None:
    """Refuse to write over a file that does not begin as ours do, in whichever units."""
    if not path.exists():
        return

    def mark(line: str) -> str:
        return line[:30] if path.suffix == ".json" else line.rstrip("\n").replace("_ft", "_m")

    try:
        with path.open(encoding="utf-8", newline="") as file:
            there = file.readline(100_000)
    except UnicodeDecodeError:
        there = ""
    if mark(there) != mark(text.partition("\n")[0]):
        raise InputError(
            "a file of this name is there that rockhead did not write", file=path, remedy="Name another folder"
        )


def _write_whole(path: Path, text: str) -> None:
    """Write a text file so that it is never seen in part: beside its place first, then moved there."""
    part = path.with_name(f".{path.name}.part")
    part.write_text(text, encoding="utf-8", newline="")
    os.replace(part, path)


def report_stage(survey: Survey, directory: Path, units: str, title: str) -> None:
    """Write figures and the report of the last interpretation into a folder.

    Parameters
    ----------
    survey : Survey
        Open, with an interpretation; its files of records are where they were.
    directory : Path
        Made where it is not there.
    units : str
        `m` or `ft`.
    title : str
        Heading of the report.

    Raises
    ------
    InputError
        If there is no interpretation, or a file of records is gone or has changed.
    """
    from interp.report import ReportContent, write_report

    section = latest_section(survey)
    survey.check_files()
    numbers = [header.record for header in survey.records() if header.has_samples]

    def records() -> Iterator[ShotRecord]:
        return (survey.read(number) for number in numbers)

    content = ReportContent(
        title=title,
        section=section,
        picks=survey.picks(),
        records=records if numbers else None,
        log=survey.log(),
        files=survey.files(),
        findings=survey_findings(survey) + out_of_date(survey),
        created=datetime.date.today().isoformat(),
    )
    make_folder(directory)
    with click.progressbar(length=max(1, len(numbers)), label="Drawing", file=sys.stderr) as bar:
        path = write_report(directory, content, units, progress=lambda done, _all: bar.update(done - bar.pos))
    click.echo(f"Report: {path}")


def process_files(
    files: Sequence[Path],
    directory: Path,
    settings: InterpretSettings,
    *,
    sigma_ms: float | None,
    interval_us: float | None,
    geometry: Path | None,
    units: str,
    title: str,
) -> tuple[DepthSection, list[Finding]]:
    """Take files the whole way: load, pick, interpret, export, report.

    Parameters
    ----------
    files : sequence of Path
        Records and picks.
    directory : Path
        Where everything goes: the survey file `line.survey`, the tables, figures and report.
    settings : InterpretSettings
        What was chosen.
    sigma_ms, interval_us, geometry : optional
        As the options of `rockhead load`.
    units : str
        `m` or `ft`.
    title : str
        Heading of the report.

    Returns
    -------
    section : DepthSection
        The result.
    findings : list of Finding
        What was found in files and picks; all printed already, as were the warnings of the section.

    Raises
    ------
    InputError
        If anything cannot be used. What was done before stays in the survey file.
    """
    from picker.gather import PickSettings
    from picker.survey import Survey

    _refuse_inputs_in_the_way(files, directory)
    place = directory / SURVEY_NAME
    with _folder_for(place):
        if place.exists():
            click.echo(f"{place} is there already: the files are added to it where they are new.")
        loaded = load_stage(place, files, sigma_ms, interval_us, geometry, units)
    findings = list(loaded.findings)
    with Survey.open(place) as survey:
        echo_compiling()
        survey.check_files()
        imported = survey.imported_records()
        numbers = [header.record for header in survey.records() if header.has_samples]
        to_pick = [number for number in numbers if number not in imported]
        if to_pick:
            click.echo("\nPicks")
            unpicked = pick_stage(survey, to_pick, PickSettings())
            echo_findings(unpicked)
            findings += unpicked
        if len(to_pick) < len(numbers):
            click.echo(f"Picks that came in from a file are used for {count_words(len(imported), 'record')}.")
        section = interpret_stage(survey, settings, units)
        export_stage(survey, directory, units)
        report_stage(survey, directory, units, title)
    return section, findings


def _refuse_inputs_in_the_way(files: Sequence[Path], directory: Path) -> None:
    """Refuse inputs that an output would be written over."""
    written = {"picks.csv", "depths.csv", "bounds.csv", "velocities.csv", "section.json", "report.html", SURVEY_NAME}
    for path in files:
        if path.name in written and path.resolve().parent == directory.resolve():
            raise InputError(
                "the output would be written over this input", file=path, remedy="Name another folder with --out"
            )


@contextlib.contextmanager
def _folder_for(place: Path) -> Iterator[None]:
    """Make the folder of a file to come; take away what was made where the file does not come."""
    missing = [folder for folder in [place.parent, *place.parent.parents] if not folder.exists()]
    make_folder(place.parent)
    try:
        yield
    except BaseException:
        for folder in missing:
            with contextlib.suppress(OSError):
                folder.rmdir()
        raise
