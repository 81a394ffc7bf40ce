"""The log of a survey: every change with its time, old and new value and reason; nothing is ever taken out of it.

Changes that belong together share a batch. An undo is a batch too, that names the one it takes back; what can be
undone and redone follows from the log alone.
"""

from __future__ import annotations

import json
import sqlite3
from dataclasses import dataclass
from typing import Any

from picker.schema import now_utc

Value = dict[str, Any]
PERSONS_CHANGES = ("override", "drop")


@dataclass(frozen=True)
class LogEntry:
    """One line of the log.

    Parameters
    ----------
    id : int
        Counts up.
    utc : str
        When, ISO 8601.
    batch : int
        Shared by changes made together.
    kind : str
        `create`, `load`, `pick`, `import`, `override`, `drop`, `undo`, `redo`, `relocate` or `interpret`.
    record, channel : int or None
        The trace, where one is concerned.
    old, new : dict
        Values before and after; empty where there was none.
    reason : str
        Why, in the words of whoever did it.
    undoes : int or None
        The batch that an undo or redo takes back.
    """

    id: int
    utc: str
    batch: int
    kind: str
    record: int | None
    channel: int | None
    old: Value
    new: Value
    reason: str
    undoes: int | None


def next_batch(connection: sqlite3.Connection) -> int:
    """Number of a batch that begins."""
    return int(connection.execute("SELECT COALESCE(MAX(batch), 0) + 1 FROM log").fetchone()[0])


def append(
    connection: sqlite3.Connection,
    batch: int,
    kind: str,
    *,
    record: int | None = None,
    channel: int | None = None,
    old: Value | None = None,
    new: Value | None = None,
    reason: str = "",
    undoes: int | None = None,
) -> None:
    """Add one line to the log, inside the transaction of the change."""
    connection.execute(
        "INSERT INTO log (utc, batch, kind, record, channel, old, new, reason, undoes) VALUES (?,?,?,?,?,?,?,?,?)",
        (
            now_utc(),
            batch,
            kind,
            record,
            channel,
            json.dumps(old or {}, allow_nan=False),
            json.dumps(new or {}, allow_nan=False),
            reason,
            undoes,
        ),
    )


def entries(connection: sqlite3.Connection, batch: int | None = None) -> list[LogEntry]:
    """Lines of the log, oldest first; of one batch where that is given."""
    where, values = ("", ()) if batch is None else (" WHERE batch = ?", (batch,))
    rows = connection.execute(f"SELECT * FROM log{where} ORDER BY id", values)
    return [
        LogEntry(
            row["id"],
            row["utc"],
            row["batch"],
            row["kind"],
            row["record"],
            row["channel"],
            json.loads(row["old"]),
            json.loads(row["new"]),
            row["reason"],
            row["undoes"],
        )
        for row in rows
    ]


def undoable(connection: sqlite3.Connection) -> tuple[list[int], list[int]]:
    """Batches that can be undone and undos that can be taken back, the next one last.

    A new change of a person empties the second list, as in every editor.
    """
    rows = connection.execute(
        "SELECT DISTINCT batch, kind, undoes FROM log WHERE kind IN ('override', 'drop', 'undo', 'redo') ORDER BY id"
    )
    done: list[int] = []
    undone: list[tuple[int, int]] = []
    seen: set[int] = set()
    for batch, kind, undoes in rows:
        if batch in seen:
            continue
        seen.add(batch)
        if kind == "undo":
            done.remove(undoes)
            undone.append((batch, undoes))
        elif kind == "redo":
            change = next(change for undo, change in undone if undo == undoes)
            undone.remove((undoes, change))
            done.append(change)
        else:
            done.append(batch)
            undone.clear()
    return done, [undo for undo, _ in undone]
