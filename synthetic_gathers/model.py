"""LayeredModel: ground of known truth, layers with arbitrary interfaces and lateral changes under relief.

Distances in metres, x along the line, z as elevation (up).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
Profile = Callable[[FloatArray], FloatArray]


@dataclass(frozen=True)
class Layer:
    """One layer. Each property is a number, or a function of x in metres for a lateral change."""

    vp_m_s: float | Profile
    vs_m_s: float | Profile
    density_kg_m3: float | Profile


@dataclass(frozen=True)
class LayeredModel:
    """Layers from the top down; `interface_z_m[i]` is the elevation of the base of `layers[i]`.

    Parameters
    ----------
    surface_z_m : function of x -> elevation of the ground, metres
    layers : tuple of Layer, top first; the last is the half-space
    interface_z_m : tuple of functions of x -> elevation, one fewer than layers
    name : str
    """

    surface_z_m: Profile
    layers: tuple[Layer, ...]
    interface_z_m: tuple[Profile, ...]
    name: str = ""

    def __post_init__(self) -> None:
        if len(self.interface_z_m) != len(self.layers) - 1:
            raise ValueError(
                f"interface_z_m: expected {len(self.layers) - 1} interfaces for {len(self.layers)} layers, "
                f"found {len(self.interface_z_m)}"
            )

    def depth_m(self, interface: int, x_m: FloatArray) -> FloatArray:
        """Vertical depth below ground of interface number `interface` (from 0) at x; metres, >= 0."""
        x = np.asarray(x_m, dtype=np.float64)
        top = self.surface_z_m(x)
        for number in range(interface + 1):
            top = np.minimum(top, self.interface_z_m[number](x))
        return np.asarray(self.surface_z_m(x) - top)
