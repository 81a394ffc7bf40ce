"""Onsets of many shapes in noise of many kinds, with known times: for calibrating and for testing how onsets are read.

`python tests/onset_library.py` measures the late bias and the spread of readings on the library and writes
`picker/data/onset_bias.json`. The library is made here from closed forms; it shares nothing with the waveforms of
`synthetic_gathers`, which stay a check.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy.signal import lfilter

FloatArray = npt.NDArray[np.float64]

PRE_TRIGGER_S = 0.1
LENGTH_S = 0.2
INTERVALS_S = (0.000125, 0.00025, 0.0005, 0.001)
DRIFT_HZ = 4.0
SEEN_AT = 3.0  # a signal that stands three times above the noise is seen by anybody
CLEAR = 10.0  # an onset is seen beyond doubt where its log-likelihood over noise alone is larger than this
NOISE_KINDS = ("white", "red", "drift", "wind")


@dataclass(frozen=True, eq=False)
class LibraryGather:
    """Traces (traces, samples) that start PRE_TRIGGER_S before zero, their onsets and their signal-to-noise ratios.

    `seen_s` is where the first arrival stands SEEN_AT times above the noise, or has its first peak where it never does.
    """

    samples: FloatArray
    interval_s: float
    onset_s: FloatArray
    ratio: FloatArray
    seen_s: FloatArray


@dataclass(frozen=True)
class Wave:
    """A way in which first arrivals of one survey start: `growth` is the power of time of the first motion."""

    kind: int
    growth: float
    frequency_hz: float
    damping: float
    rise: float
    balance: float


def draw_wave(rng: np.random.Generator) -> Wave:
    """Draw the wave of a survey: it starts like t^1 to t^4, at 20 to 150 Hz.

    A blow pushes at first like t to t^3. A body wave from it grows one power slower at depth, a wave along the ground
    or the refractor as fast or one power faster, one in two dimensions half a power more, an attenuated one more.
    """
    return Wave(
        kind=int(rng.integers(3)),
        growth=rng.uniform(1.3, 5.0),
        frequency_hz=float(np.exp(rng.uniform(np.log(15.0), np.log(120.0)))),
        damping=rng.uniform(0.1, 0.5),
        rise=rng.uniform(0.1, 1.0),
        balance=rng.uniform(0.3, 0.6),
    )


def first_arrival(wave: Wave, time_s: FloatArray) -> FloatArray:
    """The wave, starting at time zero, its first swing of peak 1."""
    frequency, growth = wave.frequency_hz, wave.growth

    def shape(t: FloatArray) -> FloatArray:
        t = np.maximum(t, 0.0) * frequency
        phase = 2 * np.pi * t
        if wave.kind == 0:  # damped sinusoid whose envelope grows like a power first
            return np.asarray(t ** (growth - 1) * np.exp(-wave.damping * phase) * np.sin(phase))
        if wave.kind == 1:  # damped sinusoid with an envelope that saturates
            envelope = (t / (t + wave.rise)) ** (growth - 1)
            return np.asarray(envelope * np.exp(-wave.damping * phase) * np.sin(phase))
        # minimum phase: difference of two gamma pulses, as a source behind an absorbing ground
        return np.asarray(t**growth * np.exp(-1.3 * phase) * (1 - wave.balance * phase))

    reference = np.abs(shape(np.linspace(0, 1.5 / frequency, 1500)))
    peaks = np.flatnonzero((reference[1:-1] >= reference[:-2]) & (reference[1:-1] > reference[2:]))
    peak = reference[1 + peaks[0]] if peaks.size else reference.max()
    return np.asarray(shape(time_s) / peak)


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
    """Draw traces with one kind of noise and one wave, each with its own onset and ground roll.

    `ratio` is the peak of the first swing over the standard deviation of the noise; 1.5 to 3000 unless given.
    """
    interval = float(rng.choice(INTERVALS_S)) if interval_s is None else interval_s
    kind = NOISE_KINDS[int(rng.integers(len(NOISE_KINDS)))]
    time_s = -PRE_TRIGGER_S + interval * np.arange(round(LENGTH_S / interval))
    samples = noise(rng, kind, (traces, time_s.size), interval)
    onset = rng.uniform(0.02, 0.05, traces)
    ratios = np.full(traces, ratio) if ratio is not None else np.exp(rng.uniform(np.log(1.5), np.log(3000), traces))
    common = draw_wave(rng)
    after_s = 1e-5 * np.arange(8000)
    seen = np.empty(traces)
    for row in range(traces):
        # the ground changes the wave a little on its way
        own = replace(
            common,
            growth=max(1.0, common.growth + rng.normal(0.0, 0.2)),
            frequency_hz=common.frequency_hz * float(np.exp(rng.normal(0.0, 0.1))),
        )
        first = rng.choice([-1.0, 1.0]) * first_arrival(own, time_s - onset[row])
        swing = ratios[row] * np.abs(first_arrival(own, after_s))
        seen[row] = onset[row] + after_s[np.argmax(swing > min(SEEN_AT, 0.99 * ratios[row]))]
        roll = ground_roll(rng, time_s - onset[row] - float(np.exp(rng.uniform(np.log(0.001), np.log(0.04)))))
        samples[row] += ratios[row] * (first + roll)
    return LibraryGather(samples, interval, onset, ratios, seen)


def readings(rng: np.random.Generator, gathers: int, ratio: float | None = None) -> FloatArray:
    """Read the onsets of some gathers.

    Rows of median, width, log-likelihood, where it is seen, true onset, ratio, gather, growth.
    """
    from picker.conditioning import fit_noise, remove_drift
    from picker.reading import blocks_for_reading, neighbours_growth, prepare, read_onset, score_onset

    rows = []
    for number in range(gathers):
        drawn = gather(rng, ratio)
        samples = remove_drift(drawn.samples, drawn.interval_s, DRIFT_HZ)
        blocks, factor = blocks_for_reading(samples, drawn.interval_s)
        interval = factor * drawn.interval_s
        first = np.zeros(drawn.onset_s.size, dtype=np.int64)
        stop = np.full(drawn.onset_s.size, int((PRE_TRIGGER_S - 0.002) / interval))
        noise_model = fit_noise(blocks, first, stop, 12)
        reader = prepare(noise_model, drawn.interval_s, factor)
        # where the gather as a whole puts the arrival: late, as every detector of amplitudes, and badly in strong noise
        about = drawn.onset_s + rng.uniform(-0.0015, 0.0025, drawn.onset_s.size) * (1 + 3 / drawn.ratio)
        scores = [
            score_onset(reader, block, level, -PRE_TRIGGER_S, at)
            for block, level, at in zip(blocks, noise_model.level, about.tolist(), strict=True)
        ]
        # offsets go with the ratios: the weak traces are the far ones
        growth = neighbours_growth(scores, -drawn.ratio)
        for row, (score, log_growth) in enumerate(zip(scores, growth, strict=True)):
            found = read_onset(score, log_growth)
            brief = (found.median_s, found.width_s, found.log_likelihood)
            rows.append((*brief, drawn.seen_s[row], drawn.onset_s[row], drawn.ratio[row], number, found.growth))
    return np.array(rows)


GROWTHS = (1.75, 2.5, 3.25)
LOG_EVIDENCE = (0.0, 0.5, 1.0, 1.5, 2.0, 2.5, 3.0, 3.5, 4.0, 4.5, 5.0, 6.0)
# how far a reading may lie from a node, in growth and in decades of evidence, to count for it (standard deviations)
REACH = (0.25, 0.3)


def quantiles(value: FloatArray, weight: FloatArray, levels: tuple[float, ...]) -> FloatArray:
    """Quantiles of weighted values."""
    order = np.argsort(value)
    share = np.cumsum(weight[order]) - 0.5 * weight[order]
    return np.interp(np.asarray(levels) * weight.sum(), share, value[order])


def fit(table: FloatArray) -> dict[str, object]:
    """Quantiles of standardised errors, and how late onsets are seen, about every node of growth and evidence."""
    from picker.late_bias import LEVELS

    median, width, likelihood, seen, truth = table[:, :5].T
    growth, evidence = table[:, 7], np.log10(np.maximum(likelihood, 1e-3))
    error, late = (truth - median) / width, (seen - truth) / width
    errors, lateness = [], []
    for at in GROWTHS:
        weights = [
            np.exp(-0.5 * ((growth - at) / REACH[0]) ** 2 - 0.5 * ((evidence - node) / REACH[1]) ** 2)
            for node in LOG_EVIDENCE
        ]
        errors.append([quantiles(error, weight, LEVELS).round(4).tolist() for weight in weights])
        lateness.append([round(float(quantiles(late, weight, (0.5,))[0]), 4) for weight in weights])
    return {
        "made_by": "python tests/onset_library.py",
        "readings": int(table.shape[0]),
        "growth": GROWTHS,
        "levels": LEVELS,
        "log10_evidence": LOG_EVIDENCE,
        "standardised_error_quantiles": errors,
        "seen_late": lateness,
    }


def common_share(table: FloatArray, levels: dict[str, object]) -> float:
    """What the onsets of one gather are off together, as a share of the bias removed: standard deviation over gathers.

    A least-squares factor for each gather; what chance adds to its spread is taken off.
    """
    from picker.late_bias import Calibration, calibrate
    from picker.reading import Reading

    columns = (
        np.array(levels[name]) for name in ("growth", "log10_evidence", "standardised_error_quantiles", "seen_late")
    )
    calibration = Calibration(*columns, common_share=0.0)
    factor, chance = [], []
    for rows in (table[table[:, 6] == number] for number in np.unique(table[:, 6])):
        onsets = [calibrate(Reading(row[0], row[1], row[2], row[7]), 1e-6, calibration) for row in rows]
        error = np.array([onset.time_s for onset in onsets]) - rows[:, 4]
        bias = np.array([onset.bias_removed_s for onset in onsets])
        sigma = np.array([onset.sigma_s for onset in onsets])
        clear = (rows[:, 2] > CLEAR) & (np.abs(error) < 4 * sigma)
        if clear.sum() < 6:
            continue
        weight = 1 / sigma[clear] ** 2
        information = np.sum(weight * bias[clear] ** 2)
        factor.append(np.sum(weight * error[clear] * bias[clear]) / information)
        chance.append(1 / information)
    return float(np.sqrt(max(np.var(factor) - np.mean(chance), 0.0)))


def main() -> None:
    """Measure and write the calibration."""
    import json
    from pathlib import Path

    table = readings(np.random.default_rng(20261201), 1000)
    path = Path(__file__).resolve().parent.parent / "picker" / "data" / "onset_bias.json"
    levels = fit(table)
    levels["common_share"] = round(common_share(table, levels), 4)
    path.write_text(json.dumps(levels, indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
