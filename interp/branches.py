"""Which first arrivals are the direct wave and which the head wave, with probabilities, for all shots together.

On each side of each shot every split of the picks by offset is tried: nearer picks on a line through the shot,
farther ones on a line of free intercept. The evidence of a split is its likelihood integrated over both lines
(Laplace's approximation) under priors that all sides share; a pick is on the head wave with the summed weight of
the splits nearer than it. A pick may be wrong, with the probability that its confidence leaves, and is then drawn
from the whole span of times, so that wild picks lose their say. Only two branches are told apart here: a third
layer counts with the head wave.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import logsumexp

from interp.branch_scan import Scan, Side, settle, weighted_median

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

HIGHEST_CONFIDENCE = 0.99  # a pick that cannot be wrong would steer everything
FASTEST_RATIO = 25.0  # a refractor is not so many times faster than its overburden: sound rock under dry loose soil
SEEN_LOG_ODDS = 3.0  # twenty to one
MINUS_TIME_PICKS = 4  # receivers that must see the head wave from both shots


@dataclass(frozen=True, eq=False)
class BranchAssignment:
    """Branches of the picks, the lines they lie on, and velocities to start from.

    Parameters
    ----------
    branch : int (picks,)
        0 direct wave, 1 head wave: the more probable.
    probability : float (picks,)
        Probability of the head wave, that of there being a refractor at all included.
    agreement : float (picks,)
        Probability that the pick belongs to either line rather than being wrong.
    velocity_1_m_s : float
        Overburden velocity: weighted median over the direct lines; NaN where no direct wave was seen.
    velocity_2_m_s : float
        Refractor velocity; NaN where no head wave was seen.
    velocity_2_from : str
        `minus times` (slopes of tA - tB of reversed shots), `opposed shots` (harmonic mean of apparent velocities
        shot in the two directions), `one direction` (apparent velocity: dip is not taken out) or `none`, also where
        the lines would make the refractor impossibly fast.
    side_shot, side_direction : int (sides,)
        Shot of the side, and +1 for receivers ahead along the line, -1 behind. Sides without picks are left out.
    intercept_time_s, intercept_sigma_s : float (sides,)
        Intercept of the head-wave line less the time-break shift, and its standard error given the branches
        (scatter about the lines included); NaN where fewer than two picks are on the head wave.
    direct_slowness_s_m, refracted_slowness_s_m : float (sides,)
        Slopes of the lines; NaN where fewer than one and two picks respectively are on them.
    scatter_direct_s, scatter_refracted_s : float
        Standard departure of picks from the lines beyond their stated errors: relief, changes of velocity.
    log_evidence_one_layer, log_evidence_two_layers : float
        Natural logarithms, on one scale, of the probability of the picks without and with a refractor.
    """

    branch: IntArray
    probability: FloatArray
    agreement: FloatArray
    velocity_1_m_s: float
    velocity_2_m_s: float
    velocity_2_from: str
    side_shot: IntArray
    side_direction: IntArray
    intercept_time_s: FloatArray
    intercept_sigma_s: FloatArray
    direct_slowness_s_m: FloatArray
    refracted_slowness_s_m: FloatArray
    scatter_direct_s: float
    scatter_refracted_s: float
    log_evidence_one_layer: float
    log_evidence_two_layers: float

    @property
    def refractor_seen(self) -> bool:
        """True where two layers are at least twenty times as probable as one."""
        return self.log_evidence_two_layers - self.log_evidence_one_layer > SEEN_LOG_ODDS


def assign_branches(
    shot: npt.ArrayLike,
    shot_along_m: npt.ArrayLike,
    receiver_along_m: npt.ArrayLike,
    time_s: npt.ArrayLike,
    sigma_s: npt.ArrayLike,
    confidence: npt.ArrayLike = 1.0,
    time_break_sigma_s: npt.ArrayLike = 0.0,
) -> BranchAssignment:
    """Assign every pick of a survey to the direct or the head wave.

    Parameters
    ----------
    shot : int (picks,)
        Number of the shot; picks of one shot share its time break.
    shot_along_m, receiver_along_m : float (picks,)
        Places of shot and receiver along the line, metres. Receivers may lie on both sides of a shot.
    time_s, sigma_s : float (picks,)
        First arrivals and their standard errors, > 0; known time-break shifts taken off.
    confidence : float (picks,) or one number
        Probability that the pick is the first arrival, 0 to 1.
    time_break_sigma_s : float (picks,) or one number
        Standard error of the time break, one value a shot.

    Returns
    -------
    BranchAssignment

    Raises
    ------
    ValueError
        If sizes differ, numbers are not finite, there are fewer than three picks away from their shots, or no time
        is above zero.

    Notes
    -----
    A side with no picks near the shot, or none far from it, is decided by what the other sides show: the slowness
    of the direct wave, and slowness and intercept time of the head wave, are shared loosely. A head wave must
    have the smaller slowness and an intercept after the shot.
    """
    shots = np.asarray(shot, dtype=np.int64)
    columns = [shot_along_m, receiver_along_m, time_s, sigma_s, confidence, time_break_sigma_s]
    at_shot, at_receiver, time, sigma, sure, shift_sigma = (_column(value, shots.shape) for value in columns)
    if not np.all(sigma > 0):
        raise ValueError("sigma_s: expected more than 0 for every pick")
    if not np.all((sure >= 0) & (sure <= 1)):
        raise ValueError("confidence: expected numbers from 0 to 1")
    run = at_receiver - at_shot
    if np.count_nonzero(run) < 3:
        raise ValueError(f"expected at least three picks away from their shots, found {np.count_nonzero(run)}")
    sides = []
    for number in np.unique(shots):
        for direction in (-1, 1):
            row = np.flatnonzero((shots == number) & (direction * run > 0))
            if row.size:
                row = row[np.argsort(np.abs(run[row]), kind="stable")]
                certain = np.clip(sure[row], 0.0, HIGHEST_CONFIDENCE)
                spread = max(float(shift_sigma[row].max()), 1e-3 * float(sigma[row].min()))
                sides.append(
                    Side(int(number), direction, row, np.abs(run[row]), time[row], sigma[row], certain, spread)
                )
    shared, scans = settle(sides, two_layers=True)
    _, single = settle(sides, two_layers=False)
    two = sum(float(logsumexp(scan.log_weight)) for scan in scans)
    two -= 1.5 * np.log(time.size)  # V2, intercept and scatter were learnt from the picks (Schwarz 1978)
    one = sum(float(scan.log_weight[-1]) for scan in single)
    seen = float(np.exp(-np.logaddexp(0.0, one - two)))
    probability, agreement = np.zeros(time.size), np.ones(time.size)
    for side, scan in zip(sides, scans, strict=True):
        weight = scan.probability
        probability[side.row] = seen * np.cumsum(weight)[:-1]
        agreement[side.row] = weight @ scan.agreement
    branch = (probability > 0.5).astype(np.int64)
    table = np.array([_side_lines(side, scan, branch) for side, scan in zip(sides, scans, strict=True)])
    intercept, intercept_sigma, direct, refracted, counted, direct_counted = table.T
    ways = np.array([side.direction for side in sides])
    velocity_2, source = _minus_times(shots, at_shot, at_receiver, time, sigma, (branch == 1) & (agreement > 0.5))
    if source == "none":
        velocity_2, source = _apparent(ways, refracted, counted)
    known = np.isfinite(direct)
    slowness_1 = weighted_median(direct[known], direct_counted[known]) if known.any() else float("nan")
    velocity_1 = 1 / slowness_1 if slowness_1 > 0 else float("nan")
    if velocity_2 > FASTEST_RATIO * velocity_1:
        velocity_2, source = float("nan"), "none"
    return BranchAssignment(
        branch=branch,
        probability=probability,
        agreement=agreement,
        velocity_1_m_s=velocity_1,
        velocity_2_m_s=velocity_2,
        velocity_2_from=source,
        side_shot=np.array([side.shot for side in sides]),
        side_direction=ways,
        intercept_time_s=intercept,
        intercept_sigma_s=intercept_sigma,
        direct_slowness_s_m=direct,
        refracted_slowness_s_m=refracted,
        scatter_direct_s=shared.scatter_direct,
        scatter_refracted_s=shared.scatter_refracted,
        log_evidence_one_layer=one,
        log_evidence_two_layers=two,
    )


def _column(value: npt.ArrayLike, shape: tuple[int, ...]) -> FloatArray:
    array = np.broadcast_to(np.asarray(value, dtype=np.float64), shape)
    if array.ndim != 1 or not np.all(np.isfinite(array)):
        raise ValueError(f"expected finite numbers of shape {shape}")
    return array


def _side_lines(side: Side, scan: Scan, branch: IntArray) -> tuple[float, ...]:
    """Intercept, its error, slopes and weights of one side under the branches finally given."""
    near = int(np.count_nonzero(branch[side.row] == 0))
    slope, shift, far_slope, constant = scan.lines[near]
    agreed = scan.agreement[near]
    near_count, far_count = float(agreed[:near].sum()), float(agreed[near:].sum())
    nan = float("nan")
    has_far, has_near = far_count >= 1.5, near_count >= 0.5
    return (
        constant - shift if has_far else nan,
        float(np.sqrt(scan.intercept_variance[near])) if has_far else nan,
        slope if has_near else nan,
        far_slope if has_far else nan,
        far_count if has_far else 0.0,
        near_count if has_near else 0.0,
    )


def _minus_times(
    shot: IntArray,
    at_shot: FloatArray,
    at_receiver: FloatArray,
    time: FloatArray,
    sigma: FloatArray,
    use: BoolArray,
) -> tuple[float, str]:
    """Refractor velocity from the slopes of tA - tB over receivers between two shots; delay times cancel there."""
    places = {int(n): float(np.median(at_shot[shot == n])) for n in np.unique(shot[use])}
    slopes, weights = [], []
    for a, place_a in places.items():
        of_a = use & (shot == a)
        for b, place_b in places.items():
            if place_b <= place_a:
                continue
            of_b = use & (shot == b)
            receiver, row_a, row_b = np.intersect1d(
                np.round(at_receiver[of_a], 2), np.round(at_receiver[of_b], 2), return_indices=True
            )
            between = (receiver > place_a) & (receiver < place_b)
            if np.count_nonzero(between) < MINUS_TIME_PICKS:
                continue
            minus = (time[of_a][row_a] - time[of_b][row_b])[between]
            pull = 1 / (sigma[of_a][row_a] ** 2 + sigma[of_b][row_b] ** 2)[between]
            x = receiver[between] - np.average(receiver[between], weights=pull)
            moment = x * pull
            slopes.append(float(moment @ minus / (moment @ x)))
            weights.append(float(moment @ x))
    if not slopes:
        return float("nan"), "none"
    slope = weighted_median(np.array(slopes), np.array(weights))
    return (2 / slope, "minus times") if slope > 0 else (float("nan"), "none")


def _apparent(direction: IntArray, slowness: FloatArray, weight: FloatArray) -> tuple[float, str]:
    """Refractor velocity from apparent slownesses of the head wave, both directions meaned if there are both."""
    means = []
    for way in (-1, 1):
        chosen = (direction == way) & (weight > 0) & np.isfinite(slowness)
        if chosen.any():
            means.append(weighted_median(slowness[chosen], weight[chosen]))
    if not means or not np.mean(means) > 0:
        return float("nan"), "none"
    return float(1 / np.mean(means)), "opposed shots" if len(means) == 2 else "one direction"
