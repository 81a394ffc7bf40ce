"""The onsets of one gather together: from a shot record to its rows of the pick table.

The record is seen twice. At about one sample a millisecond, with the noise made white, the posterior of all onsets
along each side of the shot says where the first arrival is on each trace and whether it can be seen
(`picker.moveout`). At the full sample interval the onset is then read in a narrow window around it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from picker.conditioning import Noise, block_means, fit_noise, remove_mains_hum, remove_offset, trace_states, whiten
from picker.moveout import Moveout, path_posterior
from picker.onsets import change_scores
from picker.picks import PickTable
from picker.records import ShotRecord

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class PickSettings:
    """What the picker assumes.

    Parameters
    ----------
    moveout : Moveout
        Bounds and habits of apparent velocities.
    slack_s : float
        How far a time break may be off, either way, seconds.
    latest_s : float
        No first arrival is looked for after this time, seconds.
    noise_order : int
        Order of the filter that makes the noise white.
    coarse_s : float
        Sample interval at which arrivals are looked for, seconds; the record's own where that is longer.
    time_break_sigma_s : float
        Standard error of a time break, for all records: a hammer switch or a geophone trigger is good to about half
        a millisecond (common practice, no source); where repeats are to be had they say better.
    geophone_sigma_s : float
        Standard error shared by all picks at one geophone: planting, and 0.1 m of loose soil at 300 m/s more or less
        under it, make about 0.3 ms (common practice, no source).
    keep_confidence, show_confidence : float
        Picks at least this likely to be the first arrival are kept; less likely ones are shown as dropped down to
        the second value; below that there is none.
    """

    moveout: Moveout = field(default_factory=Moveout)
    slack_s: float = 0.005
    latest_s: float = 2.0
    noise_order: int = 12
    coarse_s: float = 0.001
    time_break_sigma_s: float = 0.0005
    geophone_sigma_s: float = 0.0003
    keep_confidence: float = 0.5
    show_confidence: float = 0.2


# A signal's strength is taken over this time, about half a period of a first arrival.
_ONSET_S = 0.008
# Likelihoods are damped by this: samples of a band-limited signal are not independent, nor is the model exact.
_DAMPING = 0.8
# Prior chance that an arrival is too weak to be seen, and weight of the best onset given to every time (a gust).
_UNSEEN = 0.05
_OUTLIER = 1e-6


def _sides(record: ShotRecord) -> IntArray:
    """+1 or -1 for each trace: the side of the shot along the spread's main direction."""
    receivers = record.receiver_xyz[:, :2] - record.receiver_xyz[:, :2].mean(axis=0)
    direction = np.linalg.svd(receivers, full_matrices=False)[2][0]
    along = (record.receiver_xyz[:, :2] - record.source_xyz[:2]) @ direction
    return np.where(along >= 0, 1, -1)


@dataclass(frozen=True, eq=False)
class Coarse:
    """Where the first arrivals of a record are, at the coarse sample interval; arrays (traces,)."""

    time_s: FloatArray
    spread_s: FloatArray
    confidence: FloatArray
    noise: Noise


def _noise_stop(record: ShotRecord, factor: int, settings: PickSettings) -> IntArray:
    """First block of each trace that may hold an arrival."""
    earliest = record.offset_m / settings.moveout.fastest_m_s - settings.slack_s
    blocks = np.floor((earliest - record.start_s) / (record.interval_s * factor))
    return np.clip(blocks, 0, record.samples.shape[1] // factor).astype(np.int64)


def find_arrivals(
    samples: FloatArray, record: ShotRecord, live: npt.NDArray[np.bool_], settings: PickSettings
) -> Coarse:
    """Find the first arrivals of a record from all its traces together.

    Parameters
    ----------
    samples : float (traces, samples)
        Conditioned samples at the record's own interval.
    record : ShotRecord
        Their clock and geometry.
    live : bool (traces,)
        Traces to be used.
    settings : PickSettings
        What is assumed.

    Returns
    -------
    Coarse
        Times to about the coarse interval; NaN on traces that are not live.
    """
    factor = max(1, round(settings.coarse_s / record.interval_s))
    interval_s = factor * record.interval_s
    blocks = block_means(samples, factor)
    zero = np.zeros(record.samples.shape[0], dtype=np.int64)
    stop = _noise_stop(record, factor, settings)
    noise = fit_noise(blocks, zero, stop, settings.noise_order)
    white = whiten(blocks, noise)
    scores = change_scores(white, stop, round(_ONSET_S / interval_s))
    traces, times = blocks.shape
    last = min(
        float(record.start_s.max()) + times * interval_s,
        settings.latest_s,
        float(record.offset_m.max()) / settings.moveout.slowest_m_s + settings.slack_s,
    )
    origin = float(record.start_s.min())
    skip = max(0, int(np.floor((-settings.slack_s - origin) / interval_s)))
    grid = origin + interval_s * np.arange(skip, max(skip + 2, int(np.ceil((last - origin) / interval_s))))
    time_s = np.full(traces, np.nan)
    spread_s = np.full(traces, np.nan)
    confidence = np.zeros(traces)
    likelihood, seen = _likelihoods(scores, stop, record, grid, interval_s, factor)
    side = _sides(record)
    for way in (-1, 1):
        rows = np.flatnonzero(live & (side == way))
        rows = rows[np.argsort(record.offset_m[rows], kind="stable")]
        if rows.size == 0:
            continue
        posterior = path_posterior(likelihood[rows], record.offset_m[rows], grid, settings.moveout, settings.slack_s)
        for row, weights in zip(rows.tolist(), posterior, strict=True):
            time_s[row], spread_s[row], confidence[row] = _summary(grid, weights, seen[row])
    return Coarse(time_s, spread_s, confidence, noise)


def _likelihoods(
    scores: FloatArray, stop: IntArray, record: ShotRecord, grid: FloatArray, interval_s: float, factor: int
) -> tuple[FloatArray, FloatArray]:
    """Likelihood (traces, grid) of an onset at each time, and the share of it that the trace itself shows."""
    likelihood = np.empty((scores.shape[0], grid.size))
    seen = np.empty_like(likelihood)
    for row in range(scores.shape[0]):
        last = int(record.valid[row]) // factor if record.valid is not None else scores.shape[1] - 1
        position = np.rint((grid - record.start_s[row]) / interval_s).astype(np.int64)
        inside = (position >= stop[row]) & (position <= last)
        score = _DAMPING * scores[row, np.clip(position, 0, scores.shape[1] - 1)]
        score = np.where(inside, score, -np.inf)
        top = max(float(score.max()), _DAMPING * float(scores[row, last]))
        shown = (1 - _UNSEEN) * np.exp(score - top)
        floor = max(_UNSEEN * np.exp(_DAMPING * float(scores[row, last]) - top), _OUTLIER)
        likelihood[row] = shown + floor
        seen[row] = shown / likelihood[row]
    return likelihood, seen


def _summary(grid: FloatArray, weights: FloatArray, seen: FloatArray) -> tuple[float, float, float]:
    """Time, spread and confidence of a posterior: its most likely cluster that the trace itself shows."""
    shown = weights * seen
    total = float(weights.sum())
    if total <= 0 or shown.max() <= 0:
        return np.nan, np.nan, 0.0
    half = max(1, round(0.004 / (grid[1] - grid[0])))
    cluster = np.convolve(shown, np.ones(2 * half + 1), mode="same")
    middle = int(np.argmax(cluster))
    near = slice(max(0, middle - half), middle + half + 1)
    weight = shown[near]
    time = float(grid[near] @ weight / weight.sum())
    spread = float(np.sqrt(((grid[near] - time) ** 2) @ weight / weight.sum()))
    return time, spread, float(cluster[middle] / total)


def condition_record(record: ShotRecord, settings: PickSettings) -> tuple[FloatArray, npt.NDArray[np.str_]]:
    """Samples with offset and mains hum taken off, and the state of each trace."""
    states = trace_states(record.samples, np.asarray(record.valid))
    assert record.state is not None
    states = np.where(record.state != "live", record.state, states)
    stop = _noise_stop(record, 1, settings)
    zero = np.zeros(stop.size, dtype=np.int64)
    samples = remove_offset(record.samples.astype(np.float64), zero, stop)
    samples, _ = remove_mains_hum(samples, record.interval_s, zero, stop)
    return samples, states


def pick_record(record: ShotRecord, settings: PickSettings | None = None) -> PickTable:
    """Pick the first arrivals of a record.

    Parameters
    ----------
    record : ShotRecord
        As recorded.
    settings : PickSettings, optional
        What is assumed; the defaults suit hammer and small charges on spreads of 20 to 500 m.

    Returns
    -------
    PickTable
        One row per trace, in the record's order.
    """
    settings = settings or PickSettings()
    samples, states = condition_record(record, settings)
    live = states != "dead"
    coarse = find_arrivals(samples, record, live, settings)
    traces = record.samples.shape[0]
    time_s = np.full(traces, np.nan)
    sigma_s = np.full(traces, np.nan)
    for row in np.flatnonzero(live & (coarse.confidence >= settings.show_confidence)):
        time_s[row] = coarse.time_s[row]
        sigma_s[row] = max(coarse.spread_s[row], record.interval_s)
    found = np.isfinite(time_s)
    state = np.where(found, np.where(coarse.confidence >= settings.keep_confidence, "kept", "dropped"), "none")
    return PickTable(
        record=np.full(traces, record.record),
        channel=record.channel,
        source_xyz=np.tile(record.source_xyz, (traces, 1)),
        receiver_xyz=record.receiver_xyz,
        offset_m=record.offset_m,
        time_s=time_s,
        sigma_s=sigma_s,
        early_s=time_s - 1.645 * sigma_s,
        late_s=time_s + 1.645 * sigma_s,
        reading_sigma_s=sigma_s,
        bias_removed_s=np.where(found, 0.0, np.nan),
        time_break_shift_s=np.zeros(traces),
        time_break_sigma_s=np.full(traces, settings.time_break_sigma_s),
        geophone_sigma_s=np.full(traces, settings.geophone_sigma_s),
        confidence=coarse.confidence,
        state=state,
        origin=np.full(traces, "auto"),
        note=np.where(states == "live", "", states),
    )


def pick_records(
    records: Iterable[ShotRecord],
    settings: PickSettings | None = None,
    progress: Callable[[int], None] | None = None,
) -> PickTable:
    """Pick many records, one after the other.

    Parameters
    ----------
    records : iterable of ShotRecord
        With record numbers that differ.
    settings : PickSettings, optional
        What is assumed.
    progress : callable, optional
        Called with the number of records done after each.

    Returns
    -------
    PickTable
        The rows of all records, in their order.

    Raises
    ------
    ValueError
        If there are no records, or a record number repeats.
    """
    import dataclasses

    tables = []
    for record in records:
        tables.append(pick_record(record, settings))
        if progress is not None:
            progress(len(tables))
    if not tables:
        raise ValueError("records: expected at least one, found none")
    columns = {
        column.name: np.concatenate([getattr(table, column.name) for table in tables])
        for column in dataclasses.fields(PickTable)
    }
    return PickTable(**columns)
