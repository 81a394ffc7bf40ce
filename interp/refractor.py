"""Delay times of one refractor by generalised least squares over all shots at once (time-term solution).

Unknowns: slowness of the overburden and of the refractor along the line, the delay time along the line, one
time-break shift a record, one static a geophone place, and how far off, on all picks alike, the late bias is that
was removed from them.
Times are predicted exactly, by Fermat's principle over the curved refractor and the relief (`interp.fermat`);
the step from residual to unknowns uses the delay-time relation t = delay(shot foot) + delay(receiver foot) +
integral of refractor slowness, with both feet where the exact path left them (offset by the slanted ray). The
fixed point of the two is the solution of the exact problem to second order in dip.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from interp.common_bias import BIAS_MEAN, BIAS_SIGMA, bias_derivatives
from interp.fermat import two_layer_arrivals
from interp.ground import Ground, path_integral
from interp.line import Line

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

MIN_DEPTH_M = 0.05  # a refractor nearer than this cannot be told from the ground
DIP_SIGMA = 0.18  # prior standard deviation of the overall slope of the refractor: tan 10 degrees
FREE_STEPS = 8  # steps in which picks may change branch
SETTLED = 0.02  # a step that moves predictions by less than this share of their errors (rms) is the last
WILD_WINDOW_S = 0.05  # a pick on the wrong phase lies anywhere within this of the right one


@dataclass(frozen=True)
class Roughness:
    """How much the ground may change along the line: prior standard deviations and one length.

    `upper` and `lower` are relative changes of the overburden and refractor velocity, `delay` is the relative
    departure of the delay time from its trend, `length_m` the distance over which that departure forgets itself
    (Matern 3/2 covariance).
    """

    upper: float
    lower: float
    delay: float
    length_m: float


@dataclass(frozen=True)
class Start:
    """A flat two-layer ground to start from: velocities in m/s, delay time at one end in seconds."""

    upper_m_s: float
    lower_m_s: float
    delay_s: float


@dataclass(frozen=True, eq=False)
class Observations:
    """The picks as the inversion sees them; arrays of shape (picks,), seconds.

    `record_of` is the row of the pick's record in `shift_s` and `shift_sigma_s` (records,); `static_sigma_s`
    has shape (stations,).
    """

    time_s: FloatArray
    sigma_s: FloatArray
    early_sigma_s: FloatArray
    late_sigma_s: FloatArray
    confidence: FloatArray
    bias_removed_s: FloatArray
    record_of: IntArray
    shift_s: FloatArray
    shift_sigma_s: FloatArray
    static_sigma_s: FloatArray


@dataclass(frozen=True)
class Columns:
    """Where each kind of unknown stands in the vector of unknowns."""

    upper_mean: int
    upper: slice
    lower_mean: int
    lower: slice
    trend: slice
    delay: slice
    shift: slice
    static: slice
    bias: slice
    count: int


@dataclass(frozen=True, eq=False)
class Problem:
    """Everything that stays fixed while the delay times are solved for.

    `upper_prior` is the prior standard deviation of the overburden slowness relative to its start: 1 where
    direct arrivals measure it.
    """

    line: Line
    ground: Ground
    observed: Observations
    start: Start
    upper_prior: float = 1.0

    @property
    def columns(self) -> Columns:
        """Layout of the unknowns."""
        upper = self.ground.upper_x_m.size
        lower = self.ground.lower_x_m.size
        delay = self.ground.delay_x_m.size
        sizes = [1, upper, 1, lower, 3, delay, self.observed.shift_s.size, self.observed.static_sigma_s.size]
        sizes.append(len(BIAS_SIGMA))
        at = np.concatenate([[0], np.cumsum(sizes)]).tolist()
        return Columns(
            upper_mean=at[0],
            upper=slice(at[1], at[2]),
            lower_mean=at[2],
            lower=slice(at[3], at[4]),
            trend=slice(at[4], at[5]),
            delay=slice(at[5], at[6]),
            shift=slice(at[6], at[7]),
            static=slice(at[7], at[8]),
            bias=slice(at[8], at[9]),
            count=at[9],
        )

    @property
    def delay_per_metre_s_m(self) -> float:
        """Delay time per metre of depth at the start velocities, s/m."""
        return float(np.sqrt(self.start.upper_m_s**-2 - self.start.lower_m_s**-2))


def prior(problem: Problem, rough: Roughness) -> tuple[FloatArray, FloatArray]:
    """Mean (unknowns,) and factor L (unknowns, unknowns) of the prior: unknowns = mean + L standard normals.

    Slownesses are as good as free (one standard deviation is as large as the value itself), the mean delay
    likewise; the overall slope of the refractor has the standard deviation
    DIP_SIGMA; whether it follows the relief is left open between not at all and fully.
    """
    columns, ground, observed, start = problem.columns, problem.ground, problem.observed, problem.start
    mean = np.zeros(columns.count)
    factor = np.zeros((columns.count, columns.count))
    upper, lower = 1 / start.upper_m_s, 1 / start.lower_m_s
    per_metre = problem.delay_per_metre_s_m
    half_m = 0.5 * (ground.node_x_m[-1] - ground.node_x_m[0])
    mean[columns.upper_mean], factor[columns.upper_mean, columns.upper_mean] = upper, problem.upper_prior * upper
    mean[columns.lower_mean], factor[columns.lower_mean, columns.lower_mean] = lower, lower
    correlation_m = max(0.5 * half_m, 4 * (ground.delay_x_m[1] - ground.delay_x_m[0]))
    factor[columns.upper, columns.upper] = rough.upper * upper * _matern_factor(ground.upper_x_m, correlation_m)
    factor[columns.lower, columns.lower] = rough.lower * lower * _matern_factor(ground.lower_x_m, correlation_m)
    first = columns.trend.start
    mean[first] = start.delay_s
    mean[first + 2] = 0.5 * per_metre
    for place, sigma in enumerate((3 * start.delay_s, DIP_SIGMA * half_m * per_metre, 0.5 * per_metre)):
        factor[first + place, first + place] = sigma
    factor[columns.delay, columns.delay] = (
        rough.delay * start.delay_s * _matern_factor(ground.delay_x_m, rough.length_m)
    )
    mean[columns.shift] = observed.shift_s
    factor[columns.shift, columns.shift] = np.diag(observed.shift_sigma_s)
    factor[columns.static, columns.static] = np.diag(observed.static_sigma_s)
    mean[columns.bias], factor[columns.bias, columns.bias] = BIAS_MEAN, np.diag(BIAS_SIGMA)
    return mean, factor


@dataclass(frozen=True, eq=False)
class Profiles:
    """Slownesses (s/m), delay time (s) and depth (m) at nodes; last axis nodes."""

    upper_s_m: FloatArray
    lower_s_m: FloatArray
    delay_s: FloatArray
    depth_m: FloatArray


def profiles(problem: Problem, unknowns: FloatArray) -> Profiles:
    """Profiles along the line of one vector of unknowns, or of many (draws, unknowns).

    Depth is delay / sqrt(upper**2 - lower**2), never less than MIN_DEPTH_M.
    """
    columns, ground = problem.columns, problem.ground
    upper = unknowns[..., columns.upper_mean, None] + unknowns[..., columns.upper] @ ground.upper_at.T
    lower = unknowns[..., columns.lower_mean, None] + unknowns[..., columns.lower] @ ground.lower_at.T
    delay = unknowns[..., columns.trend] @ ground.trend.T + unknowns[..., columns.delay] @ ground.delay_at.T
    upper = np.maximum(upper, 1e-5)
    lower = np.clip(lower, 1e-5, 0.98 * upper)
    depth = np.maximum(delay / np.sqrt(upper**2 - lower**2), MIN_DEPTH_M)
    return Profiles(upper, lower, delay, depth)


@dataclass(frozen=True, eq=False)
class Linearised:
    """Predictions of both branches on the record's clock at one state, and how they change.

    `direct_s`, `head_s` (picks,); `direct_by`, `head_by` (picks, unknowns); `shot_foot`, `receiver_foot`
    (picks,) are the nodes where the head wave entered and left the refractor.
    """

    direct_s: FloatArray
    head_s: FloatArray
    direct_by: FloatArray
    head_by: FloatArray
    shot_foot: IntArray
    receiver_foot: IntArray


def linearise(problem: Problem, unknowns: FloatArray) -> Linearised:
    """Exact predictions of both branches at `unknowns` (unknowns,) with the delay-time derivatives."""
    columns, ground, line, observed = problem.columns, problem.ground, problem.line, problem.observed
    at = profiles(problem, unknowns)
    shot = ground.shot_node[line.shot_of]
    receiver = ground.station_node[line.station_of]
    arrivals = two_layer_arrivals(
        ground.node_x_m, ground.surface_z_m, ground.surface_z_m - at.depth_m, at.upper_s_m, at.lower_s_m, shot, receiver
    )
    run = np.abs(ground.node_x_m[receiver] - ground.node_x_m[shot])
    extra = (line.stretch - 1) * run
    direct = arrivals.direct_s * line.stretch
    head = arrivals.head_s + extra * unknowns[columns.lower_mean]
    upper_path = path_integral(ground.node_x_m, ground.upper_at, shot, receiver)
    flat_direct = upper_path @ unknowns[columns.upper] + run * unknowns[columns.upper_mean]
    with np.errstate(invalid="ignore", divide="ignore"):
        lengthening = np.where(flat_direct > 0, direct / flat_direct, 1.0)
    shared = np.zeros((observed.time_s.size, columns.count))
    rows = np.arange(observed.time_s.size)
    shared[rows, columns.shift.start + observed.record_of] = 1
    shared[rows, columns.static.start + line.station_of] = 1
    direct_by, head_by = shared.copy(), shared
    direct_by[:, columns.bias], head_by[:, columns.bias] = bias_derivatives(observed.bias_removed_s, run * line.stretch)
    direct_by[:, columns.upper_mean] = run * lengthening
    direct_by[:, columns.upper] = upper_path * lengthening[:, None]
    head_by[:, columns.lower_mean] = run * line.stretch
    head_by[:, columns.lower] = path_integral(ground.node_x_m, ground.lower_at, shot, receiver)
    feet = (arrivals.shot_foot, arrivals.receiver_foot)
    head_by[:, columns.trend] = sum(ground.trend[foot] for foot in feet)
    head_by[:, columns.delay] = sum(ground.delay_at[foot] for foot in feet)
    common = unknowns[columns.shift][observed.record_of] + unknowns[columns.static][line.station_of]
    direct = direct + common + direct_by[:, columns.bias] @ unknowns[columns.bias]
    head = head + common + head_by[:, columns.bias] @ unknowns[columns.bias]
    return Linearised(direct, head, direct_by, head_by, *feet)


@dataclass(frozen=True, eq=False)
class Solution:
    """Most probable ground for one Roughness.

    Parameters
    ----------
    unknowns : float (unknowns,)
    at : Linearised
        Exact predictions there.
    head : bool (picks,)
        True where the head wave is predicted first.
    weight : float (picks,)
        Probability that the pick is on the right phase, given its residual.
    log_evidence : float
        Log marginal likelihood of the picks (Laplace), natural units.
    converged : bool
        Whether predictions stopped changing.
    """

    unknowns: FloatArray
    at: Linearised
    head: BoolArray
    weight: FloatArray
    log_evidence: float
    converged: bool


def solve(
    problem: Problem,
    rough: Roughness,
    *,
    error_scale: float = 1.0,
    refractor: bool = True,
    unknowns: FloatArray | None = None,
    iterations: int = 40,
) -> Solution:
    """Most probable delay times, velocities and shifts: Gauss-Newton on exact first arrivals.

    Parameters
    ----------
    problem : Problem
    rough : Roughness
    error_scale : float
        Factor on all stated pick errors.
    refractor : bool
        False for a ground without refractor: every first arrival is the direct wave.
    unknowns : float (unknowns,), optional
        Where to start; the prior mean unless given.
    iterations : int
        Most steps taken.

    Returns
    -------
    Solution
        Converged when predictions moved by less than SETTLED of their errors, rms, in the last step.
    """
    mean, factor = prior(problem, rough)
    state = mean if unknowns is None else unknowns
    sigma = error_scale * problem.observed.sigma_s
    at = linearise(problem, state)
    converged = False
    standard: FloatArray = np.zeros(mean.size)  # the state as standard normals of the prior, once a step was taken
    head = (at.head_s < at.direct_s) & refractor
    for step in range(iterations):
        if step < FREE_STEPS:  # later, a pick that lies on the crossover would hop from branch to branch for ever
            head = (at.head_s < at.direct_s) & refractor
        predicted = np.where(head, at.head_s, at.direct_s)
        slope = np.where(head[:, None], at.head_by, at.direct_by)
        residual = problem.observed.time_s - predicted
        # a broad error at first, so that a poor start does not make good picks look wild
        weight = right_phase(residual, sigma * max(1.0, 8.0 / 2**step), problem.observed.confidence)
        target = residual + slope @ (state - mean)
        whitened = (slope @ factor) * (np.sqrt(weight) / sigma)[:, None]
        normal = np.eye(mean.size) + whitened.T @ whitened
        normals = np.asarray(np.linalg.solve(normal, whitened.T @ (target * np.sqrt(weight) / sigma)), dtype=np.float64)
        move = mean + factor @ normals - state
        shift = np.abs(slope @ move) / sigma
        damping = 1.0 if step < FREE_STEPS else 0.6
        state = state + damping * move
        standard = normals if step == 0 else standard + damping * (normals - standard)
        at = linearise(problem, state)
        if step > 3 and float(np.sqrt(np.average(shift**2, weights=weight))) < SETTLED:
            converged = True
            break
    head = (at.head_s < at.direct_s) & refractor
    residual = problem.observed.time_s - np.where(head, at.head_s, at.direct_s)
    weight = right_phase(residual, sigma, problem.observed.confidence)
    slope = np.where(head[:, None], at.head_by, at.direct_by)
    whitened = (slope @ factor) * (np.sqrt(weight) / sigma)[:, None]
    normal = np.eye(mean.size) + whitened.T @ whitened
    evidence = (
        float(np.sum(log_mixture(residual, sigma, problem.observed.confidence)))
        - 0.5 * float(standard @ standard)
        - 0.5 * float(np.linalg.slogdet(normal)[1])
    )
    return Solution(state, at, head, weight, evidence, converged)


def screen(problem: Problem, choices: tuple[Roughness, ...], near: Solution, *, error_scale: float = 1.0) -> FloatArray:
    """Log evidence of each roughness with branches, weights and derivatives held as in a solution nearby.

    Returns float (choices,), up to one constant: the marginal likelihood of a linear problem with normal errors.
    """
    head, at = near.head, near.at
    slope = np.where(head[:, None], at.head_by, at.direct_by)
    root = np.sqrt(near.weight) / (error_scale * problem.observed.sigma_s)
    evidence = np.empty(len(choices))
    for number, rough in enumerate(choices):
        mean, factor = prior(problem, rough)
        predicted = np.where(head, at.head_s, at.direct_s)
        target = (problem.observed.time_s - predicted + slope @ (near.unknowns - mean)) * root
        whitened = (slope @ factor) * root[:, None]
        normal = np.eye(mean.size) + whitened.T @ whitened
        pull = whitened.T @ target
        evidence[number] = 0.5 * (
            float(pull @ np.linalg.solve(normal, pull)) - float(target @ target) - float(np.linalg.slogdet(normal)[1])
        )
    return evidence


def log_mixture(residual_s: FloatArray, sigma_s: FloatArray, confidence: FloatArray) -> FloatArray:
    """Log density of residuals: normal with probability `confidence`, else anywhere in WILD_WINDOW_S."""
    good = confidence * np.exp(-0.5 * (residual_s / sigma_s) ** 2) / (np.sqrt(2 * np.pi) * sigma_s)
    return np.asarray(np.log(good + (1 - confidence) / (2 * WILD_WINDOW_S)))


def right_phase(residual_s: FloatArray, sigma_s: FloatArray, confidence: FloatArray) -> FloatArray:
    """Probability that each pick is on the right phase, given its residual (two-component mixture)."""
    good = confidence * np.exp(-0.5 * (residual_s / sigma_s) ** 2) / (np.sqrt(2 * np.pi) * sigma_s)
    return np.asarray(good / (good + (1 - confidence) / (2 * WILD_WINDOW_S)))


def _matern_factor(x: FloatArray, length_m: float) -> FloatArray:
    """Lower factor of the Matern 3/2 correlation matrix of points x."""
    lag = np.sqrt(3.0) * np.abs(x[:, None] - x[None, :]) / length_m
    correlation = (1 + lag) * np.exp(-lag)
    return np.asarray(np.linalg.cholesky(correlation + 1e-9 * np.eye(x.size)))
