"""One shot record as a figure: its traces around the first arrivals, the picks with their errors, what is predicted."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.collections import PolyCollection
from matplotlib.figure import Figure

from interp.figure_style import (
    INK,
    PAGE_WIDTH_MM,
    PICK,
    PREDICTED,
    QUIET,
    axes_at,
    lengths_in,
    mark,
    new_figure,
    styled,
)
from interp.line import along_chain
from interp.section import DepthSection
from picker.picks import PickTable

if TYPE_CHECKING:
    from picker.records import ShotRecord

FloatArray = npt.NDArray[np.float64]

_LEFT_MM, _WIDTH_MM, _HEIGHT_MM = 14.0, PAGE_WIDTH_MM - 17.0, 96.0
_TRACE = "#5d646d"
_FILL = "#bfc5cb"
_BEFORE_S = 0.012  # shown before the earliest pick, so that the noise is seen
_LEAST_S = 0.03
_FIRST_SWING_S = 0.015  # the gain of a trace is set by what lies before its pick and this much after it
_EXCURSION = 0.9  # of the spacing of traces
_MARK_MM = 1.1  # half the length of the mark of a pick, at the most
_POINTS = 900  # a trace needs no more on a page


@dataclass(frozen=True, eq=False)
class _Traces:
    """What is drawn of one record: traces sorted along the line, picks and predictions aligned with them."""

    along: FloatArray
    shot_along: float
    time_s: FloatArray
    early_s: FloatArray
    late_s: FloatArray
    predicted_s: FloatArray
    state: npt.NDArray[np.str_]
    by_hand: npt.NDArray[np.bool_]
    order: npt.NDArray[np.intp]
    excursion: float


@styled
def gather_figure(record: ShotRecord, picks: PickTable, section: DepthSection, units: str = "m") -> Figure:
    """Draw one record with its picks.

    Parameters
    ----------
    record : ShotRecord
        The samples.
    picks : PickTable
        Picks of the survey; those of this record are drawn.
    section : DepthSection
        The result, for distances along the line and for predicted times.
    units : str
        `m` or `ft`.

    Returns
    -------
    Figure
        Each trace has a gain of its own, set by what lies before and shortly after its pick: amplitudes do not
        compare. Bars reach from the 5 % to the 95 % point of the onset.
    """
    figure = new_figure(16.0 + _HEIGHT_MM + 9.0)
    axes = axes_at(figure, _LEFT_MM, 16.0, _WIDTH_MM, _HEIGHT_MM)
    traces = _traces(record, picks, section, units)
    first_s, last_s = _window(record, traces)
    margin = max(traces.excursion * 1.3, 1e-6)
    axes.set_xlim(float(traces.along.min()) - margin, float(traces.along.max()) + margin)
    axes.set_ylim(1e3 * last_s, 1e3 * first_s)
    axes.grid(axis="y")
    _wiggles(axes, record, traces, first_s, last_s)
    _marks(axes, traces)
    if first_s < 0 < last_s:
        axes.axhline(0, color=QUIET, linewidth=0.5, zorder=1)
    low, high = axes.get_xlim()
    if low <= traces.shot_along <= high:
        axes.annotate(
            "",
            (traces.shot_along, 1.0),
            xycoords=("data", "axes fraction"),
            xytext=(0, 7),
            textcoords="offset points",
            arrowprops={"arrowstyle": "-|>", "color": INK, "linewidth": 0.8, "shrinkA": 0, "shrinkB": 0},
        )
    axes.set_title(f"Record {record.record}, shot at {traces.shot_along:.4g} {units} along the line", pad=8)
    axes.set_xlabel(f"distance along the line ({units})")
    axes.set_ylabel("time on the record's clock (ms)")
    handles = [
        mark(marker="_", color=PICK, markersize=6, markeredgewidth=1.4, label="pick, kept"),
        mark(marker="|", color=PICK, markersize=7, label="its 90 % interval"),
        mark(marker="x", color=INK, markersize=3.5, label="pick, dropped"),
        mark(marker="$?$", color=QUIET, markersize=4, label="no onset to be had"),
        mark(linestyle="-", color=PREDICTED, linewidth=0.9, label="predicted by the result"),
    ]
    if traces.by_hand.any():
        handles.append(mark(marker="o", markersize=5, markerfacecolor="none", markeredgewidth=0.7, label="by hand"))
    figure.legend(handles=handles, loc="lower left", bbox_to_anchor=(_LEFT_MM / PAGE_WIDTH_MM - 0.01, 0.0), ncols=6)
    return figure


def _traces(record: ShotRecord, picks: PickTable, section: DepthSection, units: str) -> _Traces:
    """Bring traces, picks and predictions of a record together by channel."""
    chain = section.station_xyz[:, :2]
    along_m = np.array([along_chain(place, chain, section.along_m) for place in record.receiver_xyz[:, :2]])
    shot_m = along_chain(record.source_xyz[:2], chain, section.along_m)
    order = np.argsort(along_m, kind="stable")
    channels = record.channel[order]
    mine = np.flatnonzero(picks.record == record.record)
    row_of = dict(zip(picks.channel[mine].tolist(), mine.tolist(), strict=True))
    rows = np.array([row_of.get(channel, -1) for channel in channels.tolist()])
    fitted = np.flatnonzero(section.fit.record == record.record)
    predicted = dict(zip(section.fit.channel[fitted].tolist(), section.fit.predicted_s[fitted].tolist(), strict=True))

    def of(column: FloatArray) -> FloatArray:
        return np.where(rows >= 0, column[rows], np.nan) if len(picks) else np.full(rows.size, np.nan)

    by_hand = rows >= 0
    if len(picks):
        by_hand &= picks.origin[rows] == "manual"
    # where a whole record came in from somebody, rings would mark nothing
    by_hand &= not by_hand[rows >= 0].all()
    state = np.where(rows >= 0, picks.state[rows], "none") if len(picks) else np.full(rows.size, "none")
    found: npt.NDArray[np.str_] = record.state  # type: ignore[assignment]
    state = np.where(found[order] == "dead", "dead", state)
    places = np.unique(along_m)
    spacing_m = float(np.median(np.diff(places))) if places.size > 1 else 1.0
    return _Traces(
        along=lengths_in(units, along_m[order]),
        shot_along=float(lengths_in(units, shot_m)),
        time_s=of(picks.time_s),
        early_s=of(picks.early_s),
        late_s=of(picks.late_s),
        predicted_s=np.array([predicted.get(channel, np.nan) for channel in channels.tolist()]),
        state=state.astype(np.str_),
        by_hand=by_hand,
        order=order,
        excursion=_EXCURSION * float(lengths_in(units, spacing_m)),
    )


def _window(record: ShotRecord, traces: _Traces) -> tuple[float, float]:
    """The stretch of time that holds the first arrivals; the whole record where there are none."""
    start = float(record.start_s.min())
    valid: npt.NDArray[np.int64] = record.valid  # type: ignore[assignment]
    end = float((record.start_s + valid * record.interval_s).max())
    times = np.concatenate([traces.time_s, traces.late_s, traces.predicted_s])
    times = times[np.isfinite(times)]
    if times.size == 0:
        return start, end
    first = min(float(times.min()) - _BEFORE_S, 0.0)
    last = float(times.max()) + max(0.25 * float(np.ptp(times)), _LEAST_S)
    return max(start, first), min(end, last)


def _wiggles(axes: Axes, record: ShotRecord, traces: _Traces, first_s: float, last_s: float) -> None:
    """All traces as one line and their swings to the right as one set of areas."""
    line_x: list[FloatArray] = []
    line_t: list[FloatArray] = []
    areas: list[FloatArray] = []
    valid: npt.NDArray[np.int64] = record.valid  # type: ignore[assignment]
    for place, trace in enumerate(traces.order.tolist()):
        clock = record.start_s[trace] + record.interval_s * np.arange(valid[trace])
        shown = np.flatnonzero((clock >= first_s) & (clock <= last_s))
        if shown.size < 2:
            continue
        samples = record.samples[trace, shown].astype(np.float64)
        swing = _to_scale(samples, clock[shown], traces.time_s[place])
        at_s, swing = _thinned(clock[shown], swing)
        base = traces.along[place]
        x, t = base + traces.excursion * swing, 1e3 * at_s
        line_x += [x, np.array([np.nan])]
        line_t += [t, np.array([np.nan])]
        right = np.maximum(x, base)
        areas.append(np.column_stack([np.concatenate([[base], right, [base]]), np.concatenate([t[:1], t, t[-1:]])]))
    if areas:
        axes.add_collection(PolyCollection(areas, facecolor=_FILL, edgecolor="none", zorder=2), autolim=False)
        axes.plot(np.concatenate(line_x), np.concatenate(line_t), color=_TRACE, linewidth=0.35, zorder=3)


def _to_scale(samples: FloatArray, clock_s: FloatArray, pick_s: float) -> FloatArray:
    """Samples less their level before the pick, in units of the first swing; what is larger bends towards one."""
    before = clock_s < pick_s if np.isfinite(pick_s) else np.ones(samples.size, bool)
    level = float(np.median(samples[before])) if before.any() else 0.0
    about = clock_s <= pick_s + _FIRST_SWING_S if np.isfinite(pick_s) else before
    scale = float(np.abs(samples[about] - level).max(initial=0.0))
    return np.tanh((samples - level) / scale) if scale > 0 else np.zeros(samples.size)


def _thinned(clock_s: FloatArray, swing: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Of every block of samples the largest swing, where there are more samples than a page can show."""
    block = -(-swing.size // _POINTS)
    if block == 1:
        return clock_s, swing
    blocks = swing.size // block
    parts = swing[: blocks * block].reshape(blocks, block)
    largest = np.abs(parts).argmax(axis=1) + block * np.arange(blocks)
    return clock_s[largest], swing[largest]


def _marks(axes: Axes, traces: _Traces) -> None:
    """Picks with their 90 % intervals, dropped ones, traces without, and predicted times."""
    low, high = axes.get_xlim()
    half = min(0.42 * traces.excursion, _MARK_MM * (high - low) / _WIDTH_MM)
    kept = traces.state == "kept"
    dropped = (traces.state == "dropped") & np.isfinite(traces.time_s)
    axes.vlines(
        traces.along[kept], 1e3 * traces.early_s[kept], 1e3 * traces.late_s[kept], color=PICK, linewidth=0.9, zorder=6
    )
    at_ms = 1e3 * traces.time_s[kept]
    axes.hlines(at_ms, traces.along[kept] - half, traces.along[kept] + half, color=PICK, linewidth=1.3, zorder=6)
    axes.plot(
        traces.along[dropped],
        1e3 * traces.time_s[dropped],
        "x",
        color=INK,
        markersize=3.5,
        markeredgewidth=0.8,
        zorder=6,
    )
    rings = traces.by_hand & np.isfinite(traces.time_s)
    axes.plot(
        traces.along[rings],
        1e3 * traces.time_s[rings],
        "o",
        color=INK,
        markersize=7,
        markerfacecolor="none",
        markeredgewidth=0.7,
        zorder=6,
    )
    for state, words in (("none", "?"), ("dead", "dead")):
        for along in traces.along[traces.state == state].tolist():
            axes.annotate(
                words,
                (along, 1.0),
                xycoords=("data", "axes fraction"),
                xytext=(0, 1),
                textcoords="offset points",
                ha="center",
                va="bottom",
                fontsize=5.5,
                color=QUIET,
                rotation=90 if len(words) > 1 else 0,
            )
    for side in (traces.along < traces.shot_along, traces.along >= traces.shot_along):
        told = side & np.isfinite(traces.predicted_s)
        axes.plot(traces.along[told], 1e3 * traces.predicted_s[told], color=PREDICTED, linewidth=0.9, zorder=5)
