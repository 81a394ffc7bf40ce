"""The commands that turn records into picks: each parses, calls one step and ends with its status."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from picker.errors import InputError
from picker.stages import echo_compiling, load_stage, pick_stage
from picker.terminal import EXIT_FINDINGS, CommandGroup, echo_findings, needs_a_look, survey_argument, units_option

if TYPE_CHECKING:
    from picker.log import LogEntry

_POSITIVE = click.FloatRange(min=0, min_open=True)
_NOT_NEGATIVE = click.FloatRange(min=0)


def load_options(command: Any) -> Any:
    """Give a command the options of loading files."""
    options = (
        click.option(
            "--sigma-ms", type=_POSITIVE, help="Standard error of picks that come without one, in milliseconds."
        ),
        click.option(
            "--interval-us",
            type=_POSITIVE,
            help="Sample interval of the records in microseconds, whatever their headers say.",
        ),
        click.option(
            "--geometry",
            type=click.Path(path_type=Path),
            help="Table (.csv) of positions that replace those in the headers: record, channel, source_x_m, "
            "receiver_x_m, ...",
        ),
    )
    for option in reversed(options):
        command = option(command)
    return command


@click.command()
@survey_argument
@click.argument("files", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="FILE...")
@load_options
@units_option
def load(
    survey: Path,
    files: tuple[Path, ...],
    sigma_ms: float | None,
    interval_us: float | None,
    geometry: Path | None,
    units: str,
) -> None:
    """Load shot records (SEG-Y, SEG-2) and picks (.csv) into a survey file.

    The survey file is created where it is not there. Records stay in their files: keep those. Loading the same
    files again changes nothing; if one file cannot be used, none is loaded.

    \b
    Example:
      rockhead load mill_lane.survey records/*.sgy
      rockhead load mill_lane.survey records/*.sgy --geometry positions.csv
      rockhead load mill_lane.survey picks.csv --sigma-ms 1
    """  # noqa: D301 - click wants the character
    loaded = load_stage(survey, files, sigma_ms, interval_us, geometry, units)
    if needs_a_look(loaded.findings):
        raise click.exceptions.Exit(EXIT_FINDINGS)


@click.command()
@survey_argument
@click.option("--slowest-m-s", type=_POSITIVE, help="Least apparent velocity of a first arrival, m/s.")
@click.option("--fastest-m-s", type=_POSITIVE, help="Greatest apparent velocity of a first arrival, m/s.")
@click.option("--latest-ms", type=_POSITIVE, help="No first arrival is looked for after this time, in milliseconds.")
@click.option("--time-break-sigma-ms", type=_NOT_NEGATIVE, help="Standard error of a time break, in milliseconds.")
@click.option("--geophone-sigma-ms", type=_NOT_NEGATIVE, help="Standard error shared by all picks at one geophone.")
@click.option("--keep-confidence", type=click.FloatRange(0, 1), help="Least probability of a pick that is kept.")
def pick(
    survey: Path,
    slowest_m_s: float | None,
    fastest_m_s: float | None,
    latest_ms: float | None,
    time_break_sigma_ms: float | None,
    geophone_sigma_ms: float | None,
    keep_confidence: float | None,
) -> None:
    """Pick the first arrivals of every record of a survey, with their errors.

    What was changed by hand stays on top. The first run compiles the picking, which takes a while once.

    \b
    Example:
      rockhead pick mill_lane.survey
      rockhead pick mill_lane.survey --slowest-m-s 200 --fastest-m-s 6000
    """  # noqa: D301 - click wants the character
    from picker.survey import Survey

    with Survey.open(survey) as opened:
        headers = [header for header in opened.records() if header.has_samples]
        if not headers:
            raise InputError(
                "the survey has no records to pick", file=survey, remedy=f"Load some: rockhead load {survey} FILE..."
            )
        opened.check_files()
        replaced = sorted(opened.imported_records() & {header.record for header in headers})
        echo_compiling()
        from dataclasses import replace

        from picker.gather import PickSettings

        settings = PickSettings()
        moveout = _given(slowest_m_s=slowest_m_s, fastest_m_s=fastest_m_s)
        others = _given(
            latest_s=None if latest_ms is None else latest_ms * 1e-3,
            time_break_sigma_s=None if time_break_sigma_ms is None else time_break_sigma_ms * 1e-3,
            geophone_sigma_s=None if geophone_sigma_ms is None else geophone_sigma_ms * 1e-3,
            keep_confidence=keep_confidence,
        )
        try:
            settings = replace(settings, moveout=replace(settings.moveout, **moveout), **others)
        except ValueError as error:
            raise click.UsageError(f"The settings do not go together: {error}.") from error
        if settings.moveout.slowest_m_s >= settings.moveout.fastest_m_s:
            raise click.UsageError("--slowest-m-s must be less than --fastest-m-s.")
        findings = pick_stage(opened, [header.record for header in headers], settings)
    if replaced:
        numbers = ", ".join(map(str, replaced))
        click.echo(f"Imported picks of records {numbers} are replaced; they stay in the log.", err=True)
    echo_findings(findings)
    if needs_a_look(findings):
        raise click.exceptions.Exit(EXIT_FINDINGS)


def _given(**options: float | None) -> dict[str, Any]:
    """Options that were given."""
    return {name: value for name, value in options.items() if value is not None}


@click.command()
@survey_argument
@click.option("--record", type=int, help="Record number in the survey.")
@click.option("--channel", type=int, help="Channel of the trace.")
@click.option("--time-ms", type=float, help="Onset after the time break as recorded, in milliseconds.")
@click.option("--sigma-ms", type=float, help="Its standard error in milliseconds; that of the pick below if left out.")
@click.option("--drop", is_flag=True, help="Take the pick out of use.")
@click.option("--why", help="The reason, kept in the log; needed for every change.")
@click.option("--undo", is_flag=True, help="Take back the last change.")
@click.option("--redo", is_flag=True, help="Take back the last undo.")
@click.option("--log", "show_log", is_flag=True, help="Show every change ever made.")
def override(
    survey: Path,
    record: int | None,
    channel: int | None,
    time_ms: float | None,
    sigma_ms: float | None,
    drop: bool,
    why: str | None,
    undo: bool,
    redo: bool,
    show_log: bool,
) -> None:
    """Change one pick by hand, undo a change, or show the log.

    A change lies on top of the automatic pick: picking again keeps it, undoing it shows the automatic pick.

    \b
    Example:
      rockhead override mill_lane.survey --record 7 --channel 12 --time-ms 18.4 --sigma-ms 0.5 --why "weak onset"
      rockhead override mill_lane.survey --record 7 --channel 13 --drop --why "air wave"
      rockhead override mill_lane.survey --undo
    """  # noqa: D301 - click wants the character
    from picker.survey import Survey

    changing = [record, channel, time_ms, sigma_ms, drop or None, why]
    if undo + redo + show_log + any(value is not None for value in changing) != 1:
        raise click.UsageError("Give a change, or one of --undo, --redo and --log.")
    with Survey.open(survey) as opened:
        if show_log:
            click.echo_via_pager(f"{line}\n" for line in map(_log_line, opened.log()))
        elif undo or redo:
            taken_back = opened.undo() if undo else opened.redo()
            if not taken_back:
                raise InputError(
                    f"there is nothing to {'undo' if undo else 'redo'}", file=survey, remedy="See the log with --log"
                )
            _echo_last_changes(opened.log())
        else:
            if record is None or channel is None:
                raise click.UsageError("Name the trace with --record and --channel.")
            if not why or not why.strip():
                raise click.UsageError("Say why with --why; the reason is kept in the log.")
            opened.override(
                record,
                channel,
                None if time_ms is None else time_ms * 1e-3,
                None if sigma_ms is None else sigma_ms * 1e-3,
                drop,
                why.strip(),
            )
            _echo_last_changes(opened.log())


def _echo_last_changes(entries: list[LogEntry]) -> None:
    """Print the changes that were made together last."""
    for entry in entries:
        if entry.batch == entries[-1].batch:
            click.echo(_log_line(entry))


def _log_line(entry: LogEntry) -> str:
    """One line of the log in words."""
    parts = [f"{entry.utc}  {entry.batch:>5}  {entry.kind:<8}"]
    if entry.record is not None:
        parts.append(
            f"record {entry.record}, channel {entry.channel}: {_pick_words(entry.old)} -> {_pick_words(entry.new)}"
        )
    else:
        parts.append(
            ", ".join(f"{name} {value}" for name, value in (entry.new or entry.old).items() if name != "sha256")
        )
    if entry.undoes is not None:
        parts.append(f"takes back {entry.undoes}")
    if entry.reason:
        parts.append(f"({entry.reason})")
    return "  ".join(parts)


def _pick_words(value: dict[str, Any]) -> str:
    """One pick as the log holds it, in words."""
    pick = value.get("pick") if "override" in value else value
    if not pick:
        return "no pick"
    if pick["state"] != "kept" or pick["time_s"] is None:
        return str(pick["state"])
    return f"{pick['time_s'] * 1e3:.3f} ms +- {pick['sigma_s'] * 1e3:.3f} ms ({pick['origin']})"


@click.group(cls=CommandGroup)
def main() -> None:
    """Turn shot records of a refraction spread into first-arrival times with their errors."""


main.add_command(load)
main.add_command(pick)
main.add_command(override)
