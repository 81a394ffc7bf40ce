"""DepthSection as rows to be read at a terminal: depths, velocities, and the plane-layer check beside them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from interp.plane_pairs import PlanePair, plane_pairs
from interp.section import DepthSection
from interp.section_tables import Columns, cells, depth_columns, velocity_columns
from interp.velocity_zones import BELIEVED_WEIGHT
from picker.units import columns_in

_MARKS = "abcdefghijklmnopqrstuvwxyz"


@dataclass(frozen=True)
class TextTable:
    """A table as text, and the notes that its last column refers to by letter."""

    header: tuple[str, ...]
    rows: list[tuple[str, ...]]
    notes: list[str]


def depth_table(section: DepthSection, units: str) -> TextTable:
    """Depths as rows, one for every geophone and refractor.

    Parameters
    ----------
    section : DepthSection
        The result.
    units : str
        `m` or `ft`.

    Returns
    -------
    TextTable
        Where a refractor was not seen, its depth reads as the one that it must exceed.
    """
    shown = cells(columns_in(units, depth_columns(section)))
    depth = [
        value or (f"> {least}" if least else "-")
        for value, least in zip(shown[f"depth_{units}"], shown[f"deeper_than_{units}"], strict=True)
    ]
    columns = {f"x ({units})": shown[f"x_{units}"], f"along ({units})": shown[f"along_{units}"]}
    if section.layers > 1:
        columns["layer"] = shown["layer"]
    columns |= {
        f"depth ({units})": depth,
        "90 % from": shown[f"depth_lo_{units}"],
        "to": shown[f"depth_hi_{units}"],
        "coverage": shown["coverage"],
        "picks": shown["picks"],
    }
    return with_notes(columns, shown["note"])


def velocity_table(section: DepthSection, units: str) -> TextTable:
    """Layer velocities as rows, one for every layer and stretch of the line; parameters as for `depth_table`."""
    shown = cells(columns_in(units, velocity_columns(section)))
    columns = {
        "layer": shown["layer"],
        f"from ({units})": shown[f"from_{units}"],
        f"to ({units})": shown[f"to_{units}"],
        f"velocity ({units}/s)": [value or "-" for value in shown[f"velocity_{units}_s"]],
        "90 % from": shown[f"velocity_lo_{units}_s"],
        "to": shown[f"velocity_hi_{units}_s"],
        "picks": shown["picks"],
    }
    return with_notes(columns, shown["note"])


def with_notes(columns: dict[str, list[str]], notes: list[str]) -> TextTable:
    """Put a letter for its note at the end of every row that has one; notes beyond the letters share the last.

    Parameters
    ----------
    columns : dict of str to list of str
        Cells by the header of their column.
    notes : list of str
        The note of every row; empty where there is none.

    Returns
    -------
    TextTable
    """
    distinct = list(dict.fromkeys(note for note in notes if note))
    if distinct:
        marks = {note: _MARKS[min(number, len(_MARKS) - 1)] for number, note in enumerate(distinct)}
        columns = columns | {"note": [marks.get(note, "") for note in notes]}
        distinct = [f"{marks[note]}: {note}" for note in distinct]
    return TextTable(tuple(columns), list(zip(*columns.values(), strict=True)), distinct)


def quality_line(section: DepthSection) -> str:
    """One line on how well the result fits and what it is conditioned on."""
    believed = int(np.sum(section.fit.weight > BELIEVED_WEIGHT))
    parts = [
        f"{section.fit.time_s.size} picks, {believed} of them believed, rms misfit {section.rms_misfit_s * 1e3:.2f} ms",
        f"mean squared misfit over stated error {section.chi2_per_pick:.2f}",
    ]
    numbers = sorted(section.refractor_probability.items())
    if numbers:
        parts.append("refractors seen: " + ", ".join(f"{count} (probability {share:.2f})" for count, share in numbers))
    return "; ".join(parts) + "."


def plane_check_line(section: DepthSection, units: str) -> str:
    """Say what plane layers between two facing shots give beside the section: a check, not a result.

    Parameters
    ----------
    section : DepthSection
        The result.
    units : str
        `m` or `ft`.

    Returns
    -------
    str
        The widest pair of shots that both stand on the line is told; the widest of all where there is none.
    """
    pairs = plane_pairs(section)
    if not pairs:
        return "Check by plane layers: none, as no two facing shots both show direct and head waves."
    pair = next((one for one in pairs if _on_line(section, one)), pairs[0])
    beside = [int(np.argmin(np.abs(section.along_m - along))) for along in (pair.along_a_m, pair.along_b_m)]
    shown = cells(columns_in(units, _pair_columns(section, pair, beside)))
    places, planes, depths = (shown[f"{name}_{units}"] for name in ("along", "plane", "depth"))
    velocities = shown[f"velocity_{units}_s"]
    return (
        f"Check by plane layers (not a result), shots at {places[0]} and {places[1]} {units}: {velocities[0]} and "
        f"{velocities[1]} {units}/s, {planes[0]} and {planes[1]} {units} deep under the shots; the section has "
        f"{depths[0] or 'nothing'} and {depths[1] or 'nothing'} {units} under the geophones nearest to them."
    )


def _on_line(section: DepthSection, pair: PlanePair) -> bool:
    """Whether both shots of a pair stand within a geophone spacing of the line."""
    spacing = float(np.median(np.diff(section.along_m)))
    return bool(pair.along_a_m >= section.along_m[0] - spacing and pair.along_b_m <= section.along_m[-1] + spacing)


def _pair_columns(section: DepthSection, pair: PlanePair, beside: list[int]) -> Columns:
    """Two rows, one for each shot of the pair: place, plane-layer depth and the section's; and the two velocities."""
    layers = pair.layers
    return {
        "along_m": np.array([pair.along_a_m, pair.along_b_m]),
        "plane_m": np.array([layers.at_a.depth_m[0], layers.at_b.depth_m[0]]),
        "depth_m": section.depth_m[0, beside],
        "velocity_m_s": layers.at_a.velocity_m_s[:2],
    }
