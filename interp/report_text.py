"""The report in words: the answer, what its intervals hold and do not hold, and how it was come by.

Sentences only say what the result, the picks and the log say; what no first arrival decides is always said.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from interp.section import DepthSection
from interp.section_tables import Columns, cells, depth_columns, velocity_columns
from picker.picks import PickTable
from picker.units import columns_in

if TYPE_CHECKING:
    from picker.findings import Finding

CAUTIONS = (
    "Depths and velocities support the judgement of a licensed or chartered professional. They never replace borings, "
    "test pits or utility searches, nor local codes, nor the law on who may practise.",
    "Excavation: velocity alone does not say whether rock can be ripped, nor what stands in a cut. Confirm depth to "
    "rock and its strength by borings before design or price.",
    "Foundations: a refractor is where velocity jumps. It need not be what a driller calls rock, and rock may be "
    "weaker below it. Base no bearing level on it alone.",
    "Water: a refractor near 1,500 m/s may be saturated ground. Whether it yields water, and whether that may be "
    "drunk, is for wells, tests and the authority.",
    "Voids, boulders, pipes and old fill can lie under a line without a sign in its first arrivals.",
)

_NOT_IN_THE_INTERVALS = (
    "A hidden layer: one too thin to give a first arrival anywhere. If there is one, the refractor lies elsewhere than "
    "told, deeper as a rule where the hidden layer is faster than the ground above it.",
    "A velocity inversion: a slow layer below a faster one gives no head wave. If there is one, the refractor is "
    "shallower than told.",
    "Structure against velocity: a change of overburden velocity that no direct arrival measures passes for a change "
    "of depth, and the other way round.",
    "Rays from the side: a refractor that slopes across the line is seen at its nearest point, not straight below. "
    "Depths are then too small.",
    "A velocity that grows with depth inside a layer, or differs with direction.",
)

_PICKING = (
    "First arrivals: noise was made white with a filter fitted to it; the onsets of all traces on one side of a shot "
    "were found together, by the probability of every path of times over offset; each onset was then read as a "
    "likelihood over time, the signal a Gaussian process that starts there (Rasmussen and Williams 2006; Wahba 1978). "
    "Late bias and spread of that reading were measured on a library of onsets and taken into account.",
)

_INTERPRETATION = (
    "Branches: a pick belongs to the direct wave or to the head wave, whichever the ground predicts first; both times "
    "are exact for uneven ground over a curved refractor (Fermat's principle). In every draw this is decided anew.",
    "Depths: delay times along the line, the velocities of overburden and refractor, a shift of every time break and a "
    "static of every geophone were solved for together from all shots by generalised least squares (delay times: "
    "Gardner 1939). How much depth and velocity may change along the line is weighed by the evidence of the picks. A "
    "pick that the result cannot explain loses weight, down to being set aside.",
    "Intervals: each of the joint draws moves every pick by its own error and every assumption by its own, and solves "
    "again (Oliver, He and Reynolds 1996). An interval runs from the 5 % to the 95 % point of the draws.",
)

_PLANE_CHECK = (
    "Check: plane dipping layers between facing shots, from straight lines through their branches (Adachi 1954; "
    "Geldart and Sheriff 2004).",
)

_SOURCES = {
    "Adachi 1954": "Adachi, R., 1954. On a proof of fundamental formula concerning refraction method of geophysical "
    "prospecting and some remarks. Kumamoto Journal of Science, Series A, 2, 18-23.",
    "Gardner 1939": "Gardner, L. W., 1939. An areal plan of mapping subsurface structure by refraction shooting. "
    "Geophysics 4, 247-259.",
    "Geldart": "Geldart, L. P., and Sheriff, R. E., 2004. Problems in Exploration Seismology and their Solutions. "
    "Society of Exploration Geophysicists.",
    "Oliver": "Oliver, D. S., He, N., and Reynolds, A. C., 1996. Conditioning permeability fields to pressure data. "
    "5th European Conference on the Mathematics of Oil Recovery.",
    "Rasmussen": "Rasmussen, C. E., and Williams, C. K. I., 2006. Gaussian Processes for Machine Learning. MIT Press.",
    "Wahba": "Wahba, G., 1978. Improper priors, spline smoothing and the problem of guarding against model errors in "
    "regression. Journal of the Royal Statistical Society B 40, 364-372.",
}


def answer(section: DepthSection, units: str) -> list[str]:
    """Say how deep each refractor is and how fast the layers are, with 90 % intervals.

    Parameters
    ----------
    section : DepthSection
        The result.
    units : str
        `m` or `ft`.

    Returns
    -------
    list of str
        Sentences with the numbers of the depth and velocity tables.
    """
    columns = columns_in(units, depth_columns(section))
    told = [_depth_range(columns, layer, units, _name(section, layer)) for layer in range(1, section.layers + 1)]
    return [*(told or ["No refractor was seen in first arrivals."]), *_velocities(section, units)]


def _name(section: DepthSection, layer: int) -> str:
    """What a refractor is called."""
    return "the refractor" if section.layers == 1 else f"refractor {layer}"


def _depth_range(columns: Columns, layer: int, units: str, name: str) -> str:
    """Tell the depth of one refractor at its shallowest and deepest points, and how wide its intervals are."""
    rows = np.flatnonzero(columns["layer"] == layer)
    shown = {column: [values[row] for row in rows] for column, values in cells(columns).items()}
    depth = columns[f"depth_{units}"][rows]
    name = name.capitalize()
    if not np.isfinite(depth).any():
        least = [value for value in shown[f"deeper_than_{units}"] if value]
        told = f"{name} was not seen in first arrivals."
        if least:
            low, high = min(least, key=float), max(least, key=float)
            told += f" If there is one, it is deeper than told under each geophone: than {low} to {high} {units}."
        return told

    def at(row: int, more: str) -> str:
        low, middle, high, along = (shown[f"{one}_{units}"][row] for one in ("depth_lo", "depth", "depth_hi", "along"))
        return f"{middle} {units} below ground ({more}{low} to {high}) at {along} {units} along the line"

    shallowest, deepest = int(np.nanargmin(depth)), int(np.nanargmax(depth))
    told = f"{name} is {at(shallowest, '90 % interval ')}."
    if shallowest != deepest:
        told = f"{name} is shallowest, {at(shallowest, '90 % interval ')}, and deepest, {at(deepest, '')}."
    width = columns[f"depth_hi_{units}"][rows] - columns[f"depth_lo_{units}"][rows]
    ends = cells({f"width_{units}": np.array([np.nanmin(width), np.nanmax(width)])})[f"width_{units}"]
    return f"{told} Its 90 % intervals are {ends[0]} to {ends[1]} {units} wide."


def _velocities(section: DepthSection, units: str) -> list[str]:
    """One sentence a layer on its velocity along the line."""
    columns = columns_in(units, velocity_columns(section))
    shown = cells(columns)
    told = []
    for layer in range(1, section.layers + 2):
        stretches = []
        for row in np.flatnonzero(columns["layer"] == layer):
            value, low, high, start, stop = (
                shown[name][row]
                for name in (
                    f"velocity_{units}_s",
                    f"velocity_lo_{units}_s",
                    f"velocity_hi_{units}_s",
                    f"from_{units}",
                    f"to_{units}",
                )
            )
            if value:
                stretches.append(f"{value} {units}/s ({low} to {high}) from {start} to {stop} {units}")
        place = f"above {_name(section, layer)}" if layer <= section.layers else f"below {_name(section, layer - 1)}"
        if not section.layers:
            place = "of the ground"
        if stretches:
            told.append(f"The velocity {place} is {', '.join(stretches)}.")
    return told


def weak_points(section: DepthSection, units: str) -> list[str]:
    """Say where the depths rest on little.

    Parameters
    ----------
    section : DepthSection
        The result.
    units : str
        `m` or `ft`.

    Returns
    -------
    list of str
        Sentences; empty where every depth is seen from both sides.
    """
    told = []
    known = np.isfinite(section.depth_m)
    for layer in range(section.layers):
        coverage = section.coverage[layer]
        for which, words in (
            (known[layer] & (coverage == "one"), "is seen from one side only"),
            (known[layer] & (coverage == "none"), "is not seen and was interpolated"),
            (~known[layer], "has no depth, for want of arrivals that bear on it,"),
        ):
            if which.any():
                places = cells(columns_in(units, {"along_m": section.along_m[which]}))[f"along_{units}"]
                count = "1 geophone" if len(places) == 1 else f"{len(places)} geophones"
                where = f"{places[0]} {units}" if len(places) == 1 else f"{places[0]} to {places[-1]} {units}"
                told.append(f"{_name(section, layer + 1).capitalize()} {words} under {count} ({where} along the line).")
    return told


def to_look_at(section: DepthSection, findings: Sequence[Finding]) -> list[str]:
    """List what a person must look at: the warnings of the result and the findings that say so."""
    return [*section.warnings, *(str(finding) for finding in findings if finding.severity == "look")]


def in_the_intervals(section: DepthSection) -> list[str]:
    """Say what the 90 % intervals of depth and velocity hold, and on what they are conditioned."""
    told = [
        "The error of reading each onset, skewed as it is; errors that all picks of a record share (time break), that "
        "all picks at a geophone share, and that all picks share (late bias), as far as the picks came with them; "
        "which branch a pick is on; and how quickly depth and velocity may change along the line.",
        f"They hold for ground of {section.layers + 1} layers whose velocities change along the line, not with depth.",
    ]
    numbers = sorted(section.refractor_probability.items())
    if numbers:
        shares = ", ".join(f"{count}: {share:.2f}" for count, share in numbers)
        told.append(f"Probability of each number of refractors that was compared: {shares}.")
    told.append(
        "Each interval is for one place: of many geophones, about one in ten lies outside its interval. The draws "
        "behind them are joint, so neighbouring geophones tend to be off together."
    )
    return told


def not_in_the_intervals(section: DepthSection) -> list[str]:
    """Say what the 90 % intervals do not hold, and whether bounds on it were computed."""
    if section.bounds:
        kinds = ", ".join(sorted({bound.kind for bound in section.bounds}))
        first = (
            f"Bounds were computed for: {kinds}. They stand apart from the intervals, in the columns \u201cbound\u201d "
            "of the depth table. What they do not name is not bounded."
        )
    else:
        first = (
            "No bounds were computed on any of the following. That the columns for them are missing does not mean that "
            "there is nothing to bound."
        )
    return [first, *_NOT_IN_THE_INTERVALS]


def missing_errors(picks: PickTable) -> list[str]:
    """Say which errors the kept picks came without, and what the interpretation did about it.

    Parameters
    ----------
    picks : PickTable
        All picks.

    Returns
    -------
    list of str
        Sentences; empty where the picks came with every error.
    """
    kept = picks.kept
    total = int(kept.sum())
    assumed = np.char.find(picks.note, "assumed") >= 0
    cases = (
        (
            assumed,
            "came without a standard error; it was assumed (see the notes of the picks). The intervals are only as "
            "good as that assumption",
        ),
        (
            np.isnan(picks.time_break_sigma_s),
            "came without an error of the time break; their time breaks were taken as exact, and the intervals do not "
            "hold that error",
        ),
        (
            np.isnan(picks.geophone_sigma_s),
            "came without an error shared by all picks at a geophone; it was taken as none, and the intervals do not "
            "hold it",
        ),
        (
            np.isnan(picks.bias_removed_s),
            "came without a late bias; onsets read by eye or by threshold are late, and the intervals do not hold that",
        ),
        (
            np.isnan(picks.early_s) | np.isnan(picks.late_s),
            "came without 5 % and 95 % points; their errors were taken as symmetric",
        ),
        (np.isnan(picks.confidence), "came without a confidence; they were taken for first arrivals"),
    )
    told = [f"{count} of {total} kept picks {words}." for which, words in cases if (count := int(np.sum(which & kept)))]
    by_hand = int(np.sum(kept & (picks.origin == "manual") & np.isfinite(picks.bias_removed_s)))
    if by_hand:
        told.append(
            f"{by_hand} of {total} kept picks were placed by hand; no late bias was taken off them, and the intervals "
            "do not hold the lateness of a reading by eye."
        )
    return told


def methods(*, picked: bool, pairs: bool) -> tuple[list[str], list[str]]:
    """Say how the result was come by.

    Parameters
    ----------
    picked : bool
        Whether first arrivals were picked here.
    pairs : bool
        Whether plane layers could be checked between facing shots.

    Returns
    -------
    steps : list of str
    sources : list of str
        The publications that the steps name.
    """
    steps = [
        *(_PICKING if picked else ("First arrivals: the picks were handed in; they were not made here.",)),
        *_INTERPRETATION,
        *(_PLANE_CHECK if pairs else ()),
    ]
    words = " ".join(steps)
    return steps, [source for key, source in _SOURCES.items() if key in words]
