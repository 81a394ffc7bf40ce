"""DepthSection: the result of an interpretation, as arrays with their joint samples.

Statistical intervals and the bounds of what first arrivals cannot decide stand in separate fields.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
StrArray = npt.NDArray[np.str_]

COVERAGES = ("two", "one", "none")


@dataclass(frozen=True, eq=False)
class PickFit:
    """What the result says of every pick it used, row by row.

    Parameters
    ----------
    record, channel : int (picks,)
        The trace.
    source_along_m, receiver_along_m : float (picks,)
        Distance along the line of shot and geophone, metres.
    offset_m : float (picks,)
        Shot to geophone distance, metres.
    time_s, sigma_s : float (picks,)
        The pick on its record's clock and the standard error the interpretation gave it, seconds.
    predicted_s : float (picks,)
        Median predicted time on the record's own clock (its time-break shift included), seconds.
    branch : int (picks,)
        0 the direct wave, n the head wave of refractor n: the most probable branch.
    branch_probability : float (picks,)
        Probability of that branch.
    weight : float (picks,)
        1 for a pick that was believed, towards 0 for one that was set aside as an outlier.
    """

    record: IntArray
    channel: IntArray
    source_along_m: FloatArray
    receiver_along_m: FloatArray
    offset_m: FloatArray
    time_s: FloatArray
    sigma_s: FloatArray
    predicted_s: FloatArray
    branch: IntArray
    branch_probability: FloatArray
    weight: FloatArray


@dataclass(frozen=True)
class Bound:
    """One ambiguity that first arrivals cannot settle, at one place: a row of `bounds.csv`."""

    along_m: float
    layer: int
    kind: str
    assumption: str
    depth_shallow_m: float
    depth_deep_m: float


@dataclass(frozen=True, eq=False)
class DepthSection:
    """Depth to every refractor under every geophone and the layer velocities, with their joint samples.

    `layers` refractors were seen, numbered from 1; layer n ends at refractor n, and the half-space below the
    last is layer `layers + 1`. Stations are the geophone positions, sorted along the line. Arrays with a
    leading `draws` axis are joint: draw k of depth belongs with draw k of velocity.

    Parameters
    ----------
    station_xyz : float (stations, 3)
        Geophone positions, metres; z is the elevation of the ground.
    along_m : float (stations,)
        Distance along the line, metres.
    depth_samples_m : float (draws, layers, stations)
        Vertical depth below ground of each refractor; NaN throughout where a station has no control.
    velocity_samples_m_s : float (draws, layers + 1, stations)
        Layer velocities at each station (for the half-space: along the refractor there).
    bound_shallow_m, bound_deep_m : float (layers, stations)
        Envelope of `bounds`; NaN where none was computed. Never part of the statistical interval.
    coverage : str (layers, stations)
        `two`, `one` or `none`: from how many sides rays from that refractor reached the station.
    deeper_than_m : float (layers, stations)
        Where a refractor was not seen, the depth it must exceed; NaN elsewhere.
    picks : int (layers, stations)
        Number of picks that bear on the point.
    note : str (layers, stations)
        What a reader must know about the point; empty where nothing.
    fit : PickFit
        Branch, prediction and weight of every pick used.
    rms_misfit_s : float
        Root mean square of pick minus prediction over believed picks, seconds.
    chi2_per_pick : float
        Mean squared residual over squared stated error of believed picks; 1 when the errors are right.
    refractor_probability : dict of int to float
        Probability of each number of refractors that was compared; the result is conditioned on `layers`.
    shot_shift_s : dict of int to (float, float)
        Time-break shift of every record: median and standard error, seconds.
    bounds : tuple of Bound
        Rows of `bounds.csv`.
    warnings : tuple of str
        What a person must look at, in full sentences.
    settings : dict
        Everything that was chosen, seed included; plain JSON types.
    """

    station_xyz: FloatArray
    along_m: FloatArray
    depth_samples_m: FloatArray
    velocity_samples_m_s: FloatArray
    bound_shallow_m: FloatArray
    bound_deep_m: FloatArray
    coverage: StrArray
    deeper_than_m: FloatArray
    picks: IntArray
    note: StrArray
    fit: PickFit
    rms_misfit_s: float
    chi2_per_pick: float
    refractor_probability: dict[int, float]
    shot_shift_s: dict[int, tuple[float, float]] = field(default_factory=dict)
    bounds: tuple[Bound, ...] = ()
    warnings: tuple[str, ...] = ()
    settings: dict[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        draws, layers, stations = self.depth_samples_m.shape
        shapes = {
            "station_xyz": (stations, 3),
            "along_m": (stations,),
            "velocity_samples_m_s": (draws, layers + 1, stations),
            "bound_shallow_m": (layers, stations),
            "bound_deep_m": (layers, stations),
            "coverage": (layers, stations),
            "deeper_than_m": (layers, stations),
            "picks": (layers, stations),
            "note": (layers, stations),
        }
        for name, shape in shapes.items():
            found = getattr(self, name).shape
            if found != shape:
                raise ValueError(f"{name}: expected shape {shape}, found {found}")
        unknown = sorted(set(self.coverage.ravel().tolist()) - set(COVERAGES))
        if unknown:
            raise ValueError(f"coverage: expected one of {COVERAGES}, found {unknown}")

    @property
    def layers(self) -> int:
        """Number of refractors seen in first arrivals."""
        return int(self.depth_samples_m.shape[1])

    @property
    def depth_m(self) -> FloatArray:
        """Median depth of each refractor; shape (layers, stations), NaN without control."""
        return np.asarray(np.median(self.depth_samples_m, axis=0))

    @property
    def depth_interval_90_m(self) -> FloatArray:
        """5 % and 95 % points of depth; shape (2, layers, stations), NaN without control."""
        return np.asarray(np.quantile(self.depth_samples_m, (0.05, 0.95), axis=0))

    @property
    def velocity_m_s(self) -> FloatArray:
        """Median velocity of each layer at each station; shape (layers + 1, stations)."""
        return np.asarray(np.median(self.velocity_samples_m_s, axis=0))

    @property
    def velocity_interval_90_m_s(self) -> FloatArray:
        """5 % and 95 % points of the layer velocities; shape (2, layers + 1, stations)."""
        return np.asarray(np.quantile(self.velocity_samples_m_s, (0.05, 0.95), axis=0))
