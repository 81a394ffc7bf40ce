"""Where the signal of a trace starts: energy ratios, AIC and its weights, as compiled kernels over whole records.

All functions take the samples of one trace or of many, and know nothing of offsets or of other traces: what
neighbours say is the business of `picker.gather`. Sums are prefix sums in float64.

References
----------
Coppens 1985, Geophysical Prospecting 33, 1212-1231 (energy ratio); Wong, Han, Bancroft and Stewart 2009, CREWES
Research Report 21 (modified energy ratio); Maeda 1985, Zisin 38, 365-379 (AIC of the samples themselves); Burnham and
Anderson 2002, Model Selection and Multimodel Inference, 2nd edition (Akaike weights).
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
from numba import njit

FloatArray = npt.NDArray[np.float64]

_MANTISSA = np.int64(0x000FFFFFFFFFFFFF)
_ONE = np.int64(0x3FF0000000000000)
_TWO_TO_52 = np.int64(0x4330000000000000)
_LN2_HIGH = 6.93147180369123816490e-01  # ln 2 in two parts, so that n ln 2 is exact to the last bit
_LN2_LOW = 1.90821492927058770002e-10
_SQRT_2 = 1.4142135623730951
# Variances below this, in units of the trace's largest squared sample, are rounding: a flat stretch has no logarithm.
_RELATIVE_VARIANCE_FLOOR = 1e-24

_NOISE_FREEDOM = 30.0
_SIGNAL_FREEDOM = 5.0


def _t_constant(freedom: float) -> float:
    """Log of Student's t density at zero, unit scale, less that of the normal one."""
    density = math.lgamma(0.5 * (freedom + 1)) - math.lgamma(0.5 * freedom) - 0.5 * math.log(freedom * math.pi)
    return density + 0.5 * math.log(2 * math.pi)


_NOISE_CONSTANT = _t_constant(_NOISE_FREEDOM)
_SIGNAL_CONSTANT = _t_constant(_SIGNAL_FREEDOM)
# Variances, in noise variances, of the weakest onset that is looked for and of the weakest signal after it.
_QUIETEST_ONSET = 3.0
_QUIETEST_LATER = 1.5


@njit(cache=True)
def _logarithms_kernel(values: FloatArray, out: FloatArray) -> None:
    """Natural logarithms of positive normal numbers, in a loop without branches or calls that a compiler can vectorise.

    x = 2^n m with m between sqrt(1/2) and sqrt(2); log m = 2 atanh(s), s = (m - 1)/(m + 1), |s| < 0.1716, whose
    series to s^19 is good to 1e-17 of s.
    """
    bits = values.view(np.int64)
    parts = out.view(np.int64)
    exponents = np.empty(values.size)
    words = exponents.view(np.int64)
    for i in range(values.size):
        parts[i] = (bits[i] & _MANTISSA) | _ONE
        # the biased exponent as the last bits of a float near 2^52: no integer is converted, which SSE and AVX2 cannot
        words[i] = (bits[i] >> 52) | _TWO_TO_52
    for i in range(values.size):
        mantissa = out[i]
        exponent = exponents[i] - (4503599627370496.0 + 1023.0)
        high = mantissa > _SQRT_2
        mantissa = mantissa * 0.5 if high else mantissa
        exponent = exponent + 1.0 if high else exponent
        s = (mantissa - 1.0) / (mantissa + 1.0)
        z = s * s
        tail = 1.0 / 17.0 + z * (1.0 / 19.0)
        tail = 1.0 / 13.0 + z * (1.0 / 15.0 + z * tail)
        tail = 1.0 / 9.0 + z * (1.0 / 11.0 + z * tail)
        tail = 1.0 / 5.0 + z * (1.0 / 7.0 + z * tail)
        series = z * (1.0 / 3.0 + z * tail)
        out[i] = exponent * _LN2_HIGH + (2.0 * (s + s * series) + exponent * _LN2_LOW)


@njit(cache=True)
def _aic_kernel(samples: FloatArray, out: FloatArray) -> None:
    """AIC of every trace of (traces, samples), samples >= 3; out has the same shape."""
    traces, n = samples.shape
    total = np.empty(2 * n)
    square = np.empty(2 * n)
    share = np.empty(2 * n)
    logarithm = np.empty(2 * n)
    for k in range(n):
        share[k] = 1.0 / (k + 1)
        share[n + k] = 1.0 / max(n - 1 - k, 1)
    for row in range(traces):
        # [k]: samples 0..k; [n + k]: samples k+1..n-1, summed from the end so that a quiet end keeps its digits
        first = samples[row, 0]
        last = samples[row, n - 1]
        largest = 0.0
        running = 0.0
        running_square = 0.0
        for k in range(n):
            centred = samples[row, k] - first
            running += centred
            running_square += centred * centred
            total[k] = running
            square[k] = running_square
            largest = max(largest, centred * centred)
        running = 0.0
        running_square = 0.0
        for k in range(n - 1, -1, -1):
            total[n + k] = running
            square[n + k] = running_square
            centred = samples[row, k] - last
            running += centred
            running_square += centred * centred
        floor = max(largest * _RELATIVE_VARIANCE_FLOOR, 1e-300)
        for k in range(2 * n):
            mean = total[k] * share[k]
            total[k] = max(square[k] * share[k] - mean * mean, floor)
        _logarithms_kernel(total, logarithm)
        for k in range(n - 1):
            out[row, k] = (k + 1) * logarithm[k] + (n - k - 2) * logarithm[n + k]
        out[row, n - 1] = out[row, n - 2]


@njit(cache=True)
def _energy_ratio_kernel(samples: FloatArray, window: int, out: FloatArray) -> None:
    """Energy of `window` samples from i over that of the `window` samples before i; 0 where a window does not fit."""
    traces, n = samples.shape
    energy = np.empty(n + 1)
    for row in range(traces):
        total = 0.0
        energy[0] = 0.0
        for i in range(n):
            total += samples[row, i] * samples[row, i]
            energy[i + 1] = total
            out[row, i] = 0.0
        for i in range(window, n - window + 1):
            before = energy[i] - energy[i - window]
            if before > 0.0:
                out[row, i] = (energy[i + window] - energy[i]) / before


@njit(cache=True)
def _change_score_kernel(white: FloatArray, first: npt.NDArray[np.int64], window: int, out: FloatArray) -> None:
    """Log-likelihood of an onset before sample k, for k = first..n, less that of "signal since first"."""
    traces, n = white.shape
    memory = 1.0 / window
    later = np.empty(n + 1)
    energy = np.empty(n + 1)
    for row in range(traces):
        strength = _QUIETEST_LATER
        score = 0.0
        later[0] = 0.0
        energy[0] = 0.0
        for k in range(n):
            square = white[row, k] * white[row, k]
            energy[k + 1] = energy[k] + square
            scale = max(strength, _QUIETEST_LATER)
            spread = np.log1p(square / (_SIGNAL_FREEDOM * scale))
            later[k + 1] = later[k] - 0.5 * np.log(scale) - 0.5 * (_SIGNAL_FREEDOM + 1.0) * spread + _SIGNAL_CONSTANT
            strength += memory * (square - strength)
        for k in range(n + 1):
            out[row, k] = score
            stop = min(k + window, n)
            if k >= first[row] and stop > k:
                count = stop - k
                level = (energy[stop] - energy[k] + _QUIETEST_ONSET) / (count + 1.0)
                level = max(level, _QUIETEST_ONSET)
                fit = -0.5 * count * np.log(level) - 0.5 * (energy[stop] - energy[k]) / level
                out[row, k] += fit - (later[stop] - later[k])
            if first[row] <= k < n:
                square = white[row, k] * white[row, k]
                noise = -0.5 * (_NOISE_FREEDOM + 1.0) * np.log1p(square / _NOISE_FREEDOM) + _NOISE_CONSTANT
                score += noise - (later[k + 1] - later[k])


def _as_traces(samples: npt.ArrayLike) -> tuple[FloatArray, bool]:
    """Samples as float64 (traces, samples), and whether they came as one trace."""
    array = np.ascontiguousarray(samples, dtype=np.float64)
    if array.ndim not in (1, 2):
        raise ValueError(f"samples: expected shape (samples,) or (traces, samples), found {array.shape}")
    return np.atleast_2d(array), array.ndim == 1


def logarithms(values: npt.ArrayLike) -> FloatArray:
    """Natural logarithms of positive normal numbers by the kernel that AIC uses; any shape, relative error 1e-15."""
    array = np.ascontiguousarray(values, dtype=np.float64)
    out = np.empty_like(array)
    _logarithms_kernel(array.reshape(-1), out.reshape(-1))
    return out


def aic(samples: npt.ArrayLike) -> FloatArray:
    """Akaike information criterion of a change of variance behind each sample.

    Parameters
    ----------
    samples : array (samples,) or (traces, samples)
        At least 3 samples a trace.

    Returns
    -------
    array of the same shape
        AIC(k) = (k+1) ln var(a_0..a_k) + (n-k-2) ln var(a_{k+1}..a_{n-1}) for k = 0..n-2; the last value repeats
        the one before. The onset is behind the sample of the least value. [Maeda 1985]

    Raises
    ------
    ValueError
        If there are fewer than 3 samples, or the shape is another.
    """
    traces, single = _as_traces(samples)
    if traces.shape[1] < 3:
        raise ValueError(f"samples: expected at least 3 a trace, found {traces.shape[1]}")
    out = np.empty_like(traces)
    _aic_kernel(traces, out)
    return out[0] if single else out


def akaike_weights(values: npt.ArrayLike, correlation_samples: float = 1.0) -> FloatArray:
    """Weights of the candidates of an information criterion: w = exp(-(AIC - min)/2), normalised.

    Parameters
    ----------
    values : array (..., candidates)
        AIC or twice the negative log-likelihood.
    correlation_samples : float
        The samples' correlation length; the exponent is divided by it, because correlated samples say the same
        thing more than once.

    Returns
    -------
    array of the same shape
        Weights that sum to one along the last axis. [Burnham and Anderson 2002]

    Raises
    ------
    ValueError
        If the correlation length is less than one sample.
    """
    if not correlation_samples >= 1.0:
        raise ValueError(f"correlation_samples: expected at least 1, found {correlation_samples!r}")
    array = np.asarray(values, dtype=np.float64)
    weights = np.exp(-0.5 / correlation_samples * (array - array.min(axis=-1, keepdims=True)))
    return np.asarray(weights / weights.sum(axis=-1, keepdims=True))


def energy_ratio(samples: npt.ArrayLike, window: int) -> FloatArray:
    """Energy in a window behind each sample over the energy in the window before it.

    Parameters
    ----------
    samples : array (samples,) or (traces, samples)
        The traces.
    window : int
        Samples in each window.

    Returns
    -------
    array of the same shape
        ER_i = sum(a_i^2 .. a_{i+window-1}^2) / sum(a_{i-window}^2 .. a_{i-1}^2); zero where a window does not fit
        or nothing but zeros is before i. [Coppens 1985, in the form with two windows of equal length]

    Raises
    ------
    ValueError
        If the window is not between 1 and half the trace.
    """
    traces, single = _as_traces(samples)
    if not 1 <= window <= traces.shape[1] // 2:
        raise ValueError(f"window: expected 1 to {traces.shape[1] // 2} samples (half the trace), found {window}")
    out = np.empty_like(traces)
    _energy_ratio_kernel(traces, window, out)
    return out[0] if single else out


def modified_energy_ratio(samples: npt.ArrayLike, window: int, power: float = 3.0) -> FloatArray:
    """Energy ratio times the sample's own magnitude, to a power.

    Parameters
    ----------
    samples, window
        As for `energy_ratio`.
    power : float
        The exponent, 3 in the source.

    Returns
    -------
    array of the same shape
        MER_i = (ER_i |a_i|)^power. [Wong et al. 2009]

    Raises
    ------
    ValueError
        As `energy_ratio`.
    """
    ratio = energy_ratio(samples, window)
    return np.asarray((ratio * np.abs(np.asarray(samples, dtype=np.float64))) ** power)


def change_scores(white: npt.ArrayLike, first: npt.ArrayLike, window: int) -> FloatArray:
    """Log-likelihood of "noise before, anything stronger after" for an onset before each sample.

    Parameters
    ----------
    white : array (traces, samples)
        Traces through a filter that makes their noise white, in units of its standard deviation.
    first : array (traces,)
        Sample from which each trace counts.
    window : int
        Samples over which the strength of a signal is taken, about half a period.

    Returns
    -------
    float (traces, samples + 1)
        Value k is for an onset between samples k-1 and k, up to a constant for each trace; the last is for no onset.
        Noise has Student's t distribution with 30 degrees of freedom. The first `window` samples of signal are normal
        with their own mean square, at least 3 noise variances; the later ones have Student's t distribution with 5
        degrees of freedom and the running mean square of the samples before as its scale, at least 1.5. The sum
        over samples of the log ratio is Page's statistic of a change (Page 1954, Biometrika 41, 100-115).
    """
    traces, _ = _as_traces(white)
    out = np.empty((traces.shape[0], traces.shape[1] + 1))
    start = np.ascontiguousarray(np.broadcast_to(np.asarray(first, dtype=np.int64), traces.shape[:1]))
    _change_score_kernel(traces, start, max(1, int(window)), out)
    return out
