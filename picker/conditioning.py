"""What is done to the samples of a record before onsets are looked for: bad traces, offset, mains hum, noise.

Everything here is causal: filters look back only, so that nothing of an arrival appears before its onset. The noise
before the first arrivals is described by one prediction-error filter for the record and a level for each trace.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

# A trace with more equal neighbours than this is flat: a recorder that digitises noise repeats values less often.
_FLAT_SHARE = 0.98
# A trace this much weaker than the middle one carries no ground motion: a cut cable has its amplifier's noise left.
_SILENT_SHARE = 1e-4
# Three samples in a row at the largest or smallest value: a smooth peak has one or two, a clipped one has a plateau.
_PLATEAU_SAMPLES = 3
MAINS_HZ = (50.0, 60.0)
_MAINS_HARMONICS = 5
# Two cycles of the mains are needed to tell hum from drift.
_SHORTEST_HUM_WINDOW_S = 0.04
# Hum is taken off where the chance of such a fit in noise is below this (F test); noise is coloured, so it is strict.
_HUM_CHANCE = 1e-6
# White noise added to the noise's autocorrelation: the prediction-error filter flattens 40 dB and no more, since what
# lies deeper (above an anti-alias filter, say) is rounding rather than noise.
_WHITE_SHARE = 1e-4
# Levels are never below this share of the trace's peak: float32 samples carry 6e-8 of it, processed ones less.
_LEAST_LEVEL = 2e-6


@dataclass(frozen=True, eq=False)
class Noise:
    """Noise of a record before the first arrivals.

    Parameters
    ----------
    prediction_error : float (order + 1,)
        Causal filter that makes the noise white; its first coefficient is 1.
    level : float (traces,)
        Standard deviation of the filtered noise of each trace, in the samples' unit.
    raw_level : float (traces,)
        Standard deviation of the noise as it is.
    samples : int (traces,)
        How many samples of each trace it rests on; 0 where the level was borrowed from other traces.
    """

    prediction_error: FloatArray
    level: FloatArray
    raw_level: FloatArray
    samples: IntArray


def trace_states(samples: npt.NDArray[np.floating], valid: IntArray) -> npt.NDArray[np.str_]:
    """Which traces are flat or clipped.

    Parameters
    ----------
    samples : float (traces, samples)
        As recorded.
    valid : int (traces,)
        How many samples of each are real.

    Returns
    -------
    str (traces,)
        `dead` (flat, fewer than 8 samples, or next to nothing beside the other traces), `clipped` (plateaus at both or
        either extreme) or `live`.
    """
    states = np.full(samples.shape[0], "live", dtype="<U7")
    for row, count in enumerate(valid.tolist()):
        trace = samples[row, :count]
        if count < 8 or not np.isfinite(trace).all() or np.mean(np.diff(trace) == 0) > _FLAT_SHARE:
            states[row] = "dead"
            continue
        for extreme in (trace.max(), trace.min()):
            at = trace == extreme
            runs = at[: 1 - _PLATEAU_SAMPLES].copy()
            for shift in range(1, _PLATEAU_SAMPLES):
                runs &= at[shift : at.size - _PLATEAU_SAMPLES + 1 + shift]
            if runs.any():
                states[row] = "clipped"
    alive = np.flatnonzero(states != "dead")
    if alive.size:
        peak = np.array([np.ptp(samples[row, : valid[row]]) for row in alive])
        states[alive[peak < _SILENT_SHARE * np.median(peak)]] = "dead"
    return states


def block_means(samples: npt.NDArray[np.floating], factor: int) -> FloatArray:
    """Means of blocks of `factor` samples: float64 (traces, samples // factor); a rest at the end is left out."""
    traces, count = samples.shape
    blocks = count // factor
    cut = np.asarray(samples[:, : blocks * factor], dtype=np.float64)
    return cut if factor == 1 else np.asarray(cut.reshape(traces, blocks, factor).mean(axis=2))


def remove_offset(samples: FloatArray, first: IntArray, stop: IntArray) -> FloatArray:
    """Take off each trace's mean over samples first..stop-1 (the median of all where those are fewer than 8)."""
    out = np.array(samples)
    for row, (begin, end) in enumerate(zip(first.tolist(), stop.tolist(), strict=True)):
        out[row] -= out[row, begin:end].mean() if end - begin >= 8 else np.median(out[row])
    return out


def remove_mains_hum(
    samples: FloatArray, interval_s: float, first: IntArray, stop: IntArray
) -> tuple[FloatArray, FloatArray]:
    """Fit mains hum with harmonics to the samples before the arrivals and take it off the whole trace.

    Parameters
    ----------
    samples : float (traces, samples)
        The traces.
    interval_s : float
        Sample interval, seconds.
    first, stop : int (traces,)
        Samples first..stop-1 of each trace are before any arrival.

    Returns
    -------
    samples : float (traces, samples)
        Hum-free copy. A trace whose noise does not show hum is returned as it was.
    mains_hz : float (traces,)
        50 or 60 where hum was taken off, 0 elsewhere.
    """
    from scipy.stats import f as f_distribution

    out = np.array(samples)
    found = np.zeros(samples.shape[0])
    time_s = np.arange(samples.shape[1]) * interval_s
    for row, (begin, end) in enumerate(zip(first.tolist(), stop.tolist(), strict=True)):
        if (end - begin) * interval_s < _SHORTEST_HUM_WINDOW_S:
            continue
        window = samples[row, begin:end]
        level = window - window.mean()
        total = float(level @ level)
        best = (_HUM_CHANCE, 0.0, level)
        for mains_hz in MAINS_HZ:
            harmonics = [h for h in range(1, _MAINS_HARMONICS + 1) if h * mains_hz < 0.4 / interval_s]
            phase = 2 * np.pi * mains_hz * np.outer(time_s, harmonics)
            waves = np.hstack([np.cos(phase), np.sin(phase)])
            free = level.size - 1 - waves.shape[1]
            if not harmonics or free < level.size // 2 or total == 0:
                continue
            design = np.column_stack([waves[begin:end], np.ones(level.size)])
            amplitude, *_ = np.linalg.lstsq(design, window, rcond=None)
            rest = float(np.sum((window - design @ amplitude) ** 2))
            ratio = ((total - rest) / waves.shape[1]) / max(rest / free, 1e-300)
            chance = float(f_distribution.sf(ratio, waves.shape[1], free))
            # coloured noise concentrates on some of the waves; hum explains most of what there is
            if chance < best[0] and rest < 0.5 * total:
                best = (chance, mains_hz, waves @ amplitude[:-1])
        if best[1] > 0:
            out[row] -= best[2]
            found[row] = best[1]
    return out, found


def remove_drift(samples: FloatArray, interval_s: float, corner_hz: float) -> FloatArray:
    """High-pass filter that looks back only: two poles at the corner, two zeros at zero frequency; the same shape.

    An onset stays where it is and keeps its shape over a time much shorter than 1 / corner_hz. A trace is taken to
    have been constant before its start.
    """
    from scipy.signal import lfilter

    pole = float(np.exp(-2 * np.pi * corner_hz * interval_s))
    centred = samples - samples[:, :1]
    return np.asarray(lfilter([1.0, -2.0, 1.0], [1.0, -2.0 * pole, pole * pole], centred, axis=1))


def fit_noise(samples: FloatArray, first: IntArray, stop: IntArray, order: int) -> Noise:
    """Describe the noise of a record from the samples before the arrivals.

    Parameters
    ----------
    samples : float (traces, samples)
        Offset and hum taken off.
    first, stop : int (traces,)
        Samples first..stop-1 of each trace are noise; a trace with fewer than 8 borrows from the others.
    order : int
        Order of the prediction-error filter; less where the record has too little noise for it.

    Returns
    -------
    Noise
        Levels have a floor in proportion to the trace's peak, so that a record without noise has one too.
    """
    from scipy.linalg import solve_toeplitz
    from scipy.signal import lfilter

    traces = samples.shape[0]
    count = np.maximum(stop - first, 0)
    usable = count >= 8
    peak = np.abs(samples).max(axis=1)
    floor = np.maximum(_LEAST_LEVEL * peak, 1e-300)
    raw_level = np.full(traces, np.nan)
    order = min(order, int(count.sum()) // 20, int(count.max(initial=0)) // 3)
    correlation = np.zeros(order + 1)
    for row in np.flatnonzero(usable):
        noise = samples[row, first[row] : stop[row]]
        raw_level[row] = max(float(noise.std()), floor[row])
        scaled = (noise - noise.mean()) / raw_level[row]
        for lag in range(min(order, noise.size - 1) + 1):
            correlation[lag] += float(scaled[: noise.size - lag] @ scaled[lag:])
    prediction_error = np.ones(1)
    if order > 0 and correlation[0] > 0:
        correlation[0] *= 1 + _WHITE_SHARE
        prediction_error = np.append(1.0, -solve_toeplitz(correlation[:order], correlation[1:]))
    level = np.full(traces, np.nan)
    for row in np.flatnonzero(usable):
        filtered = lfilter(prediction_error, [1.0], samples[row, first[row] : stop[row]])
        settled = filtered[min(order, filtered.size // 2) :]
        level[row] = max(float(np.sqrt(np.mean(settled**2))), floor[row])
    if usable.any():
        level[~usable] = np.maximum(np.median(level[usable]), floor[~usable])
        raw_level[~usable] = np.maximum(np.median(raw_level[usable]), floor[~usable])
    else:
        level, raw_level = 1e-3 * np.maximum(peak, 1e-300), 1e-3 * np.maximum(peak, 1e-300)
    return Noise(prediction_error, level, raw_level, np.where(usable, count, 0))


def whiten(samples: FloatArray, noise: Noise) -> FloatArray:
    """Traces through the prediction-error filter, in units of each trace's noise level; the same shape.

    Before its start a trace is taken to have been constant, so that the filter does not ring there.
    """
    from scipy.signal import lfilter

    order = noise.prediction_error.size - 1
    led = np.concatenate([np.repeat(samples[:, :1], order, axis=1), samples], axis=1)
    return np.asarray(lfilter(noise.prediction_error, [1.0], led, axis=1)[:, order:] / noise.level[:, np.newaxis])


def quiet_start(samples: FloatArray, share: float) -> IntArray:
    """How many samples at the start of each trace stay below `share` of its largest magnitude; int (traces,)."""
    magnitude = np.abs(samples)
    loud = magnitude > share * magnitude.max(axis=1, keepdims=True)
    return np.asarray(np.where(loud.any(axis=1), loud.argmax(axis=1), samples.shape[1]), dtype=np.int64)


def recent_level(samples: FloatArray, noise: Noise, row: int, stop: int, window: int) -> float:
    """Noise level of one trace just before an arrival, or over all its noise where that is larger.

    Parameters
    ----------
    samples : float (samples,)
        The trace; `row` is its row in `noise`.
    noise : Noise
        Of the record.
    row, stop, window : int
        The `window` samples before sample `stop` count; fewer than half of them, and nothing changes.

    Returns
    -------
    float
        Standard deviation behind the filter: wind and traffic do not keep to the time before the shot.
    """
    order = noise.prediction_error.size - 1
    begin = max(order, stop - window)
    level = float(noise.level[row])
    if stop - begin < window // 2:
        return level
    filtered = np.convolve(samples[begin - order : stop], noise.prediction_error, mode="valid")
    return max(level, float(np.sqrt(np.mean(filtered**2))))
