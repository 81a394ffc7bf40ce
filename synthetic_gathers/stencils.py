"""Compiled time stepping of the velocity-stress equations on a staggered grid.

Second order in time, fourth in space, second in the cells next to the ground surface where wider stencils would reach
into air. Absorbing edges are convolutional perfectly matched layers: an extra term for each derivative. The kernel
runs on one core and lets go of the interpreter lock: shots side by side in threads use the other cores, which costs
nothing in waiting and leaves every result the same to the last bit.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numba
import numpy as np
import numpy.typing as npt

_NEAR = np.float32(9.0 / 8.0)
_FAR = np.float32(1.0 / 24.0)

Array = npt.NDArray[Any]


def _compiled(**options: Any) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """numba.njit with a disk cache, or without one where no cache folder can be written."""

    def decorate(function: Callable[..., Any]) -> Callable[..., Any]:
        try:
            return numba.njit(cache=True, **options)(function)  # type: ignore[no-any-return]
        except RuntimeError:
            return numba.njit(**options)(function)  # type: ignore[no-any-return]

    return decorate


@_compiled()
def _dx_kernel(a, i, j, wide):  # type: ignore[no-untyped-def]
    """Difference of `a` from column i to i + 1."""
    if wide:
        return _NEAR * (a[i + 1, j] - a[i, j]) - _FAR * (a[i + 2, j] - a[i - 1, j])
    return a[i + 1, j] - a[i, j]


@_compiled()
def _dz_kernel(a, i, j, wide):  # type: ignore[no-untyped-def]
    """Difference of `a` from row j to j + 1."""
    if wide:
        return _NEAR * (a[i, j + 1] - a[i, j]) - _FAR * (a[i, j + 2] - a[i, j - 1])
    return a[i, j + 1] - a[i, j]


@_compiled()
def _add_wide_kernel(out, gain_x, gain_z, a, i, b, up, first, end, per_x, per_z):  # type: ignore[no-untyped-def]
    """Add gain_x * da/dx + gain_z * db/dz to `out`, fourth order, rows `first` to `end` of one column.

    Slices that start at the first element of the loop, few enough to be told apart: the compiler then takes eight
    or sixteen elements at a time.
    """
    to, by_x, by_z, each = out[first:end], gain_x[first:end], gain_z[first:end], per_z[first:end]
    a0, a1, a2, a3 = a[i - 1, first:end], a[i, first:end], a[i + 1, first:end], a[i + 2, first:end]
    b0 = b[first - up - 1 :]
    for j in range(to.size):
        dx = per_x * (_NEAR * (a2[j] - a1[j]) - _FAR * (a3[j] - a0[j]))
        dz = each[j] * (_NEAR * (b0[j + 2] - b0[j + 1]) - _FAR * (b0[j + 3] - b0[j]))
        to[j] += by_x[j] * dx + by_z[j] * dz


@_compiled()
def _add_two_kernel(i, rows, out, gain, a, ia, b, up, per_x, per_z, memory_x, memory_z, edge_x, edge_z):  # type: ignore[no-untyped-def]
    """Add gain * (da/dx + db/dz) to `out` along column i: a momentum equation, or the shear stress.

    `rows` holds first, first with wide x stencil, first with wide z stencil at centres, end, first absorbing; `ia` the
    column at which da/dx is taken, `up` 1 where db/dz is taken at faces, a row above, else 0.
    """
    first, wide_x, wide_z, end, absorb = rows[i, 0], rows[i, 1], rows[i, 2] + up, rows[i, 3], rows[i, 4]
    for j in range(first, wide_z):
        dx = _dx_kernel(a, ia, j, j >= wide_x)
        out[i, j] += gain[i, j] * (per_x * dx + per_z[j] * _dz_kernel(b, i, j - up, False))
    _add_wide_kernel(out[i], gain[i], gain[i], a, ia, b[i], up, wide_z, end, per_x, per_z)
    if edge_x[i, 1] != 0.0:
        for j in range(first, end):
            memory_x[i, j] = edge_x[i, 0] * memory_x[i, j] + edge_x[i, 1] * _dx_kernel(a, ia, j, j >= wide_x)
            out[i, j] += gain[i, j] * per_x * memory_x[i, j]
        for j in range(first, absorb):
            memory_z[i, j] = edge_x[i, 2] * memory_z[i, j] + edge_x[i, 3] * _dz_kernel(b, i, j - up, j >= wide_z)
            out[i, j] += gain[i, j] * per_z[j] * memory_z[i, j]
    for j in range(absorb, end):
        memory_z[i, j] = edge_z[j, 0] * memory_z[i, j] + edge_z[j, 1] * _dz_kernel(b, i, j - up, True)
        out[i, j] += gain[i, j] * per_z[j] * memory_z[i, j]


@_compiled()
def _add_normal_kernel(i, rows, sxx, szz, c11, c13, c33, vx, vz, per_x, per_z, memory_x, memory_z, edge_x, edge_z):  # type: ignore[no-untyped-def]
    """Normal stresses along column i from the strain rates dvx/dx and dvz/dz."""
    first, wide_x, wide_z, end, absorb = rows[i, 0], rows[i, 1], rows[i, 2], rows[i, 3], rows[i, 4]
    for j in range(first, wide_z):
        dx = per_x * _dx_kernel(vx, i - 1, j, j >= wide_x)
        dz = per_z[j] * _dz_kernel(vz, i, j, False)
        sxx[i, j] += c11[i, j] * dx + c13[i, j] * dz
        szz[i, j] += c13[i, j] * dx + c33[i, j] * dz
    _add_wide_kernel(sxx[i], c11[i], c13[i], vx, i - 1, vz[i], 0, wide_z, end, per_x, per_z)
    _add_wide_kernel(szz[i], c13[i], c33[i], vx, i - 1, vz[i], 0, wide_z, end, per_x, per_z)
    if edge_x[i, 1] != 0.0:
        for j in range(first, end):
            memory_x[i, j] = edge_x[i, 0] * memory_x[i, j] + edge_x[i, 1] * _dx_kernel(vx, i - 1, j, j >= wide_x)
            sxx[i, j] += c11[i, j] * per_x * memory_x[i, j]
            szz[i, j] += c13[i, j] * per_x * memory_x[i, j]
        for j in range(first, absorb):
            memory_z[i, j] = edge_x[i, 2] * memory_z[i, j] + edge_x[i, 3] * _dz_kernel(vz, i, j, j >= wide_z)
            sxx[i, j] += c13[i, j] * per_z[j] * memory_z[i, j]
            szz[i, j] += c33[i, j] * per_z[j] * memory_z[i, j]
    for j in range(absorb, end):
        memory_z[i, j] = edge_z[j, 0] * memory_z[i, j] + edge_z[j, 1] * _dz_kernel(vz, i, j, True)
        sxx[i, j] += c13[i, j] * per_z[j] * memory_z[i, j]
        szz[i, j] += c33[i, j] * per_z[j] * memory_z[i, j]


@_compiled(nogil=True)
def _advance_kernel(force, window, rows, fields, moduli, per_x, per_z, memory, edges, source_node, source_gain):  # type: ignore[no-untyped-def]
    """One step for each entry of `force`; see `advance`."""
    vx, vz, sxx, szz, sxz = fields[0], fields[1], fields[2], fields[3], fields[4]
    c11, c13, c33, c44, bx, bz = moduli[0], moduli[1], moduli[2], moduli[3], moduli[4], moduli[5]
    centre_z, face_z = per_z[0], per_z[1]
    centre_x, half_x, centre_edge_z, face_edge_z = edges
    for step in range(force.size):
        left, right = window[step, 0], window[step, 1]
        for i in range(left, right):
            _add_two_kernel(
                i, rows, vx, bx, sxx, i, sxz, 0, per_x, centre_z, memory[0], memory[1], half_x, centre_edge_z
            )
            _add_two_kernel(
                i, rows, vz, bz, sxz, i - 1, szz, 1, per_x, face_z, memory[2], memory[3], centre_x, face_edge_z
            )
        for node in range(source_gain.size):
            vz[source_node[node, 0], source_node[node, 1]] += source_gain[node] * force[step]
        for i in range(left, right):
            _add_normal_kernel(
                i, rows, sxx, szz, c11, c13, c33, vx, vz, per_x, centre_z, memory[4], memory[5], centre_x, centre_edge_z
            )
            _add_two_kernel(i, rows, sxz, c44, vz, i, vx, 1, per_x, face_z, memory[6], memory[7], half_x, face_edge_z)


def advance(
    force: Array,
    window: Array,
    rows: Array,
    fields: Array,
    moduli: Array,
    per_x: float,
    per_z: Array,
    memory: Array,
    edges: tuple[Array, ...],
    source_node: Array,
    source_gain: Array,
) -> None:
    """Advance the fields in place by one time step for each entry of `force`.

    Parameters
    ----------
    force : float32 (steps,)
        Force of each step, any unit; the velocity gains `source_gain` times it.
    window : int64 (steps, 2)
        First column and end of the columns that a wave can have reached.
    rows : int64 (columns, 5)
        First row that is ground, first with the wide x stencil, first with the wide z stencil at centres (at faces it
        is one lower), end, first absorbing.
    fields : float32 (5, columns, rows)
        vx, vz (m/s), sxx, szz, sxz (Pa); changed.
    moduli : float32 (6, columns, rows)
        c11, c13, c33, c44 (Pa) and buoyancies at vx and vz (m^3/kg), each times the time step (s).
    per_x : float
        1 / column spacing, 1/m.
    per_z : float32 (2, rows)
        1 / row spacing at centres and at faces, 1/m.
    memory : float32 (8, columns, rows)
        Memory of the absorbing edges; changed.
    edges : four float32 (columns or rows, 4)
        Decay and gain of that memory, then those across it: at column centres, half columns, row centres, row faces;
        gain 0 = not absorbing. Those across apply to columns only.
    source_node : int64 (nodes, 2), source_gain : float32 (nodes,)
        vz nodes that take the force, and their share.
    """
    _advance_kernel(
        force, window, rows, fields, moduli, np.float32(per_x), per_z, memory, edges, source_node, source_gain
    )
