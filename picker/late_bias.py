"""From the likelihood of an onset to its calibrated distribution: what is left of bias, and how wide it really is.

The likelihood of `picker.reading` knows no wave's shape, so its median is off and its width is a scale rather than a
standard error; the AIC of the same samples reads late. Both were measured on a library of onsets of many shapes in
noise of many kinds (tests/onset_library.py, which writes data/onset_bias.json), as functions of how clearly the
onset is seen. Standardised by the width of the likelihood the errors hardly depend on frequency, on the sample
interval or on the noise.
"""

from __future__ import annotations

import functools
import json
from dataclasses import dataclass
from importlib.resources import files

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

LEVELS = (0.05, 0.16, 0.5, 0.84, 0.95)
_NORMAL_95 = 1.6448536269514722


@dataclass(frozen=True, eq=False)
class Calibration:
    """Errors of readings as functions of the evidence.

    Parameters
    ----------
    log_evidence : float (nodes,)
        Common logarithm of the greatest log-likelihood of an onset over noise alone; ascending.
    standardised : float (nodes, 5)
        Quantiles (LEVELS) of (true onset - median of the likelihood) / width of the likelihood.
    aic_late : float (nodes,)
        Median of (AIC onset - true onset) / width.
    """

    log_evidence: FloatArray
    standardised: FloatArray
    aic_late: FloatArray


@dataclass(frozen=True)
class CalibratedOnset:
    """Distribution of one onset: two half normals that meet at the median, seconds."""

    time_s: float
    sigma_early_s: float
    sigma_late_s: float
    bias_removed_s: float

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
        np.asarray(table["log10_evidence"], dtype=np.float64),
        np.asarray(table["standardised_error_quantiles"], dtype=np.float64),
        np.asarray(table["aic_late"], dtype=np.float64),
    )


def calibrate(
    median_s: float, width_s: float, log_likelihood: float, floor_s: float, table: Calibration | None = None
) -> CalibratedOnset:
    """Calibrated distribution of an onset.

    Parameters
    ----------
    median_s, width_s : float
        Median of the likelihood (normalised), and half the distance between its 16 % and 84 % points.
    log_likelihood : float
        Its largest value over that of noise alone.
    floor_s : float
        No side of the distribution is narrower than this (sampling).
    table : Calibration, optional
        The one that comes with the program unless given.

    Returns
    -------
    CalibratedOnset
        `bias_removed_s` is how late the AIC reads such an onset on average.
    """
    table = table or calibration()
    at = np.log10(max(log_likelihood, 1e-3))
    z = [float(np.interp(at, table.log_evidence, column)) for column in table.standardised.T]
    # each side is a half normal; its scale is the larger of what the 5 (95) and the 16 (84) % points ask for
    early = max((z[2] - z[0]) / _NORMAL_95, (z[2] - z[1]) / 0.9945)
    late = max((z[4] - z[2]) / _NORMAL_95, (z[3] - z[2]) / 0.9945)
    late_bias = float(np.interp(at, table.log_evidence, table.aic_late))
    return CalibratedOnset(
        time_s=median_s + z[2] * width_s,
        sigma_early_s=max(early * width_s, floor_s),
        sigma_late_s=max(late * width_s, floor_s),
        bias_removed_s=late_bias * width_s,
    )
