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
from scipy.linalg import cho_factor, cho_solve

from interp.refractor import Problem, Profiles, Roughness, Solution, prior, profiles, screen, solve

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

BRANCH_ROUNDS = 4
LEAST_PICK_WEIGHT = 1e-8  # as good as nothing, and yet a number to divide by
MOST_TRIES = 20  # draws of an impossible ground are drawn again this often
SLOWEST_M_S = 80.0  # loosest dry topsoil (common practice, no source)
FASTEST_M_S = 7500.0  # faster than rock near the ground is
WARM_STEPS = 30  # steps of a solution that starts from a near one
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
    head: BoolArray
    predicted_s: FloatArray
    along: Profiles


def weigh_roughness(
    problem: Problem,
    choices: tuple[Roughness, ...],
    best: Solution,
    *,
    error_scale: float,
    refractor: bool = True,
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

    Returns
    -------
    tuple of Candidate, the improbable ones left out; probabilities sum to 1.
    """
    screened = screen(problem, choices, best, error_scale=error_scale)
    likely = [choices[number] for number in np.flatnonzero(screened > screened.max() + np.log(LEAST_WEIGHT))]
    solutions = [
        solve(
            problem,
            rough,
            error_scale=error_scale,
            refractor=refractor,
            unknowns=best.unknowns,
            iterations=WARM_STEPS,
        )
        for rough in likely
    ]
    evidence = np.array([solution.log_evidence for solution in solutions])
    weight = np.exp(evidence - evidence.max())
    weight = np.where(weight < LEAST_WEIGHT * weight.sum(), 0.0, weight)
    weight /= weight.sum()
    return tuple(
        Candidate(rough, solution, float(share))
        for rough, solution, share in zip(likely, solutions, weight, strict=True)
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
    counts = rng.multinomial(draws, share / share.sum())
    states, heads, predictions = [], [], []
    done = 0
    for candidate, count in zip(candidates, counts.tolist(), strict=True):
        if count == 0:
            continue
        drawer = _Drawer(problem, candidate, error_scale, refractor)
        state, head, predicted = drawer.draw(count, rng)
        for _ in range(MOST_TRIES):
            again = np.flatnonzero(~_possible(problem, state, refractor))
            if again.size == 0:
                break
            state[again], head[again], predicted[again] = drawer.draw(again.size, rng)
        states.append(state)
        heads.append(head)
        predictions.append(predicted)
        done += count
        if progress is not None:
            progress(done, draws)
    unknowns = np.concatenate(states)
    return Ensemble(unknowns, np.concatenate(heads), np.concatenate(predictions), profiles(problem, unknowns))


class _Drawer:
    """Draws around one solution.

    The normal equations are factored once; a draw that moves picks to the other branch corrects the factor for
    those picks alone (Woodbury identity).
    """

    def __init__(self, problem: Problem, candidate: Candidate, error_scale: float, refractor: bool) -> None:
        self.observed, self.solution, self.refractor = problem.observed, candidate.solution, refractor
        self.error_scale = error_scale
        at = self.solution.at
        self.mean, self.factor = prior(problem, candidate.rough)
        self.root = np.sqrt(np.maximum(self.solution.weight, LEAST_PICK_WEIGHT)) / (error_scale * self.observed.sigma_s)
        from_mean = self.solution.unknowns - self.mean
        self.direct_rows = (at.direct_by @ self.factor) * self.root[:, None]
        self.head_rows = (at.head_by @ self.factor) * self.root[:, None]
        self.direct_origin = at.direct_s - at.direct_by @ from_mean
        self.head_origin = at.head_s - at.head_by @ from_mean
        self.rows = np.where(self.solution.head[:, None], self.head_rows, self.direct_rows)
        self.origin = np.where(self.solution.head, self.head_origin, self.direct_origin)
        self.normal = cho_factor(np.eye(self.mean.size) + self.rows.T @ self.rows)

    def draw(self, count: int, rng: np.random.Generator) -> tuple[FloatArray, BoolArray, FloatArray]:
        """States (count, unknowns), branches (count, picks) and predicted times (count, picks)."""
        observed = self.observed
        normals = rng.standard_normal((count, observed.time_s.size))
        sides = np.where(normals < 0, observed.early_sigma_s, observed.late_sigma_s)
        moved_s = observed.time_s + self.error_scale * sides * normals
        moved_prior = rng.standard_normal((count, self.mean.size))
        pull = ((moved_s - self.origin) * self.root) @ self.rows + moved_prior
        standard = cho_solve(self.normal, pull.T).T
        head = np.tile(self.solution.head, (count, 1))
        todo = np.arange(count)
        for _ in range(BRANCH_ROUNDS):
            first = self._head_first(standard[todo])
            todo = todo[np.any(first != head[todo], axis=1)]
            if todo.size == 0:
                break
            head[todo] = self._head_first(standard[todo])
            for row in todo:
                standard[row] = self._resolved(head[row], moved_s[row], pull[row])
        direct_s, head_s = self._branches(standard)
        head = (head_s < direct_s) & self.refractor
        return self.mean + standard @ self.factor.T, head, np.where(head, head_s, direct_s)

    def _branches(self, standard: FloatArray) -> tuple[FloatArray, FloatArray]:
        direct = self.direct_origin + standard @ self.direct_rows.T / self.root
        return direct, self.head_origin + standard @ self.head_rows.T / self.root

    def _head_first(self, standard: FloatArray) -> BoolArray:
        direct, head = self._branches(standard)
        return np.asarray((head < direct) & self.refractor)

    def _resolved(self, head: BoolArray, moved_s: FloatArray, pull: FloatArray) -> FloatArray:
        """Solution of one draw whose branches differ from those of the factored equations."""
        changed = np.flatnonzero(head != self.solution.head)
        if changed.size == 0:
            return np.asarray(cho_solve(self.normal, pull))
        new = np.where(head[changed, None], self.head_rows[changed], self.direct_rows[changed])
        old = self.rows[changed]
        new_origin = np.where(head[changed], self.head_origin[changed], self.direct_origin[changed])
        root = self.root[changed]
        pull = (
            pull
            + ((moved_s[changed] - new_origin) * root) @ new
            - ((moved_s[changed] - self.origin[changed]) * root) @ old
        )
        both = np.concatenate([new, old])
        sign = np.concatenate([np.ones(changed.size), -np.ones(changed.size)])
        solved = cho_solve(self.normal, np.column_stack([pull, both.T]))
        plain, spread = solved[:, 0], solved[:, 1:]
        return np.asarray(plain - spread @ np.linalg.solve(np.diag(sign) + both @ spread, both @ plain))


def _possible(problem: Problem, states: FloatArray, refractor: bool) -> BoolArray:
    """Which draws are a ground that can exist: velocities of earth materials, the refractor the faster."""
    columns = problem.columns
    upper, lower = states[:, columns.upper_mean], states[:, columns.lower_mean]
    possible = (upper > 1 / FASTEST_M_S) & (upper < 1 / SLOWEST_M_S)
    if refractor:
        possible &= (lower > 1 / FASTEST_M_S) & (lower < upper)
    return np.asarray(possible)


def branch_probability(ensemble: Ensemble) -> FloatArray:
    """Share of draws in which the head wave came first; shape (picks,)."""
    return np.asarray(ensemble.head.mean(axis=0))
