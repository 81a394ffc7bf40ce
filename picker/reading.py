"""The onset of one trace read as a distribution: how likely each onset time makes the samples around it.

Before the onset there is noise; after it a signal grows out of zero. Of the signal nothing is assumed but that it is
smooth: it is a Gaussian process that starts at the onset, noise integrated two to five times, so that it grows like
t^1.5 to t^4.5, of any strength. An onset that is not a step is not read late for want of a step, and both signs count
the same. How quickly onsets grow is the source's and the ground's doing, much the same on neighbouring traces, and
the clear traces of a record tell it for the weak ones. What is left of the late bias is measured on onsets of many
shapes and kept in `picker.late_bias`.

References
----------
Rasmussen and Williams 2006, Gaussian Processes for Machine Learning, sections 2.2 (likelihood) and 6.3 (integrated
Wiener process); Wahba 1978, J. R. Statist. Soc. B 40, 364-372 (the same process as smoothness prior).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.stats import rankdata

from picker.conditioning import Noise, block_means

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

# Candidate onsets are no further apart than this; distributions are interpolated between them.
_CANDIDATE_STEP_S = 2e-4
# Standard deviation of the signal this long after its onset, in units of the raw noise, in steps of a factor of 2.
_STRENGTH_AFTER_S = 0.004
_STRENGTHS = 0.5 * 2.0 ** np.arange(19)
_INTEGRATIONS = (2, 3, 4, 5)
# Once the signal stands this far above the noise the onset is over. What comes then, often a hundred times stronger,
# follows laws of its own, and would drown what the first weak samples say.
_ONSET_ENDS = 40.0
# No signal follows a smooth law better than to this share of its strength.
_MODEL_ERROR = 1e-3
# How many neighbours, counted by offset, tell how quickly an onset grows, and how much one may say at the most (nats).
_GROWTH_NEIGHBOURS = 6.0
_LOUDEST_VOTE = 8.0


@dataclass(frozen=True)
class ReadingWindow:
    """Window of a reading about the time at which the gather puts the arrival, seconds.

    Candidates are from `before_s` before it to `after_s` after it; the signal is followed for `signal_s` more, about
    the first swing: what comes later is of no use for the onset. Samples are averaged to `interval_s` where they are
    closer, since first arrivals have nothing above a few hundred hertz.
    """

    before_s: float = 0.007
    after_s: float = 0.005
    signal_s: float = 0.006
    interval_s: float = 5e-4


READING = ReadingWindow()


@dataclass(frozen=True, eq=False)
class OnsetModel:
    """What a signal that starts at any of some candidates looks like after the filter that makes noise white.

    Parameters
    ----------
    phase : float (phases,)
        How long before a sample the onset is, in sample intervals, in [0, 1).
    inverse : float (growths, strengths, phases, length, length)
        Inverse Cholesky factors of the covariance of the samples from the onset on, lower triangular.
    log_determinant : float (growths, strengths, phases, length + 1)
        Log of the determinant of the first n rows' Cholesky factor, for n = 0..length.
    """

    phase: FloatArray
    inverse: FloatArray
    log_determinant: FloatArray


def _growth_covariance(time_s: FloatArray, integrations: int) -> FloatArray:
    """Covariance of white noise integrated n times from time zero, but for a factor.

    The integral from 0 to min(t, t') of ((t - u) (t' - u))^(n-1) du is that of a polynomial, which n Gauss points give
    exactly.
    """
    points, weights = np.polynomial.legendre.leggauss(integrations)
    early = np.minimum(time_s[:, np.newaxis], time_s)
    total = np.zeros_like(early)
    for point, weight in zip(points, weights, strict=True):
        u = 0.5 * early * (1.0 + point)
        total += weight * ((time_s[:, np.newaxis] - u) * (time_s - u)) ** (integrations - 1)
    return np.asarray(0.5 * early * total)


def onset_model(prediction_error: FloatArray, gain: float, interval_s: float, factor: int, length: int) -> OnsetModel:
    """Prepare the likelihood of onsets for traces with the same noise spectrum.

    Parameters
    ----------
    prediction_error : float (order + 1,)
        Causal filter that makes the noise white.
    gain : float
        Raw noise level over filtered noise level.
    interval_s : float
        Interval of the samples that are read, seconds.
    factor : int
        How many recorded samples were averaged into one of those.
    length : int
        Samples from the first candidate to the end of the window.

    Returns
    -------
    OnsetModel
    """
    phases = max(1, int(np.ceil(interval_s / _CANDIDATE_STEP_S - 1e-9)))
    phase = np.arange(phases) / phases
    column = np.zeros(length)
    column[: min(length, prediction_error.size)] = prediction_error[:length]
    lag = np.arange(length)[:, np.newaxis] - np.arange(length)
    filtering = np.where(lag >= 0, column[np.abs(lag)], 0.0)
    inverse = np.empty((len(_INTEGRATIONS), _STRENGTHS.size, phases, length, length))
    log_determinant = np.zeros((*inverse.shape[:3], length + 1))
    identity = np.eye(length)
    for kind, integrations in enumerate(_INTEGRATIONS):
        reference = _growth_covariance(np.array([_STRENGTH_AFTER_S]), integrations)[0, 0]
        for which, share in enumerate(phase):
            # a sample is the mean of `factor` recorded ones, and the onset may lie between those
            recorded_s = (np.arange(1 - factor, factor * (length - 1) + 1) / factor + share) * interval_s
            growth = _growth_covariance(np.maximum(recorded_s, 0.0), integrations)
            growth = growth.reshape(length, factor, length, factor).mean(axis=(1, 3))
            growth[np.diag_indices(length)] *= 1 + _MODEL_ERROR**2
            growth = filtering @ growth @ filtering.T / reference
            for step, strength in enumerate(_STRENGTHS):
                lower = np.linalg.cholesky(identity + (strength * gain) ** 2 * growth)
                inverse[kind, step, which] = np.linalg.inv(lower)
                log_determinant[kind, step, which, 1:] = np.cumsum(np.log(np.diag(lower)))
    return OnsetModel(phase, inverse, log_determinant)


def onset_log_likelihood(model: OnsetModel, white: FloatArray, candidates: int) -> FloatArray:
    """Log-likelihood of an onset at each candidate, less that of noise alone.

    Parameters
    ----------
    model : OnsetModel
        For windows of `length` samples.
    white : float (length,)
        Samples from the first candidate on, noise made white with unit variance.
    candidates : int
        How many samples may be the first with signal.

    Returns
    -------
    float (growths, candidates * phases)
        For every way of growing, strengths averaged. In ascending time: value c * phases + p is for an onset p-th
        phase from the earliest before sample c.
    """
    length = white.size
    loud = np.abs(white) > _ONSET_ENDS
    end = min(length, int(np.argmax(loud)) + 2) if loud.any() else length
    padded = np.concatenate([white, np.zeros(candidates)])
    windows = np.lib.stride_tricks.sliding_window_view(padded, length)[:candidates]
    count = np.maximum(end - np.arange(candidates), 0)
    rest = windows @ np.swapaxes(model.inverse, 3, 4)  # growths, strengths, phases, candidates, length
    gained = 0.5 * (windows**2 - rest**2)
    inside = np.arange(length) < count[:, np.newaxis]
    score = np.where(inside, gained, 0.0).sum(axis=4) - model.log_determinant[:, :, :, count]
    mixed = _log_mean(score, axis=1)  # growths, phases, candidates
    # the onset is phase * interval before the sample: the largest phase is the earliest
    return np.asarray(np.swapaxes(mixed[:, ::-1], 1, 2).reshape(mixed.shape[0], -1))


def _log_mean(score: FloatArray, axis: int) -> FloatArray:
    """Logarithm of the mean of exponentials along an axis."""
    top = score.max(axis=axis, keepdims=True)
    return np.asarray(np.log(np.exp(score - top).mean(axis=axis)) + np.squeeze(top, axis))


def candidate_times(model: OnsetModel, first_s: float, interval_s: float, candidates: int) -> FloatArray:
    """Times of the values of `onset_log_likelihood`, the first candidate sample being at `first_s`."""
    sample = first_s + interval_s * np.arange(candidates)
    return np.asarray((sample[:, np.newaxis] - model.phase[::-1] * interval_s).reshape(-1))


def weighted_quantiles(time_s: FloatArray, weight: FloatArray, at: FloatArray) -> FloatArray:
    """Quantiles of a distribution given at equidistant times, its mass spread evenly over each step."""
    step = time_s[1] - time_s[0]
    edges = np.append(time_s - step / 2, time_s[-1] + step / 2)
    total = np.append(0.0, np.cumsum(weight))
    return np.asarray(np.interp(at, total / total[-1], edges))


@dataclass(frozen=True, eq=False)
class Reader:
    """What is common to the readings of a record: model, filter and the clock of its averaged samples."""

    model: OnsetModel
    prediction_error: FloatArray
    recorded_s: float
    factor: int
    candidates: int

    @property
    def interval_s(self) -> float:
        """Interval of the averaged samples."""
        return self.recorded_s * self.factor


@dataclass(frozen=True)
class Reading:
    """Likelihood of one onset in brief: median, half the distance of its 16 % and 84 % points, largest value.

    `growth` is the power of time with which the neighbours say that onsets grow.
    """

    median_s: float
    width_s: float
    log_likelihood: float
    growth: float


def blocks_for_reading(samples: npt.NDArray[np.floating], interval_s: float) -> tuple[FloatArray, int]:
    """Traces averaged to about the interval at which onsets are read, and how many samples went into each."""
    factor = max(1, round(READING.interval_s / interval_s))
    return block_means(samples, factor), factor


def prepare(noise: Noise, recorded_s: float, factor: int) -> Reader:
    """Prepare the readings of a record whose averaged samples have this noise.

    Parameters
    ----------
    noise : Noise
        Of the averaged samples.
    recorded_s : float
        Interval of the recorded samples, seconds.
    factor : int
        How many of them were averaged into one.

    Returns
    -------
    Reader
    """
    interval_s = recorded_s * factor
    candidates = max(2, round((READING.before_s + READING.after_s) / interval_s))
    length = candidates + max(2, round(READING.signal_s / interval_s))
    gain = float(np.median(noise.raw_level / noise.level))
    model = onset_model(noise.prediction_error, gain, interval_s, factor, length)
    return Reader(model, noise.prediction_error, recorded_s, factor, candidates)


@dataclass(frozen=True, eq=False)
class OnsetScores:
    """Log-likelihood of one trace's onset at the candidate times, for each way in which it may grow.

    Parameters
    ----------
    time_s : float (times,)
        Equidistant, ascending.
    score : float (growths, times)
        Log-likelihood less that of noise alone.
    """

    time_s: FloatArray
    score: FloatArray


def score_onset(reader: Reader, blocks: FloatArray, level: float, start_s: float, about_s: float) -> OnsetScores | None:
    """Log-likelihood of the onset of one trace.

    Parameters
    ----------
    reader : Reader
        Of the record.
    blocks : float (samples,)
        The averaged samples, offset and hum taken off.
    level : float
        Noise level of the trace behind the filter.
    start_s : float
        Time of the trace's first recorded sample.
    about_s : float
        Where the arrival is, to a few milliseconds.

    Returns
    -------
    OnsetScores or None
        None where the window does not fit into the trace.
    """
    interval_s = reader.interval_s
    # an averaged sample stands at its last recorded one: the first that an onset may have touched
    origin_s = start_s + (reader.factor - 1) * reader.recorded_s
    begin = round((about_s - READING.before_s - origin_s) / interval_s)
    length = reader.model.log_determinant.shape[-1] - 1
    order = reader.prediction_error.size - 1
    if begin < 0 or begin + length > blocks.size:
        return None
    lead = max(0, begin - order)
    white = np.convolve(blocks[lead : begin + length], reader.prediction_error)[begin - lead : begin - lead + length]
    score = onset_log_likelihood(reader.model, white / level, reader.candidates)
    return OnsetScores(
        candidate_times(reader.model, origin_s + begin * interval_s, interval_s, reader.candidates), score
    )


def neighbours_growth(scores: Sequence[OnsetScores], offset_m: FloatArray) -> FloatArray:
    """How the other traces of a record, the nearest in offset most, say that onsets grow.

    Parameters
    ----------
    scores : sequence of OnsetScores (traces)
    offset_m : float (traces,)

    Returns
    -------
    float (traces, growths)
        Log-probability of each way of growing without the trace's own evidence.
    """
    evidence = np.array([_log_mean(one.score, axis=1) for one in scores])
    votes = np.maximum(evidence - evidence.max(axis=1, keepdims=True), -_LOUDEST_VOTE)
    rank = rankdata(offset_m)
    near = np.exp(-0.5 * ((rank[:, np.newaxis] - rank) / _GROWTH_NEIGHBOURS) ** 2)
    np.fill_diagonal(near, 0.0)
    # the mean, not the sum: none of these laws is quite the wave's own, so many traces know little more than one
    pooled = (near @ votes) / np.maximum(near.sum(axis=1, keepdims=True), 1.0)
    return np.asarray(pooled - np.log(np.exp(pooled).sum(axis=1, keepdims=True)))


def read_onset(scores: OnsetScores, log_growth: FloatArray) -> Reading:
    """Read one onset, its ways of growing weighted.

    Parameters
    ----------
    scores : OnsetScores
    log_growth : float (growths,)
        Log-probability of each way of growing.

    Returns
    -------
    Reading
    """
    weighted = scores.score + log_growth[:, np.newaxis]
    top = weighted.max()
    score = np.log(np.maximum(np.exp(weighted - top).sum(axis=0), np.finfo(np.float64).tiny)) + top
    best = float(score.max())
    low, middle, high = weighted_quantiles(scores.time_s, np.exp(score - best), np.array([0.16, 0.5, 0.84]))
    growth = float(np.exp(log_growth) @ (np.array(_INTEGRATIONS) - 0.5))
    return Reading(float(middle), float(0.5 * (high - low)), best, growth)
