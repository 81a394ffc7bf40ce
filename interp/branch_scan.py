"""Every split of the picks on one side of a shot into direct wave and head wave, weighed; and what sides share.

A split is weighed by its likelihood integrated over both lines (Laplace's approximation), under normal priors that
all sides share and that are learnt from them. Knows nothing of how sides are put together to a survey.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy.special import log_ndtr, logsumexp, ndtr

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

# standard errors are first taken so many times too large, and then less, to let no wild pick steer
STEPS_DOWN = (8.0, 4.0, 2.0, 1.0, 1.0, 1.0)
ROUNDS = 5  # sides are fitted, what they share is learnt, and again
FIRST_SCATTER = 0.03  # departure from straight lines, as a share of the span of times, before it is learnt
# sides may differ by so much, as a share of the value, before it is held against them: ground varies, layers dip
DIRECT_SPREAD, REFRACTED_SPREAD, INTERCEPT_SPREAD = 0.1, 0.25, 0.3
DIP_SPREAD = 0.08  # apparent slowness differs by sin(dip) / V1: a dip of five degrees either way
ENOUGH_PICKS = 5.0  # sides with so many picks on a line count alike in what the sides share


@dataclass(frozen=True, eq=False)
class Side:
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
class Shared:
    """What all sides have in common: priors (mean, standard deviation), scatter about lines, span of times."""

    direct: tuple[float, float]
    refracted: tuple[float, float]
    intercept: tuple[float, float]
    scatter_direct: float
    scatter_refracted: float
    span: float


@dataclass(frozen=True, eq=False)
class Scan:
    """Every split of one side: number of direct picks 0..n down the first axis."""

    log_weight: FloatArray  # (n + 1,)
    lines: FloatArray  # (n + 1, 4): direct slowness, shift, refracted slowness, intercept
    intercept_variance: FloatArray  # (n + 1,): of intercept less shift
    residual: FloatArray  # (n + 1, n)
    agreement: FloatArray  # (n + 1, n)

    @property
    def probability(self) -> FloatArray:
        """Probability of every split; shape (n + 1,)."""
        return np.asarray(np.exp(self.log_weight - logsumexp(self.log_weight)))

    @property
    def best(self) -> int:
        """Row of the most probable split."""
        return int(np.argmax(self.log_weight))


def settle(sides: list[Side], two_layers: bool) -> tuple[Shared, list[Scan]]:
    """Scan all sides, learn what they share, and again, from loose to settled.

    Parameters
    ----------
    sides : list of Side
    two_layers : bool
        False to hold every pick to the direct wave: the only split is then the last.

    Returns
    -------
    Shared
    list of Scan, one a side

    Raises
    ------
    ValueError
        If the times do not differ.
    """
    offset = np.concatenate([side.offset for side in sides])
    time = np.concatenate([side.time for side in sides])
    slowness = float(np.median(np.abs(time) / offset))
    span = float(np.quantile(time, 0.98) - min(0.0, np.quantile(time, 0.02)))
    if not span > 0:
        raise ValueError("time_s: expected times that grow with offset, found none above zero")
    shared = Shared(
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


def _scan(side: Side, shared: Shared, two_layers: bool) -> Scan:
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
    if two_layers:
        log_weight = log_weight + _order(side.offset, direct, refracted, shared)
    return Scan(
        log_weight=np.asarray(log_weight),
        lines=np.stack([direct.slope, direct.constant, refracted.slope, refracted.constant], axis=1),
        intercept_variance=refracted.constant_variance + direct.constant_variance,
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


def _line(side: Side, pull: FloatArray, slope: tuple[float, float], constant: tuple[float, float]) -> _Line:
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


def _order(offset: FloatArray, direct: _Line, refracted: _Line, shared: Shared) -> FloatArray:
    """Log-probability that the lines of every split cross where the split says that they do.

    The head wave must be the faster and the later at the shot, and the offset at which the lines cross, uncertain
    by the errors of both lines and the scatter about them, must lie between the last direct pick and the next.
    """
    faster, later = direct.slope - refracted.slope, refracted.constant - direct.constant
    faster_sd = np.sqrt(direct.slope_variance + refracted.slope_variance)
    later_sd = np.sqrt(direct.constant_variance + refracted.constant_variance)
    least = np.maximum(faster, 1e-3 * abs(shared.direct[0]))  # lines that do not close cross far out
    crossover = later / least
    scatter = np.hypot(shared.scatter_direct, shared.scatter_refracted)
    blur = np.sqrt(later_sd**2 + scatter**2 + (crossover * faster_sd) ** 2) / least
    edges = np.concatenate([[-np.inf], offset, [np.inf]])
    low, high = (edges[:-1] - crossover) / blur, (edges[1:] - crossover) / blur
    between = ndtr(np.where(low > 0, -low, high)) - ndtr(np.where(low > 0, -high, low))  # small tails keep their digits
    log_between = np.log(np.maximum(between, 1e-30))
    return np.asarray(log_ndtr(faster / faster_sd) + log_ndtr(later / later_sd) + log_between)


def _learn(sides: list[Side], scans: list[Scan], broad: Shared, before: Shared) -> Shared:
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
    middle = weighted_median(value, weight)
    spread = 1.4826 * weighted_median(np.abs(value - middle), weight)
    floor = max(share * abs(middle), least, 1e-3 * broad[1]) * (1 + 2 / len(found))  # one side says little of others
    return middle, float(min(max(spread, floor), broad[1]))


def _scatter(residual: list[FloatArray], weight: list[FloatArray], sigma: float, before: float) -> float:
    """Standard departure from the lines beyond the stated errors, from the median of the sizes of residuals."""
    values, weights = np.abs(np.concatenate(residual)), np.concatenate(weight)
    if np.count_nonzero(weights > 0.5) < 6:
        return before
    return float(np.sqrt(max((1.4826 * weighted_median(values, weights + 1e-3)) ** 2 - sigma**2, 0.0)))


def weighted_median(value: FloatArray, weight: FloatArray) -> float:
    """Value with half the weight on either side, interpolated; weights > 0."""
    order = np.argsort(value)
    total = np.cumsum(weight[order])
    return float(np.interp(0.5 * total[-1], total - 0.5 * weight[order], value[order]))
