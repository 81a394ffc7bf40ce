"""The commands that turn records into picks, and the group that gives every command its exit status.

A command parses, calls one function and prints. Results go to standard output, progress and messages to standard error.
"""

from __future__ import annotations

import sqlite3
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from picker.errors import InputError

if TYPE_CHECKING:
    from picker.findings import Finding
    from picker.loading import Loaded
    from picker.log import LogEntry
    from picker.picks import PickTable

EXIT_FINDINGS = 1
EXIT_INPUT = 2
EXIT_STOPPED = 130
_ROWS_SHOWN = 60
_PLACES_SHOWN = 4


_POSITIVE = click.FloatRange(min=0, min_open=True)
_NOT_NEGATIVE = click.FloatRange(min=0)


class CommandGroup(click.Group):
    """A group of commands whose exit status is 0 done, 1 findings to look at, 2 unusable input, 130 stopped."""

    def invoke(self, ctx: click.Context) -> Any:
        """Run a command; what could not be used becomes one message and status 2."""
        try:
            return super().invoke(ctx)
        except InputError as error:
            raise _Unusable(str(error)) from error
        except click.UsageError:
            raise
        except click.ClickException as error:
            raise _Unusable(error.format_message()) from error
        except BrokenPipeError:
            raise
        except sqlite3.Error as error:
            raise _Unusable(f"the survey file is damaged ({error}). Put a copy in its place.") from error
        except OSError as error:
            place = f"{error.filename}: " if error.filename else ""
            raise _Unusable(f"{place}{error.strerror or error}.") from error
        except (KeyboardInterrupt, click.Abort):
            click.echo("Stopped. What was reported as done is kept.", err=True)
            ctx.exit(EXIT_STOPPED)


class _Unusable(click.ClickException):
    """What click prints as `Error: ...` and ends with status 2."""

    exit_code = EXIT_INPUT


def survey_argument(command: Any) -> Any:
    """Give a command its first argument, the survey file."""
    return click.argument("survey", type=click.Path(path_type=Path))(command)


def _table(header: tuple[str, ...], rows: Sequence[tuple[str, ...]]) -> list[str]:
    """Lines of a table, columns aligned to the right."""
    widths = [max(len(row[column]) for row in [header, *rows]) for column in range(len(header))]
    return ["  ".join(cell.rjust(width) for cell, width in zip(row, widths, strict=True)) for row in [header, *rows]]


def echo_findings(findings: list[Finding]) -> None:
    """Print findings to standard output, those that say the same of several places once."""
    places: dict[tuple[str, str, str], list[str]] = {}
    for finding in sorted(findings, key=lambda one: one.severity != "look"):
        where = ", ".join(
            [Path(finding.file).name] * bool(finding.file)
            + [f"record {finding.record}"] * (finding.record is not None)
            + [f"channel {finding.channel}"] * (finding.channel is not None)
        )
        places.setdefault((finding.severity, finding.text, finding.proposal), []).append(where)
    for (severity, text, proposal), where_all in places.items():
        where = "; ".join(where_all[:_PLACES_SHOWN])
        if len(where_all) > _PLACES_SHOWN:
            where += f" and {len(where_all) - _PLACES_SHOWN} more"
        place = f" {where}:" if where else ""
        click.echo(f"{'LOOK' if severity == 'look' else 'Note'}{place} {text} {proposal}".rstrip())


def _needs_a_look(findings: list[Finding]) -> bool:
    """Whether a person must look at any of the findings."""
    return any(finding.severity == "look" for finding in findings)


@click.command()
@survey_argument
@click.argument("files", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="FILE...")
@click.option(
    "--sigma-ms",
    type=_POSITIVE,
    help="Standard error of picks that come without one, in milliseconds.",
)
@click.option(
    "--interval-us",
    type=_POSITIVE,
    help="Sample interval of the records in microseconds, whatever their headers say.",
)
@click.option(
    "--geometry",
    type=click.Path(path_type=Path),
    help="Table (.csv) of positions that replace those in the headers: record, channel, source_x_m, receiver_x_m, ...",
)
@click.option("--units", type=click.Choice(["m", "ft"]), default="m", show_default=True, help="Lengths as printed.")
def load(
    survey: Path,
    files: tuple[Path, ...],
    sigma_ms: float | None,
    interval_us: float | None,
    geometry: Path | None,
    units: str,
) -> None:
    """Load shot records (SEG-Y) and picks (.csv) into a survey file.

    The survey file is created where it is not there. Records stay in their files: keep those. Loading the same
    files again changes nothing; if one file cannot be used, none is loaded.

    \b
    Example:
      rockhead load mill_lane.survey records/*.sgy
      rockhead load mill_lane.survey records/*.sgy --geometry positions.csv
      rockhead load mill_lane.survey picks.csv --sigma-ms 1
    """  # noqa: D301 - click wants the character
    from picker.loading import load_files

    loaded = load_files(
        survey,
        files,
        sigma_s=None if sigma_ms is None else sigma_ms * 1e-3,
        interval_s=None if interval_us is None else interval_us * 1e-6,
        geometry_path=geometry,
    )
    _echo_loaded(loaded, survey, units)
    if _needs_a_look(list(loaded.findings)):
        raise click.exceptions.Exit(EXIT_FINDINGS)


def _echo_loaded(loaded: Loaded, survey: Path, units: str) -> None:
    """Print what was loaded: a line a record, what was found, and one that sums up."""
    import numpy as np

    from picker.units import columns_in

    rows = []
    for header in loaded.records[:_ROWS_SHOWN]:
        lengths = columns_in(
            units,
            {
                "shot_x_m": [header.source_xyz[0]],
                "first_x_m": [header.receiver_xyz[:, 0].min()],
                "last_x_m": [header.receiver_xyz[:, 0].max()],
            },
        )
        shot_x, first_x, last_x = (f"{float(values[0]):.1f}" for values in lengths.values())
        number = str(header.record)
        if header.record != header.original_record:
            number += f" (was {header.original_record})"
        rows.append(
            (
                number,
                shot_x,
                f"{header.channel.size}",
                f"{first_x} to {last_x}",
                f"{header.interval_s * 1e3:g}",
                f"{int(header.valid.max())}",
                f"{float(np.median(header.start_s)) * 1e3:g}",
                f"{int((header.state == 'dead').sum()) or ''}",
            )
        )
    if rows:
        titles = ("record", f"shot x ({units})", "traces", f"geophones x ({units})", "interval (ms)", "samples")
        for line in _table((*titles, "start (ms)", "dead"), rows):
            click.echo(line.rstrip())
        if len(loaded.records) > len(rows):
            click.echo(f"... and {_count(len(loaded.records) - len(rows), 'record')} more")
    for path in loaded.known_files:
        click.echo(f"{path.name}: in the survey already, nothing changed")
    echo_findings(list(loaded.findings))
    done = [
        _count(number, what) for number, what in ((len(loaded.new), "record"), (loaded.picks_changed, "pick")) if number
    ]
    if done:
        click.echo(f"{'Created' if loaded.created else 'Updated'} {survey}: {' and '.join(done)} loaded.")
    else:
        click.echo(f"Nothing new: {survey} is as it was.")


def _count(number: int, what: str) -> str:
    """Number of things in words."""
    return f"{number} {what}" if number == 1 else f"{number} {what}s"


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
        click.echo("Getting ready (the first run compiles the picking, once).", err=True)
        from dataclasses import replace

        from picker.gather import PickSettings, pick_records

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
        with click.progressbar(length=len(headers), label="Picking", file=sys.stderr) as bar:
            shots = (opened.read(header.record) for header in headers)
            table = pick_records(shots, settings, progress=lambda _done: bar.update(1))
        opened.store_picks(table, reason=repr(settings))
        findings = _echo_picked(opened.picks(), {header.record for header in headers})
    if replaced:
        numbers = ", ".join(map(str, replaced))
        click.echo(f"Imported picks of records {numbers} are replaced; they stay in the log.", err=True)
    echo_findings(findings)
    if _needs_a_look(findings):
        raise click.exceptions.Exit(EXIT_FINDINGS)


def _given(**options: float | None) -> dict[str, Any]:
    """Options that were given."""
    return {name: value for name, value in options.items() if value is not None}


def _echo_picked(picks: PickTable, records: set[int]) -> list[Finding]:
    """Print a line a record on the picks as they hold now; findings are records without any."""
    import numpy as np

    from picker.findings import Finding

    rows = []
    findings = []
    for record in sorted(records):
        mine = picks.record == record
        kept = mine & picks.kept
        sigma_ms = f"{float(np.median(picks.sigma_s[kept])) * 1e3:.2f}" if kept.any() else ""
        manual = int((mine & (picks.origin == "manual")).sum())
        rows.append(
            (
                f"{record}",
                f"{int(kept.sum())}",
                f"{int((mine & (picks.state == 'none')).sum())}",
                f"{int((mine & (picks.state == 'dropped')).sum())}",
                f"{manual or ''}",
                sigma_ms,
            )
        )
        if not kept.any():
            findings.append(Finding("look", "No first arrival could be picked.", "Look at the gather.", record=record))
    for line in _table(("record", "kept", "none", "dropped", "by hand", "median sigma (ms)"), rows[:_ROWS_SHOWN]):
        click.echo(line.rstrip())
    if len(rows) > _ROWS_SHOWN:
        click.echo(f"... and {_count(len(rows) - _ROWS_SHOWN, 'record')} more")
    kept = picks.kept & np.isin(picks.record, sorted(records))
    total = f"{int(kept.sum())} picks kept of {int(np.isin(picks.record, sorted(records)).sum())} traces"
    if kept.any():
        total += f", median sigma {float(np.median(picks.sigma_s[kept])) * 1e3:.2f} ms"
    click.echo(f"{total}.")
    return findings


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
