"""Files of records and of picks taken into a survey file, all of them or none."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from picker import schema
from picker.errors import InputError
from picker.findings import Finding
from picker.geometry_csv import read_geometry_csv
from picker.picks_csv import PicksFile, read_picks_csv
from picker.records import ShotHeader, scan_file
from picker.survey import Survey
from picker.survey_files import FileFacts, file_facts

PICKS_SUFFIXES = (".csv", ".tsv", ".txt")
_RECORDS_SUFFIXES = (".sgy", ".segy", ".seg", ".sg2", ".seg2", ".dat")


@dataclass(frozen=True)
class Loaded:
    """What loading did.

    Parameters
    ----------
    created : bool
        Whether the survey file is new.
    records : tuple of ShotHeader
        Records that are in the survey from the files given, new or not.
    new : frozenset of int
        Numbers of those that are new.
    known_files : tuple of Path
        Files that the survey had already and that changed nothing.
    picks_changed : int
        How many imported picks are new or different.
    findings : tuple of Finding
        What was found in the files given.
    """

    created: bool
    records: tuple[ShotHeader, ...]
    new: frozenset[int]
    known_files: tuple[Path, ...]
    picks_changed: int
    findings: tuple[Finding, ...]


@dataclass(frozen=True)
class _Scanned:
    """A file that was looked through and can be used."""

    facts: FileFacts
    headers: Sequence[ShotHeader]
    findings: Sequence[Finding]


def load_files(
    survey_path: Path,
    files: Sequence[Path],
    sigma_s: float | None = None,
    interval_s: float | None = None,
    geometry_path: Path | None = None,
) -> Loaded:
    """Take files into a survey file, which is created where it is not there.

    Parameters
    ----------
    survey_path : Path
        The survey file.
    files : sequence of Path
        Files of shot records, and of picks (`.csv`, `.tsv`, `.txt`); records go first, so that picks find them.
    sigma_s : float, optional
        Standard error of picks that come without one, seconds.
    interval_s : float, optional
        Sample interval of the records whatever their headers say, seconds.
    geometry_path : Path, optional
        Table of positions (`picker.geometry_csv`) that replace those of the headers.

    Returns
    -------
    Loaded

    Raises
    ------
    InputError
        If anything cannot be used: nothing is loaded then, and a survey file that was not there is not created.
    """
    if survey_path.suffix.lower() in _RECORDS_SUFFIXES + PICKS_SUFFIXES:
        raise InputError(
            "is named like a file to load",
            file=survey_path,
            expected="the survey file first, by custom NAME.survey",
            found=survey_path.name,
            remedy="Write: rockhead load NAME.survey FILE...",
        )
    geometry = None if geometry_path is None else read_geometry_csv(geometry_path)
    corrected = interval_s is not None or geometry is not None
    scanned: list[_Scanned] = []
    picks: list[PicksFile] = []
    for path in files:
        if path.suffix.lower() in PICKS_SUFFIXES:
            picks.append(read_picks_csv(path, sigma_s))
        else:
            headers, findings = scan_file(path, interval_s, geometry)
            scanned.append(_Scanned(file_facts(path), headers, findings))
    if survey_path.exists():
        with Survey.open(survey_path) as survey:
            return _take_in(survey, scanned, picks, created=False, corrected=corrected)
    if not survey_path.resolve().parent.is_dir():
        raise InputError("there is no such folder", file=survey_path.parent, remedy="Create the folder first")
    return _build(survey_path, scanned, picks)


def _build(survey_path: Path, scanned: Sequence[_Scanned], picks: Sequence[PicksFile]) -> Loaded:
    """Create a survey file whole: in a folder beside its place, from which it is moved there when it is done."""
    try:
        beside = tempfile.TemporaryDirectory(prefix=f".{survey_path.name}.", dir=survey_path.resolve().parent)
    except OSError as error:
        raise InputError(
            f"the folder cannot be written ({error.strerror or error})",
            file=survey_path.resolve().parent,
            remedy="Check who may write it",
        ) from error
    with beside as folder:
        built = Path(folder) / survey_path.name
        with Survey.create(built, folder=survey_path.resolve().parent) as survey:
            loaded = _take_in(survey, scanned, picks, created=True, corrected=False)
        schema.move_file(built, survey_path)
    return loaded


def _take_in(
    survey: Survey, scanned: Sequence[_Scanned], picks: Sequence[PicksFile], *, created: bool, corrected: bool
) -> Loaded:
    """Put what was read into a survey in one transaction."""
    new: set[int] = set()
    known_files = []
    findings: list[Finding] = []
    with survey.transaction():
        for file in scanned:
            numbers = survey.add_file(file.facts, file.headers, file.findings, corrected=corrected)
            new.update(numbers)
            if not numbers:
                known_files.append(file.facts.path)
        changed = 0
        for one in picks:
            reason = f"from {os.path.basename(one.path)}"
            changed += survey.import_picks(one.table, reason, has_record=one.has_record, has_channel=one.has_channel)
    checksums = {file.facts.sha256 for file in scanned}
    records = tuple(survey.records_of_files(checksums))
    findings += survey.findings(checksums)
    for one in picks:
        findings += one.findings
    return Loaded(created, records, frozenset(new), tuple(known_files), changed, tuple(findings))
