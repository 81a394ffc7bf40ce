"""Shot records as rows of a survey file: written once when a file is loaded, read back as ShotHeaders.

Functions on the open survey file; `picker.survey` owns the transactions.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from picker.records import ShotHeader


def free_numbers(connection: sqlite3.Connection, wanted: Sequence[int]) -> list[int]:
    """Choose record numbers for new records: those wanted where free, the next above all others where not."""
    taken = {row[0] for row in connection.execute("SELECT record FROM record")}
    spare = max([*taken, *wanted, 0])
    numbers = []
    for number in wanted:
        if number in taken:
            spare += 1
            number = spare
        taken.add(number)
        numbers.append(number)
    return numbers


def add_record(connection: sqlite3.Connection, header: ShotHeader, number: int, file_id: int | None) -> None:
    """Write one record and its traces.

    Parameters
    ----------
    connection : sqlite3.Connection
        The survey file, in a transaction.
    header : ShotHeader
        The record.
    number : int
        Record number in the survey; nothing may carry it yet.
    file_id : int or None
        The file with its samples, None for picks only.
    """
    connection.execute(
        "INSERT INTO record VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
        (
            number,
            header.original_record,
            file_id,
            header.format,
            header.encoding,
            header.first_byte,
            float(header.interval_s) if header.has_samples else None,
            *header.source_xyz.tolist(),
            float(header.source_depth_m),
        ),
    )
    add_traces(connection, header, number, range(header.channel.size))


def add_traces(connection: sqlite3.Connection, header: ShotHeader, number: int, rows: Sequence[int]) -> None:
    """Write some traces of a record that is there."""
    connection.executemany(
        "INSERT INTO trace VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
        [
            (
                number,
                int(header.channel[row]),
                int(header.sample_byte[row]),
                int(header.valid[row]),
                float(header.start_s[row]),
                *header.receiver_xyz[row].tolist(),
                str(header.state[row]),
                int(header.polarity[row]),
            )
            for row in rows
        ],
    )


def read_headers(
    connection: sqlite3.Connection, folder: Path, where: str = "", values: Sequence[object] = ()
) -> list[ShotHeader]:
    """Read records back.

    Parameters
    ----------
    connection : sqlite3.Connection
        The survey file.
    folder : Path
        The folder from which paths of files are counted.
    where : str
        Condition in SQL on the tables record and file; all records without one.
    values : sequence
        Values for its question marks.

    Returns
    -------
    list of ShotHeader
        By record number, traces by channel.
    """
    chosen = f"FROM record LEFT JOIN file ON file.id = record.file_id {f'WHERE {where}' if where else ''}"
    records = connection.execute(f"SELECT record.*, file.path {chosen} ORDER BY record.record", values).fetchall()
    traces: dict[int, list[sqlite3.Row]] = {row["record"]: [] for row in records}
    for trace in connection.execute(
        f"SELECT * FROM trace WHERE record IN (SELECT record.record {chosen}) ORDER BY record, channel", values
    ):
        traces[trace["record"]].append(trace)
    return [_header(row, traces[row["record"]], folder) for row in records]


def _header(row: sqlite3.Row, traces: list[sqlite3.Row], folder: Path) -> ShotHeader:
    """Build a header from its rows."""

    def column(name: str, kind: type) -> Any:
        return np.array([trace[name] for trace in traces], dtype=kind)

    return ShotHeader(
        record=row["record"],
        original_record=row["original_record"],
        interval_s=float("nan") if row["interval_s"] is None else row["interval_s"],
        start_s=column("start_s", np.float64),
        channel=column("channel", np.int64),
        source_xyz=np.array([row["source_x_m"], row["source_y_m"], row["source_z_m"]]),
        receiver_xyz=np.column_stack([column(f"receiver_{axis}_m", np.float64) for axis in "xyz"]),
        source_depth_m=row["source_depth_m"],
        valid=column("valid", np.int64),
        state=column("state", np.str_),
        polarity=column("polarity", np.int64),
        file=folder / row["path"] if row["path"] is not None else Path(),
        format=row["format"],
        encoding=row["encoding"],
        first_byte=row["first_byte"],
        sample_byte=column("sample_byte", np.int64),
    )
