"""The first arrivals of one side of a shot together: posterior of each onset given all traces of that side.

A hidden path (time, slowness) runs along the offsets. From one geophone to the next the time grows by slowness times
distance, give or take a residual for relief and statics; slowness prefers to fall with offset, because velocity grows
with depth. What each trace says of its onset comes in as a likelihood; forward-backward sums give the posterior.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from numba import njit

FloatArray = npt.NDArray[np.float64]

# Weight, at every geophone, of arrivals that do not come later with offset: a refractor that rises steeply does that
# for a few geophones, crosstalk of the trigger and lightning do it along the whole spread.
_NOT_DOWNWARD = 0.1


@dataclass(frozen=True)
class Moveout:
    """Prior of the path.

    Parameters
    ----------
    fastest_m_s, slowest_m_s : float
        Bounds of the apparent velocity.
    slowness_steps : int
        Classes of slowness between the bounds, equal in logarithm; two more stand for infinite and slightly negative.
    residual_s, residual_s_m : float
        Mean size of the time residual between neighbours (two-sided exponential): a constant and a part per metre.
    faster, slower : float
        Weight of each further class of slowness towards higher and towards lower velocity.
    """

    fastest_m_s: float = 7000.0
    slowest_m_s: float = 150.0
    slowness_steps: int = 22
    residual_s: float = 3e-4
    residual_s_m: float = 1e-4
    faster: float = 0.55
    slower: float = 0.18

    def slowness_s_m(self) -> FloatArray:
        """Classes of slowness, ascending: one slightly negative (a rising refractor), zero, then the bounds' range."""
        classes = np.geomspace(1 / self.fastest_m_s, 1 / self.slowest_m_s, self.slowness_steps)
        return np.concatenate([[-1 / self.fastest_m_s, 0.0], classes])


@njit(cache=True)
def _smooth_kernel(message: FloatArray, decay: float) -> None:
    """Two-sided exponential smoothing along the last axis, in place; weights sum to one."""
    classes, times = message.shape
    gain = (1.0 - decay) / (1.0 + decay)
    forward = np.empty(times)
    for p in range(classes):
        running = 0.0
        for t in range(times):
            running = running * decay + message[p, t]
            forward[t] = running
        running = 0.0
        for t in range(times - 1, -1, -1):
            here = message[p, t]
            message[p, t] = gain * (forward[t] + running)
            running = (running + here) * decay


@njit(cache=True)
def _change_kernel(message: FloatArray, down: float, up: float, share: FloatArray) -> None:
    """Mix classes in place: from class q to p with down^(q-p) or up^(p-q)."""
    classes, times = message.shape
    fall = np.empty((classes, times))
    for t in range(times):
        running = 0.0
        for p in range(classes - 1, -1, -1):
            fall[p, t] = running
            running = (running + message[p, t] * share[p]) * down
        running = 0.0
        for p in range(classes):
            here = message[p, t] * share[p]
            message[p, t] = fall[p, t] + running + here
            running = (running + here) * up


@njit(cache=True)
def _shift_kernel(message: FloatArray, shift: FloatArray, out: FloatArray) -> None:
    """out[p, t + shift[p]] = message[p, t], shared between the two nearest times; what leaves the grid is lost."""
    classes, times = message.shape
    for p in range(classes):
        whole = int(np.floor(shift[p]))
        part = shift[p] - whole
        for t in range(times):
            value = 0.0
            a = t - whole
            if 0 <= a < times:
                value += message[p, a] * (1.0 - part)
            if 0 <= a - 1 < times:
                value += message[p, a - 1] * part
            out[p, t] = value


@njit(cache=True)
def _posterior_kernel(
    emission: FloatArray,
    allowed: FloatArray,
    shift: FloatArray,
    decay: FloatArray,
    down: float,
    up: float,
) -> FloatArray:
    """Forward-backward sums: emission (traces, times), allowed (traces, classes, times), shift (traces-1, classes)."""
    traces, classes, times = allowed.shape
    forward = np.empty((traces, classes, times))
    share = np.empty(classes)
    ones = np.ones(classes)
    for q in range(classes):
        total = 0.0
        for p in range(classes):
            total += down ** (q - p) if p <= q else up ** (p - q)
        share[q] = 1.0 / total
    moved = np.empty((classes, times))
    for i in range(traces):
        if i == 0:
            moved[:] = 1.0
        else:
            _shift_kernel(forward[i - 1], shift[i - 1], moved)
            _smooth_kernel(moved, decay[i - 1])
            _change_kernel(moved, down, up, share)
        total = 0.0
        for p in range(classes):
            for t in range(times):
                value = moved[p, t] * emission[i, t] * allowed[i, p, t]
                forward[i, p, t] = value
                total += value
        if total > 0.0:
            for p in range(classes):
                for t in range(times):
                    forward[i, p, t] /= total
        else:
            forward[i] = allowed[i]
    posterior = np.zeros((traces, times))
    backward = np.ones((classes, times))
    weighted = np.empty((classes, times))
    for i in range(traces - 1, -1, -1):
        total = 0.0
        for p in range(classes):
            for t in range(times):
                value = forward[i, p, t] * backward[p, t]
                posterior[i, t] += value
                total += value
        if total > 0.0:
            for t in range(times):
                posterior[i, t] /= total
        if i == 0:
            break
        largest = 0.0
        for p in range(classes):
            for t in range(times):
                weighted[p, t] = backward[p, t] * emission[i, t] * allowed[i, p, t]
                largest = max(largest, weighted[p, t])
        if largest > 0.0:
            for p in range(classes):
                for t in range(times):
                    weighted[p, t] /= largest
        # the transpose of the step forward: classes, then smoothing (symmetric), then the shift back
        _change_kernel(weighted, up, down, ones)
        for p in range(classes):
            for t in range(times):
                weighted[p, t] *= share[p]
        _smooth_kernel(weighted, decay[i - 1])
        _shift_kernel(weighted, -shift[i - 1], backward)
    return posterior


def smooth_times(values: FloatArray, interval_s: float, scale_s: float) -> FloatArray:
    """Smooth along the last axis with a two-sided exponential of the given mean size; float (traces, times)."""
    out = np.array(values, dtype=np.float64, order="C")
    _smooth_kernel(out, float(np.exp(-interval_s / scale_s)))
    return out


def path_posterior(
    likelihood: FloatArray,
    offset_m: npt.NDArray[np.floating],
    time_s: npt.NDArray[np.floating],
    moveout: Moveout,
    slack_s: float,
) -> FloatArray:
    """Posterior of the onset of each trace given all traces of one side of the shot.

    Parameters
    ----------
    likelihood : float (traces, times)
        Of the onset of each trace at each time, from that trace alone; positive somewhere, largest about one.
    offset_m : float (traces,)
        Ascending.
    time_s : float (times,)
        Equidistant times after the time break.
    moveout : Moveout
        The prior.
    slack_s : float
        How far the time break may be off, either way.

    Returns
    -------
    float (traces, times)
        Rows sum to one; zero where no path is possible.
    """
    slowness = moveout.slowness_s_m()
    interval_s = float(time_s[1] - time_s[0])
    step_m = np.diff(offset_m)
    shift = step_m[:, np.newaxis] * slowness / interval_s
    decay = np.exp(-interval_s / (moveout.residual_s + moveout.residual_s_m * step_m))
    earliest = offset_m / moveout.fastest_m_s - slack_s
    latest = offset_m / moveout.slowest_m_s + slack_s
    inside = (time_s >= earliest[:, np.newaxis]) & (time_s <= latest[:, np.newaxis])
    # Velocity grows with depth: the slowness at an offset is not above the mean slowness up to there. Relief and dip
    # may break that by a third; ground roll behind a fast first arrival breaks it by much more.
    bound = 1.33 * np.maximum(time_s, 0.0) + slack_s
    steep = slowness[np.newaxis, :, np.newaxis] * offset_m[:, np.newaxis, np.newaxis] <= bound
    allowed = (inside[:, np.newaxis, :] & steep).astype(np.float64)
    allowed *= np.where(slowness > 0, 1.0, _NOT_DOWNWARD)[np.newaxis, :, np.newaxis]
    emission = np.ascontiguousarray(likelihood)
    return np.asarray(
        _posterior_kernel(emission, allowed, np.ascontiguousarray(shift), decay, moveout.faster, moveout.slower)
    )
