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
from scipy.special import expit

from picker.conditioning import (
    block_means,
    fit_noise,
    quiet_start,
    recent_level,
    remove_drift,
    remove_mains_hum,
    remove_offset,
    trace_states,
    whiten,
)
from picker.late_bias import CalibratedOnset, calibrate
from picker.moveout import Moveout, path_posterior, smooth_times
from picker.onsets import change_scores
from picker.picks import PickTable
from picker.reading import (
    blocks_for_reading,
    neighbours_growth,
    prepare,
    read_onset,
    score_onset,
)
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
    drift_hz : float
        Below this frequency there is drift and no first arrival; it is filtered off, looking back only.
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
    drift_hz: float = 4.0
    coarse_s: float = 0.001
    time_break_sigma_s: float = 0.0005
    geophone_sigma_s: float = 0.0003
    keep_confidence: float = 0.5
    show_confidence: float = 0.2


# A signal's strength is taken over this time, about half a period of a first arrival.
_ONSET_S = 0.008
# Likelihoods are damped by this: samples of a band-limited signal are not independent, nor is the model exact.
_DAMPING = 0.8
# Prior chance that a first arrival is too weak to be seen: at the shot, and at the far end of the spread; and the
# weight that every time has whatever the trace shows (a gust before the arrival).
_UNSEEN_NEAR = 0.02
_UNSEEN_FAR = 0.15
_OUTLIER = 1e-6
# Mean size of what the soil under one geophone adds or takes.
_STATIC_S = 8e-4
# Onsets this close to one another are the same arrival.
_CLUSTER_S = 0.004
# Noise enough to know it, and how far it keeps from an arrival.
_ENOUGH_NOISE_S = 0.03
_MARGIN_S = 0.004
# A trace without pre-trigger samples is taken for noise until it reaches this share of its peak.
_QUIET_SHARE = 0.01
# Gusts pass for onsets: the evidence of one trace for its onset counts by this much when its confidence is told.
_GUST_DAMPING = 0.25
_NORMAL_95 = 1.6448536269514722


def _sides(record: ShotRecord) -> IntArray:
    """+1 or -1 for each trace: the side of the shot along the spread's main direction."""
    receivers = record.receiver_xyz[:, :2] - record.receiver_xyz[:, :2].mean(axis=0)
    direction = np.linalg.svd(receivers, full_matrices=False)[2][0]
    along = (record.receiver_xyz[:, :2] - record.source_xyz[:2]) @ direction
    return np.where(along >= 0, 1, -1)


@dataclass(frozen=True, eq=False)
class Arrivals:
    """Where the first arrivals of a record are, to the coarse interval, and how sure that is; shape (traces,)."""

    time_s: FloatArray
    confidence: FloatArray


def _earliest(record: ShotRecord, interval_s: float, count: int, settings: PickSettings) -> IntArray:
    """First sample of each trace that may hold an arrival, for traces of `count` samples at this interval."""
    earliest = record.offset_m / settings.moveout.fastest_m_s - settings.slack_s
    return np.clip(np.floor((earliest - record.start_s) / interval_s), 0, count).astype(np.int64)


def find_arrivals(
    samples: FloatArray,
    record: ShotRecord,
    live: npt.NDArray[np.bool_],
    noise_stop_s: FloatArray,
    settings: PickSettings,
) -> Arrivals:
    """Find the first arrivals of a record from all its traces together.

    Parameters
    ----------
    samples : float (traces, samples)
        Conditioned samples at the record's own interval.
    record : ShotRecord
        Their clock and geometry.
    live : bool (traces,)
        Traces to be used.
    noise_stop_s : float (traces,)
        Before this time each trace is noise.
    settings : PickSettings
        What is assumed.

    Returns
    -------
    Arrivals
        Times to about the coarse interval; NaN and confidence 0 on traces that are not live.
    """
    factor = max(1, round(settings.coarse_s / record.interval_s))
    interval_s = factor * record.interval_s
    blocks = block_means(samples, factor)
    traces, count = blocks.shape
    earliest = _earliest(record, interval_s, count, settings)
    stop = np.clip((noise_stop_s - record.start_s) / interval_s, 0, count).astype(np.int64)
    noise = fit_noise(blocks, np.zeros(traces, dtype=np.int64), np.where(live, stop, 0), settings.noise_order)
    scores = change_scores(whiten(blocks, noise), earliest, round(_ONSET_S / interval_s))
    last = min(
        float(record.start_s.max()) + count * interval_s,
        settings.latest_s,
        float(record.offset_m.max()) / settings.moveout.slowest_m_s + settings.slack_s,
    )
    origin = float(record.start_s.min())
    skip = max(0, int(np.floor((-settings.slack_s - origin) / interval_s)))
    stop_at = max(skip + 2, int(np.ceil((last - origin) / interval_s)))
    grid = np.asarray(origin + interval_s * np.arange(skip, stop_at), dtype=np.float64)
    likelihood, seen = _likelihoods(scores, earliest, record, grid, interval_s, factor)
    result = Arrivals(np.full(traces, np.nan), np.zeros(traces))
    side = _sides(record)
    for way in (-1, 1):
        rows = np.flatnonzero(live & (side == way))
        rows = rows[np.argsort(record.offset_m[rows], kind="stable")]
        if rows.size == 0:
            continue
        # the path stands for the ground; each trace is off it by the soil under its own geophone
        lent = smooth_times(likelihood[rows], interval_s, _STATIC_S)
        posterior = path_posterior(lent, record.offset_m[rows], grid, settings.moveout, settings.slack_s)
        expected = smooth_times(posterior / lent, interval_s, _STATIC_S)
        for row, others in zip(rows.tolist(), expected, strict=True):
            if others.sum() > 0:
                _summarise(result, row, grid, others / others.sum(), likelihood[row], seen[row])
    return result


def _likelihoods(
    scores: FloatArray, stop: IntArray, record: ShotRecord, grid: FloatArray, interval_s: float, factor: int
) -> tuple[FloatArray, FloatArray]:
    """Likelihood (traces, grid) of an onset at each time, and the share of it that the trace itself shows."""
    likelihood = np.empty((scores.shape[0], grid.size))
    reach = max(1, round(_CLUSTER_S / interval_s))
    share = record.offset_m / max(float(record.offset_m.max()), 1e-9)
    unseen = _UNSEEN_NEAR + (_UNSEEN_FAR - _UNSEEN_NEAR) * share**2
    seen = np.empty_like(likelihood)
    for row in range(scores.shape[0]):
        last = int(record.valid[row]) // factor if record.valid is not None else scores.shape[1] - 1
        position = np.rint((grid - record.start_s[row]) / interval_s).astype(np.int64)
        inside = (position >= stop[row]) & (position <= last)
        score = _DAMPING * scores[row, np.clip(position, 0, scores.shape[1] - 1)]
        score = np.where(inside, score, -np.inf)
        top = max(float(score.max()), _DAMPING * float(scores[row, last]))
        shown = (1 - unseen[row]) * np.exp(score - top)
        # an arrival too weak to be seen leaves the trace looking like noise until whatever comes next
        later = np.maximum.accumulate(np.append(shown, np.exp(_DAMPING * float(scores[row, last]) - top))[::-1])[::-1]
        likelihood[row] = shown + np.maximum(unseen[row] * later[1:], _OUTLIER)
        # what comes within a cluster of it is the same arrival, not a later one
        after = np.append(later[1 + reach :], np.full(min(reach, grid.size), later[-1]))[: grid.size]
        seen[row] = shown / (shown + np.maximum(unseen[row] * after, _OUTLIER))
    return likelihood, seen


def _summarise(
    result: Arrivals, row: int, grid: FloatArray, others: FloatArray, likelihood: FloatArray, seen: FloatArray
) -> None:
    """Fill in one trace: the most likely cluster of onsets that the trace itself shows, given the others."""
    posterior = others * likelihood
    shown = posterior * seen
    if shown.max() <= 0:
        return
    half = max(1, round(_CLUSTER_S / (grid[1] - grid[0])))
    cluster = np.convolve(shown, np.ones(2 * half + 1), mode="same")
    middle = int(np.argmax(cluster))
    near = slice(max(0, middle - half), middle + half + 1)
    result.time_s[row] = float(grid[near] @ shown[near] / shown[near].sum())
    result.confidence[row] = min(1.0, float(cluster[middle] / posterior.sum()))


def _noise_stop(samples: FloatArray, record: ShotRecord, settings: PickSettings) -> FloatArray:
    """Time before which each trace is noise, for want of better: before anything can arrive, or while it is quiet."""
    earliest_s = record.offset_m / settings.moveout.fastest_m_s - settings.slack_s
    quiet_s = record.start_s + quiet_start(samples, _QUIET_SHARE) * record.interval_s - _MARGIN_S
    short = earliest_s - record.start_s < _ENOUGH_NOISE_S
    return np.where(short, np.maximum(earliest_s, quiet_s), earliest_s)


def condition_record(record: ShotRecord, settings: PickSettings) -> tuple[FloatArray, npt.NDArray[np.str_]]:
    """Samples (traces, samples) with offset, mains hum and drift taken off, and the state of each trace."""
    states = trace_states(record.samples, np.asarray(record.valid))
    states = np.where(np.asarray(record.state) == "live", states, np.asarray(record.state))
    first = np.zeros(states.size, dtype=np.int64)
    stop = _earliest(record, record.interval_s, record.samples.shape[1], settings)
    samples = remove_offset(record.samples.astype(np.float64), first, stop)
    samples, _ = remove_mains_hum(samples, record.interval_s, first, stop)
    return remove_drift(samples, record.interval_s, settings.drift_hz), states


def _read_record(
    samples: FloatArray, record: ShotRecord, arrivals: Arrivals, noise_stop_s: FloatArray, rows: IntArray, order: int
) -> dict[int, CalibratedOnset]:
    """Read the onsets of some traces at the fine interval; traces whose window does not fit are left out."""
    blocks, factor = blocks_for_reading(samples, record.interval_s)
    interval_s = factor * record.interval_s
    stop = np.clip((noise_stop_s - record.start_s) / interval_s, 0, blocks.shape[1]).astype(np.int64)
    noise = fit_noise(blocks, np.zeros(stop.size, dtype=np.int64), stop, order)
    reader = prepare(noise, record.interval_s, factor)
    recent = round(_ENOUGH_NOISE_S / interval_s)
    floor_s = record.interval_s / np.sqrt(12.0)
    scores = {}
    for row in rows.tolist():
        start_s, about_s = float(record.start_s[row]), float(arrivals.time_s[row])
        level = recent_level(blocks[row], noise, row, int((about_s - _MARGIN_S - start_s) / interval_s), recent)
        found = score_onset(reader, blocks[row], level, start_s, about_s)
        if found is not None:
            scores[row] = found
    if not scores:
        return {}
    growth = neighbours_growth(list(scores.values()), record.offset_m[list(scores)])
    onsets = {}
    for (row, found), log_growth in zip(scores.items(), growth, strict=True):
        reading = read_onset(found, log_growth)
        onsets[row] = calibrate(reading, floor_s)
    return onsets


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
        One row per trace, in the record's order. No pick depends on the order of the traces, on amplitude or on
        polarity, and none is random.
    """
    settings = settings or PickSettings()
    samples, states = condition_record(record, settings)
    live = states != "dead"
    traces = record.samples.shape[0]
    noise_stop_s = _noise_stop(samples, record, settings)
    arrivals = find_arrivals(samples, record, live, noise_stop_s, settings)
    if np.any(noise_stop_s[live] - record.start_s[live] < _ENOUGH_NOISE_S):
        # once it is known where the arrivals are, all that is before them is noise
        clear = arrivals.confidence >= settings.keep_confidence
        noise_stop_s = np.where(clear, np.fmax(noise_stop_s, arrivals.time_s - _MARGIN_S), noise_stop_s)
        arrivals = find_arrivals(samples, record, live, noise_stop_s, settings)
    rows = np.flatnonzero(live & (arrivals.confidence >= settings.show_confidence))
    onsets = _read_record(samples, record, arrivals, noise_stop_s, rows, settings.noise_order)
    columns = {name: np.full(traces, np.nan) for name in ("time", "sigma", "early", "late", "reading", "bias")}
    confidence = np.zeros(traces)
    for row, onset in onsets.items():
        early_s, late_s = (
            onset.time_s + at for at in (-_NORMAL_95 * onset.sigma_early_s, _NORMAL_95 * onset.sigma_late_s)
        )
        values = (onset.time_s, onset.sigma_s, early_s, late_s, onset.reading_sigma_s, onset.bias_removed_s)
        for name, value in zip(columns, values, strict=True):
            columns[name][row] = value
        confidence[row] = arrivals.confidence[row] * expit(_GUST_DAMPING * onset.evidence)
    found = np.isfinite(columns["time"])
    state = np.where(found, np.where(confidence >= settings.keep_confidence, "kept", "dropped"), "none")
    return PickTable(
        record=np.full(traces, record.record),
        channel=record.channel,
        source_xyz=np.tile(record.source_xyz, (traces, 1)),
        receiver_xyz=record.receiver_xyz,
        offset_m=record.offset_m,
        time_s=columns["time"],
        sigma_s=columns["sigma"],
        early_s=columns["early"],
        late_s=columns["late"],
        reading_sigma_s=columns["reading"],
        bias_removed_s=columns["bias"],
        time_break_shift_s=np.zeros(traces),
        time_break_sigma_s=np.full(traces, settings.time_break_sigma_s),
        geophone_sigma_s=np.full(traces, settings.geophone_sigma_s),
        confidence=confidence,
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
