"""Positions of shots and geophones from a table beside the records, where the headers do not have them right."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import numpy.typing as npt

from picker.csv_rows import CsvRows
from picker.errors import InputError
from picker.picks_csv import POSITIONS, own_name

FloatArray = npt.NDArray[np.float64]

_NEEDED = ("record", "channel", "source_x_m", "receiver_x_m")
_SAME_SHOT_M = 1e-6


@dataclass(frozen=True, eq=False)
class GeometryTable:
    """Positions by file name (empty where the table names no files), record and channel.

    Parameters
    ----------
    path : Path
        The table.
    positions : dict
        Six numbers a trace: source x, y, z and receiver x, y, z, metres; not-a-number where the table has no such
        column and the header keeps its own.
    """

    path: Path
    positions: dict[tuple[str, int, int], FloatArray] = field(default_factory=dict)

    def place(
        self,
        file: Path,
        record: int,
        channel: npt.NDArray[np.int64],
        source_xyz: FloatArray,
        receiver_xyz: FloatArray,
    ) -> tuple[FloatArray, FloatArray]:
        """Put the positions of one record in place of those of its headers.

        Parameters
        ----------
        file : Path
            The file of the record.
        record : int
            Its number in that file.
        channel : int (traces,)
            Its channels.
        source_xyz, receiver_xyz : float (3,) and (traces, 3)
            Positions after the headers, metres.

        Returns
        -------
        source_xyz, receiver_xyz : float (3,) and (traces, 3)

        Raises
        ------
        InputError
            If the table has no row for a trace, or gives the shot two places.
        """
        rows = []
        for number in channel.tolist():
            row = self.positions.get((file.name, record, number), self.positions.get(("", record, number)))
            if row is None:
                raise InputError(
                    "the geometry has no row for the trace",
                    file=self.path,
                    record=record,
                    trace=number,
                    expected=f"a row for every trace of {file.name}",
                    found="none",
                    remedy="Add the row",
                )
            rows.append(row)
        table = np.array(rows)
        apart = np.abs(table[:, :3] - table[0, :3]) > _SAME_SHOT_M
        if apart.any():
            raise InputError(
                "the geometry gives the shot two places",
                file=self.path,
                record=record,
                trace=int(channel[np.flatnonzero(apart.any(axis=1))[0]]),
                expected="one source position a record",
                found="another than in the rows before",
                remedy="Correct the rows",
            )
        source = np.where(np.isnan(table[0, :3]), source_xyz, table[0, :3])
        return source, np.where(np.isnan(table[:, 3:]), receiver_xyz, table[:, 3:])


def read_geometry_csv(path: Path) -> GeometryTable:
    """Read a table with a row a trace.

    Parameters
    ----------
    path : Path
        CSV as `picker.csv_rows` takes it, with columns record, channel, source_x_m and receiver_x_m, and where they
        are to be had source_y_m, source_z_m, receiver_y_m, receiver_z_m (`_ft` for feet) and `file`, the name of the
        file of records.

    Returns
    -------
    GeometryTable

    Raises
    ------
    InputError
        If the table cannot be read, lacks a column, has a cell that is no number, or a trace twice.
    """
    rows = CsvRows(path, own_name, ("file", "record", "channel", *POSITIONS), _NEEDED)
    columns = [
        rows.floats(name, 0, None) if name in rows.columns else np.full(len(rows.lines), np.nan) for name in POSITIONS
    ]
    file = rows.words("file", None, "")
    keys = list(zip(file.tolist(), rows.whole("record").tolist(), rows.whole("channel").tolist(), strict=True))
    positions: dict[tuple[str, int, int], FloatArray] = {}
    for row, (name, record, channel) in enumerate(keys):
        key = (name.strip(), record, channel)
        if key in positions:
            raise InputError(
                f"line {rows.lines[row]}: the trace has a row already",
                file=path,
                record=record,
                trace=channel,
                expected="one row a trace",
                found="two",
                remedy="Take one out, or add a column file where record numbers repeat between files",
            )
        positions[key] = np.array([column[row] for column in columns])
    return GeometryTable(path, positions)
