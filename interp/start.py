"""Flat two-layer grounds to start from, found in two ways that fail on different surveys.

One looks at every flat ground on a grid: no branch is assigned beforehand, each candidate predicts the smaller of
its two branches at every offset, and the sum of capped misfits decides, so that picks on the wrong phase do not
steer. The other takes the branches of the travel-time curves, shot by shot (`interp.branches`).
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from interp.branches import BranchAssignment
from interp.refractor import Start

FloatArray = npt.NDArray[np.float64]

CAP = 5.0  # misfit beyond this many standard errors says only "wrong", not how wrong
FLOOR_S = 0.002  # a flat ground cannot be expected to fit closer than this
MAX_PICKS = 600
LEAST_RATIO = 1.1  # a refractor less faster than this than the overburden gives no branch of its own
MOST_RATIO = 20.0


def flat_start(offset_m: FloatArray, time_s: FloatArray, sigma_s: FloatArray) -> Start:
    """Flat two-layer ground nearest to the picks.

    Parameters
    ----------
    offset_m, time_s, sigma_s : float (picks,)
        Offsets, first arrivals and their errors. Two picks at least.

    Returns
    -------
    Start

    Raises
    ------
    ValueError
        If fewer than three picks, or all at one offset, or nearly all at or before their time breaks.
    """
    if offset_m.size < 3 or np.ptp(offset_m) <= 0:
        raise ValueError(f"expected at least three picks at different offsets, found {offset_m.size}")
    stride = max(1, offset_m.size // MAX_PICKS)
    order = np.argsort(offset_m, kind="stable")[::stride]
    offset, time = offset_m[order], time_s[order]
    scale = np.hypot(sigma_s[order], FLOOR_S)
    apparent = offset / np.maximum(time, 1e-4)
    usable = apparent[(offset > 0) & (time > 1e-4)]
    if usable.size < 3:
        raise ValueError(f"expected at least three picks later than their time breaks, found {usable.size}")
    slow, fast = np.quantile(usable, (0.02, 0.98))
    upper = np.geomspace(max(0.5 * slow, 80.0), min(1.3 * fast, 6000.0), 40)
    ratio = np.geomspace(LEAST_RATIO, MOST_RATIO, 36)
    intercept = np.linspace(0.0, float(np.max(time)), 60)[1:]
    best, chosen = np.inf, (0, 0, 0)
    for i, v1 in enumerate(upper):
        direct = offset / v1
        for j, v2 in enumerate(v1 * ratio):
            if v2 > 8000.0:
                break
            head = offset / v2 + intercept[:, None]
            misfit = np.minimum(np.abs(time - np.minimum(direct, head)) / scale, CAP).sum(axis=1)
            k = int(np.argmin(misfit))
            if misfit[k] < best:
                best, chosen = float(misfit[k]), (i, j, k)
    i, j, k = chosen
    return Start(float(upper[i]), float(upper[i] * ratio[j]), float(0.5 * intercept[k]))


def branch_start(branches: BranchAssignment) -> Start | None:
    """Ground that the branches speak of; None where they do not give both velocities and an intercept time."""
    intercept = branches.intercept_time_s[np.isfinite(branches.intercept_time_s)]
    if intercept.size == 0:
        return None
    delay = 0.5 * float(np.median(intercept))
    velocities = (branches.velocity_1_m_s, branches.velocity_2_m_s)
    if not (np.all(np.isfinite(velocities)) and delay > 0 and velocities[1] > LEAST_RATIO * velocities[0] > 0):
        return None
    return Start(*velocities, delay)
