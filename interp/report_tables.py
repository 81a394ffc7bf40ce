"""The tables of the report, as text in the units that are read; the same cells as the CSV files."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from interp.plane_pairs import PlanePair
from interp.section import DepthSection
from interp.section_tables import Columns, cells, depth_columns
from interp.section_text import TextTable, with_notes
from interp.velocity_zones import BELIEVED_WEIGHT
from picker.picks import PICK_STATES, PickTable
from picker.units import columns_in

if TYPE_CHECKING:
    from picker.log import LogEntry

_BY_PERSONS = ("override", "drop", "undo", "redo")


def depths_of_geophones(section: DepthSection, units: str) -> TextTable:
    """Depths with everything that bears on them, a row for every geophone and refractor.

    Parameters
    ----------
    section : DepthSection
        The result.
    units : str
        `m` or `ft`.

    Returns
    -------
    TextTable
        Bounds stand in it only where some were computed. A depth that must be exceeded begins with `>`.
    """
    columns = depth_columns(section)
    columns["elevation_m"] = columns["surface_z_m"] - columns["depth_m"]
    shown = cells(columns_in(units, columns))

    def length(name: str) -> list[str]:
        return shown[f"{name}_{units}"]

    table = {f"x ({units})": length("x")}
    if np.ptp(section.station_xyz[:, 1]) > 0:
        table[f"y ({units})"] = length("y")
    table |= {f"along ({units})": length("along"), f"ground ({units})": length("surface_z")}
    if section.layers > 1:
        table["layer"] = shown["layer"]
    table |= {
        f"depth ({units})": [
            depth or (f"> {least}" if least else "")
            for depth, least in zip(length("depth"), length("deeper_than"), strict=True)
        ],
        "90 % from": length("depth_lo"),
        "to": length("depth_hi"),
        f"elevation ({units})": length("elevation"),
    }
    if any(length("bound_shallow")) or any(length("bound_deep")):
        table |= {"bound from": length("bound_shallow"), "bound to": length("bound_deep")}
    table |= {
        f"velocity above ({units}/s)": shown[f"velocity_above_{units}_s"],
        f"below ({units}/s)": shown[f"velocity_below_{units}_s"],
        "coverage": shown["coverage"],
        "picks": shown["picks"],
    }
    return with_notes(table, shown["note"])


def records_table(section: DepthSection, picks: PickTable, units: str) -> TextTable:
    """Every record: its shot, what became of its traces, how it fits, and the shift of its time break.

    Parameters
    ----------
    section : DepthSection
        The result.
    picks : PickTable
        All picks.
    units : str
        `m` or `ft`.

    Returns
    -------
    TextTable
    """
    fit = section.fit
    records = np.unique(picks.record)
    first = [int(np.flatnonzero(picks.record == record)[0]) for record in records]
    shot = cells(columns_in(units, {f"{axis}_m": picks.source_xyz[first, k] for k, axis in enumerate("xyz")}))
    table = {"record": [str(record) for record in records.tolist()]}
    table |= {f"shot {axis} ({units})": shot[f"{axis}_{units}"] for axis in "xyz"}
    for state in PICK_STATES:
        table[state] = [str(int(np.sum((picks.record == record) & (picks.state == state)))) for record in records]
    manual = picks.origin == "manual"
    table["manual"] = [str(int(np.sum((picks.record == record) & manual))) for record in records]
    errors, misfits, shifts = [], [], []
    for record in records.tolist():
        sigma = picks.sigma_s[(picks.record == record) & picks.kept]
        errors.append(_ms(float(np.median(sigma))) if sigma.size else "")
        mine = (fit.record == record) & (fit.weight > BELIEVED_WEIGHT)
        residual = (fit.time_s - fit.predicted_s)[mine]
        misfits.append(_ms(float(np.sqrt(np.mean(residual**2)))) if residual.size else "")
        shift = section.shot_shift_s.get(record)
        shifts.append(f"{_ms(shift[0])} \u00b1 {_ms(shift[1])}" if shift else "")
    table |= {"median error (ms)": errors, "rms misfit (ms)": misfits, "time-break shift (ms)": shifts}
    return TextTable(tuple(table), list(zip(*table.values(), strict=True)), [])


def plane_pairs_table(section: DepthSection, pairs: Sequence[PlanePair], units: str) -> TextTable:
    """Plane-layer solutions of facing shots beside the section; standard errors after the sign.

    Parameters
    ----------
    section : DepthSection
        The result.
    pairs : sequence of PlanePair
        Of `interp.plane_pairs.plane_pairs`.
    units : str
        `m` or `ft`.

    Returns
    -------
    TextTable
    """
    layers = [pair.layers.at_a for pair in pairs]
    ends = {"a": [pair.layers.at_a for pair in pairs], "b": [pair.layers.at_b for pair in pairs]}
    places = {"a": [pair.along_a_m for pair in pairs], "b": [pair.along_b_m for pair in pairs]}
    columns: Columns = {}
    for number, name in ((0, "upper"), (1, "lower")):
        columns[f"{name}_m_s"] = np.array([one.velocity_m_s[number] for one in layers])
        columns[f"{name}_sigma_m_s"] = np.array([one.velocity_sigma_m_s[number] for one in layers])
    for end in "ab":
        columns[f"along_{end}_m"] = np.array(places[end])
        columns[f"depth_{end}_m"] = np.array([one.depth_m[0] for one in ends[end]])
        columns[f"sigma_{end}_m"] = np.array([one.depth_sigma_m[0] for one in ends[end]])
        nearest = [int(np.argmin(np.abs(section.along_m - along))) for along in places[end]]
        columns[f"section_{end}_m"] = section.depth_m[0, nearest]
    shown = cells(columns_in(units, columns))

    def with_error(value: str, error: str) -> list[str]:
        return [f"{one} \u00b1 {other}" for one, other in zip(shown[value], shown[error], strict=True)]

    degrees = [f"{np.degrees(one.dip_rad[0]):.1f} \u00b1 {np.degrees(one.dip_sigma_rad[0]):.1f}" for one in layers]
    mismatch = [
        f"{_ms(float(pair.layers.reciprocal_mismatch_s[0]))} \u00b1 {_ms(float(pair.layers.reciprocal_sigma_s[0]))}"
        for pair in pairs
    ]
    header = [
        "records",
        f"shots at ({units})",
        f"velocity above ({units}/s)",
        f"below ({units}/s)",
        "dip (\u00b0)",
        "reciprocal mismatch (ms)",
    ]
    columns_shown = [
        [f"{pair.record_a}, {pair.record_b}" for pair in pairs],
        [f"{a}, {b}" for a, b in zip(shown[f"along_a_{units}"], shown[f"along_b_{units}"], strict=True)],
        with_error(f"upper_{units}_s", f"upper_sigma_{units}_s"),
        with_error(f"lower_{units}_s", f"lower_sigma_{units}_s"),
        degrees,
        mismatch,
    ]
    for end, name in (("a", "first"), ("b", "second")):
        header += [f"depth at {name} shot ({units})", "section there"]
        columns_shown += [with_error(f"depth_{end}_{units}", f"sigma_{end}_{units}"), shown[f"section_{end}_{units}"]]
    return TextTable(tuple(header), list(zip(*columns_shown, strict=True)), [])


def changes_table(log: Sequence[LogEntry]) -> TextTable:
    """What persons changed, took back and why, oldest first; times in ms."""
    entries = [entry for entry in log if entry.kind in _BY_PERSONS]
    columns = {
        "time (UTC)": [entry.utc for entry in entries],
        "change": [entry.kind for entry in entries],
        "record": [_blank(entry.record) for entry in entries],
        "channel": [_blank(entry.channel) for entry in entries],
        "before": [_pick_words(entry.old) for entry in entries],
        "after": [_pick_words(entry.new) for entry in entries],
        "reason": [entry.reason for entry in entries],
    }
    return TextTable(tuple(columns), list(zip(*columns.values(), strict=True)), [])


def notes_table(picks: PickTable) -> TextTable:
    """Every note that picks carry, with how many carry it."""
    notes, counts = np.unique(picks.note[picks.note != ""], return_counts=True)
    columns = {"picks": [str(count) for count in counts.tolist()], "note": notes.tolist()}
    return TextTable(tuple(columns), list(zip(*columns.values(), strict=True)), [])


def settings_table(settings: dict[str, Any]) -> TextTable:
    """Everything that was chosen."""
    values = [
        ", ".join(map(str, value)) if isinstance(value, list | tuple) else str(value) for value in settings.values()
    ]
    columns = {"setting": [str(name) for name in settings], "value": values}
    return TextTable(tuple(columns), list(zip(*columns.values(), strict=True)), [])


def _ms(seconds: float) -> str:
    """Milliseconds to two decimals."""
    return f"{round(1e3 * seconds, 2) + 0.0:.2f}"


def _blank(number: int | None) -> str:
    return "" if number is None else str(number)


def _pick_words(value: dict[str, Any]) -> str:
    """A pick as the log keeps it, in words."""
    pick = value.get("pick") or {}
    parts = []
    if pick.get("time_s") is not None:
        parts.append(f"{_ms(float(pick['time_s']))} ms")
    if pick.get("sigma_s") is not None:
        parts.append(f"\u00b1 {_ms(float(pick['sigma_s']))} ms")
    if pick.get("state"):
        parts.append(str(pick["state"]))
    return " ".join(parts)
