"""The report: one HTML file that needs nothing else, with its figures beside it as PNG.

It opens with the answer and says what the answer does not hold; everything that comes from a file or a person is
escaped. The same content gives the same bytes.
"""

from __future__ import annotations

import base64
import os
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from jinja2 import DictLoader, Environment, StrictUndefined

from interp import report_tables, report_text
from interp.figure_style import png_bytes
from interp.figures_gather import gather_figure
from interp.figures_quality import pick_quality_figure
from interp.figures_section import section_figure
from interp.figures_travel_times import record_numbers, travel_time_figure
from interp.plane_pairs import plane_pairs
from interp.section import DepthSection
from interp.section_text import quality_line, velocity_table
from picker.picks import PickTable

if TYPE_CHECKING:
    from picker.findings import Finding
    from picker.log import LogEntry
    from picker.records import ShotRecord

MOST_GATHERS = 24  # more than this would make the report too large to send and too long to read
_TEMPLATE = "report.html.j2"
_GATHER = "gather_"


@dataclass(frozen=True, eq=False)
class ReportContent:
    """Everything a report tells.

    Parameters
    ----------
    title : str
        Heading.
    section : DepthSection
        The result.
    picks : PickTable
        All picks of the survey.
    records : callable giving an iterable of ShotRecord, or None
        Called once; the records are drawn one by one as they come. None where there are picks only.
    log : sequence of LogEntry
        The survey's log, oldest first.
    files : sequence of (str, str)
        Name and SHA-256 checksum of every input file.
    findings : sequence of Finding
        What was found in the input.
    created : str
        The date to print, given by the caller.
    """

    title: str
    section: DepthSection
    picks: PickTable
    records: Callable[[], Iterable[ShotRecord]] | None
    log: Sequence[LogEntry]
    files: Sequence[tuple[str, str]]
    findings: Sequence[Finding]
    created: str


@dataclass(frozen=True)
class _Picture:
    """A figure as it stands in the report."""

    data: str
    words: str


def write_report(
    directory: Path,
    content: ReportContent,
    units: str = "m",
    progress: Callable[[int, int], None] | None = None,
) -> Path:
    """Write `report.html` and `figures/*.png` into a folder.

    Parameters
    ----------
    directory : Path
        Made where it is not there. Files of these names are replaced, and gathers of an earlier report taken away.
    content : ReportContent
        What to tell.
    units : str
        `m` or `ft`.
    progress : callable of (done, all), optional
        Called after each record that was drawn.

    Returns
    -------
    Path
        The HTML file. With more than `MOST_GATHERS` records it shows one of every shot place, as many as that; all
        are in the folder of figures.

    Raises
    ------
    OSError
        If the folder cannot be written into.
    """
    figures = directory / "figures"
    figures.mkdir(parents=True, exist_ok=True)
    section, picks = content.section, content.picks

    names: set[str] = set()

    def keep(name: str, png: bytes) -> str:
        names.add(name)
        _write_whole(figures / f"{name}.png", png)
        return base64.b64encode(png).decode("ascii")

    pictures = {
        "section": keep("section", png_bytes(section_figure(section, picks, units))),
        "travel_times": keep("travel_times", png_bytes(travel_time_figure(section, units))),
        "pick_quality": keep("pick_quality", png_bytes(pick_quality_figure(picks, section, units))),
    }
    shown = shown_gathers(picks)
    total = np.unique(picks.record).size
    gathers: list[_Picture] = []
    drawn = 0
    for drawn, record in enumerate(content.records() if content.records is not None else (), start=1):
        data = keep(f"{_GATHER}{record.record:04d}", png_bytes(gather_figure(record, picks, section, units)))
        if record.record in shown:
            gathers.append(_Picture(data, f"Record {record.record} with its picks"))
        if progress is not None:
            progress(drawn, max(total, drawn))
    for stale in set(figures.glob(f"{_GATHER}*.png")) - {figures / f"{name}.png" for name in names}:
        stale.unlink()  # of an earlier report: a folder with two surveys in it misleads
    path = directory / "report.html"
    _write_whole(path, _html(content, units, pictures, gathers, drawn).encode("utf-8"))
    return path


def shown_gathers(picks: PickTable) -> frozenset[int]:
    """Choose the records whose gathers stand in the report.

    Parameters
    ----------
    picks : PickTable
        All picks.

    Returns
    -------
    frozenset of int
        All of them up to `MOST_GATHERS`; beyond that of every shot place the record with most kept picks, and of
        these as many, spread evenly over the places.
    """
    records, first = np.unique(picks.record, return_index=True)
    if records.size <= MOST_GATHERS:
        return frozenset(records.tolist())
    kept = {record: int(np.sum(picks.kept & (picks.record == record))) for record in records.tolist()}
    best: dict[tuple[float, ...], int] = {}
    for record, row in zip(records.tolist(), first.tolist(), strict=True):
        place = tuple(np.round(picks.source_xyz[row, :2], 1).tolist())
        if place not in best or kept[record] > kept[best[place]]:
            best[place] = record
    chosen = [best[place] for place in sorted(best)]
    if len(chosen) > MOST_GATHERS:
        spread = np.unique(np.linspace(0, len(chosen) - 1, MOST_GATHERS).round().astype(int))
        chosen = [chosen[number] for number in spread.tolist()]
    return frozenset(chosen)


def _html(content: ReportContent, units: str, pictures: dict[str, str], gathers: Sequence[_Picture], drawn: int) -> str:
    """The whole page."""
    section, picks = content.section, content.picks
    pairs = plane_pairs(section) if section.layers else []
    kinds = {entry.kind for entry in content.log}
    steps, sources = report_text.methods(picked="pick" in kinds or "import" not in kinds, pairs=bool(pairs))
    environment = Environment(
        loader=DictLoader({_TEMPLATE: (files("interp") / "templates" / _TEMPLATE).read_text(encoding="utf-8")}),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template(_TEMPLATE).render(
        title=content.title,
        created=content.created,
        units=units,
        answer=report_text.answer(section, units),
        weak=report_text.weak_points(section, units),
        look=report_text.to_look_at(section, content.findings),
        notes=[str(finding) for finding in content.findings if finding.severity == "note"],
        pictures=pictures,
        depths=report_tables.depths_of_geophones(section, units),
        velocities=velocity_table(section, units),
        inside=report_text.in_the_intervals(section),
        outside=report_text.not_in_the_intervals(section),
        cautions=report_text.CAUTIONS,
        quality=quality_line(section),
        records=report_tables.records_table(section, picks, units),
        pairs=report_tables.plane_pairs_table(section, pairs, units) if pairs else None,
        missing=report_text.missing_errors(picks),
        pick_notes=report_tables.notes_table(picks),
        gathers=gathers,
        drawn=drawn,
        shown_records=record_numbers(sorted(shown_gathers(picks))),
        changes=report_tables.changes_table(content.log),
        settings=report_tables.settings_table(section.settings),
        files=content.files,
        steps=steps,
        sources=sources,
    )


def _write_whole(path: Path, data: bytes) -> None:
    """Write a file so that it is never seen in part: beside its place first, then moved there."""
    part = path.with_name(f".{path.name}.part")
    part.write_bytes(data)
    os.replace(part, path)
