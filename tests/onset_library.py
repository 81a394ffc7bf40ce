"""Onsets of many shapes in noise of many kinds, with known times: for calibrating and for testing how onsets are read.

`python tests/onset_library.py` measures the late bias and the spread of readings on the library and writes
`picker/data/onset_bias.json`. The library is made here from closed forms; it shares nothing with the waveforms of
`synthetic_gathers`, which stay a check.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.signal import lfilter

FloatArray = npt.NDArray[np.float64]

PRE_TRIGGER_S = 0.1
LENGTH_S = 0.2
INTERVALS_S = (0.000125, 0.00025, 0.0005, 0.001)
DRIFT_HZ = 4.0
AIC_ASTRAY_S = 0.005
NOISE_KINDS = ("white", "red", "drift", "wind")


@dataclass(frozen=True, eq=False)
class LibraryGather:
    """Traces (traces, samples) that start PRE_TRIGGER_S before zero, their onsets and their signal-to-noise ratios."""

    samples: FloatArray
    interval_s: float
    onset_s: FloatArray
    ratio: FloatArray
    frequency_hz: FloatArray


def first_arrival(rng: np.random.Generator, time_s: FloatArray) -> tuple[FloatArray, float]:
    """Draw one wave that starts at time zero like t^1 to t^3 and whose first swing has peak 1, and its frequency."""
    frequency = float(np.exp(rng.uniform(np.log(20.0), np.log(150.0))))
    growth = rng.uniform(1.0, 3.0)
    kind = int(rng.integers(3))
    fine = np.linspace(0, 1.5 / frequency, 1500)

    def shape(t: FloatArray) -> FloatArray:
        t = np.maximum(t, 0.0)
        phase = 2 * np.pi * frequency * t
        if kind == 0:  # damped sinusoid whose envelope grows like a power first
            return np.asarray(t ** (growth - 1) * np.exp(-damping * phase) * np.sin(phase))
        if kind == 1:  # damped sinusoid with an envelope that saturates
            return np.asarray((t / (t + rise)) ** (growth - 1) * np.exp(-damping * phase) * np.sin(phase))
        # minimum phase: difference of two gamma pulses, as a source behind an absorbing ground
        return np.asarray((frequency * t) ** growth * np.exp(-1.3 * phase) * (1 - balance * phase))

    damping = rng.uniform(0.1, 0.5)
    rise = rng.uniform(0.05, 1.0) / frequency
    balance = rng.uniform(0.3, 0.6)
    reference = np.abs(shape(fine))
    peaks = np.flatnonzero((reference[1:-1] >= reference[:-2]) & (reference[1:-1] > reference[2:]))
    peak = reference[1 + peaks[0]] if peaks.size else reference.max()
    return shape(time_s) / peak * rng.choice([-1.0, 1.0]), frequency


def ground_roll(rng: np.random.Generator, time_s: FloatArray) -> FloatArray:
    """Draw a wave train that grows to 3 to 100 times a first arrival, from time zero on."""
    t = np.maximum(time_s, 0.0)
    frequency = rng.uniform(10.0, 35.0)
    duration = rng.uniform(0.03, 0.08)
    envelope = (t / duration) ** 2 * np.exp(2 - 2 * t / duration)
    strength = float(np.exp(rng.uniform(np.log(3.0), np.log(100.0))))
    return np.asarray(strength * envelope * np.sin(2 * np.pi * frequency * t))


def noise(rng: np.random.Generator, kind: str, shape: tuple[int, int], interval_s: float) -> FloatArray:
    """Noise of unit standard deviation: white, red (25 Hz corner), drift (5 Hz corner and some white) or wind."""
    settle = int(0.2 / interval_s)
    white = rng.normal(size=(shape[0], shape[1] + settle))
    if kind == "white":
        out = white
    elif kind == "wind":  # resonance between 20 and 60 Hz
        radius = np.exp(-2 * np.pi * 12.0 * interval_s)
        angle = 2 * np.pi * rng.uniform(20.0, 60.0) * interval_s
        out = lfilter([1.0], [1.0, -2 * radius * np.cos(angle), radius**2], white, axis=1)
    else:
        corner = 25.0 if kind == "red" else 5.0
        out = lfilter([1.0], [1.0, -np.exp(-2 * np.pi * corner * interval_s)], white, axis=1)
    out = out[:, settle:] / out[:, settle:].std()
    if kind in ("drift", "wind"):
        out = 0.95 * out + 0.3 * rng.normal(size=shape)
    return np.asarray(out)


def gather(
    rng: np.random.Generator, ratio: float | None = None, interval_s: float | None = None, traces: int = 24
) -> LibraryGather:
    """Draw traces with one kind of noise, each with its own shape, onset and ground roll.

    `ratio` is the peak of the first swing over the standard deviation of the noise; drawn from 1.5 to 300 unless given.
    """
    interval = float(rng.choice(INTERVALS_S)) if interval_s is None else interval_s
    kind = NOISE_KINDS[int(rng.integers(len(NOISE_KINDS)))]
    time_s = -PRE_TRIGGER_S + interval * np.arange(round(LENGTH_S / interval))
    samples = noise(rng, kind, (traces, time_s.size), interval)
    onset = rng.uniform(0.02, 0.05, traces)
    ratios = np.full(traces, ratio) if ratio is not None else np.exp(rng.uniform(np.log(1.5), np.log(300), traces))
    frequency = np.empty(traces)
    for row in range(traces):
        wave, frequency[row] = first_arrival(rng, time_s - onset[row])
        roll = ground_roll(rng, time_s - onset[row] - rng.uniform(0.004, 0.04))
        samples[row] += ratios[row] * (wave + roll)
    return LibraryGather(samples, interval, onset, ratios, frequency)


def readings(rng: np.random.Generator, gathers: int, ratio: float | None = None) -> FloatArray:
    """Read the onsets of some gathers: rows of (median, width, log-likelihood, AIC onset, truth, ratio, interval)."""
    from picker.conditioning import fit_noise, remove_drift
    from picker.onsets import aic
    from picker.reading import READING, blocks_for_reading, prepare, read_onset

    rows = []
    for _ in range(gathers):
        drawn = gather(rng, ratio)
        samples = remove_drift(drawn.samples, drawn.interval_s, DRIFT_HZ)
        blocks, factor = blocks_for_reading(samples, drawn.interval_s)
        interval = factor * drawn.interval_s
        first = np.zeros(drawn.onset_s.size, dtype=np.int64)
        stop = np.full(drawn.onset_s.size, int((PRE_TRIGGER_S - 0.002) / interval))
        noise_model = fit_noise(blocks, first, stop, 12)
        reader = prepare(noise_model, drawn.interval_s, factor)
        for row, truth in enumerate(drawn.onset_s.tolist()):
            # where the gather as a whole puts the arrival: late, as every detector of amplitudes
            about = truth + rng.uniform(-0.0015, 0.0025)
            found = read_onset(reader, blocks[row], noise_model.level[row], -PRE_TRIGGER_S, about)
            if found is None:
                continue
            begin = int((about - READING.before_s + PRE_TRIGGER_S) / drawn.interval_s)
            end = int((about + READING.after_s + PRE_TRIGGER_S) / drawn.interval_s)
            late = -PRE_TRIGGER_S + (begin + int(np.argmin(aic(samples[row, begin:end]))) + 0.5) * drawn.interval_s
            rows.append((found.median_s, found.width_s, found.log_likelihood, late, truth, drawn.ratio[row], interval))
    return np.array(rows)


def fit(table: FloatArray, nodes: int = 14) -> dict[str, object]:
    """Quantiles of standardised errors in `nodes` groups of equal size by evidence, smoothed over three groups."""
    median, width, evidence, late, truth = table[:, :5].T
    order = np.argsort(evidence)
    groups = np.array_split(order, nodes)
    joined = [np.concatenate(groups[max(0, k - 1) : k + 2]) for k in range(nodes)]
    at = [round(float(np.log10(max(np.median(evidence[group]), 1e-3))), 4) for group in groups]
    levels = [0.05, 0.16, 0.5, 0.84, 0.95]
    errors = [np.quantile((truth - median)[g] / width[g], levels).round(4).tolist() for g in joined]
    return {
        "made_by": "python tests/onset_library.py",
        "readings": int(table.shape[0]),
        "levels": levels,
        "log10_evidence": at,
        "standardised_error_quantiles": errors,
        # where AIC finds noise instead of the onset it says nothing of lateness
        "aic_late": [
            round(float(np.median(((late - truth) / width)[g[np.abs(late - truth)[g] < AIC_ASTRAY_S]])), 4)
            for g in joined
        ],
    }


def main() -> None:
    """Measure and write the calibration."""
    import json
    from pathlib import Path

    table = readings(np.random.default_rng(20261201), 600)
    path = Path(__file__).resolve().parent.parent / "picker" / "data" / "onset_bias.json"
    path.write_text(json.dumps(fit(table), indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
