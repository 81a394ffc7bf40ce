"""Layer velocities summed up along the line: one value with its interval for every stretch that reads as one.

A summary of the joint samples only; nothing is estimated here that the interpretation did not already decide.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from interp.section import DepthSection

FloatArray = npt.NDArray[np.float64]

SAME_VELOCITY_M_S = 0.1  # the resolution at which section.json keeps velocities
MOST_STEPS = 4  # more changes than this along the line are a gradual change, told in thirds
BELIEVED_WEIGHT = 0.5


@dataclass(frozen=True)
class VelocityZone:
    """Velocity of one layer over one stretch of the line: a row of `velocities.csv`.

    Parameters
    ----------
    layer : int
        Layer, from 1; the half-space below the last refractor is the last.
    from_m, to_m : float
        The stretch, distance along the line, metres.
    velocity_m_s, velocity_lo_m_s, velocity_hi_m_s : float
        Median, 5 % and 95 % points of the harmonic mean over the stretch, m/s; NaN where nothing is known.
    picks : int
        Believed picks whose wave runs along this layer through the stretch.
    note : str
        What a reader must know; empty where nothing.
    """

    layer: int
    from_m: float
    to_m: float
    velocity_m_s: float
    velocity_lo_m_s: float
    velocity_hi_m_s: float
    picks: int
    note: str


def velocity_zones(section: DepthSection) -> list[VelocityZone]:
    """Sum up every layer's velocity along the line.

    A layer whose velocity does not change along the line gives one zone; one that changes at a few places gives
    a zone between each two; one that changes gradually gives the line in thirds (of its geophones).

    Parameters
    ----------
    section : DepthSection
        The result.

    Returns
    -------
    list of VelocityZone
        Sorted by layer, then along the line.
    """
    zones = []
    for index in range(section.layers + 1):
        for stations in _stretches(section.velocity_samples_m_s[:, index, :]):
            zones.append(_zone(section, index, stations))
    return zones


def _stretches(samples_m_s: FloatArray) -> list[npt.NDArray[np.intp]]:
    """Station indices of each stretch, from the (draws, stations) samples of one layer."""
    stations = np.arange(samples_m_s.shape[1])
    before, after = samples_m_s[:, :-1], samples_m_s[:, 1:]
    both = np.isfinite(before) & np.isfinite(after)
    step = np.where(both, np.abs(np.where(both, after, 0.0) - np.where(both, before, 0.0)), 0.0)
    appears = np.isfinite(before) != np.isfinite(after)
    changes = np.any((step > SAME_VELOCITY_M_S) | appears, axis=0)
    if np.count_nonzero(changes) <= MOST_STEPS:
        return np.split(stations, np.flatnonzero(changes) + 1)
    return [part for part in np.array_split(stations, 3) if part.size]


def _zone(section: DepthSection, index: int, stations: npt.NDArray[np.intp]) -> VelocityZone:
    """One row: the harmonic mean of every draw over the stretch, each geophone weighted by the line it stands for."""
    along = section.along_m
    edges = np.concatenate([along[:1], (along[:-1] + along[1:]) / 2, along[-1:]])
    from_m, to_m = float(edges[stations[0]]), float(edges[stations[-1] + 1])
    samples = section.velocity_samples_m_s[:, index, stations]
    known = np.isfinite(samples).all(axis=0)
    fit = section.fit
    near = np.minimum(fit.source_along_m, fit.receiver_along_m)
    far = np.maximum(fit.source_along_m, fit.receiver_along_m)
    # a zone of a single point (one geophone) counts the rays over it; otherwise touching at an edge is not crossing
    crosses = (near < to_m) & (far > from_m) if to_m > from_m else (near <= to_m) & (far >= from_m)
    picks = int(np.count_nonzero((fit.branch == index) & (fit.weight >= BELIEVED_WEIGHT) & crosses))
    if not known.any():
        return VelocityZone(index + 1, from_m, to_m, np.nan, np.nan, np.nan, picks, "no control on this stretch")
    width = np.diff(edges)[stations][known]
    width = width if width.sum() > 0 else np.ones_like(width)
    mean_m_s = width.sum() / (width / samples[:, known]).sum(axis=1)
    low, median, high = np.quantile(mean_m_s, (0.05, 0.5, 0.95))
    note = "" if picks else "no pick runs along this layer here; the value follows from the rest of the line"
    return VelocityZone(index + 1, from_m, to_m, float(median), float(low), float(high), picks, note)
