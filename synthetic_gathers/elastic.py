"""Shot gathers of a LayeredModel by two-dimensional elastic (P-SV) finite differences, free surface with relief.

Velocity and stress on a staggered grid [Virieux1986] [Levander1988], the ground surface by weighting cells with their
share of ground (`rasterise`), convolutional perfectly matched layers at the other three edges [Komatitsch2007].
The source is a line force across the plane: amplitudes fall off as in two dimensions.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from synthetic_gathers.model import FloatArray, LayeredModel
from synthetic_gathers.rasterise import Grid, IntArray, Medium, make_grid, rasterise, velocity_range_m_s
from synthetic_gathers.wavelets import Wavelet

# Grid points per wavelength of the slowest shear wave at `Wavelet.highest_hz`.
POINTS_PER_WAVELENGTH = 8.0
# Share of the stability limit of the time step.
_COURANT = 0.9
# Sum of the magnitudes of the fourth-order stencil: 9/8 + 1/24.
_STENCIL_SUM = 7.0 / 6.0
# Absorbing columns and rows at the default spacing; a finer grid takes more of them, so that they stay as thick in
# metres. Then their profile and the reflection they would have in a continuum.
_EDGE = 40
_EDGE_POWER = 3
_EDGE_REFLECTION = 1e-5
# Share of the damping that also acts along the edge; without it slow layers under relief make the edge unstable.
_EDGE_ACROSS = 0.1
# Cells between the outermost position and the absorbing columns, at the default spacing.
_MARGIN_CELLS = 24
# Columns kept ahead of the fastest possible wave; the stencil is two columns wide on either side.
_AHEAD = 6
# Peak force per metre of line, N/m.
PEAK_FORCE_N_M = 1000.0


def simulate(
    model: LayeredModel,
    source_x_m: float,
    receiver_x_m: npt.ArrayLike,
    *,
    source_depth_m: float = 0.0,
    duration_s: float,
    interval_s: float,
    wavelet: Wavelet,
    spacing_m: float | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> npt.NDArray[np.float32]:
    """Vertical particle velocity at geophones on the ground after a vertical blow.

    Parameters
    ----------
    model : LayeredModel
    source_x_m : float
        Position of the source along the line, metres.
    receiver_x_m : array (receivers,)
        Positions of the geophones; they stand on the ground surface.
    source_depth_m : float
        Depth of the source below the ground, metres; 0 is a blow on the surface.
    duration_s : float
        Length of the record; it holds round(duration_s / interval_s) samples.
    interval_s : float
        Sampling interval. The first sample is at the time break, sample k at k * interval_s.
    wavelet : Wavelet
        Force of the blow against time, from the time break on.
    spacing_m : float, optional
        Grid spacing; when None, 8 points to the wavelength of the slowest shear wave at `wavelet.highest_hz`.
    progress : callable, optional
        Called with (samples done, samples in all) after each.

    Returns
    -------
    float32 array (receivers, samples)
        m/s for a line force of peak 1000 N per metre, *positive downward* for a downward blow: the polarity of the
        exploration standard, by which ground that moves up gives negative numbers, so the first arrival of
        a refracted compression is negative.

    Raises
    ------
    ValueError
        If a position is not finite, a duration, interval or spacing is not above 0, or the model is not elastic.

    Notes
    -----
    The step is interval_s over a whole number, so samples are taken, not interpolated, and nothing moves before its
    time. Columns that no wave can have reached stay exactly 0.

    At the default spacing surface waves lag by 0.4 % of their travel time on flat ground, 0.8 % on a slope of
    10 degrees and 1.8 % on one of 20, where the surface is a staircase of cells in part filled. First arrivals are far
    better sampled: with a 60 Hz blow a head wave is late by less than 0.1 ms, whatever part of its first swing is read
    (tests/external/test_elastic_closed_forms.py). One core works on one shot; run shots side by side in threads to
    use more.

    References
    ----------
    [Virieux1986] P-SV wave propagation in heterogeneous media: velocity-stress finite-difference method.
    Geophysics 51, 889-901.
    [Levander1988] Fourth-order finite-difference P-SV seismograms. Geophysics 53, 1425-1436.
    [Komatitsch2007] Komatitsch, Martin: An unsplit convolutional perfectly matched layer improved at grazing incidence
    for the seismic wave equation. Geophysics 72, SM155-SM167.
    """
    receivers = np.atleast_1d(np.asarray(receiver_x_m, dtype=np.float64))
    _check(source_x_m, receivers, source_depth_m, duration_s, interval_s, spacing_m)
    ends = np.array([min(source_x_m, receivers.min()), max(source_x_m, receivers.max())])
    slowest, fastest = velocity_range_m_s(model, np.linspace(ends[0], ends[1], 401))
    default_m = slowest / (POINTS_PER_WAVELENGTH * wavelet.highest_hz)
    if spacing_m is None:
        spacing_m = default_m
    refined = max(default_m / spacing_m, 1.0)
    grid = make_grid(
        model,
        float(ends[0]),
        float(ends[1]),
        spacing_m=spacing_m,
        margin_m=_MARGIN_CELLS * refined * spacing_m,
        depth_below_m=max(source_depth_m, 0.0) + 0.5 * fastest / wavelet.dominant_hz,
        edge=int(np.ceil(_EDGE * refined)),
    )
    medium = rasterise(model, grid)
    run = _prepare(grid, medium, wavelet, interval_s)
    samples = round(duration_s / interval_s)

    source_node, source_share = _surface_nodes(grid, medium, np.array([source_x_m]), source_depth_m)
    gain = _source_gain(grid, medium, source_node[0], source_share[0], run.step_s)
    receiver_node, receiver_share = _surface_nodes(grid, medium, receivers, 0.0)

    from synthetic_gathers.stencils import advance

    traces = np.zeros((receivers.size, samples), dtype=np.float32)
    for sample in range(1, samples):
        step = (sample - 1) * run.steps_per_sample + np.arange(run.steps_per_sample, dtype=np.float64)
        force = wavelet((step + 0.5) * run.step_s).astype(np.float32)
        window = _reached(grid, source_x_m, run.fastest_m_s * (step + 1) * run.step_s)
        advance(
            force,
            window,
            run.rows,
            run.fields,
            run.moduli,
            1.0 / grid.spacing_m,
            run.per_z,
            run.memory,
            run.edges,
            source_node[0],
            gain,
        )
        vz = run.fields[1][receiver_node[..., 0], receiver_node[..., 1]]
        traces[:, sample] = np.sum(vz * receiver_share, axis=1)
        if progress is not None:
            progress(sample + 1, samples)
    return traces


def _check(
    source_x_m: float,
    receiver_x_m: FloatArray,
    source_depth_m: float,
    duration_s: float,
    interval_s: float,
    spacing_m: float | None,
) -> None:
    if receiver_x_m.ndim != 1 or receiver_x_m.size == 0 or not np.isfinite(receiver_x_m).all():
        raise ValueError(f"receiver_x_m: expected one row of finite positions, found shape {receiver_x_m.shape}")
    if not (np.isfinite(source_x_m) and np.isfinite(source_depth_m) and source_depth_m >= 0.0):
        raise ValueError(
            f"source: expected a finite position and depth >= 0 m, found x {source_x_m!r}, depth {source_depth_m!r}"
        )
    positive = {"duration_s": duration_s, "interval_s": interval_s, "spacing_m": spacing_m}
    for name, value in positive.items():
        if value is not None and not (value > 0.0 and np.isfinite(value)):
            raise ValueError(f"{name}: expected a finite number above 0, found {value!r}")
    if interval_s > duration_s:
        raise ValueError(f"interval_s: expected at most duration_s = {duration_s:g} s, found {interval_s:g} s")


@dataclass(frozen=True, eq=False)
class _Run:
    """State and coefficients of one run, in the layout `stencils.advance` describes."""

    step_s: float
    steps_per_sample: int
    fastest_m_s: float
    rows: IntArray
    fields: npt.NDArray[np.float32]
    moduli: npt.NDArray[np.float32]
    per_z: npt.NDArray[np.float32]
    memory: npt.NDArray[np.float32]
    edges: tuple[npt.NDArray[np.float32], ...]


def _prepare(grid: Grid, medium: Medium, wavelet: Wavelet, interval_s: float) -> _Run:
    height_m = grid.row_height_m
    # Faces see the harmonic neighbourhood of the rows beside them: the limit of a cell uses the faster of both.
    fastest = np.maximum(medium.fastest_m_s, np.roll(medium.fastest_m_s, -1))
    rate = fastest * _STENCIL_SUM * np.sqrt(1.0 / grid.spacing_m**2 + 1.0 / height_m**2)
    steps_per_sample = int(np.ceil(interval_s * rate.max() / _COURANT))
    step_s = interval_s / steps_per_sample
    shape = medium.fill.shape
    moduli = np.array([medium.c11, medium.c13, medium.c33, medium.c44, medium.buoyancy_x, medium.buoyancy_z])
    face_m = np.concatenate([height_m[:1], 0.5 * (height_m[1:] + height_m[:-1])])
    return _Run(
        step_s=step_s,
        steps_per_sample=steps_per_sample,
        fastest_m_s=float(fastest.max()),
        rows=_row_limits(medium.fill, grid.edge),
        fields=np.zeros((5, *shape), dtype=np.float32),
        moduli=(moduli * step_s).astype(np.float32),
        per_z=(1.0 / np.array([height_m, face_m])).astype(np.float32),
        memory=np.zeros((8, *shape), dtype=np.float32),
        edges=_edge_coefficients(grid, float(fastest.max()), wavelet.dominant_hz, step_s),
    )


def _row_limits(fill: FloatArray, edge: int) -> IntArray:
    """Rows (columns, 5) at which each column starts, widens its stencils, absorbs and ends."""
    columns, rows = fill.shape
    ground = np.argmax(fill > 0.0, axis=1)
    full = rows - np.argmax(fill[:, ::-1] < 1.0 - 1e-9, axis=1)
    limits = np.zeros((columns, 5), dtype=np.int64)
    limits[:, 0] = np.minimum(ground, np.append(ground[1:], ground[-1]))
    around = np.lib.stride_tricks.sliding_window_view(np.pad(full, 3, mode="edge"), 7).max(axis=1)
    limits[:, 1] = around
    limits[:, 2] = around + 1
    limits[:, 3] = rows - 2
    limits[:, 4] = rows - 2 - edge
    return limits


def _edge_coefficients(
    grid: Grid, fastest_m_s: float, dominant_hz: float, step_s: float
) -> tuple[npt.NDArray[np.float32], ...]:
    """Decay and gain of the absorbing memory at column centres, half columns, row centres and row faces."""
    x_m, spacing_m, edge = grid.x_m, grid.spacing_m, grid.edge
    width_m = edge * spacing_m
    left_m, right_m = x_m[edge + 2], x_m[-edge - 3]
    centre_z_m = 0.5 * (grid.face_z_m[1:] + grid.face_z_m[:-1])
    bottom_m = grid.face_z_m[-edge - 3]
    thickness_m = bottom_m - grid.face_z_m[-3]

    def coefficients(into: FloatArray, width: float) -> npt.NDArray[np.float32]:
        share = np.clip(into / width, 0.0, 1.0)
        peak = -(_EDGE_POWER + 1) * fastest_m_s * np.log(_EDGE_REFLECTION) / (2.0 * width)
        damping = peak * share**_EDGE_POWER
        shift = np.pi * dominant_hz * (1.0 - share)
        pairs = []
        for part in (damping, _EDGE_ACROSS * damping):
            decay = np.exp(-(part + shift) * step_s)
            pairs += [decay, part / (part + shift + 1e-30) * (decay - 1.0)]
        return np.where(share > 0.0, pairs, 0.0).T.astype(np.float32)

    def across(position: FloatArray) -> FloatArray:
        return np.asarray(np.maximum(left_m - position, position - right_m))

    return (
        coefficients(across(x_m), width_m),
        coefficients(across(x_m + 0.5 * spacing_m), width_m),
        coefficients(bottom_m - centre_z_m, thickness_m),
        coefficients(bottom_m - grid.face_z_m[:-1], thickness_m),
    )


def _reached(grid: Grid, source_x_m: float, distance_m: FloatArray) -> IntArray:
    """First column and end of those within reach of each distance; shape (steps, 2)."""
    columns = grid.x_m.size
    centre = (source_x_m - grid.x_m[0]) / grid.spacing_m
    reach = distance_m / grid.spacing_m + _AHEAD
    left = np.clip(np.floor(centre - reach), 2, columns - 3)
    right = np.clip(np.ceil(centre + reach) + 1, 3, columns - 2)
    return np.stack([left, right], axis=1).astype(np.int64)


def _surface_nodes(grid: Grid, medium: Medium, x_m: FloatArray, depth_m: float) -> tuple[IntArray, FloatArray]:
    """The vz nodes around points at a depth below ground, and their shares.

    Linear between the two columns beside x, and in each column between two faces at that depth below the ground of
    that column. Returns nodes (points, 4, 2) and shares (points, 4) that sum to 1.
    """
    place = (x_m - grid.x_m[0]) / grid.spacing_m
    left = np.floor(place).astype(np.int64)
    toward_right = place - left
    nodes = np.zeros((x_m.size, 4, 2), dtype=np.int64)
    shares = np.zeros((x_m.size, 4))
    for side, column_share in enumerate((1.0 - toward_right, toward_right)):
        column = left + side
        row_place = np.interp(
            -(medium.surface_z_m[column] - depth_m), -grid.face_z_m, np.arange(grid.face_z_m.size, dtype=np.float64)
        )
        first = np.argmax(medium.buoyancy_z[column] > 0.0, axis=1)
        row_place = np.maximum(row_place, first)
        row = np.floor(row_place).astype(np.int64)
        down = row_place - row
        for part, row_share in enumerate((1.0 - down, down)):
            nodes[:, 2 * side + part, 0] = column
            nodes[:, 2 * side + part, 1] = row + part
            shares[:, 2 * side + part] = column_share * row_share
    return nodes, shares


def _source_gain(
    grid: Grid, medium: Medium, nodes: IntArray, shares: FloatArray, step_s: float
) -> npt.NDArray[np.float32]:
    """Velocity that each source node gains in one step from a force of 1: share * force * step / mass."""
    height_m = grid.row_height_m
    face_m = 0.5 * (height_m[nodes[:, 1]] + height_m[nodes[:, 1] - 1])
    per_mass = medium.buoyancy_z[nodes[:, 0], nodes[:, 1]] / (grid.spacing_m * face_m)
    gain: npt.NDArray[Any] = shares * PEAK_FORCE_N_M * step_s * per_mass
    return gain.astype(np.float32)
