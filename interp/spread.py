"""The spread of the result: joint draws of everything unknown, given the errors of the picks.

A draw moves every pick by its own (skewed) error and every prior by its own, and solves again: the ensemble of
solutions is the posterior of a linear problem, and close to it here, where delay times make the problem nearly
linear (Oliver, He and Reynolds 1996, randomized maximum likelihood). Which branch a pick belongs to is decided
anew in each draw, and how rough the ground may be is drawn too, by the evidence of each choice.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from interp.refractor import Problem, Profiles, Roughness, Solution, prior, profiles, solve

FloatArray = npt.NDArray[np.float64]

BRANCH_ROUNDS = 4
MOST_TRIES = 20  # draws of an impossible ground are drawn again this often
SLOWEST_M_S = 80.0  # loosest dry topsoil (common practice, no source)
FASTEST_M_S = 7500.0  # faster than rock near the ground is
WARM_STEPS = 12  # steps of a solution that starts from a near one
LEAST_WEIGHT = 0.01  # a roughness less probable than this is not drawn


@dataclass(frozen=True)
class Candidate:
    """One choice of roughness, its solution and its posterior probability."""

    rough: Roughness
    solution: Solution
    probability: float


@dataclass(frozen=True, eq=False)
class Ensemble:
    """Joint draws: `unknowns` (draws, unknowns), `head` (draws, picks), `predicted_s` (draws, picks)."""

    unknowns: FloatArray
    head: npt.NDArray[np.bool_]
    predicted_s: FloatArray
    along: Profiles


def weigh_roughness(
    problem: Problem,
    choices: tuple[Roughness, ...],
    best: Solution,
    *,
    error_scale: float,
    refractor: bool = True,
    progress: Callable[[int, int], None] | None = None,
) -> tuple[Candidate, ...]:
    """Posterior probability of each roughness: evidence of its own solution, uniform prior over the choices.

    Parameters
    ----------
    problem : Problem
    choices : tuple of Roughness
    best : Solution
        Where every solution starts.
    error_scale : float
        Factor on all stated pick errors.
    refractor : bool
        False for a ground without refractor: every first arrival is the direct wave.
    progress : callable of (done, all), optional

    Returns
    -------
    tuple of Candidate, the improbable ones left out; probabilities sum to 1.
    """
    solutions = []
    for done, rough in enumerate(choices):
        solutions.append(
            solve(
                problem,
                rough,
                error_scale=error_scale,
                refractor=refractor,
                unknowns=best.unknowns,
                iterations=WARM_STEPS,
            )
        )
        if progress is not None:
            progress(done + 1, len(choices))
    evidence = np.array([solution.log_evidence for solution in solutions])
    weight = np.exp(evidence - evidence.max())
    weight /= weight.sum()
    weight = np.where(weight < LEAST_WEIGHT, 0.0, weight)
    weight /= weight.sum()
    return tuple(
        Candidate(rough, solution, float(share))
        for rough, solution, share in zip(choices, solutions, weight, strict=True)
        if share > 0
    )


def draw(
    problem: Problem,
    candidates: tuple[Candidate, ...],
    draws: int,
    rng: np.random.Generator,
    *,
    error_scale: float,
    refractor: bool = True,
    progress: Callable[[int, int], None] | None = None,
) -> Ensemble:
    """Joint draws of all unknowns.

    Parameters
    ----------
    problem : Problem
    candidates : tuple of Candidate
        Choices of roughness with probabilities.
    draws : int
        Number of draws; the 5 % and 95 % points of a normal carry a Monte Carlo error of 2.1 / sqrt(draws)
        standard deviations.
    rng : numpy Generator
    error_scale : float
        Factor on all stated pick errors.
    refractor : bool
        False for a ground without refractor: every first arrival is the direct wave.
    progress : callable of (done, all), optional

    Returns
    -------
    Ensemble
    """
    share = np.array([candidate.probability for candidate in candidates])
    of_candidate = np.sort(rng.choice(share.size, size=draws, p=share / share.sum()))
    unknowns, heads, predictions = [], [], []
    for number, candidate in enumerate(candidates):
        mean, factor = prior(problem, candidate.rough)
        for _ in range(int(np.sum(of_candidate == number))):
            for _try in range(MOST_TRIES):
                state, head, predicted = _one_draw(
                    problem, candidate.solution, mean, factor, rng, error_scale, refractor
                )
                if _possible(problem, state, refractor):
                    break
            unknowns.append(state)
            heads.append(head)
            predictions.append(predicted)
            if progress is not None and len(unknowns) % 50 == 0:
                progress(len(unknowns), draws)
    states = np.array(unknowns)
    return Ensemble(states, np.array(heads), np.array(predictions), profiles(problem, states))


def _one_draw(
    problem: Problem,
    solution: Solution,
    mean: FloatArray,
    factor: FloatArray,
    rng: np.random.Generator,
    error_scale: float,
    refractor: bool,
) -> tuple[FloatArray, npt.NDArray[np.bool_], FloatArray]:
    """One draw of the unknowns, the branch of every pick in it and the predicted times."""
    observed, at = problem.observed, solution.at
    normals = rng.standard_normal(observed.time_s.size)
    sides = np.where(normals < 0, observed.early_sigma_s, observed.late_sigma_s)
    moved_s = observed.time_s + error_scale * sides * normals
    moved_prior = rng.standard_normal(mean.size)
    root_weight = np.sqrt(solution.weight) / (error_scale * observed.sigma_s)
    head = solution.head
    for _ in range(BRANCH_ROUNDS):
        predicted = np.where(head, at.head_s, at.direct_s)
        slope = np.where(head[:, None], at.head_by, at.direct_by)
        target = moved_s - predicted + slope @ (solution.unknowns - mean)
        whitened = (slope @ factor) * root_weight[:, None]
        normal = np.eye(mean.size) + whitened.T @ whitened
        state = mean + factor @ np.linalg.solve(normal, whitened.T @ (target * root_weight) + moved_prior)
        direct_s, head_s = at.moved(state - solution.unknowns)
        again = (head_s < direct_s) & refractor
        if np.array_equal(again, head):
            break
        head = again
    return state, again, np.where(again, head_s, direct_s)


def _possible(problem: Problem, state: FloatArray, refractor: bool) -> bool:
    """Whether a draw is a ground that can exist: velocities of earth materials, the refractor the faster."""
    columns = problem.columns
    upper, lower = state[columns.upper_mean], state[columns.lower_mean]
    if not SLOWEST_M_S < 1 / upper < FASTEST_M_S:
        return False
    return not refractor or (0 < lower < upper and 1 / lower < FASTEST_M_S)


def branch_probability(ensemble: Ensemble) -> FloatArray:
    """Share of draws in which the head wave came first; shape (picks,)."""
    return np.asarray(ensemble.head.mean(axis=0))
