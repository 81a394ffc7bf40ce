"""Survey: the one file that holds what is known of a survey; samples stay in the files they came in.

Every change is a transaction with its lines in the log. A change that raises leaves the file as it was.
"""

from __future__ import annotations

import json
import os
import sqlite3
from collections.abc import Collection, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import numpy as np

from picker import log, pick_layers, record_rows, schema, survey_files
from picker.errors import InputError
from picker.findings import Finding
from picker.log import LogEntry
from picker.pick_layers import Override
from picker.pick_places import match_places, records_of_picks
from picker.picks import PickTable
from picker.records import ShotHeader, ShotRecord, read_shot
from picker.survey_files import FileFacts


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

    def add_file(
        self,
        facts: FileFacts,
        headers: Sequence[ShotHeader],
        findings: Sequence[Finding],
        *,
        corrected: bool = False,
    ) -> list[int]:
        """Take in the shots of one file.

        Parameters
        ----------
        facts : FileFacts
            The file.
        headers : sequence of ShotHeader
            Its shots. A record number that the survey has already is replaced by the next free one.
        findings : sequence of Finding
            What was found in it.
        corrected : bool
            True where interval or geometry were given beside the file: they replace those of a known file.

        Returns
        -------
        list of int
            Record numbers given, in the order of `headers`; empty where the survey has the file already.

        Raises
        ------
        InputError
            If the file has changed since it was loaded, or is corrected, and there are picks on its records.
        """
        with self.transaction() as connection:
            return survey_files.add_file(connection, self._folder, facts, headers, findings, corrected=corrected)

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
            survey_files.check_unchanged(self._connection, headers[0])
        return read_shot(headers[0])

    def check_files(self) -> None:
        """Make sure, before long work, that every file of records is there and unchanged; InputError if not."""
        checked = set()
        for header in self.records():
            if header.has_samples and header.file not in checked:
                survey_files.check_unchanged(self._connection, header)
                checked.add(header.file)

    def files(self) -> list[tuple[str, str]]:
        """Name and SHA-256 checksum of every file of records, by name."""
        rows = self._connection.execute("SELECT path, sha256 FROM file")
        return sorted((Path(row["path"]).name, row["sha256"]) for row in rows)

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
