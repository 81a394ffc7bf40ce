"""What disturbs a gather in the field, one at a time: ground and recorder noise, traffic, mains, wind, spikes, air.

Pure functions on arrays; random ones take a numpy Generator. How much of each there is stands in `noise`.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

# Speed of sound in dry air: 331.3 m/s at 0 deg C, growing with the root of the absolute temperature.
SOUND_AT_FREEZING_M_S = 331.3
FREEZING_K = 273.15
# Mains harmonics relative to the fundamental: odd ones dominate a badly balanced supply (common practice, no source).
HUM_HARMONICS = ((1, 1.0), (2, 0.15), (3, 0.45), (5, 0.25))
# A spike of a bad contact dies away with this time constant.
SPIKE_DECAY_S = 1.5e-3
# Half width of the windowed-sinc interpolator: at four samples a cycle or more its error is below 1e-5 of the signal.
SHIFT_HALF_WIDTH = 24
SHIFT_KAISER_BETA = 9.0


def sound_speed_m_s(temperature_c: float) -> float:
    """Speed of sound in air, m/s: 331.3 sqrt(1 + T / 273.15), the ideal-gas law scaled to its value at 0 deg C."""
    return float(SOUND_AT_FREEZING_M_S * np.sqrt(1.0 + temperature_c / FREEZING_K))


def _geophone_response(frequency_hz: FloatArray, natural_hz: float, damping: float = 0.7) -> FloatArray:
    """Magnitude of the response of a moving-coil geophone to ground velocity."""
    ratio = frequency_hz / natural_hz
    return np.asarray(ratio**2 / np.sqrt((1.0 - ratio**2) ** 2 + (2.0 * damping * ratio) ** 2))


def _two_sided(weight: FloatArray, samples: int) -> FloatArray:
    """The weight at all frequencies of a full transform, for its mean power."""
    inner = weight[1:-1] if samples % 2 == 0 else weight[1:]
    return np.concatenate([weight, inner])


def ambient(
    rng: np.random.Generator, traces: int, samples: int, interval_s: float, geophone_hz: float = 10.0
) -> FloatArray:
    """Ambient noise of ground and recorder, independent from trace to trace, expected rms 1.

    Power rises as 1/f towards low frequencies down to the geophone's natural frequency, and falls above 250 Hz, over
    a flat floor of the recorder: the shape seen before the time break on hammer records (common practice, no source).

    Parameters
    ----------
    rng : Generator
    traces, samples : int
    interval_s : float
        Sample interval, seconds.
    geophone_hz : float
        Natural frequency of the geophones.

    Returns
    -------
    float (traces, samples)
    """
    frequency_hz: FloatArray = np.fft.rfftfreq(samples, interval_s).astype(np.float64)
    safe = np.maximum(frequency_hz, frequency_hz[1])
    ground = np.sqrt(60.0 / safe) * _geophone_response(frequency_hz, geophone_hz) / (1.0 + (safe / 250.0) ** 2)
    return _coloured(rng, traces, samples, np.hypot(ground, 0.05))


def _coloured(rng: np.random.Generator, traces: int, samples: int, weight: FloatArray) -> FloatArray:
    """White noise through a filter of the given magnitude, expected rms 1."""
    white = rng.standard_normal((traces, samples))
    filtered: FloatArray = np.fft.irfft(np.fft.rfft(white, axis=1) * weight, samples, axis=1)
    return np.asarray(filtered / np.sqrt(np.mean(_two_sided(weight, samples) ** 2)))


def traffic(
    rng: np.random.Generator, receiver_x_m: FloatArray, samples: int, interval_s: float, waves: int = 3
) -> FloatArray:
    """Surface waves of distant traffic and machines crossing the spread, coherent from geophone to geophone, rms 1.

    Each of the waves has its own band between 8 and 40 Hz, its own speed between 150 and 400 m/s along the ground
    and its own direction, so that its apparent velocity along the spread is anything from that speed up.

    Returns
    -------
    float (receivers, samples)
        Expected rms 1.
    """
    padded = 2 * samples
    frequency_hz = np.fft.rfftfreq(padded, interval_s)
    noise = np.zeros((receiver_x_m.size, samples))
    strengths = rng.uniform(0.3, 1.0, waves)
    for strength in strengths / np.sqrt(np.sum(strengths**2)):
        centre_hz = rng.uniform(10.0, 30.0)
        weight = np.exp(-0.5 * ((frequency_hz - centre_hz) / (0.25 * centre_hz)) ** 2)
        slowness_s_m = np.cos(rng.uniform(0.0, 2.0 * np.pi)) / rng.uniform(150.0, 400.0)
        spectrum = np.fft.rfft(rng.standard_normal(padded)) * weight
        shifts = np.exp(-2j * np.pi * frequency_hz * slowness_s_m * receiver_x_m[:, None])
        wave = np.fft.irfft(spectrum * shifts, padded, axis=1)[:, :samples]
        noise += strength * wave / np.sqrt(float(np.mean(_two_sided(weight, padded) ** 2)))
    return noise


def mains_hum(
    rng: np.random.Generator, pickup: FloatArray, samples: int, interval_s: float, mains_hz: float
) -> FloatArray:
    """Mains and its harmonics on all channels in phase; the time break falls anywhere in the mains cycle.

    Parameters
    ----------
    rng : Generator
    pickup : float (traces,)
        How much each channel picks up; the hum of a channel with 1 has rms 1.
    samples : int
    interval_s : float
    mains_hz : float
        Nominal frequency; a grid keeps it within about 0.02 Hz.

    Returns
    -------
    float (traces, samples)
    """
    time_s = np.arange(samples) * interval_s + rng.uniform(0.0, 1.0 / mains_hz)
    actual_hz = mains_hz + rng.normal(0.0, 0.02)
    phases = rng.uniform(0.0, 2.0 * np.pi, len(HUM_HARMONICS))
    wave = np.zeros(samples)
    for (harmonic, amplitude), phase in zip(HUM_HARMONICS, phases, strict=True):
        wave += amplitude * np.sin(2.0 * np.pi * harmonic * actual_hz * time_s + (phase if harmonic > 1 else 0.0))
    power = sum(amplitude**2 for _, amplitude in HUM_HARMONICS) / 2.0
    return np.asarray(pickup[:, None] * wave / np.sqrt(power))


def wind(
    rng: np.random.Generator,
    exposure: FloatArray,
    samples: int,
    interval_s: float,
    gusts_per_s: float = 8.0,
    gust_s: float = 0.08,
) -> FloatArray:
    """Bursts of wind noise, non-stationary, independent from geophone to geophone.

    Parameters
    ----------
    rng : Generator
    exposure : float (traces,)
        How much each geophone is shaken; with 1 the expected rms is 1.
    samples : int
    interval_s : float
    gusts_per_s, gust_s : float
        Rate and length of the bursts.

    Returns
    -------
    float (traces, samples)
    """
    traces = exposure.size
    time_s = np.arange(samples) * interval_s
    length_s = samples * interval_s
    counts = rng.poisson(gusts_per_s * (length_s + 2.0 * gust_s), traces)
    envelope = np.zeros((traces, samples))
    for trace, count in enumerate(counts):
        centres = rng.uniform(-gust_s, length_s + gust_s, count)
        heights = rng.exponential(1.0, count)
        phase = np.clip((time_s[None, :] - centres[:, None]) / gust_s, -1.0, 1.0)
        envelope[trace] = np.sqrt(np.sum(heights[:, None] * np.cos(0.5 * np.pi * phase) ** 2, axis=0))
    frequency_hz = np.fft.rfftfreq(samples, interval_s)
    weight = frequency_hz / 20.0 / (1.0 + (frequency_hz / 40.0) ** 2)
    # A gust of mean height 1 adds the integral of its cos^2 window, gust_s, to the mean square.
    gusts = envelope * _coloured(rng, traces, samples, weight)
    return np.asarray(exposure[:, None] * gusts / np.sqrt(gusts_per_s * gust_s))


def spikes(rng: np.random.Generator, traces: int, samples: int, interval_s: float, spikes_per_s: float) -> FloatArray:
    """Spikes of a bad contact: one-sided jumps that die away within a few milliseconds, median height 1.

    Returns
    -------
    float (traces, samples)
    """
    out = np.zeros((traces, samples))
    decay = np.exp(-np.arange(samples) * interval_s / SPIKE_DECAY_S)
    for trace in range(traces):
        for at in rng.integers(0, samples, rng.poisson(spikes_per_s * samples * interval_s)):
            height = rng.choice([-1.0, 1.0]) * rng.lognormal(0.0, 0.5)
            out[trace, at:] += height * decay[: samples - at]
    return out


def air_wave(
    rng: np.random.Generator,
    distance_m: FloatArray,
    samples: int,
    interval_s: float,
    start_s: float,
    sound_m_s: float,
    dominant_hz: float,
    decay: float,
    reference_m: float,
) -> FloatArray:
    """The bang of the blow through the air: a short high-frequency ring at the speed of sound.

    Parameters
    ----------
    rng : Generator
        For the varying strength from geophone to geophone.
    distance_m : float (traces,)
        Straight distance source to geophone.
    samples : int
    interval_s : float
    start_s : float
        Time of the first sample after the blow.
    sound_m_s : float
        Speed of sound.
    dominant_hz : float
        Frequency of the ring; it dies away within two cycles.
    decay : float
        Amplitude falls with distance to the power of minus this.
    reference_m : float
        Distance at which the largest amplitude is 1 on average.

    Returns
    -------
    float (traces, samples)
    """
    time_s = start_s + np.arange(samples) * interval_s
    late_s = time_s[None, :] - distance_m[:, None] / sound_m_s
    phase = 2.0 * np.pi * dominant_hz * np.maximum(late_s, 0.0)
    ring = np.sin(phase) * (1.0 - np.exp(-phase)) * np.exp(-phase / 6.0)
    strength = (np.maximum(distance_m, 1.0) / reference_m) ** -decay * rng.lognormal(0.0, 0.3, distance_m.size)
    # The largest value of the ring: 0.61, from its own formula on a fine grid.
    fine = np.linspace(0.0, 2.0 * np.pi, 2001)
    largest = float(np.max(np.sin(fine) * (1.0 - np.exp(-fine)) * np.exp(-fine / 6.0)))
    return strength[:, None] * ring / largest


def delay(samples: npt.NDArray[np.floating], delay_s: FloatArray, interval_s: float, before: int) -> FloatArray:
    """Delay every trace by its own time, fractions of a sample included, and put zeros before it.

    Band-limited interpolation by a Kaiser-windowed sinc; being short, it spreads nothing strong far forward in time.

    Parameters
    ----------
    samples : float (traces, samples)
        Traces that are zero before their first sample.
    delay_s : float (traces,)
        Delay of each, seconds; negative advances.
    interval_s : float
        Sample interval.
    before : int
        Samples to put before the first; more than the largest advance.

    Returns
    -------
    float (traces, before + samples)
    """
    traces, length = samples.shape
    shift = np.asarray(delay_s, dtype=np.float64) / interval_s + before
    whole = np.floor(shift).astype(np.int64)
    taps = np.arange(1 - SHIFT_HALF_WIDTH, SHIFT_HALF_WIDTH + 1)
    distance = taps - (shift - whole)[:, None]
    window = np.i0(SHIFT_KAISER_BETA * np.sqrt(np.maximum(1.0 - (distance / SHIFT_HALF_WIDTH) ** 2, 0.0)))
    kernels = np.sinc(distance) * window / np.i0(SHIFT_KAISER_BETA)
    reach = int(np.max(np.maximum(np.abs(whole), np.abs(before - whole)), initial=0)) + SHIFT_HALF_WIDTH
    padded = np.pad(np.asarray(samples, dtype=np.float64), ((0, 0), (reach, reach)), mode="edge")
    padded[:, :reach] = 0.0
    out = np.empty((traces, before + length))
    for trace in range(traces):
        first = reach + SHIFT_HALF_WIDTH - 1 - whole[trace]
        out[trace] = np.convolve(padded[trace], kernels[trace])[first : first + before + length]
    return out
