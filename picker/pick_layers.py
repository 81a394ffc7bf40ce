"""Picks of a survey in two layers: what the program or a file gave, and on top what a person put there.

Picking again changes the lower layer only; taking a person's change back shows the lower layer as it is now.
Functions on the open survey file; `picker.survey` owns the transactions.
"""

from __future__ import annotations

import sqlite3
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from picker import log
from picker.errors import InputError
from picker.picks import PickTable

# 5 % and 95 % points of a normal distribution, in standard errors, for a pick whose distribution nobody gave.
Z_90 = 1.6448536269514722

BASE_NUMBERS = (
    "time_s",
    "sigma_s",
    "early_s",
    "late_s",
    "reading_sigma_s",
    "bias_removed_s",
    "time_break_shift_s",
    "time_break_sigma_s",
    "geophone_sigma_s",
    "confidence",
)
BASE_WORDS = ("state", "origin", "note")
_BASE_COLUMNS = BASE_NUMBERS + BASE_WORDS
_POSITION_TOLERANCE_M = 0.05
_SHARED_BY_RECORD = ("time_break_shift_s", "time_break_sigma_s")


@dataclass(frozen=True)
class Override:
    """What a person says of one trace: another time, another error, or that there is nothing to use.

    Parameters
    ----------
    record, channel : int
        The trace.
    time_s, sigma_s : float, optional
        Onset on the record's own clock and its standard error; left out, the pick below lends its own.
    drop : bool
        True takes the pick out of use.
    why : str
        The reason, for the log.
    """

    record: int
    channel: int
    time_s: float | None = None
    sigma_s: float | None = None
    drop: bool = False
    why: str = ""


def _plain(value: float) -> float | None:
    """A number as SQLite and JSON hold it: nothing in place of not-a-number."""
    number = float(value)
    return number if np.isfinite(number) else None


def store_base(connection: sqlite3.Connection, table: PickTable, kind: str, batch: int, reason: str) -> int:
    """Put picks in the lower layer, replacing those of the same records there, and log each one that changes.

    Parameters
    ----------
    connection : sqlite3.Connection
        The survey file, in a transaction.
    table : PickTable
        Picks of traces that the survey has; geometry is the survey's own and must agree.
    kind : str
        `pick` or `import`.
    batch : int
        Batch in the log.
    reason : str
        For the log.

    Returns
    -------
    int
        How many rows changed.

    Raises
    ------
    InputError
        If the survey does not have a trace, or has it at another place.
    """
    _check_traces(connection, table)
    records = sorted(set(table.record.tolist()))
    before: dict[tuple[int, int], log.Value] = {}
    for record in records:
        rows = connection.execute(f"SELECT channel, {', '.join(_BASE_COLUMNS)} FROM pick WHERE record = ?", (record,))
        for row in rows:
            before[record, row["channel"]] = {name: row[name] for name in _BASE_COLUMNS}
    changed = 0
    for row, key in enumerate(zip(table.record.tolist(), table.channel.tolist(), strict=True)):
        new: log.Value = {name: _plain(getattr(table, name)[row]) for name in BASE_NUMBERS}
        new |= {name: str(getattr(table, name)[row]) for name in BASE_WORDS}
        old = before.pop(key, None)
        if old == new:
            continue
        marks = ", ".join("?" * (2 + len(_BASE_COLUMNS)))
        connection.execute(f"INSERT OR REPLACE INTO pick VALUES ({marks})", (*key, *new.values()))
        log.append(connection, batch, kind, record=key[0], channel=key[1], old=old, new=new, reason=reason)
        changed += 1
    for key, old in before.items():
        connection.execute("DELETE FROM pick WHERE record = ? AND channel = ?", key)
        log.append(connection, batch, kind, record=key[0], channel=key[1], old=old, reason=reason)
        changed += 1
    return changed


def _check_traces(connection: sqlite3.Connection, table: PickTable) -> None:
    """Refuse picks of traces that the survey does not have, or has elsewhere."""
    places = {
        (row[0], row[1]): row[2:]
        for row in connection.execute(
            "SELECT record, channel, source_x_m, source_y_m, receiver_x_m, receiver_y_m FROM trace JOIN record"
            " USING (record)"
        )
    }
    given = np.column_stack([table.source_xyz[:, :2], table.receiver_xyz[:, :2]])
    for row, key in enumerate(zip(table.record.tolist(), table.channel.tolist(), strict=True)):
        if key not in places:
            raise InputError(
                "there is a pick of a trace that the survey does not have",
                record=key[0],
                trace=key[1],
                remedy="Load the shot record first, or give the picks record numbers of their own",
            )
        if np.any(np.abs(given[row] - np.array(places[key])) > _POSITION_TOLERANCE_M):
            raise InputError(
                "the pick stands at another place than the trace it names",
                record=key[0],
                trace=key[1],
                expected=_place(np.array(places[key])),
                found=_place(given[row]),
                remedy="Correct the geometry or the record and channel numbers of the picks",
            )


def _place(xyxy: npt.NDArray[np.float64]) -> str:
    """Shot and geophone place in words."""
    return f"shot at ({xyxy[0]:g}, {xyxy[1]:g}) m and geophone at ({xyxy[2]:g}, {xyxy[3]:g}) m"


def effective(connection: sqlite3.Connection, only: tuple[int, int] | None = None) -> PickTable:
    """Picks as they hold now: the lower layer with what persons put on top.

    Parameters
    ----------
    connection : sqlite3.Connection
        The survey file.
    only : (int, int), optional
        Record and channel of one trace.

    Returns
    -------
    PickTable
        Sorted by record and channel; traces that have no pick in either layer are left out. A pick that a person
        moved has confidence 1, the normal 5 % and 95 % points of its error, and no bias taken off.
    """
    lower = ", ".join(f"pick.{name}" for name in _BASE_COLUMNS)
    rows = connection.execute(
        f"""
        SELECT trace.record, trace.channel, source_x_m, source_y_m, source_z_m, receiver_x_m, receiver_y_m,
            receiver_z_m, {lower}, override.time_s AS new_time_s, override.sigma_s AS new_sigma_s, override.dropped,
            override.why
        FROM trace
        JOIN record USING (record)
        LEFT JOIN pick ON pick.record = trace.record AND pick.channel = trace.channel
        LEFT JOIN override ON override.record = trace.record AND override.channel = trace.channel
        WHERE (pick.state IS NOT NULL OR override.dropped IS NOT NULL)
            {"AND trace.record = ? AND trace.channel = ?" if only else ""}
        ORDER BY trace.record, trace.channel
        """,
        only or (),
    ).fetchall()
    shared = {
        row["record"]: {name: row[name] for name in _SHARED_BY_RECORD}
        for row in connection.execute(
            f"SELECT record, {', '.join(_SHARED_BY_RECORD)} FROM pick {'WHERE record = ?' if only else ''}"
            " GROUP BY record",
            only[:1] if only else (),
        )
    }
    columns: dict[str, list[object]] = {name: [] for name in ("record", "channel", *_BASE_COLUMNS)}
    for row in rows:
        pick = {name: row[name] for name in ("record", "channel", *_BASE_COLUMNS)}
        if row["state"] is None:
            pick |= {"state": "none", "origin": "manual", "note": ""} | shared.get(row["record"], {})
        if row["dropped"] is not None:
            pick |= _on_top(pick, row)
        for name, value in pick.items():
            columns[name].append(value)
    source = np.array([[row[f"source_{axis}_m"] for axis in "xyz"] for row in rows], dtype=float).reshape(-1, 3)
    receiver = np.array([[row[f"receiver_{axis}_m"] for axis in "xyz"] for row in rows], dtype=float).reshape(-1, 3)
    arrays: dict[str, Any] = {name: np.array(columns[name], dtype=np.float64) for name in BASE_NUMBERS}
    arrays |= {name: np.array(columns[name], dtype=np.str_) for name in BASE_WORDS}
    return PickTable(
        record=np.array(columns["record"], dtype=np.int64),
        channel=np.array(columns["channel"], dtype=np.int64),
        source_xyz=source,
        receiver_xyz=receiver,
        offset_m=np.hypot(receiver[:, 0] - source[:, 0], receiver[:, 1] - source[:, 1]),
        **arrays,
    )


def _on_top(pick: dict[str, object], row: sqlite3.Row) -> dict[str, object]:
    """What a person's change makes of a pick."""
    if row["dropped"]:
        return {"state": "dropped", "origin": "manual", "note": row["why"]}
    time_s = row["time_s"] if row["new_time_s"] is None else row["new_time_s"]
    sigma_s = row["sigma_s"] if row["new_sigma_s"] is None else row["new_sigma_s"]
    if time_s is None or sigma_s is None:
        # the pick that lent its time or its error is gone since: nothing is left to use
        return {"state": "none", "origin": "manual", "note": row["why"]}
    return {
        "time_s": time_s,
        "sigma_s": sigma_s,
        "early_s": time_s - Z_90 * sigma_s,
        "late_s": time_s + Z_90 * sigma_s,
        "reading_sigma_s": sigma_s,
        "bias_removed_s": 0.0,
        "confidence": 1.0,
        "state": "kept",
        "origin": "manual",
        "note": row["why"],
    }


def put_override(connection: sqlite3.Connection, change: Override, batch: int) -> None:
    """Put a person's change on top of a trace's pick and log it.

    Raises
    ------
    InputError
        If the survey does not have the trace, the change says nothing, or time or error are missing, not numbers or
        outside the record.
    """
    _check_override(connection, change)
    key = (change.record, change.channel)
    before, below = _state_of(connection, key), _override_row(connection, key)
    new: log.Value = {
        "time_s": change.time_s,
        "sigma_s": change.sigma_s,
        "dropped": int(change.drop),
        "why": change.why,
    }
    _write_override(connection, key, new)
    log.append(
        connection,
        batch,
        "drop" if change.drop else "override",
        record=change.record,
        channel=change.channel,
        old={"override": below, "pick": before},
        new={"override": new, "pick": _state_of(connection, key)},
        reason=change.why,
    )


def _check_override(connection: sqlite3.Connection, change: Override) -> None:
    """Refuse a change that cannot be meant."""

    def refuse(problem: str, **more: object) -> InputError:
        return InputError(problem, record=change.record, trace=change.channel, **more)  # type: ignore[arg-type]

    key = (change.record, change.channel)
    trace = connection.execute(
        "SELECT start_s, valid, interval_s FROM trace JOIN record USING (record) WHERE record = ? AND channel = ?", key
    ).fetchone()
    if trace is None:
        known = connection.execute("SELECT MIN(channel), MAX(channel) FROM trace WHERE record = ?", key[:1]).fetchone()
        if known[0] is None:
            known = connection.execute("SELECT MIN(record), MAX(record) FROM record").fetchone()
            raise refuse("the survey has no such record", expected=f"{known[0]} to {known[1]}", found=change.record)
        raise refuse("the record has no such channel", expected=f"{known[0]} to {known[1]}", found=change.channel)
    if change.drop:
        if change.time_s is not None or change.sigma_s is not None:
            raise refuse("a pick is either dropped or given a time, not both", remedy="Leave one of them out")
        return
    if change.time_s is None and change.sigma_s is None:
        raise refuse("the change says nothing", remedy="Give a time, an error, or drop the pick")
    if change.sigma_s is not None and not (np.isfinite(change.sigma_s) and change.sigma_s > 0):
        raise refuse(
            "the standard error is not positive", expected="more than 0 ms", found=f"{change.sigma_s * 1e3:g} ms"
        )
    below = connection.execute("SELECT time_s, sigma_s FROM pick WHERE record = ? AND channel = ?", key).fetchone()
    if change.time_s is None and (below is None or below["time_s"] is None):
        raise refuse("there is no pick whose error could be changed", remedy="Give a time too")
    if change.sigma_s is None and (below is None or below["sigma_s"] is None):
        raise refuse("there is no pick whose standard error the new time could have", remedy="Give one too")
    if change.time_s is not None:
        first = trace["start_s"]
        last = first + (trace["valid"] - 1) * trace["interval_s"] if trace["interval_s"] is not None else np.inf
        low = first if trace["interval_s"] is not None else -np.inf
        if not (np.isfinite(change.time_s) and low <= change.time_s <= last):
            raise refuse(
                "the time lies outside the record",
                expected=f"{low * 1e3:g} to {last * 1e3:g} ms" if np.isfinite(last) else "a number",
                found=f"{change.time_s * 1e3:g} ms",
            )


def _override_row(connection: sqlite3.Connection, key: tuple[int, int]) -> log.Value | None:
    """What lies in the upper layer of a trace."""
    row = connection.execute(
        "SELECT time_s, sigma_s, dropped, why FROM override WHERE record = ? AND channel = ?", key
    ).fetchone()
    return None if row is None else dict(row)


def _state_of(connection: sqlite3.Connection, key: tuple[int, int]) -> log.Value | None:
    """What holds for a trace, for people who read the log."""
    pick = effective(connection, key)
    if not len(pick):
        return None
    return {
        "time_s": _plain(pick.time_s[0]),
        "sigma_s": _plain(pick.sigma_s[0]),
        "state": str(pick.state[0]),
        "origin": str(pick.origin[0]),
    }


def _write_override(connection: sqlite3.Connection, key: tuple[int, int], value: log.Value | None) -> None:
    """Set the upper layer of a trace, or take it away."""
    if value is None:
        connection.execute("DELETE FROM override WHERE record = ? AND channel = ?", key)
    else:
        connection.execute(
            "INSERT OR REPLACE INTO override VALUES (?, ?, ?, ?, ?, ?)",
            (*key, value["time_s"], value["sigma_s"], value["dropped"], value["why"]),
        )


def take_back(connection: sqlite3.Connection, batch_taken_back: int, kind: str, batch: int) -> int:
    """Set the upper layer to what it was before a batch, as a new batch in the log.

    Parameters
    ----------
    connection : sqlite3.Connection
        The survey file, in a transaction.
    batch_taken_back : int
        The batch whose changes of the upper layer are reversed.
    kind : str
        `undo` or `redo`.
    batch : int
        The new batch.

    Returns
    -------
    int
        How many changes were taken back.
    """
    changes = log.entries(connection, batch_taken_back)
    for change in reversed(changes):
        key = (int(change.record or 0), int(change.channel or 0))
        before, below = _state_of(connection, key), _override_row(connection, key)
        _write_override(connection, key, change.old["override"])
        log.append(
            connection,
            batch,
            kind,
            record=change.record,
            channel=change.channel,
            old={"override": below, "pick": before},
            new={"override": change.old["override"], "pick": _state_of(connection, key)},
            reason=change.reason,
            undoes=batch_taken_back,
        )
    return len(changes)
