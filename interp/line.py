"""Line: where shots and geophones stand along the line, as distances, from their coordinates.

Along-line distance is counted from the first geophone along the chain of geophones, so a crooked line has its
true length. Ground elevation between points is interpolated; beyond the last point it is held.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from picker.picks import PickTable

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

SAME_PLACE_M = 0.05  # positions closer than this are one place: coordinates come rounded to centimetres
BROADSIDE = 0.5  # below this share of offset along the line a path says little about the section under the line


@dataclass(frozen=True, eq=False)
class Line:
    """Places along the line.

    Parameters
    ----------
    station_xyz : float (stations, 3)
        Geophone places, sorted along the line.
    station_along_m : float (stations,)
        Their distances along the line, metres.
    shot_xyz, shot_along_m : float (shots, 3) and (shots,)
        Shot places, likewise; repeats at one place are one.
    station_of, shot_of : int (picks,)
        Row of the geophone place and of the shot place of every pick.
    stretch : float (picks,)
        True offset over distance along the line; 1 on a straight line.
    broadside : bool (picks,)
        True where the path runs so much across the line that the section under the line does not describe it.
    """

    station_xyz: FloatArray
    station_along_m: FloatArray
    shot_xyz: FloatArray
    shot_along_m: FloatArray
    station_of: IntArray
    shot_of: IntArray
    stretch: FloatArray
    broadside: npt.NDArray[np.bool_]

    def of(self, rows: IntArray) -> Line:
        """The same line with these picks only; every place stays."""
        return replace(
            self,
            station_of=self.station_of[rows],
            shot_of=self.shot_of[rows],
            stretch=self.stretch[rows],
            broadside=self.broadside[rows],
        )

    def ground_z_m(self, along_m: FloatArray) -> FloatArray:
        """Elevation of the ground at distances along the line, metres, from all shots and geophones."""
        along = np.concatenate([self.station_along_m, self.shot_along_m])
        z = np.concatenate([self.station_xyz[:, 2], self.shot_xyz[:, 2]])
        order = np.argsort(along, kind="stable")
        along, z = along[order], z[order]
        group = np.concatenate([[0], np.cumsum(np.diff(along) > SAME_PLACE_M)])
        counts = np.bincount(group)
        mean_along = np.bincount(group, along) / counts
        mean_z = np.bincount(group, z) / counts
        return np.asarray(np.interp(along_m, mean_along, mean_z))


def lay_out_line(picks: PickTable) -> Line:
    """Lay out the line on which the picks' shots and geophones stand.

    Parameters
    ----------
    picks : PickTable
        At least two different geophone places.

    Returns
    -------
    Line

    Raises
    ------
    ValueError
        If all geophones stand at one place.
    """
    stations, station_of = _places(picks.receiver_xyz)
    shots, shot_of = _places(picks.source_xyz)
    if stations.shape[0] < 2:
        raise ValueError("expected at least two geophone places, found one")
    centre = stations[:, :2].mean(axis=0)
    _, _, axes = np.linalg.svd(stations[:, :2] - centre, full_matrices=False)
    axis = axes[0]
    if axis[np.argmax(np.abs(axis))] < 0:
        axis = -axis
    order = np.argsort((stations[:, :2] - centre) @ axis, kind="stable")
    stations = stations[order]
    rank = np.empty_like(order)
    rank[order] = np.arange(order.size)
    station_of = rank[station_of]
    steps = np.hypot(*np.diff(stations[:, :2], axis=0).T)
    station_along = np.concatenate([[0.0], np.cumsum(steps)])
    shot_along = np.array([along_chain(place[:2], stations[:, :2], station_along) for place in shots])
    shot_order = np.argsort(shot_along, kind="stable")
    shot_rank = np.empty_like(shot_order)
    shot_rank[shot_order] = np.arange(shot_order.size)
    shots, shot_along, shot_of = shots[shot_order], shot_along[shot_order], shot_rank[shot_of]
    run = np.abs(station_along[station_of] - shot_along[shot_of])
    near = picks.offset_m <= 2 * SAME_PLACE_M
    stretch = np.where(run > SAME_PLACE_M, picks.offset_m / np.maximum(run, SAME_PLACE_M), 1.0)
    return Line(
        station_xyz=stations,
        station_along_m=station_along,
        shot_xyz=shots,
        shot_along_m=shot_along,
        station_of=station_of,
        shot_of=shot_of,
        stretch=np.asarray(stretch),
        broadside=np.asarray((run < BROADSIDE * picks.offset_m) & ~near),
    )


def _places(xyz: FloatArray) -> tuple[FloatArray, IntArray]:
    """Distinct horizontal places, to SAME_PLACE_M, and the place of every row."""
    cell = np.round(xyz[:, :2] / SAME_PLACE_M).astype(np.int64)
    _, first, inverse = np.unique(cell, axis=0, return_index=True, return_inverse=True)
    return xyz[first], np.asarray(inverse).reshape(-1).astype(np.int64)


def along_chain(point: FloatArray, chain: FloatArray, along: FloatArray) -> float:
    """Distance along a chain of points at the foot of a point; the end pieces are prolonged.

    Parameters
    ----------
    point : float (2,)
        Horizontal position, metres.
    chain : float (points, 2)
        Horizontal positions of at least two different points, in their order along the line, metres.
    along : float (points,)
        Their distances along the line, metres.

    Returns
    -------
    float
        Metres.
    """
    start, stop = chain[:-1], chain[1:]
    piece = stop - start
    length2 = np.maximum(np.sum(piece**2, axis=1), 1e-12)
    share = np.sum((point - start) * piece, axis=1) / length2
    low = np.zeros(share.size)
    high = np.ones(share.size)
    low[0], high[-1] = -np.inf, np.inf
    share = np.clip(share, low, high)
    distance2 = np.sum((start + share[:, None] * piece - point) ** 2, axis=1)
    nearest = int(np.argmin(distance2))
    return float(along[nearest] + share[nearest] * np.sqrt(length2[nearest]))
