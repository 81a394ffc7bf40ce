"""The motion of the surface of a layer over a half-space under a vertical line load, by summing plane waves.

M. Bouchon, K. Aki (1977), Discrete wave-number representation of seismic-source wave fields, Bull. Seism. Soc. Am. 67,
259-277: sources repeated at intervals L along x turn the integral over horizontal wave numbers into a sum, a complex
frequency keeps the poles off the axis and damps what comes round in time; both are undone exactly as long as the
nearest copy has not arrived. Every wave number is an elastic boundary-value problem with P and S waves up and down in
the layer, both down in the half-space (K. Aki, P. G. Richards, Quantitative Seismology, chapter 5: displacements and
stresses of plane waves). With load and geophone both at the surface that sum hardly converges; so only the difference
to a half-space of the layer's own material is summed, which falls like exp(-2 k depth), and Lamb's solution is added.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt
from lamb import surface_velocity as half_space_velocity

FloatArray = npt.NDArray[np.float64]
ComplexArray = npt.NDArray[np.complex128]

# Highest frequency summed, times the dominant one: the spectrum of the rate of a sin^3 push falls like f^-3 and is
# below 1e-4 of its peak there.
_BAND = 12.0
# Damping over the record: what comes round in time is smaller by exp(-this).
_DAMPING = 12.0


def _vertical_wave_numbers(k: FloatArray, omega: complex, speed_m_s: float) -> ComplexArray:
    """Vertical wave number with the decay downward: real part of the result is not negative."""
    return np.asarray(np.sqrt(k**2 - (omega / speed_m_s) ** 2 + 0j))


def _plane_waves(
    k: FloatArray, omega: complex, vp: float, vs: float, density: float, sign: float
) -> tuple[ComplexArray, ComplexArray]:
    """(ux, uz, txz, tzz) of P and S that go as exp(ikx - sign nu z), z downward, sign 1 down and -1 up.

    P is the gradient of a potential, S the curl of one along y: u = (dS/dz, -dS/dx).
    """
    rigidity = density * vs**2
    nu_p, nu_s = _vertical_wave_numbers(k, omega, vp), _vertical_wave_numbers(k, omega, vs)
    bent = rigidity * (2.0 * k**2 - (omega / vs) ** 2)
    p_wave = np.stack([1j * k, -sign * nu_p, -2j * sign * rigidity * k * nu_p, bent])
    s_wave = np.stack([-sign * nu_s, -1j * k, bent, 2j * sign * rigidity * k * nu_s])
    return p_wave, s_wave


def _surface_uz(
    k: FloatArray, omega: complex, upper: tuple[float, float, float], lower: tuple[float, float, float], depth_m: float
) -> ComplexArray:
    """uz at the surface for a downward unit load of wave number k; the lower medium's waves only go down."""
    down = _plane_waves(k, omega, *upper, 1.0)
    up = _plane_waves(k, omega, *upper, -1.0)
    below = _plane_waves(k, omega, *lower, 1.0)
    decay = [np.exp(-_vertical_wave_numbers(k, omega, speed) * depth_m) for speed in upper[:2]]
    system = np.zeros((k.size, 6, 6), dtype=np.complex128)
    for wave in range(2):
        # Waves down start with 1 at the surface, waves up with 1 at the interface.
        system[:, 0:2, wave] = down[wave][2:].T
        system[:, 2:6, wave] = (down[wave] * decay[wave]).T
        system[:, 0:2, 2 + wave] = (up[wave][2:] * decay[wave]).T
        system[:, 2:6, 2 + wave] = up[wave].T
        system[:, 2:6, 4 + wave] = -below[wave].T
    load = np.zeros((k.size, 6, 1), dtype=np.complex128)
    load[:, 1] = -1.0
    # Stresses are 1e9 times displacements: bring rows to like size before solving.
    size = np.abs(system).max(axis=2, keepdims=True)
    amplitude = np.linalg.solve(system / size, load / size)[:, :, 0]
    total = sum(
        amplitude[:, wave] * down[wave][1] + amplitude[:, 2 + wave] * decay[wave] * up[wave][1] for wave in range(2)
    )
    return np.asarray(total)


def surface_velocity(
    force: Callable[[FloatArray], FloatArray],
    dominant_hz: float,
    time_s: FloatArray,
    x_m: float,
    upper: tuple[float, float, float],
    lower: tuple[float, float, float],
    depth_m: float,
) -> FloatArray:
    """Vertical particle velocity, positive down, at `time_s` (even steps from 0) for a downward force at offset x.

    `upper` and `lower` are (vp m/s, vs m/s, density kg/m3); velocities must not fall with depth.
    """
    record_s = 2.0 * float(time_s[-1])
    period_m = x_m + lower[0] * record_s
    damping = _DAMPING / record_s
    frequency_hz = np.arange(1, int(_BAND * dominant_hz * record_s) + 1) / record_s
    fine_s = np.arange(0.0, record_s, 1e-5)
    pushed = force(fine_s) * np.exp(-damping * fine_s)
    spectrum = np.zeros(frequency_hz.size + 1, dtype=np.complex128)
    for number, f_hz in enumerate(np.append(0.0, frequency_hz)):
        omega = 2.0 * np.pi * f_hz - 1j * damping
        largest = 2.0 * np.pi * f_hz / upper[1] + 12.0 / depth_m
        k = 2.0 * np.pi / period_m * np.arange(0.5, largest * period_m / (2.0 * np.pi))
        difference = _surface_uz(k, omega, upper, lower, depth_m) - _surface_uz(k, omega, upper, upper, depth_m)
        green = 2.0 / period_m * np.sum(difference * np.cos(k * x_m))
        push = np.sum(pushed * np.exp(-2j * np.pi * f_hz * fine_s)) * 1e-5
        spectrum[number] = 1j * omega * green * push
    weight = np.where(np.arange(spectrum.size) == 0, 1.0, 2.0) / record_s
    turning = np.exp(2j * np.pi * np.outer(time_s, np.append(0.0, frequency_hz)))
    layered = np.real(turning @ (weight * spectrum)) * np.exp(damping * time_s)
    return np.asarray(layered + half_space_velocity(force, time_s, x_m, *upper))
