"""Lamb's problem: the motion of a half-space's surface under a line load, in closed form.

H. Lamb (1904), On the propagation of tremors over the surface of an elastic solid, Phil. Trans. R. Soc. A 203, 1-42;
here in the Cagniard-de Hoop form (K. Aki, P. G. Richards, Quantitative Seismology, chapter 6; formula from memory):
at offset x on the surface, with p = t / x and
R(p) = (1/b^2 - 2 p^2)^2 + 4 p^2 qa qb, qa = sqrt(1/a^2 - p^2), qb = sqrt(1/b^2 - p^2),
the displacement along an impulsive normal load is Im[qa / (b^2 R)] / (pi mu x), along a tangential one the same with
qb for qa; real axis approached from above, principal value at the Rayleigh pole. At late times it tends to
(1 - nu) / (pi mu t), the growth that Flamant's static solution -(1 - nu) ln(x) / (pi mu) asks for: that fixes the sign.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq
from scipy.signal import fftconvolve

FloatArray = npt.NDArray[np.float64]


def rayleigh_speed_m_s(vp_m_s: float, vs_m_s: float) -> float:
    """Root of the Rayleigh equation (2 - c^2/b^2)^2 = 4 sqrt(1 - c^2/a^2) sqrt(1 - c^2/b^2)."""

    def equation(c: float) -> float:
        s, p = (c / vs_m_s) ** 2, (c / vp_m_s) ** 2
        return float((2 - s) ** 2 - 4 * np.sqrt((1 - p) * (1 - s)))

    return float(brentq(equation, 0.5 * vs_m_s, 0.9999 * vs_m_s, xtol=1e-9))


def _impulse(time_s: FloatArray, x_m: float, vp: float, vs: float, density: float, tangential: bool) -> FloatArray:
    p = time_s / x_m
    under = np.where(p[:, None] > np.array([1 / vp, 1 / vs]), -1j, 1.0 + 0j)
    q = under * np.sqrt(np.abs(np.array([1 / vp, 1 / vs]) ** 2 - p[:, None] ** 2))
    denominator = (1 / vs**2 - 2 * p**2) ** 2 + 4 * p**2 * q[:, 0] * q[:, 1]
    ratio = q[:, 1 if tangential else 0] / (vs**2 * denominator)
    return np.asarray(ratio.imag / (np.pi * density * vs**2 * x_m))


def surface_velocity(
    force: Callable[[FloatArray], FloatArray],
    time_s: FloatArray,
    x_m: float,
    vp_m_s: float,
    vs_m_s: float,
    density_kg_m3: float,
    slope_rad: float = 0.0,
) -> FloatArray:
    """Vertical particle velocity at `time_s` (even steps from 0) for a vertical force; offset x along the surface.

    On a slope the load is part normal, part tangential; the mixed terms cancel by reciprocity and symmetry.
    """
    step = 2e-6
    pole_s = x_m / rayleigh_speed_m_s(vp_m_s, vs_m_s)
    # Nodes half a step to either side of the pole: the midpoint rule then gives its principal value.
    first = pole_s - (np.floor(pole_s / step) - 0.5) * step
    nodes_s = first + step * np.arange(int(time_s[-1] / step) + 2)
    green = np.cos(slope_rad) ** 2 * _impulse(nodes_s, x_m, vp_m_s, vs_m_s, density_kg_m3, False)
    if slope_rad:
        green = green + np.sin(slope_rad) ** 2 * _impulse(nodes_s, x_m, vp_m_s, vs_m_s, density_kg_m3, True)
    edges_s = step * (np.arange(nodes_s.size) - 0.5)
    rate = np.diff(np.append(force(edges_s), force(edges_s[-1:] + step))) / step
    moved = fftconvolve(green, rate)[: nodes_s.size] * step
    return np.asarray(np.interp(time_s, nodes_s, moved, left=0.0))
