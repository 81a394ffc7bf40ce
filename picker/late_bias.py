"""From the likelihood of an onset to its calibrated distribution: what is left of bias, and how wide it really is.

The likelihood of `picker.reading` knows no wave's shape, so its median is off and its width is a scale rather than a
standard error; and an onset is seen only once its signal stands out of the noise. Both were measured on a library of
onsets of many shapes in noise of many kinds (tests/onset_library.py, which writes data/onset_bias.json), as functions
of how clearly the onset is seen and of how quickly onsets grow in its neighbourhood. Standardised by the width of the
likelihood the errors hardly depend on frequency, on the sample interval or on the noise.

What the wave of one survey has of its own stays: all its onsets are off the mean of the library, the same way, by some
share of the bias that was removed. The library knows how large that share is among its own waves (`common_share`);
since no library has every wave, it is taken to be larger by `UNKNOWN_SHARE`, about as much again (squares added).
"""

from __future__ import annotations

import functools
import json
from dataclasses import dataclass
from importlib.resources import files

import numpy as np
import numpy.typing as npt

from picker.reading import Reading

FloatArray = npt.NDArray[np.float64]

LEVELS = (0.05, 0.16, 0.5, 0.84, 0.95)
_NORMAL_95 = 1.6448536269514722
UNKNOWN_SHARE = 0.25
# However strong a signal, how it began under the noise is not known better than this, a seventieth of the period of a
# first arrival of 40 Hz: the library's waves are simpler than the ground's.
LEAST_SHAPE_S = 3.5e-4
_LEAST_OWN = 0.5  # the trace's own error is never less than this share of the whole


@dataclass(frozen=True, eq=False)
class Calibration:
    """Errors of readings as functions of the evidence.

    Parameters
    ----------
    growth : float (growths,)
        Power of time with which onsets grow; ascending.
    log_evidence : float (nodes,)
        Common logarithm of the greatest log-likelihood of an onset over noise alone; ascending.
    standardised : float (growths, nodes, 5)
        Quantiles (LEVELS) of (true onset - median of the likelihood) / width of the likelihood.
    seen_late : float (growths, nodes)
        Median of (where the signal stands three times above the noise - true onset) / width.
    common_share : float
        Standard deviation of what all onsets of a survey are off together, as a share of the bias removed.
    """

    growth: FloatArray
    log_evidence: FloatArray
    standardised: FloatArray
    seen_late: FloatArray
    common_share: float


@dataclass(frozen=True)
class CalibratedOnset:
    """Distribution of one onset: two half normals that meet at the median, seconds.

    `reading_sigma_s` is the part of its standard error that is the trace's own: noise and sampling. `evidence` is the
    greatest log-likelihood of an onset over noise alone.
    """

    time_s: float
    sigma_early_s: float
    sigma_late_s: float
    bias_removed_s: float
    reading_sigma_s: float
    evidence: float

    @property
    def sigma_s(self) -> float:
        """Standard error: root mean square of the two sides."""
        return float(np.sqrt(0.5 * (self.sigma_early_s**2 + self.sigma_late_s**2)))


@functools.cache
def calibration() -> Calibration:
    """The calibration that comes with the program."""
    text = (files("picker") / "data" / "onset_bias.json").read_text(encoding="utf-8")
    table = json.loads(text)
    return Calibration(
        np.asarray(table["growth"], dtype=np.float64),
        np.asarray(table["log10_evidence"], dtype=np.float64),
        np.asarray(table["standardised_error_quantiles"], dtype=np.float64),
        np.asarray(table["seen_late"], dtype=np.float64),
        float(table["common_share"]),
    )


def calibrate(reading: Reading, floor_s: float, table: Calibration | None = None) -> CalibratedOnset:
    """Calibrated distribution of an onset.

    Parameters
    ----------
    reading : Reading
        Its likelihood in brief.
    floor_s : float
        No side of the distribution is narrower than this (sampling).
    table : Calibration, optional
        The one that comes with the program unless given.

    Returns
    -------
    CalibratedOnset
        `bias_removed_s` is how late such an onset is seen on average: its signal three times above the noise.
    """
    table = table or calibration()
    z = _at(table, table.standardised, reading)
    # each side is a half normal; its scale is the larger of what the 5 (95) and the 16 (84) % points ask for
    early = max((z[2] - z[0]) / _NORMAL_95, (z[2] - z[1]) / 0.9945)
    late = max((z[4] - z[2]) / _NORMAL_95, (z[3] - z[2]) / 0.9945)
    bias_s = float(_at(table, table.seen_late[..., np.newaxis], reading)[0]) * reading.width_s
    sides_s = np.array([early, late]) * reading.width_s
    own_s = np.sqrt(
        np.maximum(np.mean(sides_s**2) - (table.common_share * bias_s) ** 2, (_LEAST_OWN * sides_s.min()) ** 2)
    )
    early_s, late_s = np.maximum(np.hypot(sides_s, np.hypot(UNKNOWN_SHARE * bias_s, LEAST_SHAPE_S)), floor_s)
    return CalibratedOnset(
        time_s=reading.median_s + float(z[2]) * reading.width_s,
        sigma_early_s=float(early_s),
        sigma_late_s=float(late_s),
        bias_removed_s=bias_s,
        reading_sigma_s=max(float(own_s), floor_s),
        evidence=reading.log_likelihood,
    )


def _at(table: Calibration, values: FloatArray, reading: Reading) -> FloatArray:
    """Values (growths, nodes, k) between the nodes, straight lines both ways; beyond the outermost as there."""
    evidence = np.log10(max(reading.log_likelihood, 1e-3))
    row = float(np.interp(reading.growth, table.growth, np.arange(table.growth.size)))
    column = float(np.interp(evidence, table.log_evidence, np.arange(table.log_evidence.size)))
    r, c = min(int(row), table.growth.size - 2), min(int(column), table.log_evidence.size - 2)
    u, v = row - r, column - c
    upper = (1 - v) * values[r, c] + v * values[r, c + 1]
    lower = (1 - v) * values[r + 1, c] + v * values[r + 1, c + 1]
    return np.asarray((1 - u) * upper + u * lower)
