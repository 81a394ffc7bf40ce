"""From a PickTable to a DepthSection: the whole interpretation in one call."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from dataclasses import dataclass
from itertools import product

import numpy as np
import numpy.typing as npt
from scipy.special import expit
from threadpoolctl import threadpool_limits

from interp.branches import assign_branches
from interp.common_bias import COMMON_SHARE
from interp.control import Control, control_of_stations, least_depth_m
from interp.ground import lay_ground
from interp.line import Line, lay_out_line
from interp.refractor import Observations, Problem, Roughness, Solution, solve
from interp.section import DepthSection, PickFit
from interp.spread import Ensemble, branch_probability, draw, weigh_roughness
from interp.start import branch_start, flat_start
from picker.picks import PickTable

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

HIGHEST_CONFIDENCE = 0.995  # nobody's pick is certain to be on the right phase
LEAST_SIGMA_S = 2e-5  # below this the errors of the forward model would count
LEAST_PICKS = 4
MOST_ASIDE = 0.2  # a result for which more of the picks are set aside than this is in doubt
LEAST_HEAD = 3  # fewer head waves than this are taken for chance
LEAST_DIRECT = 3  # fewer direct arrivals than this do not measure the overburden
UNSEEN_UPPER_M_S = 600.0  # middle of the range of dry soils and weathered ground
UNSEEN_UPPER_SIGMA = 0.3  # relative standard deviation of its slowness: 375 to 1,500 m/s within two of them
FASTEST_M_S = 6500.0  # refractor velocity assumed where none was seen: the fast end of sound rock


@dataclass(frozen=True)
class InterpretSettings:
    """What a person may choose.

    Parameters
    ----------
    seed : int
        Seed of all random draws; the same seed gives the same result.
    draws : int
        Joint draws of depths and velocities.
    upper_roughness, lower_roughness, delay_roughness : tuple of float
        Relative changes along the line that are weighed against each other: overburden velocity, refractor
        velocity, departure of the delay time from its trend.
    """

    seed: int = 1
    draws: int = 1000
    upper_roughness: tuple[float, ...] = (0.01, 0.06, 0.15)
    lower_roughness: tuple[float, ...] = (0.005, 0.05, 0.15)
    delay_roughness: tuple[float, ...] = (0.03, 0.1, 0.25, 0.5)
    correlation_spacings: tuple[float, ...] = (4.0, 10.0)


def interpret(
    picks: PickTable,
    settings: InterpretSettings | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> DepthSection:
    """Depth to the refractor under every geophone and the layer velocities, with joint draws.

    Parameters
    ----------
    picks : PickTable
        Picks in state `kept` are used.
    settings : InterpretSettings
    progress : callable of (done, all), optional
        Called as draws are made.

    Returns
    -------
    DepthSection

    Raises
    ------
    ValueError
        If the picks cannot carry a two-layer solution; the text says what is missing.
    """
    # the matrices are small: more threads would only wait for each other, and add up in another order
    with threadpool_limits(limits=1, user_api="blas"):
        return _interpret(picks, settings or InterpretSettings(), progress)


def _interpret(
    picks: PickTable, settings: InterpretSettings, progress: Callable[[int, int], None] | None
) -> DepthSection:
    whole_line = lay_out_line(picks)
    across = picks.kept & whole_line.broadside
    rows = np.flatnonzero(picks.kept & ~across)
    if rows.size < LEAST_PICKS:
        raise ValueError(f"expected at least {LEAST_PICKS} kept picks along the line, found {rows.size}")
    used, line = take(picks, rows), whole_line.of(rows)
    warnings = []
    if np.any(across):
        warnings.append(f"{int(across.sum())} picks run across the line rather than along it and were not used.")
    middle = Roughness(0.06, 0.02, 0.15, settings.correlation_spacings[-1] * _spacing(line))
    problem, seen = _best_start(used, line, middle)
    bare = solve(problem, middle, refractor=False)
    seen_probability = _seen_probability(seen, bare)
    refractor = seen_probability > 0.5
    best = seen if refractor else bare
    if refractor and _believed_direct(best) < LEAST_DIRECT:
        problem = dataclasses.replace(problem, start=dataclasses.replace(problem.start, upper_m_s=UNSEEN_UPPER_M_S))
        problem = dataclasses.replace(problem, upper_prior=UNSEEN_UPPER_SIGMA)
        best = solve(problem, middle)
        warnings.append(
            f"Fewer than {LEAST_DIRECT} direct arrivals: the overburden velocity is not measured but assumed "
            f"({UNSEEN_UPPER_M_S:.0f} m/s, give or take {100 * UNSEEN_UPPER_SIGMA:.0f} %), and the depths rest on it."
        )
    error_scale, note = _error_scale(problem, best)
    if note:
        warnings.append(note)
    choices = tuple(
        Roughness(upper, lower, delay, spacings * _spacing(line))
        for upper, lower, delay, spacings in product(
            settings.upper_roughness, settings.lower_roughness, settings.delay_roughness, settings.correlation_spacings
        )
    )
    candidates = weigh_roughness(problem, choices, best, error_scale=error_scale, refractor=refractor)
    rng = np.random.default_rng(settings.seed)
    ensemble = draw(
        problem, candidates, settings.draws, rng, error_scale=error_scale, refractor=refractor, progress=progress
    )
    top = max(candidates, key=lambda candidate: candidate.probability).solution
    if not refractor:
        warnings.append(
            "No refractor was seen: all first arrivals fit the direct wave. The depths that a refractor must exceed "
            "are given instead."
        )
    elif _one_sided(line, top):
        warnings.append(
            "All head waves ran in one direction: the dip of the refractor is unknown, and its velocity and depth are "
            "only as good as the assumption that it slopes by less than about ten degrees."
        )
    aside = int(np.sum(top.weight < 0.5))
    if aside > MOST_ASIDE * rows.size:
        warnings.append(
            f"{aside} of {rows.size} picks do not fit a ground of two layers and were set aside: the result rests on "
            "the others. Look at the travel-time figure; times, positions or the model may be wrong."
        )
    if not top.converged:
        warnings.append("The solution had not settled when its steps ran out: look at the travel-time figure.")
    return _section(problem, used, top, ensemble, settings, seen_probability, tuple(warnings))


def take(table: PickTable, rows: npt.NDArray[np.bool_] | IntArray) -> PickTable:
    """The given rows of a table."""
    return PickTable(**{field.name: getattr(table, field.name)[rows] for field in dataclasses.fields(table)})


def _spacing(line: Line) -> float:
    return float(np.median(np.diff(line.station_along_m)))


def _one_sided(line: Line, solution: Solution) -> bool:
    used = solution.head & (solution.weight > 0.5)
    rightward = line.shot_along_m[line.shot_of] < line.station_along_m[line.station_of]
    return bool(np.all(rightward[used]) or not np.any(rightward[used]))


def _believed_direct(solution: Solution) -> int:
    return int(np.sum(~solution.head & (solution.weight > 0.5)))


def _seen_probability(seen: Solution, bare: Solution) -> float:
    """Probability that a refractor gave first arrivals, from the evidence with and without one."""
    if np.sum(seen.head & (seen.weight > 0.5)) < LEAST_HEAD:
        return 0.0
    return float(expit(seen.log_evidence - bare.log_evidence))


def _observations(used: PickTable, line: Line) -> Observations:
    records, record_of = np.unique(used.record, return_inverse=True)
    first = np.array([int(np.flatnonzero(record_of == number)[0]) for number in range(records.size)])
    static = np.zeros(line.station_along_m.size)
    np.maximum.at(static, line.station_of, np.nan_to_num(used.geophone_sigma_s))
    # a pick's error holds what is left of the late bias; the part common to all picks is an unknown of its own
    common = COMMON_SHARE * np.nan_to_num(used.bias_removed_s)
    alone = np.sqrt(np.maximum(used.sigma_s**2 - common**2, 0.0))
    sigma = np.maximum(np.fmax(alone, used.reading_sigma_s), LEAST_SIGMA_S)
    # 5 % and 95 % points of a normal stand 1.645 standard deviations out
    early = np.where(np.isfinite(used.early_s), (used.time_s - used.early_s) / 1.645, sigma)
    late = np.where(np.isfinite(used.late_s), (used.late_s - used.time_s) / 1.645, sigma)
    both = np.sqrt(0.5 * (early**2 + late**2))
    stretch = np.where(both > 0, sigma / np.where(both > 0, both, 1.0), 1.0)
    return Observations(
        time_s=used.time_s,
        sigma_s=sigma,
        early_sigma_s=np.where(both > 0, early * stretch, sigma),
        late_sigma_s=np.where(both > 0, late * stretch, sigma),
        confidence=np.clip(np.nan_to_num(used.confidence, nan=1.0), 0.01, HIGHEST_CONFIDENCE),
        bias_removed_s=np.nan_to_num(used.bias_removed_s),
        record_of=np.asarray(record_of).reshape(-1).astype(np.int64),
        shift_s=np.nan_to_num(used.time_break_shift_s[first]),
        shift_sigma_s=np.nan_to_num(used.time_break_sigma_s[first]),
        static_sigma_s=static,
    )


def _best_start(used: PickTable, line: Line, rough: Roughness) -> tuple[Problem, Solution]:
    """The problem and its solution from whichever starting ground explains the picks better."""
    observed = _observations(used, line)
    true_s = observed.time_s - observed.shift_s[observed.record_of]
    branches = assign_branches(
        observed.record_of,
        line.shot_along_m[line.shot_of],
        line.station_along_m[line.station_of],
        true_s,
        observed.sigma_s,
        observed.confidence,
        observed.shift_sigma_s[observed.record_of],
    )
    starts = [flat_start(used.offset_m, true_s, observed.sigma_s), branch_start(branches)]
    ground = lay_ground(line)
    problems = [Problem(line, ground, observed, start) for start in starts if start is not None]
    solutions = [solve(problem, rough) for problem in problems]
    best = int(np.argmax([solution.log_evidence for solution in solutions]))
    return problems[best], solutions[best]


def _error_scale(problem: Problem, solution: Solution) -> tuple[float, str]:
    """Factor on stated errors when the picks scatter more than they allow, and the sentence that says so."""
    predicted = np.where(solution.head, solution.at.head_s, solution.at.direct_s)
    residual = (problem.observed.time_s - predicted) / problem.observed.sigma_s
    weight = solution.weight
    freedom = float(weight.sum()) - _effective_unknowns(problem, solution)
    if freedom < 5:
        return 1.0, "Too few picks to test the stated pick errors against their scatter."
    chi2 = float(np.sum(weight * residual**2)) / freedom
    if chi2 < 1 + 2.5 * np.sqrt(2 / freedom):
        return 1.0, ""
    scale = float(np.sqrt(chi2))
    return scale, (
        f"The picks scatter {scale:.2f} times as much about the result as their stated errors allow; all pick errors "
        "were multiplied by that factor. Wrong picks, a third layer or a velocity that grows with depth can cause it."
    )


def _effective_unknowns(problem: Problem, solution: Solution) -> float:
    """Number of unknowns that the picks decide, roughly: places and shots with data, and the velocities."""
    head = solution.head
    stations = np.unique(problem.line.station_of[head]).size
    shots = np.unique(problem.observed.record_of).size
    return min(0.5 * problem.observed.time_s.size, 2.0 + 0.5 * stations + 0.5 * shots)


def _section(
    problem: Problem,
    used: PickTable,
    top: Solution,
    ensemble: Ensemble,
    settings: InterpretSettings,
    seen_probability: float,
    warnings: tuple[str, ...],
) -> DepthSection:
    line, ground, observed, columns = problem.line, problem.ground, problem.observed, problem.columns
    node = ground.station_node
    probability = branch_probability(ensemble)
    head = probability >= 0.5
    believed = top.weight > 0.5
    control = control_of_stations(
        line.station_along_m,
        line.shot_along_m[line.shot_of],
        line.station_along_m[line.station_of],
        ground.node_x_m[top.at.shot_foot],
        ground.node_x_m[top.at.receiver_foot],
        head,
        believed,
    )
    depth = ensemble.along.depth_m[:, node].copy()
    velocity = 1 / np.stack([ensemble.along.upper_s_m[:, node], ensemble.along.lower_s_m[:, node]], axis=1)
    if seen_probability < 0.5:
        velocity[:, 1] = np.nan
    known = (control.coverage != "none") | control.between
    depth[:, ~known] = np.nan
    faster = FASTEST_M_S if seen_probability < 0.5 else float(np.median(velocity[:, 1]))
    deeper = np.where(known, np.nan, least_depth_m(control.reach_m, np.median(velocity[:, 0], axis=0), faster))
    predicted = np.median(ensemble.predicted_s, axis=0)
    residual = used.time_s - predicted
    shifts = ensemble.unknowns[:, columns.shift]
    stations = line.station_along_m.size
    return DepthSection(
        station_xyz=line.station_xyz,
        along_m=line.station_along_m,
        depth_samples_m=depth[:, None, :],
        velocity_samples_m_s=velocity,
        bound_shallow_m=np.full((1, stations), np.nan),
        bound_deep_m=np.full((1, stations), np.nan),
        coverage=control.coverage[None, :],
        deeper_than_m=deeper[None, :],
        picks=control.picks[None, :],
        note=_notes(control, known)[None, :],
        fit=PickFit(
            record=used.record,
            channel=used.channel,
            source_along_m=line.shot_along_m[line.shot_of],
            receiver_along_m=line.station_along_m[line.station_of],
            offset_m=used.offset_m,
            time_s=used.time_s,
            sigma_s=observed.sigma_s,
            predicted_s=predicted,
            branch=head.astype(np.int64),
            branch_probability=np.where(head, probability, 1 - probability),
            weight=top.weight,
        ),
        rms_misfit_s=float(np.sqrt(np.sum(top.weight * residual**2) / top.weight.sum())),
        chi2_per_pick=float(np.sum(top.weight * (residual / observed.sigma_s) ** 2) / top.weight.sum()),
        refractor_probability={0: 1 - seen_probability, 1: seen_probability},
        shot_shift_s={
            int(record): (float(np.median(shifts[:, row])), float(np.std(shifts[:, row])))
            for row, record in enumerate(np.unique(used.record))
        },
        warnings=warnings,
        settings=dataclasses.asdict(settings),
    )


def _notes(control: Control, known: BoolArray) -> npt.NDArray[np.str_]:
    """A sentence for every station that needs one."""
    notes = np.full(known.size, "", dtype=object)
    notes[control.coverage == "one"] = "seen from one side only"
    notes[control.between] = "interpolated between controlled points"
    notes[~known] = "no control; a refractor must be deeper than told"
    notes[~known & (control.reach_m == 0)] = "no control"
    return notes.astype(np.str_)
