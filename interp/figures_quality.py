"""The quality of the picks as a figure: their stated errors, residuals against these, and states by record."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from interp.figure_style import FAINT, INK, PAGE_WIDTH_MM, QUIET, axes_at, lengths_in, mark, new_figure, styled
from interp.figures_travel_times import NORMAL_90
from interp.section import DepthSection
from interp.velocity_zones import BELIEVED_WEIGHT
from picker.picks import PICK_STATES, PickTable

FloatArray = npt.NDArray[np.float64]

_LEFT_MM, _HALF_MM, _HEIGHT_MM, _BARS_MM, _FOOT_MM = 16.0, 72.0, 52.0, 30.0, 16.0
_BEYOND = 5.0  # residuals farther out than this many stated errors are put on the edge
_STATE_COLOURS = {"kept": "#17508f", "dropped": "#e08214", "none": "#c9cdd2"}
_STATE_WORDS = {"kept": "kept", "dropped": "dropped", "none": "none: no onset to be had"}


@styled
def pick_quality_figure(picks: PickTable, section: DepthSection, units: str = "m") -> Figure:
    """Draw how good the picks are and whether their stated errors hold.

    Parameters
    ----------
    picks : PickTable
        All picks of the survey.
    section : DepthSection
        The result, for the residuals.
    units : str
        `m` or `ft`.

    Returns
    -------
    Figure
    """
    figure = new_figure(_FOOT_MM + _BARS_MM + 17.0 + _HEIGHT_MM + 8.0)
    bottom = _FOOT_MM + _BARS_MM + 17.0
    _errors(axes_at(figure, _LEFT_MM, bottom, _HALF_MM, _HEIGHT_MM), picks, units)
    _residuals(axes_at(figure, PAGE_WIDTH_MM - 4.0 - _HALF_MM, bottom, _HALF_MM, _HEIGHT_MM), section)
    _states(axes_at(figure, _LEFT_MM, _FOOT_MM, PAGE_WIDTH_MM - 4.0 - _LEFT_MM, _BARS_MM), picks)
    handles = [
        mark(marker="s", markersize=4, color=colour, label=_STATE_WORDS[state])
        for state, colour in _STATE_COLOURS.items()
    ]
    figure.legend(handles=handles, loc="lower left", bbox_to_anchor=(_LEFT_MM / PAGE_WIDTH_MM - 0.01, 0.0), ncols=3)
    return figure


def _errors(axes: Axes, picks: PickTable, units: str) -> None:
    """Standard errors against offset; picks moved by hand are ringed."""
    offset, sigma_ms = lengths_in(units, picks.offset_m), 1e3 * picks.sigma_s
    for state in ("dropped", "kept"):
        told = (picks.state == state) & (sigma_ms > 0)
        axes.plot(
            offset[told],
            sigma_ms[told],
            "o",
            color=_STATE_COLOURS[state],
            markersize=2.2,
            markeredgewidth=0.5,
            markerfacecolor=_STATE_COLOURS[state] if state == "kept" else "white",
            alpha=0.75,
        )
    by_hand = (picks.origin == "manual") & (sigma_ms > 0)
    if by_hand.any() and not by_hand[sigma_ms > 0].all():
        axes.plot(
            offset[by_hand],
            sigma_ms[by_hand],
            "o",
            color=INK,
            markersize=5,
            markerfacecolor="none",
            markeredgewidth=0.7,
            label="by hand",
        )
        axes.legend(loc="upper left")
    axes.set_ylim(0, 1.05 * float(sigma_ms[sigma_ms > 0].max(initial=1e-3)))
    axes.set_xlim(left=0)
    axes.grid(axis="y")
    axes.set_title("Stated error against offset")
    axes.set_xlabel(f"offset ({units})")
    axes.set_ylabel("standard error of the pick (ms)")


def _residuals(axes: Axes, section: DepthSection) -> None:
    """Residuals over stated errors against stated errors: a cloud of one width where the errors are right."""
    fit = section.fit
    residual = (fit.time_s - fit.predicted_s) / fit.sigma_s
    believed = fit.weight > BELIEVED_WEIGHT
    sigma_ms = 1e3 * fit.sigma_s
    axes.axhspan(-NORMAL_90, NORMAL_90, color=FAINT, alpha=0.55, linewidth=0)
    axes.axhline(0, color=QUIET, linewidth=0.6)
    at = np.clip(residual, -_BEYOND, _BEYOND)
    for trusted, fill in ((True, INK), (False, "white")):
        which = believed == trusted
        axes.plot(
            sigma_ms[which],
            at[which],
            "o",
            color=INK,
            markerfacecolor=fill,
            markersize=2.2,
            markeredgewidth=0.5,
            alpha=0.7,
        )
    axes.set_ylim(-_BEYOND * 1.06, _BEYOND * 1.06)
    axes.set_xlim(0, 1.05 * float(sigma_ms.max(initial=1e-3)))
    share = f": {np.mean(np.abs(residual[believed]) <= NORMAL_90):.0%} in the shade" if believed.any() else ""
    axes.set_title(f"Residual against stated error{share}")
    axes.set_xlabel("standard error of the pick (ms); hollow: set aside")
    axes.set_ylabel("residual / standard error")


def _states(axes: Axes, picks: PickTable) -> None:
    """How many picks of each record were kept, dropped, or not to be had."""
    records, record_of = np.unique(picks.record, return_inverse=True)
    place = np.arange(records.size)
    base = np.zeros(records.size)
    for state in PICK_STATES:
        count = np.bincount(np.asarray(record_of).reshape(-1)[picks.state == state], minlength=records.size)
        axes.bar(place, count, 0.8, base, color=_STATE_COLOURS[state], linewidth=0)
        base = base + count
    every = max(1, -(-records.size // 45))
    axes.set_xticks(place[::every], [str(record) for record in records[::every].tolist()])
    axes.set_xlim(-0.7, records.size - 0.3)
    axes.yaxis.set_major_locator(MaxNLocator(4, integer=True))
    axes.tick_params(axis="x", length=0)
    axes.set_title("Picks by record")
    axes.set_xlabel("record", labelpad=1.5)
    axes.set_ylabel("traces")
