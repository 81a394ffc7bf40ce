"""DepthSection as the tables that leave the program: depths.csv, velocities.csv and bounds.csv.

Columns are held by name with their unit in the name; what a unit system does to them is `picker.units`' business.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from interp.section import DepthSection
from interp.velocity_zones import velocity_zones

Columns = dict[str, npt.NDArray[Any]]

NO_CONTROL = "no control: no first arrival from this refractor bears on this point"
ONLY_DEEPER = "refractor not seen in first arrivals here; it must be deeper than told"


def depth_columns(section: DepthSection) -> Columns:
    """Columns of depths.csv, a row for every geophone and refractor.

    Parameters
    ----------
    section : DepthSection
        The result.

    Returns
    -------
    dict of str to array (stations * layers,)
        Sorted along the line, then by layer; metres and m/s. Where a point has no control its numbers are NaN and its
        note says so.
    """
    stations, layers = section.along_m.size, section.layers

    def by_point(values: npt.NDArray[Any]) -> npt.NDArray[Any]:
        return np.asarray(values.T.ravel())

    def by_station(values: npt.NDArray[Any]) -> npt.NDArray[Any]:
        return np.repeat(values, layers)

    depth = by_point(section.depth_m)
    low, high = (by_point(end) for end in section.depth_interval_90_m)
    velocity = section.velocity_m_s
    controlled = np.isfinite(depth)
    deeper = by_point(section.deeper_than_m)
    note = by_point(section.note).astype(object)
    silent = ~controlled & (note == "")
    note[silent] = np.where(np.isfinite(deeper[silent]), ONLY_DEEPER, NO_CONTROL)

    def where_controlled(values: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
        return np.where(controlled, values, np.nan)

    return {
        "x_m": by_station(section.station_xyz[:, 0]),
        "y_m": by_station(section.station_xyz[:, 1]),
        "along_m": by_station(section.along_m),
        "surface_z_m": by_station(section.station_xyz[:, 2]),
        "layer": np.tile(np.arange(1, layers + 1), stations),
        "depth_m": depth,
        "depth_lo_m": low,
        "depth_hi_m": high,
        "bound_shallow_m": where_controlled(by_point(section.bound_shallow_m)),
        "bound_deep_m": where_controlled(by_point(section.bound_deep_m)),
        "velocity_above_m_s": where_controlled(by_point(velocity[:-1])),
        "velocity_below_m_s": where_controlled(by_point(velocity[1:])),
        "coverage": by_point(section.coverage),
        "deeper_than_m": deeper,
        "picks": by_point(section.picks),
        "note": note.astype(np.str_),
    }


def velocity_columns(section: DepthSection) -> Columns:
    """Columns of velocities.csv, a row for every layer and stretch of the line.

    Parameters
    ----------
    section : DepthSection
        The result.

    Returns
    -------
    dict of str to array (rows,)
        Metres and m/s; NaN where nothing is known.
    """
    zones = velocity_zones(section)
    return {
        "layer": np.array([zone.layer for zone in zones], dtype=np.int64),
        "from_m": np.array([zone.from_m for zone in zones]),
        "to_m": np.array([zone.to_m for zone in zones]),
        "velocity_m_s": np.array([zone.velocity_m_s for zone in zones]),
        "velocity_lo_m_s": np.array([zone.velocity_lo_m_s for zone in zones]),
        "velocity_hi_m_s": np.array([zone.velocity_hi_m_s for zone in zones]),
        "picks": np.array([zone.picks for zone in zones], dtype=np.int64),
        "note": np.array([zone.note for zone in zones], dtype=np.str_),
    }


def bound_columns(section: DepthSection) -> Columns:
    """Columns of bounds.csv, a row for every ambiguity at every place.

    Parameters
    ----------
    section : DepthSection
        The result.

    Returns
    -------
    dict of str to array (rows,)
        Metres; in the order of `section.bounds`.
    """
    bounds = section.bounds
    return {
        "along_m": np.array([bound.along_m for bound in bounds], dtype=np.float64),
        "layer": np.array([bound.layer for bound in bounds], dtype=np.int64),
        "kind": np.array([bound.kind for bound in bounds], dtype=np.str_),
        "assumption": np.array([bound.assumption for bound in bounds], dtype=np.str_),
        "depth_shallow_m": np.array([bound.depth_shallow_m for bound in bounds], dtype=np.float64),
        "depth_deep_m": np.array([bound.depth_deep_m for bound in bounds], dtype=np.float64),
    }


def cells(columns: Mapping[str, npt.NDArray[Any]]) -> dict[str, list[str]]:
    """Text of every cell: centimetres (or hundredths of a foot), whole m/s, nothing where a number is unknown.

    Parameters
    ----------
    columns : mapping of str to array (rows,)
        In any unit system; the unit is the end of each name.

    Returns
    -------
    dict of str to list of str
        The same columns as text.
    """
    return {name: [_cell(name, value) for value in values.tolist()] for name, values in columns.items()}


def to_csv(columns: Mapping[str, npt.NDArray[Any]]) -> str:
    """CSV text of columns: one header line, LF line ends, UTF-8 characters.

    Parameters
    ----------
    columns : mapping of str to array (rows,)
        What `depth_columns`, `velocity_columns` or `bound_columns` gave, in any unit system.

    Returns
    -------
    str
        The text of the file.
    """
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    shown = cells(columns)
    writer.writerow(shown)
    writer.writerows(zip(*shown.values(), strict=True))
    return text.getvalue()


def _cell(name: str, value: object) -> str:
    """One cell."""
    if not isinstance(value, float):
        return str(value)
    if not np.isfinite(value):
        return ""
    decimals = 0 if name.endswith(("_m_s", "_ft_s")) else 2
    return f"{round(value, decimals) + 0.0:.{decimals}f}"  # adding zero takes the sign off a negative zero
