"""Ground: the line cut into nodes, with the knots of everything that may change along it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from interp.line import Line

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

NODES_PER_KNOT = 4
MAX_NODES = 700
MAX_DELAY_KNOTS = 140
VELOCITY_KNOTS = 12


@dataclass(frozen=True, eq=False)
class Ground:
    """The line cut into nodes, and what each unknown along the line does at every node.

    `upper_at`, `lower_at`, `delay_at` (nodes, knots) interpolate knots to nodes; `trend` (nodes, 3) are the
    constant, the slope and the relief; `node_x_m` and `surface_z_m` (nodes,).
    """

    node_x_m: FloatArray
    surface_z_m: FloatArray
    upper_x_m: FloatArray
    lower_x_m: FloatArray
    delay_x_m: FloatArray
    upper_at: FloatArray
    lower_at: FloatArray
    delay_at: FloatArray
    trend: FloatArray
    station_node: IntArray
    shot_node: IntArray


def lay_ground(line: Line) -> Ground:
    """Cut the line into nodes that hold every shot and geophone, and set the knots of the unknowns."""
    places = np.concatenate([line.station_along_m, line.shot_along_m])
    spacing = float(np.median(np.diff(line.station_along_m)))
    low, high = float(places.min()), float(places.max())
    margin = max(2 * spacing, 0.02 * (high - low))
    low, high = low - margin, high + margin
    knot_step = max(spacing, (high - low) / MAX_DELAY_KNOTS)
    delay_x = np.linspace(low, high, int(np.ceil((high - low) / knot_step)) + 1)
    node_step = max(knot_step / NODES_PER_KNOT, (high - low) / MAX_NODES)
    regular = np.linspace(low, high, int(np.ceil((high - low) / node_step)) + 1)
    exact = np.unique(places)
    crowded = np.min(np.abs(regular[:, None] - exact[None, :]), axis=1) < 0.3 * node_step
    node_x = np.unique(np.concatenate([regular[~crowded], exact]))
    surface = line.ground_z_m(node_x)
    velocity_x = np.linspace(low, high, VELOCITY_KNOTS)
    half = 0.5 * (high - low)
    trend = np.stack([np.ones(node_x.size), (node_x - 0.5 * (low + high)) / half, surface - surface.mean()], axis=1)
    return Ground(
        node_x_m=node_x,
        surface_z_m=surface,
        upper_x_m=velocity_x,
        lower_x_m=velocity_x,
        delay_x_m=delay_x,
        upper_at=_hats(velocity_x, node_x),
        lower_at=_hats(velocity_x, node_x),
        delay_at=_hats(delay_x, node_x),
        trend=trend,
        station_node=np.searchsorted(node_x, line.station_along_m).astype(np.int64),
        shot_node=np.searchsorted(node_x, line.shot_along_m).astype(np.int64),
    )


def path_integral(x: FloatArray, values: FloatArray, start: IntArray, stop: IntArray) -> FloatArray:
    """Integral of each column of values (nodes, columns) along x between two nodes of every path, >= 0."""
    pieces = 0.5 * (values[1:] + values[:-1]) * np.diff(x)[:, None]
    total = np.concatenate([np.zeros((1, values.shape[1])), np.cumsum(pieces, axis=0)])
    return np.asarray(np.abs(total[stop] - total[start]))


def _hats(knots: FloatArray, x: FloatArray) -> FloatArray:
    """Linear interpolation from knots to x as a matrix (x, knots)."""
    return np.stack([np.interp(x, knots, row) for row in np.eye(knots.size)], axis=1)
