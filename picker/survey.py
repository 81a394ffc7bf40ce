"""Survey: the one file that holds what is known of a survey; samples stay in the files they came in.

Every change is a transaction with its lines in the log. A change that raises leaves the file as it was.
"""

from __future__ import annotations

import hashlib
import json
import os
import sqlite3
from collections.abc import Collection, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import numpy as np

from picker import log, pick_layers, record_rows, schema
from picker.errors import InputError
from picker.findings import Finding
from picker.log import LogEntry
from picker.pick_layers import Override
from picker.pick_places import match_places, records_of_picks
from picker.picks import PickTable
from picker.records import ShotHeader, ShotRecord, read_shot

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


class Survey:
    """An open survey file. Use it in a `with` statement, from one thread.

    Methods that change something raise InputError where SQLite cannot write; the file is then as it was.
    """

    def __init__(self, path: Path, connection: sqlite3.Connection, folder: Path | None = None) -> None:
        self.path = path
        self._connection = connection
        self._folder = path.resolve().parent if folder is None else folder

    @classmethod
    def create(cls, path: str | os.PathLike[str], folder: Path | None = None) -> Self:
        """Create a survey file and open it.

        Parameters
        ----------
        path : path
            Where; nothing may be there.
        folder : Path, optional
            The folder that the file will be moved to, where that is not its own: paths are counted from it.

        Raises
        ------
        InputError
            If something is there or the folder cannot be written.
        """
        place = Path(path)
        schema.create_file(place)
        return cls(place, schema.open_file(place), folder)

    @classmethod
    def open(cls, path: str | os.PathLike[str]) -> Self:
        """Open a survey file; InputError if there is none, it is something else, or a newer program wrote it."""
        place = Path(path)
        return cls(place, schema.open_file(place))

    def close(self) -> None:
        """Close the file."""
        self._connection.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    @contextmanager
    def transaction(self) -> Iterator[sqlite3.Connection]:
        """All changes inside are made together or not at all; may be nested."""
        if self._connection.in_transaction:
            yield self._connection
            return
        try:
            self._connection.execute("BEGIN IMMEDIATE")
            yield self._connection
            self._connection.execute("COMMIT")
        except BaseException as error:
            if self._connection.in_transaction:
                self._connection.execute("ROLLBACK")
            if isinstance(error, sqlite3.Error):
                raise schema.storage_error(error, self.path) from error
            raise

    # files and records

    def add_file(self, facts: FileFacts, headers: Sequence[ShotHeader], findings: Sequence[Finding]) -> list[int]:
        """Take in the shots of one file.

        Parameters
        ----------
        facts : FileFacts
            The file.
        headers : sequence of ShotHeader
            Its shots. A record number that the survey has already is replaced by the next free one.
        findings : sequence of Finding
            What was found in it.

        Returns
        -------
        list of int
            Record numbers given, in the order of `headers`; empty where the survey has the file already.

        Raises
        ------
        InputError
            If the file has changed since it was loaded, or is loaded with another sample interval, and there are
            picks on its records.
        """
        with self.transaction() as connection:
            known = connection.execute("SELECT * FROM file WHERE sha256 = ?", (facts.sha256,)).fetchone()
            if known is None:
                known = next(
                    (row for row in connection.execute("SELECT * FROM file") if self._is_at(row["path"], facts.path)),
                    None,
                )
            batch = log.next_batch(connection)
            if known is not None:
                if known["sha256"] == facts.sha256 and self._same_intervals(known["id"], headers):
                    self._note_place(known, facts, batch)
                    return []
                self._forget(known, facts, batch)
            cursor = connection.execute(
                "INSERT INTO file (path, size, mtime_ns, sha256, loaded_utc) VALUES (?, ?, ?, ?, ?)",
                (self._relative(facts.path), facts.size, facts.mtime_ns, facts.sha256, schema.now_utc()),
            )
            numbers = record_rows.free_numbers(connection, [header.record for header in headers])
            for header, number in zip(headers, numbers, strict=True):
                record_rows.add_record(connection, header, number, cursor.lastrowid)
            renumbered = dict(zip([header.record for header in headers], numbers, strict=True))
            connection.executemany(
                "INSERT INTO finding (file_id, severity, record, channel, text, proposal) VALUES (?, ?, ?, ?, ?, ?)",
                [
                    (
                        cursor.lastrowid,
                        finding.severity,
                        renumbered.get(finding.record) if finding.record is not None else None,
                        finding.channel,
                        finding.text,
                        finding.proposal,
                    )
                    for finding in findings
                ],
            )
            moved = {str(old): new for old, new in renumbered.items() if old != new}
            if moved:
                pairs = ", ".join(f"{old} is {new}" for old, new in moved.items())
                connection.execute(
                    "INSERT INTO finding (file_id, severity, text, proposal) VALUES (?, 'note', ?, '')",
                    (cursor.lastrowid, f"Record numbers that the survey had already are changed: {pairs}."),
                )
            new = {"file": self._relative(facts.path), "sha256": facts.sha256, "records": numbers}
            log.append(connection, batch, "load", new=new)
            return numbers

    def _relative(self, path: Path) -> str:
        """Path from the survey file's folder, so that both can be moved together; absolute on another drive."""
        try:
            return Path(os.path.relpath(path.resolve(), self._folder)).as_posix()
        except ValueError:
            return path.resolve().as_posix()

    def _is_at(self, stored: str, path: Path) -> bool:
        """Whether a stored path is that of a file."""
        return stored == self._relative(path)

    def _same_intervals(self, file_id: int, headers: Sequence[ShotHeader]) -> bool:
        """Whether the records of a file have the sample intervals that it is loaded with now."""
        rows = self._connection.execute("SELECT interval_s FROM record WHERE file_id = ?", (file_id,))
        return sorted(row[0] for row in rows) == sorted(header.interval_s for header in headers)

    def _note_place(self, known: sqlite3.Row, facts: FileFacts, batch: int) -> None:
        """Keep the path, size and time of a known file up to date where the old path leads nowhere any more."""
        old, new = known["path"], self._relative(facts.path)
        if old == new:
            self._connection.execute("UPDATE file SET mtime_ns = ? WHERE id = ?", (facts.mtime_ns, known["id"]))
        elif not (self._folder / old).exists():
            self._connection.execute(
                "UPDATE file SET path = ?, mtime_ns = ? WHERE id = ?", (new, facts.mtime_ns, known["id"])
            )
            log.append(self._connection, batch, "relocate", old={"file": old}, new={"file": new})

    def _forget(self, known: sqlite3.Row, facts: FileFacts, batch: int) -> None:
        """Take out a file that comes again changed, unless work was done on it."""
        records = [row[0] for row in self._connection.execute("SELECT record FROM record WHERE file_id = ?", known[:1])]
        for table in ("pick", "override"):
            worked_on = self._connection.execute(
                f"SELECT MIN({table}.record) FROM {table} JOIN record USING (record) WHERE file_id = ?", known[:1]
            ).fetchone()[0]
            if worked_on is not None:
                changed = known["sha256"] != facts.sha256
                raise InputError(
                    f"was loaded before with {'other content' if changed else 'another sample interval'}"
                    " and has picks already",
                    file=facts.path,
                    record=worked_on,
                    expected=f"checksum {known['sha256'][:12]}..." if changed else None,
                    found=f"{facts.sha256[:12]}..." if changed else None,
                    remedy="Load it into a new survey file",
                )
        for table in ("trace", "record", "finding"):
            owned = "record IN (SELECT record FROM record WHERE file_id = ?)" if table == "trace" else "file_id = ?"
            self._connection.execute(f"DELETE FROM {table} WHERE {owned}", known[:1])
        self._connection.execute("DELETE FROM file WHERE id = ?", known[:1])
        old = {"file": known["path"], "sha256": known["sha256"], "records": records}
        log.append(self._connection, batch, "load", old=old, reason="loaded again, changed")

    def records(self) -> list[ShotHeader]:
        """Shots of the survey, by record number, traces by channel; samples are not read."""
        return record_rows.read_headers(self._connection, self._folder)

    def records_of_files(self, sha256: Collection[str]) -> list[ShotHeader]:
        """Shots that lie in the files with the checksums given, by record number."""
        chosen = sorted(sha256)
        return record_rows.read_headers(
            self._connection, self._folder, f"file.sha256 IN ({', '.join('?' * len(chosen))})", chosen
        )

    def read(self, record: int) -> ShotRecord:
        """Read one shot with its samples.

        Parameters
        ----------
        record : int
            Record number in the survey.

        Returns
        -------
        ShotRecord

        Raises
        ------
        InputError
            If there is no such record, it has no samples, or its file is gone or has changed since it was loaded.
        """
        headers = record_rows.read_headers(self._connection, self._folder, "record.record = ?", (int(record),))
        if not headers:
            raise InputError(
                "the survey has no such record", file=self.path, record=int(record), remedy="See `rockhead load`"
            )
        if headers[0].has_samples:
            self._check_unchanged(headers[0])
        return read_shot(headers[0])

    def _check_unchanged(self, header: ShotHeader) -> None:
        """Refuse a file that is not what was loaded: by size and time, and where those differ by checksum."""
        known = self._connection.execute(
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

    def check_files(self) -> None:
        """Make sure, before long work, that every file of records is there and unchanged; InputError if not."""
        checked = set()
        for header in self.records():
            if header.has_samples and header.file not in checked:
                self._check_unchanged(header)
                checked.add(header.file)

    def findings(self, sha256: Collection[str] | None = None) -> list[Finding]:
        """List what was found in the files of records; in those with the checksums given, where they are given."""
        rows = self._connection.execute(
            "SELECT finding.*, file.path, file.sha256 FROM finding JOIN file ON file.id = file_id ORDER BY finding.id"
        )
        return [
            Finding(row["severity"], row["text"], row["proposal"], row["path"], row["record"], row["channel"])
            for row in rows
            if sha256 is None or row["sha256"] in sha256
        ]

    # picks

    def picks(self) -> PickTable:
        """Picks as they hold now, a person's changes on top; sorted by record and channel."""
        return pick_layers.effective(self._connection)

    def store_picks(self, table: PickTable, kind: str = "pick", reason: str = "") -> int:
        """Put automatic or imported picks under what persons have changed.

        Parameters
        ----------
        table : PickTable
            Picks of traces of the survey. Earlier picks of the same records in this layer are replaced.
        kind : str
            `pick` or `import`, for the log.
        reason : str
            For the log: settings, or the file they came in.

        Returns
        -------
        int
            How many picks changed; 0 where they were the same already.

        Raises
        ------
        InputError
            If the survey does not have a trace, or has it at another place.
        """
        with self.transaction() as connection:
            return pick_layers.store_base(connection, table, kind, log.next_batch(connection), reason)

    def imported_records(self) -> set[int]:
        """Records whose present picks under those of persons came in from a file."""
        rows = self._connection.execute(
            "SELECT record, kind, MAX(id) FROM log WHERE kind IN ('pick', 'import') GROUP BY record"
        )
        return {row["record"] for row in rows if row["kind"] == "import"}

    def import_picks(self, table: PickTable, reason: str, *, has_record: bool, has_channel: bool) -> int:
        """Take in picks of another program; records that the survey does not have are added without samples.

        Parameters
        ----------
        table : PickTable
            The picks.
        reason : str
            For the log: the file they came in.
        has_record, has_channel : bool
            False where record or channel numbers were made up: shots and geophones are then found by their places.

        Returns
        -------
        int
            How many picks changed.

        Raises
        ------
        InputError
            If a record or channel is in the survey at another place, or a place does not say which record is meant.
        """
        with self.transaction() as connection:
            known = self.records()
            table = match_places(table, known, has_record=has_record, has_channel=has_channel)
            there = {header.record: header for header in known}
            for header in records_of_picks(table):
                old = there.get(header.record)
                if old is None:
                    record_rows.add_record(connection, header, header.record, None)
                elif not old.has_samples:
                    more = np.flatnonzero(~np.isin(header.channel, old.channel)).tolist()
                    record_rows.add_traces(connection, header, header.record, more)
            return pick_layers.store_base(connection, table, "import", log.next_batch(connection), reason)

    def override(
        self,
        record: int,
        channel: int,
        time_s: float | None = None,
        sigma_s: float | None = None,
        drop: bool = False,
        why: str = "",
    ) -> None:
        """Change one pick by hand; parameters as in `Override`, errors as in `apply`."""
        self.apply([Override(int(record), int(channel), time_s, sigma_s, drop, why)])

    def apply(self, changes: Sequence[Override]) -> None:
        """Change some picks by hand, together: one undo takes all of them back.

        Raises
        ------
        InputError
            If the survey does not have a trace, or a change cannot be meant; none of them is made then.
        """
        with self.transaction() as connection:
            batch = log.next_batch(connection)
            for change in changes:
                pick_layers.put_override(connection, change, batch)

    def undo(self, n: int = 1) -> int:
        """Take back a person's last changes, the newest first; the changes and the undo stay in the log.

        Returns
        -------
        int
            How many were taken back: fewer than `n` where there are no more.
        """
        return self._take_back(n, "undo")

    def redo(self, n: int = 1) -> int:
        """Take back the last undos; not possible after a new change. Returns how many were taken back."""
        return self._take_back(n, "redo")

    def _take_back(self, n: int, kind: str) -> int:
        """Reverse the last n batches that can be."""
        with self.transaction() as connection:
            for taken_back in range(n):
                changes, undos = log.undoable(connection)
                batches = changes if kind == "undo" else undos
                if not batches:
                    return taken_back
                pick_layers.take_back(connection, batches[-1], kind, log.next_batch(connection))
        return n

    # the log and the results

    def log(self) -> list[LogEntry]:
        """Every change ever made, oldest first."""
        return log.entries(self._connection)

    def store_interpretation(self, settings: dict[str, Any], section_json: str) -> int:
        """Keep the settings and the result of an interpretation; earlier ones stay.

        Parameters
        ----------
        settings : dict
            Everything that was chosen; plain JSON types.
        section_json : str
            The result as JSON.

        Returns
        -------
        int
            Number of the interpretation.
        """
        with self.transaction() as connection:
            cursor = connection.execute(
                "INSERT INTO interpretation (utc, settings, section) VALUES (?, ?, ?)",
                (schema.now_utc(), json.dumps(settings, allow_nan=False), section_json),
            )
            number = int(cursor.lastrowid or 0)
            log.append(connection, log.next_batch(connection), "interpret", new={"interpretation": number})
            return number

    def latest_interpretation(self) -> tuple[int, dict[str, Any], str] | None:
        """Number, settings and result of the last interpretation, or None."""
        row = self._connection.execute("SELECT * FROM interpretation ORDER BY id DESC LIMIT 1").fetchone()
        return None if row is None else (row["id"], json.loads(row["settings"]), row["section"])
