"""The steps from files to picks as a person sees them: each does its part and prints what came of it."""

from __future__ import annotations

import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import click

from picker.terminal import ROWS_SHOWN, count_words, echo_findings, table_lines

if TYPE_CHECKING:
    from picker.findings import Finding
    from picker.gather import PickSettings
    from picker.loading import Loaded
    from picker.picks import PickTable
    from picker.survey import Survey


def load_stage(
    survey: Path,
    files: Sequence[Path],
    sigma_ms: float | None,
    interval_us: float | None,
    geometry: Path | None,
    units: str,
) -> Loaded:
    """Take files into a survey file and print a line a record and what was found.

    Parameters
    ----------
    survey : Path
        The survey file, created where it is not there.
    files : sequence of Path
        Files of records and of picks.
    sigma_ms, interval_us, geometry : optional
        As the options of `rockhead load`.
    units : str
        `m` or `ft`, for lengths as printed.

    Returns
    -------
    Loaded

    Raises
    ------
    InputError
        If anything cannot be used; the survey file is as it was then.
    """
    from picker.loading import load_files

    loaded = load_files(
        survey,
        files,
        sigma_s=None if sigma_ms is None else sigma_ms * 1e-3,
        interval_s=None if interval_us is None else interval_us * 1e-6,
        geometry_path=geometry,
    )
    _echo_loaded(loaded, survey, units)
    return loaded


def _echo_loaded(loaded: Loaded, survey: Path, units: str) -> None:
    """Print what was loaded: a line a record, what was found, and one that sums up."""
    import numpy as np

    from picker.units import columns_in

    rows = []
    for header in loaded.records[:ROWS_SHOWN]:
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
        for line in table_lines((*titles, "start (ms)", "dead"), rows):
            click.echo(line.rstrip())
        if len(loaded.records) > len(rows):
            click.echo(f"... and {count_words(len(loaded.records) - len(rows), 'record')} more")
    for path in loaded.known_files:
        click.echo(f"{path.name}: in the survey already, nothing changed")
    echo_findings(list(loaded.findings))
    done = [
        count_words(number, what)
        for number, what in ((len(loaded.new), "record"), (loaded.picks_changed, "pick"))
        if number
    ]
    if done:
        click.echo(f"{'Created' if loaded.created else 'Updated'} {survey}: {' and '.join(done)} loaded.")
    else:
        click.echo(f"Nothing new: {survey} is as it was.")


def echo_compiling() -> None:
    """Say why nothing happens for a while the first time."""
    click.echo("Getting ready (the first run compiles the numerical parts, once).", err=True)


def pick_stage(survey: Survey, records: Sequence[int], settings: PickSettings) -> list[Finding]:
    """Pick some records of an open survey, keep the picks in it and print a line a record.

    Parameters
    ----------
    survey : Survey
        Open.
    records : sequence of int
        Records with samples.
    settings : PickSettings
        What is assumed.

    Returns
    -------
    list of Finding
        Records without any pick.

    Raises
    ------
    InputError
        If a file of records is gone or has changed.
    """
    from picker.gather import pick_records

    with click.progressbar(length=len(records), label="Picking", file=sys.stderr) as bar:
        shots = (survey.read(record) for record in records)
        table = pick_records(shots, settings, progress=lambda _done: bar.update(1))
    survey.store_picks(table, reason=repr(settings))
    return _echo_picked(survey.picks(), set(records))


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
    for line in table_lines(("record", "kept", "none", "dropped", "by hand", "median sigma (ms)"), rows[:ROWS_SHOWN]):
        click.echo(line.rstrip())
    if len(rows) > ROWS_SHOWN:
        click.echo(f"... and {count_words(len(rows) - ROWS_SHOWN, 'record')} more")
    kept = picks.kept & np.isin(picks.record, sorted(records))
    total = f"{int(kept.sum())} picks kept of {int(np.isin(picks.record, sorted(records)).sum())} traces"
    if kept.any():
        total += f", median sigma {float(np.median(picks.sigma_s[kept])) * 1e3:.2f} ms"
    click.echo(f"{total}.")
    return findings
