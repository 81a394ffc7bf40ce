"""What is left of the late bias of first arrivals once picking has taken its mean off: common to all picks of a survey.

An onset is seen late, by more the weaker it is, so that what is left grows with offset and looks like a slower
refractor. No pick can tell it; it is an unknown of its own with a prior.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

# What is left of the late bias, as a share of what was removed. The waves of one survey have a shape of their own: 0.2
# on onsets of many shapes (tests/onset_library.py), and twice that because no library has them all, which elastic
# waveforms over grounds of several kinds bear out; direct and head waves apart, since they do not start alike. Third,
# what comes on top from the shot to the far end of the spread: head waves start ever more gently on the way, even in
# ground without absorption (exact waves of a flat refractor 5 m deep, tests/external/layered_reference.py: a tenth of
# the first swing 1.8 ms after the onset at 20 m, 3.0 ms at 120 m, 60 Hz).
BIAS_MEAN = (0.0, 0.0, 0.25)
BIAS_SIGMA = (0.4, 0.4, 0.3)
SATURATES_S = 0.003  # of a weak onset noise hides more and more, the wave's own shape no more than about this
COMMON_SHARE = 0.2  # what of that the library knows to be common to all picks: no part of any one pick's own error
BIAS_GROUP = 20  # picks of about one offset, enough for a median


def bias_derivatives(removed_s: FloatArray, offset_m: FloatArray) -> tuple[FloatArray, FloatArray]:
    """How the times of direct and of head waves change with each part of what is left.

    Parameters
    ----------
    removed_s : float (picks,)
        Late bias that was taken off each pick, seconds.
    offset_m : float (picks,)
        Shot to geophone distance, metres.

    Returns
    -------
    direct, head : float (picks, parts)
        Seconds for each of the parts of BIAS_SIGMA. What was removed is taken as it goes with offset: from pick to
        pick it changes with the noise, as the error of the reading does, and would make the common part look known.
    """
    groups = np.array_split(np.argsort(offset_m, kind="stable"), max(1, offset_m.size // BIAS_GROUP))
    at_m = np.array([np.median(offset_m[group]) for group in groups])
    own_s = removed_s / (1.0 + removed_s / SATURATES_S)
    smooth = np.interp(offset_m, at_m, [np.median(own_s[group]) for group in groups])
    nothing = np.zeros(removed_s.size)
    growing = smooth * offset_m / max(float(offset_m.max()), 1e-9)
    return np.column_stack([smooth, nothing, nothing]), np.column_stack([nothing, smooth, growing])
