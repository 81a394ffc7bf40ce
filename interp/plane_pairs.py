"""Plane dipping layers from reversed pairs of shots: an independent, older look at the same picks.

Straight lines through the branches of two facing shots give velocities, dip and the depth under both shots. It
takes ground and refractor for planes between the two, so it is a check on the delay-time section, not a result.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from interp.layers import BranchLines, ReversedLayers, fit_branch_lines, reversed_solution
from interp.section import DepthSection, PickFit

LEAST_DIRECT = 2
LEAST_HEAD = 4  # picks on a head-wave line: two fix it, two more test it
LEAST_TIME_BREAK_S = 1e-5


@dataclass(frozen=True)
class PlanePair:
    """A reversed pair of records: A towards B and B towards A, A the nearer to the start of the line.

    `layers` is the plane-layer solution; `along_a_m` and `along_b_m` are where the shots stood.
    """

    record_a: int
    record_b: int
    along_a_m: float
    along_b_m: float
    layers: ReversedLayers


def plane_pairs(section: DepthSection, most: int = 12) -> list[PlanePair]:
    """Plane-layer solutions of the reversed pairs of a section's picks, widest first.

    Parameters
    ----------
    section : DepthSection
    most : int
        How many pairs at the most; one record a shot place is used, that with most believed picks.

    Returns
    -------
    list of PlanePair
        Empty where no two facing shots both have direct and head waves, or plane layers do not make such branches.
    """
    fit = section.fit
    places: dict[float, npt.NDArray[np.int64]] = {}
    for record in np.unique(fit.record):
        rows = np.flatnonzero((fit.record == record) & (fit.weight > 0.5))
        if rows.size:
            place = round(float(fit.source_along_m[rows[0]]), 1)
            if place not in places or rows.size > places[place].size:
                places[place] = rows
    found = []
    order = sorted(places)
    candidates = [(a, b) for number, a in enumerate(order) for b in order[number + 1 :]]
    for a, b in sorted(candidates, key=lambda pair: pair[0] - pair[1]):
        facing_a = _facing(fit, places[a], a, b)
        facing_b = _facing(fit, places[b], b, a)
        if facing_a is None or facing_b is None:
            continue
        try:
            lines = [_lines(section, rows) for rows in (facing_a, facing_b)]
            layers = reversed_solution(lines[0], lines[1], b - a)
        except ValueError:
            continue  # no plane layers make such branches: nothing to compare with
        found.append(PlanePair(int(fit.record[facing_a[0]]), int(fit.record[facing_b[0]]), a, b, layers))
        if len(found) == most:
            break
    return found


def _facing(fit: PickFit, rows: npt.NDArray[np.int64], shot_m: float, other_m: float) -> npt.NDArray[np.int64] | None:
    """The rows of a shot whose geophones stand between it and the other shot; None where they do not suffice."""
    receiver = fit.receiver_along_m[rows]
    between = rows[(receiver > min(shot_m, other_m)) & (receiver < max(shot_m, other_m)) & (fit.offset_m[rows] > 0)]
    head = int(np.sum(fit.branch[between] == 1))
    direct = int(np.sum(fit.branch[between] == 0))
    return between if head >= LEAST_HEAD and direct >= LEAST_DIRECT else None


def _lines(section: DepthSection, rows: npt.NDArray[np.int64]) -> BranchLines:
    fit = section.fit
    time_break = section.shot_shift_s.get(int(fit.record[rows[0]]), (0.0, 0.0))[1]
    return fit_branch_lines(
        fit.offset_m[rows],
        fit.time_s[rows],
        fit.sigma_s[rows],
        fit.branch[rows],
        max(time_break, LEAST_TIME_BREAK_S),
    )
