"""PickTable as CSV: the hand-off in milliseconds, and anybody else's picks from shot, geophone and time upwards.

Written with the fewest digits that give the same number back; read in any order of columns, in metres or feet, with
commas, semicolons or tabs.
"""

from __future__ import annotations

import csv
import io
import re
from dataclasses import dataclass
from decimal import Decimal
from pathlib import Path

import numpy as np
import numpy.typing as npt

from picker.csv_rows import CsvRows
from picker.errors import InputError
from picker.findings import Finding
from picker.pick_layers import Z_90
from picker.picks import PICK_ORIGINS, PICK_STATES, PickTable
from picker.units import columns_in

FloatArray = npt.NDArray[np.float64]

POSITIONS = ("source_x_m", "source_y_m", "source_z_m", "receiver_x_m", "receiver_y_m", "receiver_z_m")
TIMES_MS = (
    "time_ms",
    "sigma_ms",
    "early_ms",
    "late_ms",
    "reading_sigma_ms",
    "bias_removed_ms",
    "time_break_shift_ms",
    "time_break_sigma_ms",
    "geophone_sigma_ms",
)
COLUMNS = ("record", "channel", *POSITIONS, "offset_m", *TIMES_MS, "confidence", "state", "origin", "note")

# Plain names under which other people's tables carry the same columns; `_m` is understood where no unit is given.
_OTHER_NAMES = {
    "shot": "record",
    "record_number": "record",
    "ffid": "record",
    "trace": "channel",
    "shot_x": "source_x",
    "shot_y": "source_y",
    "shot_z": "source_z",
    "shot_elevation": "source_z",
    "source_elevation": "source_z",
    "geophone_x": "receiver_x",
    "geophone_y": "receiver_y",
    "geophone_z": "receiver_z",
    "geophone_elevation": "receiver_z",
    "receiver_elevation": "receiver_z",
    "sx": "source_x",
    "x_shot": "source_x",
    "x_source": "source_x",
    "gx": "receiver_x",
    "rx": "receiver_x",
    "x_geophone": "receiver_x",
    "x_receiver": "receiver_x",
    **{
        name: "time_ms"
        for what in ("time", "t", "pick", "pick_time", "first_break", "first_arrival", "arrival", "travel_time")
        for name in (what, f"{what}_ms")
    },
    "ms": "time_ms",
    "error_ms": "sigma_ms",
    "std_ms": "sigma_ms",
}
_NEEDED = ("source_x_m", "receiver_x_m", "time_ms")
# What columns of numbers without a line of names stand for, and how that is told.
_UNNAMED = ("source_x_m", "receiver_x_m", "time_ms", "record")
_UNNAMED_TOLD = "shot x (m), geophone x (m), time (ms), record"
# Rock does not carry sound faster (peridotite about 8 km/s); faster on average means times in another unit.
_FASTEST_M_S = 9000.0


@dataclass(frozen=True, eq=False)
class PicksFile:
    """Picks as they were read.

    Parameters
    ----------
    path : Path
        The file.
    table : PickTable
        The picks.
    findings : tuple of Finding
        What a person should know.
    has_record, has_channel : bool
        False where record or channel numbers were made from the places of shots and geophones.
    """

    path: Path
    table: PickTable
    findings: tuple[Finding, ...]
    has_record: bool
    has_channel: bool


def _number(value: float, shift: int = 0) -> str:
    """Shortest decimal that reads back as the same float, its point moved; empty for not-a-number."""
    if not np.isfinite(value):
        return ""
    text = f"{Decimal(repr(float(value))).scaleb(shift).normalize():f}"
    return "0" if text in ("-0", "0") else text


def picks_to_csv(table: PickTable, units: str = "m") -> str:
    """Write picks as CSV text.

    Parameters
    ----------
    table : PickTable
        The picks.
    units : str
        `m`, or `ft` for lengths in feet, whose columns are then called `_ft`.

    Returns
    -------
    str
        Header and a line a row; in metres it reads back as the same table.
    """
    lengths: dict[str, npt.ArrayLike] = {}
    for column, name in enumerate(POSITIONS):
        lengths[name] = (table.source_xyz if column < 3 else table.receiver_xyz)[:, column % 3]
    lengths["offset_m"] = table.offset_m
    converted = columns_in(units, lengths)
    cells: dict[str, list[str]] = {
        "record": [str(value) for value in table.record],
        "channel": [str(value) for value in table.channel],
    }
    cells |= {name: [_number(value) for value in values.tolist()] for name, values in converted.items()}
    for name in TIMES_MS:
        cells[name] = [_number(value, 3) for value in getattr(table, f"{name[:-3]}_s").tolist()]
    cells["confidence"] = [_number(value) for value in table.confidence.tolist()]
    cells |= {name: getattr(table, name).tolist() for name in ("state", "origin")}
    # a lone carriage return would not be quoted, and other programs would take it for the end of the row
    cells["note"] = [note.replace("\r\n", "\n").replace("\r", "\n") for note in table.note.tolist()]
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(cells)
    writer.writerows(zip(*cells.values(), strict=True))
    return text.getvalue()


def write_picks_csv(table: PickTable, path: Path, units: str = "m") -> None:
    """Write picks as a CSV file in UTF-8; arguments as for `picks_to_csv`."""
    path.write_text(picks_to_csv(table, units), encoding="utf-8", newline="")


def read_picks_csv(path: Path, sigma_s: float | None = None) -> PicksFile:
    """Read picks from a CSV file, ours or somebody else's.

    Parameters
    ----------
    path : Path
        UTF-8 (with or without a byte order mark), UTF-16 with one, or Windows-1252. Lines that begin with # and empty
        lines are passed over.
    sigma_s : float, optional
        Standard error of picks that come without one, seconds.

    Returns
    -------
    PicksFile
        Missing record and channel numbers are made from the places of shots and geophones, missing elevations are 0,
        missing 5 % and 95 % points those of a normal distribution, a missing reading error is the whole error; other
        errors that the file does not give are not-a-number: not known.

    Raises
    ------
    InputError
        If the file cannot be read, a column is missing, a cell cannot be understood, a trace comes twice, or picks
        have no error and none is given.
    """
    rows = CsvRows(path, own_name, COLUMNS, _NEEDED, unnamed=_UNNAMED)
    cell = rows.floats
    sigma_missing = "sigma_ms" not in rows.columns
    if sigma_missing and sigma_s is None:
        raise InputError(
            "the picks come without errors",
            file=path,
            expected="a column sigma_ms",
            found=", ".join(rows.columns),
            remedy="Say how well they were read with --sigma-ms",
        )
    time_s = cell("time_ms", -3, np.nan)
    state = rows.words("state", PICK_STATES, "")
    state = np.where(state == "", np.where(np.isnan(time_s), "none", "kept"), state)
    rows.refuse_where((state == "kept") & np.isnan(time_s), "time_ms", "a time for a pick that is kept")
    sigma = cell("sigma_ms", -3, np.nan)
    rows.refuse_where(~(np.isnan(sigma) | (sigma > 0)) & (state == "kept"), "sigma_ms", "more than 0 ms")
    unknown = np.isnan(sigma) & (state == "kept")
    if sigma_s is None:
        rows.refuse_where(unknown, "sigma_ms", "a standard error, or one for all with --sigma-ms")
    else:
        sigma = np.where(unknown, sigma_s, sigma)

    source_xyz = np.column_stack([cell(f"source_{axis}_m", 0, None if axis == "x" else 0.0) for axis in "xyz"])
    receiver_xyz = np.column_stack([cell(f"receiver_{axis}_m", 0, None if axis == "x" else 0.0) for axis in "xyz"])
    has_record, has_channel = "record" in rows.columns, "channel" in rows.columns
    record = rows.whole("record") if has_record else _numbered(source_xyz[:, :2], in_order=True)
    channel = rows.whole("channel") if has_channel else _numbered(receiver_xyz[:, :2], in_order=False)
    _check_traces(rows, record, channel, source_xyz)

    note = rows.words("note", None, "")
    if sigma_s is not None and unknown.any():
        assumed = f"no error given: {sigma_s * 1e3:g} ms assumed"
        note = np.where(unknown, [f"{text}; {assumed}" if text else assumed for text in note.tolist()], note)
    offset_m = np.hypot(receiver_xyz[:, 0] - source_xyz[:, 0], receiver_xyz[:, 1] - source_xyz[:, 1])
    late, early = cell("late_ms", -3, np.nan), cell("early_ms", -3, np.nan)
    reading = cell("reading_sigma_ms", -3, np.nan)
    table = PickTable(
        record=record,
        channel=channel,
        source_xyz=source_xyz,
        receiver_xyz=receiver_xyz,
        offset_m=offset_m,
        time_s=time_s,
        sigma_s=sigma,
        early_s=early if "early_ms" in rows.columns else time_s - Z_90 * sigma,
        late_s=late if "late_ms" in rows.columns else time_s + Z_90 * sigma,
        reading_sigma_s=reading if "reading_sigma_ms" in rows.columns else sigma,
        bias_removed_s=cell("bias_removed_ms", -3, np.nan),
        time_break_shift_s=cell("time_break_shift_ms", -3, np.nan),
        time_break_sigma_s=cell("time_break_sigma_ms", -3, np.nan),
        geophone_sigma_s=cell("geophone_sigma_ms", -3, np.nan),
        confidence=cell("confidence", 0, np.nan),
        state=state,
        origin=rows.words("origin", PICK_ORIGINS, "manual"),
        note=note,
    )
    return PicksFile(path, table, tuple(_findings(table, rows, int(unknown.sum()), sigma_s)), has_record, has_channel)


def _numbered(places: FloatArray, *, in_order: bool) -> npt.NDArray[np.int64]:
    """Number of each row's place, from 1: in the order in which places come, or along x, then y."""
    _, first, number = np.unique(np.round(places, 3), axis=0, return_index=True, return_inverse=True)
    if not in_order:
        return np.asarray(number.ravel() + 1)
    rank = np.empty(first.size, np.int64)
    rank[np.argsort(first)] = np.arange(1, first.size + 1)
    return np.asarray(rank[number.ravel()])


def _check_traces(
    rows: CsvRows, record: npt.NDArray[np.int64], channel: npt.NDArray[np.int64], source_xyz: FloatArray
) -> None:
    """Refuse a trace that comes twice and a record that was shot at two places."""
    seen: dict[tuple[int, int], int] = {}
    shot_row: dict[int, int] = {}
    for row, key in enumerate(zip(record.tolist(), channel.tolist(), strict=True)):
        if key in seen:
            raise InputError(
                f"line {rows.lines[row]}: the same shot and geophone as in line {rows.lines[seen[key]]}",
                file=rows.path,
                record=key[0],
                trace=key[1],
                expected="one pick a trace",
                found="two",
                remedy="Give repeated shots record numbers of their own in a column record",
            )
        seen[key] = row
        first = shot_row.setdefault(key[0], row)
        if np.any(np.abs(source_xyz[row] - source_xyz[first]) > 1e-6):
            raise InputError(
                f"line {rows.lines[row]}: the shot stands elsewhere than in line {rows.lines[first]}",
                file=rows.path,
                record=key[0],
                expected=f"({', '.join(f'{value:g}' for value in source_xyz[first])}) m",
                found=f"({', '.join(f'{value:g}' for value in source_xyz[row])}) m",
                remedy="Give every shot a record number of its own",
            )


def _findings(table: PickTable, rows: CsvRows, unknown: int, sigma_s: float | None) -> list[Finding]:
    """Collect what a person should know of picks that can be used."""
    findings = []
    file = str(rows.path)
    if unknown and sigma_s is not None:
        text = f"{unknown} picks come without errors; a standard error of {sigma_s * 1e3:g} ms is assumed for them."
        findings.append(Finding("note", text, file=file))
    if not any(name in rows.columns for name in ("source_z_m", "receiver_z_m")):
        text = "There are no elevations: the ground is taken as flat."
        findings.append(Finding("note", text, "Where it is not, add source_z_m and receiver_z_m.", file))
    if rows.unnamed:
        text = f"There is no line of column names: the columns are taken as {_UNNAMED_TOLD}."
        findings.append(Finding("look", text, "If they are others, name them in the first line.", file))
    elif "ms" not in re.split(r"[^a-z]+", rows.stated("time_ms").lower()):
        text = f"The column {rows.stated('time_ms')} has no unit: it is taken as milliseconds."
        findings.append(Finding("note", text, "If it is another, name the column time_ms and convert it.", file))
    kept = table.kept & (table.offset_m > 0)
    if kept.any():
        fast = table.offset_m[kept] > _FASTEST_M_S * np.maximum(table.time_s[kept], 0.0)
        if np.mean(fast) > 0.5:
            text = f"Most times are too short for their offsets (faster than {_FASTEST_M_S:g} m/s)."
            findings.append(Finding("look", text, "Look whether they are in milliseconds after the time break.", file))
    return findings


def own_name(stated: str) -> tuple[str, bool]:
    """Translate a heading to our name of the column and whether it is in feet: `Shot X (ft)` is source_x_m in feet."""
    name = re.sub(r"[\s().\[\]]+", "_", stated.strip().lower()).strip("_")
    feet = name.endswith(("_ft", "_feet"))
    base = re.sub(r"_(ft|feet|m)$", "", name)
    base = _OTHER_NAMES.get(base, base)
    if f"{base}_m" in COLUMNS:
        return f"{base}_m", feet
    return _OTHER_NAMES.get(name, name), False
