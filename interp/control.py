"""What holds the refractor at each station: from which sides it was seen, by how many picks, and what if not.

A head wave says something of the refractor where its ray left it, a slanted ray away from the geophone or the
shot, so it controls the stretch between the place on the ground and that foot.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Control:
    """Control of one refractor at every station.

    Parameters
    ----------
    coverage : str (stations,)
        `two` when head waves of both directions left the refractor near the station, `one` or `none`.
    picks : int (stations,)
        Number of head-wave legs that stand near the station.
    between : bool (stations,)
        True at a station without control that has some on both sides: its depth is an interpolation.
    reach_m : float (stations,)
        Longest offset of a believed first arrival whose path passes the station; 0 where none does.
    """

    coverage: npt.NDArray[np.str_]
    picks: IntArray
    between: BoolArray
    reach_m: FloatArray


def control_of_stations(
    station_m: FloatArray,
    shot_m: FloatArray,
    receiver_m: FloatArray,
    shot_foot_m: FloatArray,
    receiver_foot_m: FloatArray,
    head: BoolArray,
    believed: BoolArray,
) -> Control:
    """Count the feet of head waves near every station.

    Parameters
    ----------
    station_m : float (stations,)
        Places along the line, sorted, metres.
    shot_m, receiver_m, shot_foot_m, receiver_foot_m : float (picks,)
        Places along the line of shot, geophone and of the two feet of the head wave.
    head, believed : bool (picks,)
        Whether the pick is a head wave; whether it is taken to be on the right phase.

    Returns
    -------
    Control

    Notes
    -----
    A pick controls the stretch from its geophone to the foot below it, and from its shot to the foot below that,
    each widened by three quarters of the median station spacing. Both count for the direction in which it runs.
    """
    near_m = 0.75 * float(np.median(np.diff(station_m)))
    used = head & believed
    rightward = receiver_m > shot_m
    count = np.zeros((2, station_m.size), np.int64)
    for place, foot in ((shot_m, shot_foot_m), (receiver_m, receiver_foot_m)):
        close = (np.minimum(place, foot)[:, None] - near_m <= station_m) & (
            station_m <= np.maximum(place, foot)[:, None] + near_m
        )
        for side, direction in enumerate((rightward, ~rightward)):
            count[side] += np.sum(close & (used & direction)[:, None], axis=0)
    sides = (count > 0).sum(axis=0)
    held = np.flatnonzero(sides > 0)
    between = np.zeros(station_m.size, bool)
    if held.size:
        between[held[0] : held[-1] + 1] = True
    between &= sides == 0
    low, high = np.minimum(shot_m, receiver_m), np.maximum(shot_m, receiver_m)
    passes = (low[:, None] <= station_m) & (station_m <= high[:, None]) & believed[:, None]
    reach = np.max(np.where(passes, (high - low)[:, None], 0.0), axis=0)
    return Control(np.array(["none", "one", "two"])[sides], count.sum(axis=0), between, reach)


def least_depth_m(reach_m: FloatArray, upper_m_s: FloatArray | float, lower_m_s: float) -> FloatArray:
    """Least depth of a refractor that gave no first arrival out to an offset.

    Parameters
    ----------
    reach_m : float (stations,)
        Largest offset at which the direct wave still came first, metres.
    upper_m_s, lower_m_s : float
        Velocity of the overburden, and the one taken for the refractor; m/s.

    Returns
    -------
    float (stations,)
        Metres: h = (x / 2) sqrt((V2 - V1) / (V2 + V1)), the crossover distance solved for depth.
    """
    upper = np.asarray(upper_m_s, dtype=np.float64)
    return np.asarray(0.5 * reach_m * np.sqrt(np.maximum(lower_m_s - upper, 0) / (lower_m_s + upper)))
