"""The tables of a survey file, how one is created, opened and brought up to date.

SQLite with write-ahead logging, foreign keys on, and full synchronisation: what was reported as done survives the
program being killed and the power failing. A new file is built beside its place and moved there when it is whole.
"""

from __future__ import annotations

import os
import sqlite3
from datetime import UTC, datetime
from pathlib import Path

from picker.errors import InputError

APPLICATION_ID = 0x524B4844  # "RKHD", so that other SQLite files are told apart
BUSY_TIMEOUT_S = 10.0

_FIRST = """
CREATE TABLE migration (
    version INTEGER PRIMARY KEY,
    applied_utc TEXT NOT NULL,
    what TEXT NOT NULL
);
CREATE TABLE file (
    id INTEGER PRIMARY KEY,
    path TEXT NOT NULL UNIQUE,
    size INTEGER NOT NULL,
    mtime_ns INTEGER NOT NULL,
    sha256 TEXT NOT NULL UNIQUE,
    loaded_utc TEXT NOT NULL
);
CREATE TABLE finding (
    id INTEGER PRIMARY KEY,
    file_id INTEGER REFERENCES file (id),
    severity TEXT NOT NULL,
    record INTEGER,
    channel INTEGER,
    text TEXT NOT NULL,
    proposal TEXT NOT NULL
);
CREATE TABLE record (
    record INTEGER PRIMARY KEY,
    original_record INTEGER NOT NULL,
    file_id INTEGER REFERENCES file (id),
    format TEXT NOT NULL,
    encoding TEXT NOT NULL,
    first_byte INTEGER NOT NULL,
    interval_s REAL,
    source_x_m REAL NOT NULL,
    source_y_m REAL NOT NULL,
    source_z_m REAL NOT NULL,
    source_depth_m REAL NOT NULL
);
CREATE TABLE trace (
    record INTEGER NOT NULL REFERENCES record (record),
    channel INTEGER NOT NULL,
    sample_byte INTEGER NOT NULL,
    valid INTEGER NOT NULL,
    start_s REAL NOT NULL,
    receiver_x_m REAL NOT NULL,
    receiver_y_m REAL NOT NULL,
    receiver_z_m REAL NOT NULL,
    state TEXT NOT NULL,
    polarity INTEGER NOT NULL,
    PRIMARY KEY (record, channel)
) WITHOUT ROWID;
CREATE TABLE pick (
    record INTEGER NOT NULL,
    channel INTEGER NOT NULL,
    time_s REAL,
    sigma_s REAL,
    early_s REAL,
    late_s REAL,
    reading_sigma_s REAL,
    bias_removed_s REAL,
    time_break_shift_s REAL,
    time_break_sigma_s REAL,
    geophone_sigma_s REAL,
    confidence REAL,
    state TEXT NOT NULL,
    origin TEXT NOT NULL,
    note TEXT NOT NULL,
    PRIMARY KEY (record, channel),
    FOREIGN KEY (record, channel) REFERENCES trace (record, channel)
) WITHOUT ROWID;
CREATE TABLE override (
    record INTEGER NOT NULL,
    channel INTEGER NOT NULL,
    time_s REAL,
    sigma_s REAL,
    dropped INTEGER NOT NULL,
    why TEXT NOT NULL,
    PRIMARY KEY (record, channel),
    FOREIGN KEY (record, channel) REFERENCES trace (record, channel)
) WITHOUT ROWID;
CREATE TABLE log (
    id INTEGER PRIMARY KEY AUTOINCREMENT,
    utc TEXT NOT NULL,
    batch INTEGER NOT NULL,
    kind TEXT NOT NULL,
    record INTEGER,
    channel INTEGER,
    old TEXT NOT NULL,
    new TEXT NOT NULL,
    reason TEXT NOT NULL,
    undoes INTEGER
);
CREATE INDEX log_batch ON log (batch);
CREATE TABLE interpretation (
    id INTEGER PRIMARY KEY AUTOINCREMENT,
    utc TEXT NOT NULL,
    settings TEXT NOT NULL,
    section TEXT NOT NULL
);
CREATE TRIGGER log_keeps BEFORE UPDATE ON log BEGIN SELECT RAISE(ABORT, 'the log is append-only'); END;
CREATE TRIGGER log_stays BEFORE DELETE ON log BEGIN SELECT RAISE(ABORT, 'the log is append-only'); END;
CREATE TRIGGER interpretation_keeps BEFORE UPDATE ON interpretation
    BEGIN SELECT RAISE(ABORT, 'interpretations are kept as they were'); END;
CREATE TRIGGER interpretation_stays BEFORE DELETE ON interpretation
    BEGIN SELECT RAISE(ABORT, 'interpretations are kept as they were'); END
"""

# One entry a schema version, oldest first: what it does in words, and the statements. Never change one that was
# released; add another.
MIGRATIONS: tuple[tuple[str, str], ...] = (("first tables", _FIRST),)
VERSION = len(MIGRATIONS)


def now_utc() -> str:
    """Present time, UTC, as ISO 8601 to the millisecond."""
    return datetime.now(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")


def connect(path: Path) -> sqlite3.Connection:
    """Connect to a file as SQLite with the settings that every survey file is used with.

    Transactions are explicit (`BEGIN IMMEDIATE`); rows come as `sqlite3.Row`.
    """
    connection = sqlite3.connect(path, timeout=BUSY_TIMEOUT_S, isolation_level=None)
    connection.row_factory = sqlite3.Row
    connection.execute("PRAGMA foreign_keys = ON")
    connection.execute("PRAGMA synchronous = FULL")
    return connection


def create_file(path: Path) -> None:
    """Create a survey file without anything in it.

    Parameters
    ----------
    path : Path
        Where; nothing may be there.

    Raises
    ------
    InputError
        If something is there, or the folder cannot be written.
    """
    if path.exists():
        raise InputError("is there already", file=path, remedy="Take another name, or open it")
    if not path.parent.is_dir():
        raise InputError("there is no such folder", file=path.parent, remedy="Create the folder first")
    try:
        connection = connect(path)
        try:
            connection.execute("PRAGMA journal_mode = WAL")
            connection.execute(f"PRAGMA application_id = {APPLICATION_ID}")
            migrate(connection)
        finally:
            connection.close()
    except sqlite3.Error as error:
        remove_file(path)
        raise InputError(f"cannot be created ({error})", file=path, remedy="Check who may write the folder") from error


def remove_file(path: Path) -> None:
    """Remove a survey file with the two files that SQLite keeps beside it."""
    for suffix in ("", "-wal", "-shm"):
        Path(f"{path}{suffix}").unlink(missing_ok=True)


def move_file(built: Path, path: Path) -> None:
    """Move a survey file that is closed to its place, where nothing may be.

    Raises
    ------
    InputError
        If something has come there in the meantime.
    """
    if path.exists():
        raise InputError("has been created by another program meanwhile", file=path, remedy="Run the command again")
    os.rename(built, path)


def open_file(path: Path) -> sqlite3.Connection:
    """Open a survey file, bringing its tables up to date.

    Raises
    ------
    InputError
        If there is no such file, it is no survey file, or a newer version of the program wrote it.
    """
    if not path.exists():
        raise InputError(
            "there is no such survey file", file=path, remedy=f"Create it with: rockhead load {path.name} FILE..."
        )
    not_a_survey = InputError(
        "is no survey file",
        file=path,
        expected="a survey file as `rockhead load` writes it",
        found="a folder" if path.is_dir() else "something else",
        remedy="Name the survey file first, then the files to load",
    )
    if path.is_dir() or path.stat().st_size == 0:
        raise not_a_survey
    connection: sqlite3.Connection | None = None
    try:
        connection = connect(path)
        if connection.execute("PRAGMA application_id").fetchone()[0] != APPLICATION_ID:
            connection.close()
            raise not_a_survey
        version = connection.execute("PRAGMA user_version").fetchone()[0]
        if version > VERSION:
            connection.close()
            raise InputError(
                "was written by a newer version of the program",
                file=path,
                expected=f"schema version {VERSION} or less",
                found=version,
                remedy="Update the program",
            )
        migrate(connection)
        return connection
    except sqlite3.OperationalError as error:
        if connection is not None:
            connection.close()
        raise storage_error(error, path) from error
    except sqlite3.DatabaseError as error:
        if connection is not None:
            connection.close()
        raise not_a_survey from error


def storage_error(error: sqlite3.Error, path: Path) -> InputError:
    """Turn what SQLite says of a file into a message for a person."""
    remedy = "Check who may write the file and its folder, and that the disk is not full"
    if "locked" in str(error) or "busy" in str(error):
        remedy = "Close the other program that has it open, or wait for it"
    return InputError(f"the survey file cannot be used ({error})", file=path, remedy=remedy)


def migrate(connection: sqlite3.Connection) -> None:
    """Bring the tables up to the present version, each step in a transaction of its own."""
    for number, (what, statements) in enumerate(MIGRATIONS, start=1):
        if connection.execute("PRAGMA user_version").fetchone()[0] >= number:
            continue
        connection.execute("BEGIN IMMEDIATE")
        try:
            # another program may have come first while this one waited
            if connection.execute("PRAGMA user_version").fetchone()[0] < number:
                for statement in _split(statements):
                    connection.execute(statement)
                connection.execute("INSERT INTO migration VALUES (?, ?, ?)", (number, now_utc(), what))
                connection.execute(f"PRAGMA user_version = {number}")
            connection.execute("COMMIT")
        except BaseException:
            connection.execute("ROLLBACK")
            raise


def _split(statements: str) -> list[str]:
    """Single statements of a script; executescript would end the transaction."""
    parts: list[str] = []
    waiting = ""
    for piece in statements.split(";"):
        waiting += piece + ";"
        if sqlite3.complete_statement(waiting):
            parts.append(waiting.strip())
            waiting = ""
    if waiting.strip(" \n;"):
        raise ValueError(f"statements: expected whole ones, found {waiting!r} at the end")
    return parts
