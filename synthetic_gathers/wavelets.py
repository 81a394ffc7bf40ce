"""Force-time functions of surface sources: strictly zero before the blow, smooth at its start.

A wavelet here is the *force* on the ground, not the particle velocity it causes. Two facts follow from physics: a
blow pushes one way, so `hammer` and `weight_drop` keep one sign; and the particle velocity of the far field follows
the time derivative of the force, so `dominant_hz` is where the spectrum of that derivative peaks.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

# Where w |F(w)| peaks for F = sin^3(x) on 0 <= x <= pi, in radians per unit of x.
_HAMMER_PEAK = 1.9416461
# Share of the energy of dF/dt that lies below `highest_hz`.
_ENERGY_BELOW_HIGHEST = 0.99


@dataclass(frozen=True)
class Wavelet:
    """A force-time function of peak 1.

    Parameters
    ----------
    name : str
    dominant_hz : float
        Frequency at which the amplitude spectrum of the time derivative of the force peaks, Hz.
    duration_s : float
        Time after which the force stays below 1e-6 of its peak, seconds.
    shape : callable
        Force at times >= 0, seconds in, peak 1 out.
    """

    name: str
    dominant_hz: float
    duration_s: float
    shape: Callable[[FloatArray], FloatArray]

    def __call__(self, time_s: npt.ArrayLike) -> FloatArray:
        """Force at `time_s` (any shape, seconds); exactly 0 at and before 0."""
        time = np.asarray(time_s, dtype=np.float64)
        return np.where(time > 0.0, self.shape(np.maximum(time, 0.0)), 0.0)

    @property
    def highest_hz(self) -> float:
        """Frequency below which 99 % of the energy of the time derivative of the force lies, Hz."""
        interval_s = 1.0 / (64.0 * self.dominant_hz)
        force = self(np.arange(0.0, max(16.0 / self.dominant_hz, 2.0 * self.duration_s), interval_s))
        frequency_hz = np.fft.rfftfreq(4 * force.size, interval_s)
        energy = np.cumsum(np.abs(frequency_hz * np.fft.rfft(force, 4 * force.size)) ** 2)
        return float(np.interp(_ENERGY_BELOW_HIGHEST * energy[-1], energy, frequency_hz))


def _require(name: str, value: float) -> None:
    if not (value > 0.0 and np.isfinite(value)):
        raise ValueError(f"{name}: expected a finite number above 0, found {value!r}")


def hammer(dominant_hz: float) -> Wavelet:
    """One push of finite length, F = sin^3(pi t / T): a sledgehammer on a plate.

    Starts like t^3 and is over after T = 0.97 / dominant_hz.

    Raises
    ------
    ValueError
        If `dominant_hz` is not above 0.
    """
    _require("dominant_hz", dominant_hz)
    length_s = _HAMMER_PEAK / (2.0 * dominant_hz)

    def shape(time_s: FloatArray) -> FloatArray:
        return np.asarray(np.sin(np.pi * np.minimum(time_s / length_s, 1.0)) ** 3)

    return Wavelet("hammer", dominant_hz, length_s, shape)


def weight_drop(dominant_hz: float) -> Wavelet:
    """A quick push that dies away slowly, F = (t / 3a)^3 exp(3 - t / a): a dropped weight on soft ground.

    Starts like t^3. With |F| proportional to (1 + w^2 a^2)^-2, w |F| peaks at w a = 1 / sqrt(3).

    Raises
    ------
    ValueError
        If `dominant_hz` is not above 0.
    """
    _require("dominant_hz", dominant_hz)
    scale_s = 1.0 / (np.sqrt(3.0) * 2.0 * np.pi * dominant_hz)

    def shape(time_s: FloatArray) -> FloatArray:
        stretched = time_s / scale_s
        return np.asarray((stretched / 3.0) ** 3 * np.exp(3.0 - stretched))

    return Wavelet("weight_drop", dominant_hz, 24.0 * scale_s, shape)


def damped(dominant_hz: float, damping: float = 0.35) -> Wavelet:
    """A ringing push, the impulse response of two equal damped resonators in a row.

    F is proportional to (sin bt - bt cos bt) exp(-at) with a = `damping` * b. Its Laplace transform
    1 / ((s + a)^2 + b^2)^2 has poles only, in the left half-plane, so the wavelet is minimum-phase; it starts like t^3.

    Parameters
    ----------
    dominant_hz : float
        Peak of the spectrum of dF/dt, Hz.
    damping : float
        Decay in radians per radian of ringing; 0.2 rings for several cycles, 1 hardly at all.

    Raises
    ------
    ValueError
        If `dominant_hz` or `damping` is not above 0.
    """
    _require("dominant_hz", dominant_hz)
    _require("damping", damping)
    # With b = 1: w |F(w)| peaks where u = w^2 solves 3 u^2 + (4 a^2 - 2 r) u - r^2 = 0, r = 1 + a^2.
    squared = 1.0 + damping**2
    middle = 2.0 * damping**2 - squared
    peak = np.sqrt((-middle + np.sqrt(middle**2 + 3.0 * squared**2)) / 3.0)
    ring_rad_s = 2.0 * np.pi * dominant_hz / peak

    def ringing(phase: FloatArray) -> FloatArray:
        return np.asarray((np.sin(phase) - phase * np.cos(phase)) * np.exp(-damping * phase))

    largest = float(np.max(np.abs(ringing(np.linspace(0.0, 8.0 * np.pi, 20001)))))

    def shape(time_s: FloatArray) -> FloatArray:
        return ringing(ring_rad_s * time_s) / largest

    # exp(-a x) x stays below 1e-6 of the peak beyond this many radians for every damping from 0.05 up.
    return Wavelet("damped", dominant_hz, 20.0 / (damping * ring_rad_s), shape)
