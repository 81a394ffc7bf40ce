"""A LayeredModel put on the grid of the modeller: where its nodes stand, what elastic constants they carry.

Layer boundaries and the ground surface seldom fall on cell edges. Every cell therefore knows what share of it each
layer fills, and is given the constants of the equivalent medium: harmonic means across the layering, which gives the
boundary its place to a fraction of a cell. A cell that the ground fills in part carries that part of the mass and of
the stiffness; the surface then moves continuously with the model and does not jump from cell to cell.

Index [i, j]: i along x, j downward. Cell centres carry the normal stresses; vx stands half a cell to the right of the
centre, vz on the top face, the shear stress on the upper right corner.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from synthetic_gathers.model import FloatArray, LayeredModel, Profile

IntArray = npt.NDArray[np.int64]

# Rows of air kept above the highest ground, so that stencils never leave the arrays.
_AIR_ROWS = 4
# Cells filled less than this are air: far below the accuracy of the scheme, far above float32 round-off.
_LEAST_FILL = 1e-3
# Vertical sub-columns per cell when its fill is measured.
_SUBCOLUMNS = 5
# Rows at the surface are this much lower than columns are wide: the scheme is of second order only there, which slows
# surface waves, and low rows cost no smaller time step as long as faster ground lies below.
_SURFACE_REFINEMENT = 2.0
# Largest change of row height per metre of depth.
_ROW_GROWTH = 0.06


@dataclass(frozen=True, eq=False)
class Grid:
    """Node positions.

    Attributes
    ----------
    x_m : (columns,) cell centres, evenly spaced
    face_z_m : (rows + 1,) elevation of the cell tops, and last of the lowest base; decreasing
    edge : columns at either end, and rows at the bottom, that absorb
    """

    x_m: FloatArray
    face_z_m: FloatArray
    edge: int

    @property
    def spacing_m(self) -> float:
        """Horizontal spacing, metres."""
        return float(self.x_m[1] - self.x_m[0])

    @property
    def row_height_m(self) -> FloatArray:
        """Height of each row, metres, shape (rows,)."""
        return -np.diff(self.face_z_m)


@dataclass(frozen=True, eq=False)
class Medium:
    """Elastic constants and mass on the grid, all (columns, rows); zero in air.

    Attributes
    ----------
    c11, c13, c33 : Pa, at cell centres, times the share of the cell that is ground
    c44 : Pa, at upper right corners; zero on the surface
    buoyancy_x, buoyancy_z : m^3/kg, at the vx and vz nodes
    fill : share of the cell that is ground
    surface_z_m : (columns,) mean elevation of the ground over each column
    fastest_m_s : (rows,) fastest compressional velocity of each row
    """

    c11: FloatArray
    c13: FloatArray
    c33: FloatArray
    c44: FloatArray
    buoyancy_x: FloatArray
    buoyancy_z: FloatArray
    fill: FloatArray
    surface_z_m: FloatArray
    fastest_m_s: FloatArray


def property_at(value: float | Profile, x_m: FloatArray) -> FloatArray:
    """A layer property at x, whether it is a number or a function; shape of `x_m`."""
    found = value(x_m) if callable(value) else value
    return np.broadcast_to(np.asarray(found, dtype=np.float64), x_m.shape)


def boundaries_m(model: LayeredModel, x_m: FloatArray) -> FloatArray:
    """Elevation of the surface and of the base of every layer but the last; shape (layers, points of x)."""
    levels = [np.broadcast_to(np.asarray(model.surface_z_m(x_m), dtype=np.float64), x_m.shape)]
    for interface in model.interface_z_m:
        levels.append(np.minimum(levels[-1], interface(x_m)))
    return np.array(levels)


def velocity_range_m_s(model: LayeredModel, x_m: FloatArray) -> tuple[float, float]:
    """Slowest shear and fastest compressional velocity along x, over layers that are there, m/s.

    Raises
    ------
    ValueError
        If a layer has Vs <= 0, density <= 0, or Vp below the 1.16 Vs that a positive bulk modulus needs.
    """
    levels = boundaries_m(model, x_m)
    thickness_m = np.vstack([-np.diff(levels, axis=0), np.full((1, x_m.size), np.inf)])
    slowest, fastest = np.inf, 0.0
    for number, layer in enumerate(model.layers):
        there = thickness_m[number] > 0.0
        if not there.any():
            continue
        vp = property_at(layer.vp_m_s, x_m)[there]
        vs = property_at(layer.vs_m_s, x_m)[there]
        density = property_at(layer.density_kg_m3, x_m)[there]
        if not (vs > 0).all() or not (density > 0).all() or not (3.0 * vp**2 > 4.0 * vs**2).all():
            raise ValueError(
                f"layer {number}: expected Vs > 0, density > 0 and Vp > 1.155 Vs, found Vs {vs.min():g} to "
                f"{vs.max():g} m/s, Vp {vp.min():g} to {vp.max():g} m/s, density from {density.min():g} kg/m3"
            )
        slowest, fastest = min(slowest, float(vs.min())), max(fastest, float(vp.max()))
    return slowest, fastest


def make_grid(
    model: LayeredModel,
    x_from_m: float,
    x_to_m: float,
    *,
    spacing_m: float,
    margin_m: float,
    depth_below_m: float,
    edge: int,
) -> Grid:
    """Grid around a spread: even along x, rows that grow with the shear velocity downward.

    Parameters
    ----------
    x_from_m, x_to_m : float
        Ends of the spread.
    spacing_m : float
        Horizontal spacing and height of the topmost rows.
    margin_m : float
        Ground kept between the spread and the absorbing columns.
    depth_below_m : float
        Ground kept between the deepest interface (or the lowest ground of a uniform model) and the absorbing rows.
    edge : int
        Absorbing columns and rows.
    """
    pad = int(np.ceil(margin_m / spacing_m)) + edge + 3
    inside = int(np.ceil((x_to_m - x_from_m) / spacing_m)) + 1
    x_m: FloatArray = x_from_m + spacing_m * (np.arange(inside + 2 * pad, dtype=np.float64) - pad)
    held = _held(x_m, edge)
    levels = boundaries_m(model, held)
    top_m = float(levels[0].max())
    base_m = float(levels[-1].min()) - depth_below_m

    wanted_m = _row_heights_wanted(model, held, levels, top_m, base_m, spacing_m)
    fine_z_m = top_m - spacing_m * np.arange(wanted_m.size)
    faces = [top_m]
    while faces[-1] > base_m:
        faces.append(faces[-1] - float(np.interp(-faces[-1], -fine_z_m, wanted_m)))
    last = faces[-2] - faces[-1]
    faces += [faces[-1] - last * (k + 1) for k in range(edge + 3)]
    # As high as the first row of ground: the mass at the surface face is half of that row and nothing of the air.
    air = [top_m + (faces[0] - faces[1]) * k for k in range(_AIR_ROWS, 0, -1)]
    return Grid(x_m, np.array(air + faces), edge)


def _held(x_m: FloatArray, edge: int) -> FloatArray:
    """Positions at which the model is asked: absorbing columns repeat the last column before them."""
    return np.asarray(np.clip(x_m, x_m[edge + 2], x_m[-edge - 3]))


def _row_heights_wanted(
    model: LayeredModel, x_m: FloatArray, levels: FloatArray, top_m: float, base_m: float, spacing_m: float
) -> FloatArray:
    """Row height in proportion to the slowest shear velocity of each level, growing no faster than _ROW_GROWTH."""
    count = int(np.ceil((top_m - base_m) / spacing_m)) + 2
    slowest = np.full(count, np.inf)
    for number, layer in enumerate(model.layers):
        vs = property_at(layer.vs_m_s, x_m)
        ceiling = levels[number]
        floor = levels[number + 1] if number + 1 < len(levels) else np.full(x_m.size, -np.inf)
        for column in np.flatnonzero(ceiling > floor):
            first = max(int(np.floor((top_m - ceiling[column]) / spacing_m)) - 1, 0)
            last = count if np.isinf(floor[column]) else int(np.ceil((top_m - floor[column]) / spacing_m)) + 1
            np.minimum(slowest[first:last], vs[column], out=slowest[first:last])
    wanted = spacing_m * slowest / slowest.min()
    rise = _ROW_GROWTH * spacing_m
    # Rows that are ground surface somewhere stay fine, so that the surface is equally sharp everywhere.
    relief = int(np.ceil((top_m - float(levels[0].min())) / spacing_m)) + 4
    wanted[:relief] = spacing_m / _SURFACE_REFINEMENT
    for row in range(1, count):
        wanted[row] = min(wanted[row], wanted[row - 1] + rise)
    for row in range(count - 2, -1, -1):
        wanted[row] = min(wanted[row], wanted[row + 1] + rise)
    return np.asarray(wanted)


def rasterise(model: LayeredModel, grid: Grid) -> Medium:
    """Elastic constants of `model` on `grid`.

    Notes
    -----
    Cells crossed by an interface take the constants of a finely layered medium [Backus1962]; shear moduli at corners
    are harmonic means and masses at faces arithmetic means of the cells around them [Moczo2002]. Cells in part above
    ground are weighted by their fill. Where every cell is full or empty that is the averaging of [Zeng2012].

    References
    ----------
    [Backus1962] Long-wave elastic anisotropy produced by horizontal layering. J. Geophys. Res. 67, 4427-4440.
    [Moczo2002] Moczo, Kristek, Vavrycuk, Archuleta, Halada: 3D heterogeneous staggered-grid finite-difference
    modeling of seismic motion with volume harmonic and arithmetic averaging of elastic moduli and densities.
    Bull. Seism. Soc. Am. 92, 3042-3066.
    [Zeng2012] Zeng, Xia, Miller, Tsoflias: An improved vacuum formulation for 2D finite-difference modeling of
    Rayleigh waves including surface topography and internal discontinuities. Geophysics 77, T1-T9.
    """
    columns, rows = grid.x_m.size, grid.face_z_m.size - 1
    ceiling_m, floor_m, height_m = grid.face_z_m[:-1], grid.face_z_m[1:], grid.row_height_m
    # Sums over sub-columns and layers of share * property.
    fill, mass, over_c33, ratio, plane, over_c44 = (np.zeros((columns, rows)) for _ in range(6))
    surface_m = np.zeros(columns)
    fastest = np.zeros(rows)
    for shift in (np.arange(_SUBCOLUMNS) + 0.5) / _SUBCOLUMNS - 0.5:
        x_m = _held(grid.x_m, grid.edge) + shift * grid.spacing_m
        levels = boundaries_m(model, x_m)
        surface_m += levels[0] / _SUBCOLUMNS
        for number, layer in enumerate(model.layers):
            top = levels[number][:, None]
            base = levels[number + 1][:, None] if number + 1 < len(levels) else -np.inf
            share = np.maximum(np.minimum(top, ceiling_m) - np.maximum(base, floor_m), 0.0) / (height_m * _SUBCOLUMNS)
            vp, vs, density = (
                property_at(value, x_m)[:, None] for value in (layer.vp_m_s, layer.vs_m_s, layer.density_kg_m3)
            )
            c33, c44 = density * vp**2, density * vs**2
            fill += share
            mass += share * density
            over_c33 += share / c33
            ratio += share * (1.0 - 2.0 * c44 / c33)
            plane += share * 4.0 * c44 * (1.0 - c44 / c33)
            over_c44 += share / c44
            np.maximum(fastest, np.max(np.where(share > 0, vp, 0.0), axis=0), out=fastest)
    ground = fill >= _LEAST_FILL
    fill[~ground] = 0.0
    mass[~ground] = 0.0
    safe = np.where(ground, fill, 1.0)
    c33 = np.where(ground, safe / np.where(ground, over_c33, 1.0), 0.0)
    ratio = ratio / safe
    weighted_c44 = np.where(ground, safe**2 / np.where(ground, over_c44, 1.0), 0.0)
    return Medium(
        c11=fill * (plane / safe + ratio**2 * c33),
        c13=fill * ratio * c33,
        c33=fill * c33,
        c44=_corner_mean(weighted_c44),
        buoyancy_x=_inverse(0.5 * (mass + np.vstack([mass[1:], mass[-1:]]))),
        buoyancy_z=_inverse(0.5 * (mass + np.hstack([mass[:, :1], mass[:, :-1]]))),
        fill=fill,
        surface_z_m=surface_m,
        fastest_m_s=fastest,
    )


def _inverse(value: FloatArray) -> FloatArray:
    """1 / value, and 0 where value is 0."""
    return np.asarray(np.divide(1.0, value, out=np.zeros_like(value), where=value > 0))


def _corner_mean(cell: FloatArray) -> FloatArray:
    """Harmonic mean of the four cells around each upper right corner; 0 where one of them is 0."""
    inverse = np.where(cell > 0, _inverse(cell), np.inf)
    right = np.vstack([inverse[1:], inverse[-1:]])
    pair = inverse + right
    above = np.hstack([pair[:, :1], pair[:, :-1]])
    return np.asarray(4.0 / (pair + above))
