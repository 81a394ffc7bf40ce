"""Which first arrivals are the direct wave and which the head wave, with probabilities, for all shots together.

On each side of each shot every split of the picks by offset is tried: nearer picks on a line through the shot,
farther ones on a line of free intercept. The evidence of a split is its likelihood integrated over both lines
(Laplace's approximation) under priors that all sides share; a pick is on the head wave with the summed weight of
the splits nearer than it. A pick may be wrong, with the probability that its confidence leaves, and is then drawn
from the whole span of times, so that wild picks lose their say. Only two branches are told apart here: a third
layer counts with the head wave.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy.special import log_ndtr, logsumexp, ndtr

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

HIGHEST_CONFIDENCE = 0.99  # a pick that cannot be wrong would steer everything
STEPS_DOWN = (
    8.0,
    4.0,
    2.0,
    1.0,
    1.0,
    1.0,
)  # standard errors are first taken this much larger, to let no wild pick steer
ROUNDS = 5  # sides are fitted, what they share is learnt, and again
FIRST_SCATTER = 0.03  # departure from straight lines, as a share of the span of times, before it is learnt
# sides may differ by so much, as a share of the value, before it is held against them: ground varies, layers dip
DIRECT_SPREAD, REFRACTED_SPREAD, INTERCEPT_SPREAD = 0.1, 0.25, 0.3
DIP_SPREAD = 0.08  # apparent slowness differs by sin(dip) / V1: a dip of five degrees either way
ENOUGH_PICKS = 5.0  # sides with so many picks on a line count alike in what the sides share
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
        shot in the two directions), `one direction` (apparent velocity: dip is not taken out) or `none`.
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


@dataclass(frozen=True, eq=False)
class _Side:
    """Picks on one side of a shot, by growing offset; `row` is their place among all picks."""

    shot: int
    direction: int
    row: IntArray
    offset: FloatArray
    time: FloatArray
    sigma: FloatArray
    confidence: FloatArray
    shift_sigma: float


@dataclass(frozen=True)
class _Shared:
    """What all sides have in common: priors (mean, standard deviation), scatter about lines, span of times."""

    direct: tuple[float, float]
    refracted: tuple[float, float]
    intercept: tuple[float, float]
    scatter_direct: float
    scatter_refracted: float
    span: float


@dataclass(frozen=True, eq=False)
class _Scan:
    """Every split of one side: number of direct picks 0..n down the first axis."""

    log_weight: FloatArray  # (n + 1,)
    lines: FloatArray  # (n + 1, 4): direct slowness, shift, refracted slowness, intercept
    variance: FloatArray  # (n + 1, 3): of direct slowness, refracted slowness, intercept less shift
    residual: FloatArray  # (n + 1, n)
    agreement: FloatArray  # (n + 1, n)

    @property
    def probability(self) -> FloatArray:
        return np.exp(self.log_weight - logsumexp(self.log_weight))

    @property
    def best(self) -> int:
        return int(np.argmax(self.log_weight))


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
        If sizes differ, numbers are not finite, or there are fewer than three picks away from their shots.

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
                    _Side(int(number), direction, row, np.abs(run[row]), time[row], sigma[row], certain, spread)
                )
    shared, scans = _settle(sides, two_layers=True)
    _, single = _settle(sides, two_layers=False)
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
    return BranchAssignment(
        branch=branch,
        probability=probability,
        agreement=agreement,
        velocity_1_m_s=1 / _weighted_median(direct[known], direct_counted[known]) if known.any() else float("nan"),
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


def _settle(sides: list[_Side], two_layers: bool) -> tuple[_Shared, list[_Scan]]:
    """Scan all sides, learn what they share, and again, from loose to settled."""
    offset = np.concatenate([side.offset for side in sides])
    time = np.concatenate([side.time for side in sides])
    slowness = float(np.median(np.abs(time) / offset))
    span = float(np.quantile(time, 0.98) - min(0.0, np.quantile(time, 0.02)))
    shared = _Shared(
        direct=(slowness, 2 * slowness),
        refracted=(0.5 * slowness, slowness),
        intercept=(0.3 * span, 0.5 * span),
        scatter_direct=FIRST_SCATTER * span,
        scatter_refracted=FIRST_SCATTER * span,
        span=2 * span,
    )
    broad = shared
    for _ in range(ROUNDS):
        scans = [_scan(side, shared, two_layers) for side in sides]
        shared = _learn(sides, scans, broad, shared)
    return shared, [_scan(side, shared, two_layers) for side in sides]


def _scan(side: _Side, shared: _Shared, two_layers: bool) -> _Scan:
    """Fit both lines for every split of a side, wild picks losing weight, and weigh the splits."""
    count = side.offset.size
    first = 0 if two_layers else count
    near = np.arange(count) < np.arange(first, count + 1)[:, None]
    scatter = np.where(near, shared.scatter_direct, shared.scatter_refracted)
    sigma = np.hypot(side.sigma, scatter)
    weight = np.broadcast_to(side.confidence, near.shape)
    log_wrong = np.log1p(-side.confidence) - np.log(shared.span)
    with np.errstate(divide="ignore"):
        log_right = np.log(side.confidence)
    for step in STEPS_DOWN:
        scale = sigma * step
        pull = weight / scale**2
        direct = _line(side, pull * near, shared.direct, (0.0, side.shift_sigma))
        refracted = _line(side, pull * ~near, shared.refracted, shared.intercept)
        slope = np.where(near, direct.slope[:, None], refracted.slope[:, None])
        constant = np.where(near, direct.constant[:, None], refracted.constant[:, None])
        residual = side.time - constant - slope * side.offset
        log_fits = log_right - 0.5 * (residual / scale) ** 2 - np.log(scale * np.sqrt(2 * np.pi))
        weight = np.exp(-np.logaddexp(0.0, log_wrong - log_fits))
    log_weight = np.logaddexp(log_fits, log_wrong).sum(axis=1) + direct.log_prior + refracted.log_prior
    order_sd = np.sqrt(direct.slope_variance + refracted.slope_variance)
    after_sd = np.sqrt(refracted.constant_variance + direct.constant_variance)
    if two_layers:
        order, after = direct.slope - refracted.slope, refracted.constant - direct.constant
        log_weight = log_weight + log_ndtr(order / order_sd) + log_ndtr(after / after_sd)
        crossover = after / np.maximum(order, 1e-3 * shared.direct[0])
        both = np.hypot(shared.scatter_direct, shared.scatter_refracted)
        blur = np.sqrt(after_sd**2 + both**2 + (crossover * order_sd) ** 2) / np.maximum(order, 1e-3 * shared.direct[0])
        edges = np.concatenate([[-np.inf], side.offset, [np.inf]])
        low, high = (edges[:-1] - crossover) / blur, (edges[1:] - crossover) / blur
        inside = ndtr(np.where(low > 0, -low, high)) - ndtr(np.where(low > 0, -high, low))
        log_weight = log_weight + np.log(np.maximum(inside, 1e-30))
    return _Scan(
        log_weight=np.asarray(log_weight),
        lines=np.stack([direct.slope, direct.constant, refracted.slope, refracted.constant], axis=1),
        variance=np.stack([direct.slope_variance, refracted.slope_variance, after_sd**2], axis=1),
        residual=residual,
        agreement=weight,
    )


@dataclass(frozen=True, eq=False)
class _Line:
    """Lines fitted under normal priors, one a split; `log_prior` is prior density over posterior volume."""

    slope: FloatArray
    constant: FloatArray
    slope_variance: FloatArray
    constant_variance: FloatArray
    log_prior: FloatArray


def _line(side: _Side, pull: FloatArray, slope: tuple[float, float], constant: tuple[float, float]) -> _Line:
    """Weighted least squares with normal priors (mean, sd) on slope and constant, for every row of weights."""
    a = pull @ side.offset**2 + slope[1] ** -2
    b = pull @ side.offset
    c = pull.sum(axis=1) + constant[1] ** -2
    right_slope = pull @ (side.offset * side.time) + slope[0] * slope[1] ** -2
    right_constant = pull @ side.time + constant[0] * constant[1] ** -2
    determinant = a * c - b * b
    fitted = (c * right_slope - b * right_constant) / determinant
    shift = (a * right_constant - b * right_slope) / determinant
    departure = ((fitted - slope[0]) / slope[1]) ** 2 + ((shift - constant[0]) / constant[1]) ** 2
    volume = np.log(slope[1] * constant[1]) + 0.5 * np.log(determinant)
    return _Line(fitted, shift, c / determinant, a / determinant, -0.5 * departure - volume)


def _learn(sides: list[_Side], scans: list[_Scan], broad: _Shared, before: _Shared) -> _Shared:
    """Priors and scatter from all sides, each by robust averages over the sides and splits that show them."""
    direct, refracted, intercept, inside = [], [], [], []
    near_residual, near_weight, far_residual, far_weight = [], [], [], []
    for side, scan in zip(sides, scans, strict=True):
        best = scan.best if scan.log_weight.size > 1 else side.offset.size
        row = scan.best
        lines = scan.lines[row]
        far = side.offset.size - best
        if best >= 2:
            direct.append((lines[0], min(float(best), ENOUGH_PICKS)))
            inside.append(far >= 2)
        if far >= 2:
            refracted.append((lines[2], min(float(far), ENOUGH_PICKS)))
            intercept.append((lines[3] - lines[1], min(float(far), ENOUGH_PICKS)))
        # two unknowns a line: what they took out of the residuals is put back
        near_weight.append(scan.agreement[row, :best])
        near_residual.append(scan.residual[row, :best] * np.sqrt(best / max(best - 1.0, 1.0)))
        far_weight.append(scan.agreement[row, best:])
        far_residual.append(scan.residual[row, best:] * np.sqrt(far / max(far - 2.0, 1.0)))
    if any(inside):  # a line through the shot with nothing beyond it may be a head wave seen from afar
        direct = [value for value, both in zip(direct, inside, strict=True) if both]
    sigma = float(np.median(np.concatenate([side.sigma for side in sides])))
    shared_direct = _shared_value(direct, broad.direct, DIRECT_SPREAD, 0.0)
    dip = DIP_SPREAD * shared_direct[0]
    shared_refracted = _shared_value(refracted, broad.refracted, REFRACTED_SPREAD, dip)
    return replace(
        broad,
        direct=shared_direct,
        refracted=(max(shared_refracted[0], 0.5 * dip), shared_refracted[1]),
        intercept=_shared_value(intercept, broad.intercept, INTERCEPT_SPREAD, 0.0),
        scatter_direct=_scatter(near_residual, near_weight, sigma, before.scatter_direct),
        scatter_refracted=_scatter(far_residual, far_weight, sigma, before.scatter_refracted),
    )


def _shared_value(
    found: list[tuple[float, float]], broad: tuple[float, float], share: float, least: float
) -> tuple[float, float]:
    """Robust mean over sides, and how much sides may differ from it: no less than `share` of it nor than `least`."""
    if not found:
        return broad
    value, weight = np.array(found).T
    middle = _weighted_median(value, weight)
    spread = 1.4826 * _weighted_median(np.abs(value - middle), weight)
    floor = max(share * abs(middle), least, 1e-3 * broad[1]) * (1 + 2 / len(found))  # one side says little of others
    return middle, float(min(max(spread, floor), broad[1]))


def _scatter(residual: list[FloatArray], weight: list[FloatArray], sigma: float, before: float) -> float:
    """Standard departure from the lines beyond the stated errors, from the median of the sizes of residuals."""
    values, weights = np.abs(np.concatenate(residual)), np.concatenate(weight)
    if np.count_nonzero(weights > 0.5) < 6:
        return before
    return float(np.sqrt(max((1.4826 * _weighted_median(values, weights + 1e-3)) ** 2 - sigma**2, 0.0)))


def _side_lines(side: _Side, scan: _Scan, branch: IntArray) -> tuple[float, ...]:
    """Intercept, its error, slopes and weights of one side under the branches finally given."""
    near = int(np.count_nonzero(branch[side.row] == 0))
    slope, shift, far_slope, constant = scan.lines[near]
    agreed = scan.agreement[near]
    near_count, far_count = float(agreed[:near].sum()), float(agreed[near:].sum())
    nan = float("nan")
    has_far, has_near = far_count >= 1.5, near_count >= 0.5
    return (
        constant - shift if has_far else nan,
        float(np.sqrt(scan.variance[near, 2])) if has_far else nan,
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
    slope = _weighted_median(np.array(slopes), np.array(weights))
    return (2 / slope, "minus times") if slope > 0 else (float("nan"), "none")


def _apparent(direction: IntArray, slowness: FloatArray, weight: FloatArray) -> tuple[float, str]:
    """Refractor velocity from apparent slownesses of the head wave, both directions meaned if there are both."""
    means = []
    for way in (-1, 1):
        chosen = (direction == way) & (weight > 0) & np.isfinite(slowness)
        if chosen.any():
            means.append(_weighted_median(slowness[chosen], weight[chosen]))
    if not means or not np.mean(means) > 0:
        return float("nan"), "none"
    return float(1 / np.mean(means)), "opposed shots" if len(means) == 2 else "one direction"


def _weighted_median(value: FloatArray, weight: FloatArray) -> float:
    order = np.argsort(value)
    total = np.cumsum(weight[order])
    return float(np.interp(0.5 * total[-1], total - 0.5 * weight[order], value[order]))
