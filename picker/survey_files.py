"""The files that the records of a survey lie in: taken in once, known again by their content, noticed when changed.

Functions on the open survey file; `picker.survey` owns the transactions.
"""

from __future__ import annotations

import hashlib
import os
import sqlite3
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from picker import log, record_rows, schema
from picker.errors import InputError
from picker.findings import Finding
from picker.records import ShotHeader

_CHUNK_BYTES = 1 << 20


@dataclass(frozen=True)
class FileFacts:
    """By what a file is known again: size, time of last change, checksum."""

    path: Path
    size: int
    mtime_ns: int
    sha256: str


def file_facts(path: Path) -> FileFacts:
    """Read a file through for its checksum.

    Raises
    ------
    InputError
        If it cannot be read.
    """
    digest = hashlib.sha256()
    try:
        with path.open("rb") as file:
            stat = os.fstat(file.fileno())
            while chunk := file.read(_CHUNK_BYTES):
                digest.update(chunk)
    except OSError as error:
        raise InputError(
            f"cannot be read ({error.strerror or error})",
            file=path,
            remedy="Put the file back where it was, or check who may read it",
        ) from error
    return FileFacts(path, stat.st_size, stat.st_mtime_ns, digest.hexdigest())


def add_file(
    connection: sqlite3.Connection,
    folder: Path,
    facts: FileFacts,
    headers: Sequence[ShotHeader],
    findings: Sequence[Finding],
    *,
    corrected: bool,
) -> list[int]:
    """Take in the shots of one file; parameters and errors as in `Survey.add_file`.

    `folder` is the one from which paths of files are counted.
    """
    path = _relative(facts.path, folder)
    known = connection.execute("SELECT * FROM file WHERE sha256 = ?", (facts.sha256,)).fetchone()
    if known is None:
        known = connection.execute("SELECT * FROM file WHERE path = ?", (path,)).fetchone()
    batch = log.next_batch(connection)
    if known is not None:
        if known["sha256"] == facts.sha256 and (not corrected or _same_records(connection, folder, known, headers)):
            _note_place(connection, folder, known, facts, batch)
            return []
        _forget(connection, known, facts, batch)
    file_id = connection.execute(
        "INSERT INTO file (path, size, mtime_ns, sha256, loaded_utc) VALUES (?, ?, ?, ?, ?)",
        (path, facts.size, facts.mtime_ns, facts.sha256, schema.now_utc()),
    ).lastrowid
    own = [header.record for header in headers]
    numbers = record_rows.free_numbers(connection, own)
    for header, number in zip(headers, numbers, strict=True):
        record_rows.add_record(connection, header, number, file_id)
    moved = [f"{old} is {new}" for old, new in zip(own, numbers, strict=True) if old != new]
    if moved:
        text = f"Record numbers that the survey had already are changed: {', '.join(moved)}."
        findings = [*findings, Finding("note", text)]
    number_of: dict[int | None, int] = dict(zip(own, numbers, strict=True))
    connection.executemany(
        "INSERT INTO finding (file_id, severity, record, channel, text, proposal) VALUES (?, ?, ?, ?, ?, ?)",
        [(file_id, one.severity, number_of.get(one.record), one.channel, one.text, one.proposal) for one in findings],
    )
    log.append(connection, batch, "load", new={"file": path, "sha256": facts.sha256, "records": numbers})
    return numbers


def _relative(path: Path, folder: Path) -> str:
    """Path from the survey file's folder, so that both can be moved together; absolute on another drive."""
    try:
        return Path(os.path.relpath(path.resolve(), folder)).as_posix()
    except ValueError:
        return path.resolve().as_posix()


def _same_records(
    connection: sqlite3.Connection, folder: Path, known: sqlite3.Row, headers: Sequence[ShotHeader]
) -> bool:
    """Whether the records of a known file have the sample intervals and positions that they come with now."""
    there = record_rows.read_headers(connection, folder, "record.file_id = ?", (known["id"],))
    there.sort(key=lambda header: (header.first_byte, header.original_record))
    come = sorted(headers, key=lambda header: (header.first_byte, header.original_record))
    return len(there) == len(come) and all(
        old.interval_s == new.interval_s
        and np.array_equal(old.source_xyz, new.source_xyz)
        and np.array_equal(old.receiver_xyz, new.receiver_xyz)
        for old, new in zip(there, come, strict=True)
    )


def _note_place(connection: sqlite3.Connection, folder: Path, known: sqlite3.Row, facts: FileFacts, batch: int) -> None:
    """Keep the time of a known file up to date, and its path where the old one leads nowhere any more."""
    old, new = known["path"], _relative(facts.path, folder)
    if old == new:
        connection.execute("UPDATE file SET mtime_ns = ? WHERE id = ?", (facts.mtime_ns, known["id"]))
    elif not (folder / old).exists():
        connection.execute("UPDATE file SET path = ?, mtime_ns = ? WHERE id = ?", (new, facts.mtime_ns, known["id"]))
        log.append(connection, batch, "relocate", old={"file": old}, new={"file": new})


def _forget(connection: sqlite3.Connection, known: sqlite3.Row, facts: FileFacts, batch: int) -> None:
    """Take out a file that comes again changed, unless work was done on it: the log says so."""
    worked_on = connection.execute(
        "SELECT MIN(log.record) FROM log JOIN record USING (record) WHERE record.file_id = ?", (known["id"],)
    ).fetchone()[0]
    if worked_on is not None:
        changed = known["sha256"] != facts.sha256
        what = "other content" if changed else "another sample interval or geometry"
        raise InputError(
            f"was loaded before with {what} and has picks already",
            file=facts.path,
            record=worked_on,
            expected=f"checksum {known['sha256'][:12]}..." if changed else None,
            found=f"{facts.sha256[:12]}..." if changed else None,
            remedy="Load it into a new survey file",
        )
    records = [row[0] for row in connection.execute("SELECT record FROM record WHERE file_id = ?", (known["id"],))]
    connection.execute(
        "DELETE FROM trace WHERE record IN (SELECT record FROM record WHERE file_id = ?)", (known["id"],)
    )
    for table in ("record", "finding"):
        connection.execute(f"DELETE FROM {table} WHERE file_id = ?", (known["id"],))
    connection.execute("DELETE FROM file WHERE id = ?", (known["id"],))
    old = {"file": known["path"], "sha256": known["sha256"], "records": records}
    log.append(connection, batch, "load", old=old, reason="loaded again, changed")


def check_unchanged(connection: sqlite3.Connection, header: ShotHeader) -> None:
    """Make sure that a record's file is what was loaded: by size and time, and where those differ by checksum.

    Raises
    ------
    InputError
        If the file is gone or has changed.
    """
    known = connection.execute(
        "SELECT file.* FROM file JOIN record ON record.file_id = file.id WHERE record = ?", (header.record,)
    ).fetchone()
    try:
        stat = header.file.stat()
    except OSError as error:
        raise InputError(
            "the file of the record is gone",
            file=header.file,
            record=header.record,
            remedy="Put it back, or load it from where it is now: the survey knows it again by its content",
        ) from error
    if (stat.st_size, stat.st_mtime_ns) == (known["size"], known["mtime_ns"]):
        return
    facts = file_facts(header.file)
    if facts.sha256 != known["sha256"]:
        raise InputError(
            "the file has changed since it was loaded",
            file=header.file,
            record=header.record,
            expected=f"{known['size']} bytes with checksum {known['sha256'][:12]}...",
            found=f"{facts.size} bytes with checksum {facts.sha256[:12]}...",
            remedy="Put the original back, or load the changed file into a new survey file",
        )
