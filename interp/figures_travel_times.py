"""Travel times as a figure: every pick with its error, the curve that the result predicts, and what is left.

Times are after the shot: the estimated shift of each record's time break is taken off picks and predictions alike,
so that repeated shots at one place lie on one another.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from interp.figure_style import (
    FAINT,
    INK,
    PAGE_WIDTH_MM,
    QUIET,
    SHOTS,
    axes_at,
    lengths_in,
    mark,
    new_figure,
    styled,
)
from interp.section import DepthSection
from interp.velocity_zones import BELIEVED_WEIGHT

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

NORMAL_90 = 1.6448536269514722  # 5 % and 95 % points of a normal, in standard errors
_LEFT_MM, _WIDTH_MM = 16.0, PAGE_WIDTH_MM - 20.0
_TIMES_MM, _RESIDUALS_MM = 84.0, 36.0
_NAMED_PLACES = 24
_CROWDED = 0.07  # of the width of the axes: numbers nearer to one another than this stand one above the other
_SAME_PLACE_M = 0.05


@styled
def travel_time_figure(section: DepthSection, units: str = "m") -> Figure:
    """Draw picks, predicted travel-time curves and residuals along the line.

    Parameters
    ----------
    section : DepthSection
        The result; its `fit` has every pick that was used.
    units : str
        `m` or `ft`.

    Returns
    -------
    Figure
        Squares are on the direct wave, dots on a head wave, hollow where the pick was set aside; bars are 90 %.
    """
    figure = new_figure(17.0 + _RESIDUALS_MM + 6.0 + _TIMES_MM + 10.0)
    upper = axes_at(figure, _LEFT_MM, 17.0 + _RESIDUALS_MM + 6.0, _WIDTH_MM, _TIMES_MM)
    lower = axes_at(figure, _LEFT_MM, 17.0, _WIDTH_MM, _RESIDUALS_MM)
    drawing = _Drawing(section, units)
    drawing.times(upper)
    drawing.residuals(lower)
    upper.tick_params(labelbottom=False)
    lower.set_xlim(upper.get_xlim())
    lower.set_xlabel(f"distance along the line ({units})")
    handles = [
        mark(marker="s", markersize=3, label="pick on the direct wave"),
        mark(marker="o", markersize=3, label="pick on a head wave"),
        mark(marker="o", markersize=3, markerfacecolor="white", label="set aside"),
        mark(linestyle="-", linewidth=0.8, label="predicted"),
        mark(marker="|", markersize=7, label="its 90 % interval"),
    ]
    figure.legend(handles=handles, loc="lower left", bbox_to_anchor=(_LEFT_MM / PAGE_WIDTH_MM - 0.01, 0.0), ncols=5)
    return figure


class _Drawing:
    """The picks of one result, milliseconds after the shot, at distances in the units they are read in."""

    def __init__(self, section: DepthSection, units: str) -> None:
        fit = section.fit
        self.fit, self.units = fit, units
        shift = np.array([section.shot_shift_s.get(record, (0.0, 0.0))[0] for record in fit.record.tolist()])
        self.time_ms = 1e3 * (fit.time_s - shift)
        self.predicted_ms = 1e3 * (fit.predicted_s - shift)
        self.residual_ms = 1e3 * (fit.time_s - fit.predicted_s)
        self.bar_ms = 1e3 * NORMAL_90 * fit.sigma_s
        self.believed = fit.weight > BELIEVED_WEIGHT
        self.receiver = lengths_in(units, fit.receiver_along_m)
        cell = np.round(fit.source_along_m / _SAME_PLACE_M).astype(np.int64)
        _, first, place = np.unique(cell, return_index=True, return_inverse=True)
        self.place = np.asarray(place).reshape(-1)
        self.place_along = lengths_in(units, fit.source_along_m[first])
        self.dot = 2.2 if fit.time_s.size < 2000 else 1.4

    def times(self, axes: Axes) -> None:
        """Picks with their errors and the predicted curves, by shot."""
        trusted = np.concatenate([self.predicted_ms, self.time_ms[self.believed]])
        highest = 1.08 * float(trusted.max(initial=1e-3))
        lowest = min(0.0, float(trusted.min(initial=0.0)))
        along = np.concatenate([self.receiver, self.place_along])
        margin = 0.02 * float(np.ptp(along))
        axes.set_xlim(float(along.min()) - margin, float(along.max()) + margin)
        axes.set_ylim(lowest - 0.02 * highest, highest)
        axes.grid(axis="y")
        for number in range(self.place_along.size):
            rows = np.flatnonzero(self.place == number)
            colour = SHOTS[number % len(SHOTS)]
            for record in np.unique(self.fit.record[rows]).tolist():
                self._curve(axes, rows[self.fit.record[rows] == record], colour)
            bar_ms = self.bar_ms[rows]
            ends = self.time_ms[rows] - bar_ms, self.time_ms[rows] + bar_ms
            axes.vlines(self.receiver[rows], *ends, color=colour, linewidth=0.5, alpha=0.6, zorder=2)
            self._picks(axes, rows, self.time_ms, colour)
        inside = (self.time_ms >= lowest - 0.02 * highest) & (self.time_ms <= highest)
        if not inside.all():
            axes.text(
                0.995,
                0.985,
                f"{int(np.sum(~inside))} picks set aside lie outside",
                transform=axes.transAxes,
                ha="right",
                va="top",
                fontsize=6.5,
                color=QUIET,
            )
        self._name_places(axes, lowest)
        axes.set_ylabel("time after the shot (ms)")

    def residuals(self, axes: Axes) -> None:
        """Pick less prediction; what lies beyond the axes is put on their edge."""
        most = 1.15 * max(float(np.abs(self.residual_ms[self.believed]).max(initial=0.0)), 0.5)
        axes.set_ylim(-most, most)
        axes.grid(axis="y")
        axes.axhline(0, color=QUIET, linewidth=0.6)
        beyond = np.abs(self.residual_ms) > most
        for number in range(self.place_along.size):
            rows = np.flatnonzero((self.place == number) & ~beyond)
            self._picks(axes, rows, self.residual_ms, SHOTS[number % len(SHOTS)])
        for sign, marker in ((1, "^"), (-1, "v")):
            out = beyond & (np.sign(self.residual_ms) == sign)
            axes.plot(
                self.receiver[out],
                np.full(int(out.sum()), sign * 0.95 * most),
                marker,
                color=QUIET,
                markersize=2.5,
                markerfacecolor="white",
                markeredgewidth=0.6,
            )
        axes.set_ylabel("pick less predicted (ms)")

    def _curve(self, axes: Axes, rows: npt.NDArray[np.intp], colour: str) -> None:
        """The predicted times of one record, a curve to either side of the shot."""
        rows = rows[np.argsort(self.fit.receiver_along_m[rows], kind="stable")]
        side = self.fit.receiver_along_m[rows] >= self.fit.source_along_m[rows]
        for part in (rows[~side], rows[side]):
            axes.plot(
                self.receiver[part], self.predicted_ms[part], "-", color=colour, linewidth=0.8, alpha=0.9, zorder=3
            )

    def _picks(self, axes: Axes, rows: npt.NDArray[np.intp], value_ms: FloatArray, colour: str) -> None:
        """Picks of one shot place: squares direct, dots head waves, hollow set aside."""
        x, y = self.receiver[rows], value_ms[rows]
        direct = self.fit.branch[rows] == 0
        for branch, marker in ((direct, "s"), (~direct, "o")):
            for trusted, fill in ((True, colour), (False, "white")):
                which = branch & (self.believed[rows] == trusted)
                axes.plot(
                    x[which],
                    y[which],
                    marker,
                    color=colour,
                    markersize=self.dot,
                    markerfacecolor=fill,
                    markeredgewidth=0.6,
                    zorder=4 if trusted else 5,
                )

    def _name_places(self, axes: Axes, lowest: float) -> None:
        """A star on the axis at every shot place, with the numbers of its records above the figure."""
        axes.plot(
            self.place_along,
            np.full(self.place_along.size, max(lowest, 0.0)),
            "*",
            color=INK,
            markersize=5,
            zorder=6,
            clip_on=False,
            markeredgewidth=0,
        )
        left, right = axes.get_xlim()
        every = -(-self.place_along.size // _NAMED_PLACES)
        above, before = False, -np.inf
        for number in range(0, self.place_along.size, every):
            at = float(self.place_along[number])
            above = not above and at - before < _CROWDED * (right - left)
            before = at
            records = np.unique(self.fit.record[self.place == number]).tolist()
            axes.annotate(
                record_numbers(records),
                (at, 1.0),
                xycoords=("data", "axes fraction"),
                xytext=(0, 11 if above else 3),
                textcoords="offset points",
                ha="center",
                va="bottom",
                fontsize=6,
                color=SHOTS[number % len(SHOTS)],
            )
            axes.axvline(at, color=FAINT, linewidth=0.5, zorder=0)
        axes.annotate(
            "record",
            (0.0, 1.0),
            xycoords="axes fraction",
            xytext=(-4, 3),
            textcoords="offset points",
            ha="right",
            va="bottom",
            fontsize=6,
            color=QUIET,
        )


def record_numbers(records: list[int]) -> str:
    """Write record numbers shortly: runs as first to last."""
    runs: list[list[int]] = []
    for record in records:
        if runs and record == runs[-1][-1] + 1:
            runs[-1].append(record)
        else:
            runs.append([record])
    return ", ".join(str(run[0]) if len(run) == 1 else f"{run[0]}\u2013{run[-1]}" for run in runs)
