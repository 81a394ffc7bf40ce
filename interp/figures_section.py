"""The depth section as a figure: ground, refractors with their intervals, what holds them, and the velocities.

Above, elevations to a stated vertical exaggeration; below, the same depths read straight down from the ground.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Patch
from matplotlib.ticker import MaxNLocator

from interp.figure_style import (
    BOUND,
    FAINT,
    GROUND,
    INK,
    LAYERS,
    MM_PER_INCH,
    PAGE_WIDTH_MM,
    QUIET,
    REFRACTORS,
    axes_at,
    lengths_in,
    mark,
    new_figure,
    styled,
)
from interp.line import lay_out_line
from interp.section import DepthSection
from interp.section_tables import cells, velocity_columns
from picker.picks import PickTable
from picker.units import columns_in

FloatArray = npt.NDArray[np.float64]

_LEFT_MM, _WIDTH_MM = 16.0, PAGE_WIDTH_MM - 20.0
_SECTION_MM, _DEPTH_MM = 58.0, 34.0
_EXAGGERATIONS = (0.5, 1.0, 1.5, 2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 8.0, 10.0)
_HALF_SPACE = 0.22  # share of the section's height kept below the deepest point, where the last velocity is written
_TOP = 0.14
_LEGEND_COLUMNS, _LEGEND_ROW_MM = 4, 4.5
_NAMED_SHOTS = 5
_THIN_MM = 8.0  # a layer thinner than this on the page has room for one line of text
_LINES = {"two": "-", "one": (0, (4, 1.5)), "none": (0, (1, 1.5))}


@styled
def section_figure(section: DepthSection, picks: PickTable, units: str = "m") -> Figure:
    """Draw the depth section of a line.

    Parameters
    ----------
    section : DepthSection
        The result.
    picks : PickTable
        Its picks; only the places of the shots are taken from it.
    units : str
        `m` or `ft`.

    Returns
    -------
    Figure
        Shades are 90 % intervals of depth; bounds from what first arrivals cannot decide are drawn apart from them.
        A point where a refractor was not seen has an arrow from the depth that it must exceed.
    """
    drawing = _Drawing(section, picks, units)
    handles = drawing.legend()
    foot_mm = 11.0 + _LEGEND_ROW_MM * -(-len(handles) // _LEGEND_COLUMNS)
    below_mm = _DEPTH_MM + 7.0 if section.layers else 0.0
    figure = new_figure(foot_mm + below_mm + _SECTION_MM + 8.0)
    lowest = upper = axes_at(figure, _LEFT_MM, foot_mm + below_mm, _WIDTH_MM, _SECTION_MM)
    drawing.section(upper)
    if section.layers:
        lowest = axes_at(figure, _LEFT_MM, foot_mm, _WIDTH_MM, _DEPTH_MM)
        upper.tick_params(labelbottom=False)
        lowest.set_xlim(upper.get_xlim())
        drawing.depths(lowest)
    lowest.set_xlabel(f"distance along the line ({units})")
    corner = (_LEFT_MM / PAGE_WIDTH_MM - 0.01, 0.0)
    figure.legend(handles=handles, loc="lower left", bbox_to_anchor=corner, ncols=_LEGEND_COLUMNS)
    return figure


class _Drawing:
    """One section in the units it is read in; `along` and `ground` (stations,), depths (layers, stations)."""

    def __init__(self, section: DepthSection, picks: PickTable, units: str) -> None:
        self.section_, self.units = section, units
        self.along = lengths_in(units, section.along_m)
        self.ground = lengths_in(units, section.station_xyz[:, 2])
        self.depth = lengths_in(units, section.depth_m)
        self.low, self.high = lengths_in(units, section.depth_interval_90_m)
        self.deeper = np.where(np.isfinite(self.depth), np.nan, lengths_in(units, section.deeper_than_m))
        self.shallow_bound = lengths_in(units, section.bound_shallow_m)
        self.deep_bound = lengths_in(units, section.bound_deep_m)
        spacing_pt = 72 / MM_PER_INCH * _WIDTH_MM / max(self.along.size - 1, 1)
        self.dot = min(2.4, 0.6 * spacing_pt)  # size of a mark at every geophone, points
        line = lay_out_line(picks)
        self.shots = lengths_in(units, line.shot_along_m)
        self.shot_ground = lengths_in(units, line.shot_xyz[:, 2])

    @property
    def bounded(self) -> bool:
        """Whether there is any bound to draw."""
        return bool(np.isfinite(self.deep_bound).any() or np.isfinite(self.shallow_bound).any())

    def section(self, axes: Axes) -> None:
        """Elevations: the ground, the layers as tints, refractors with their intervals, velocities."""
        bottom = self._frame(axes)
        self._layers(axes, bottom)
        axes.plot(self.along, self.ground, color=GROUND, linewidth=1.4, zorder=4)
        height = axes.get_ylim()[1] - bottom
        axes.plot(self.along, self.ground + 0.014 * height, "v", color=GROUND, markersize=self.dot, zorder=5)
        self._shots(axes, 0.045 * height)
        for layer in range(self.section_.layers):
            self._refractor(axes, layer, lambda depth: self.ground - depth)
        self._velocities(axes, bottom)
        axes.yaxis.set_major_locator(MaxNLocator(steps=[1, 2, 5, 10]))
        axes.set_ylabel(f"elevation ({self.units})")
        self._ends(axes)

    def depths(self, axes: Axes) -> None:
        """Depths below ground, read downwards, with the interval at every geophone."""
        known = np.concatenate([part.ravel() for part in (self.high, self.deeper, self.deep_bound, np.array([0.0]))])
        axes.set_ylim(1.12 * max(float(np.nanmax(known)), 1e-6), 0)
        axes.yaxis.set_major_locator(MaxNLocator(steps=[1, 2, 5, 10]))
        axes.grid(axis="y")
        for layer in range(self.section_.layers):
            self._refractor(axes, layer, lambda depth: depth)
        axes.set_ylabel(f"depth below ground ({self.units})")

    def legend(self) -> list[object]:
        """Samples of what is drawn, and of nothing else."""
        section = self.section_
        shown: list[object] = [
            mark(marker="v", color=GROUND, markersize=3.5, label="geophone"),
            mark(marker="*", color=INK, markersize=6, label="shot"),
        ]
        seen = np.isfinite(self.depth)
        colour = REFRACTORS[0] if section.layers == 1 else QUIET
        if seen.any():
            shown.append(Patch(facecolor=colour, alpha=0.3, label="90 % interval"))
        for coverage, words, fill in (
            ("two", "median, seen from both sides", colour),
            ("one", "median, seen from one side", "white"),
            ("none", "median, interpolated", None),
        ):
            if np.any(seen & (section.coverage == coverage)):
                looks = {"marker": "o", "markersize": 3.5, "markerfacecolor": fill} if fill else {}
                shown.append(mark(color=colour, linestyle=_LINES[coverage], label=words, **looks))
        if np.isfinite(self.deeper).any():
            shown.append(mark(marker=r"$\downarrow$", color=colour, markersize=6, label="not seen: deeper than this"))
        if self.bounded:
            shown.append(
                Patch(facecolor="none", edgecolor=BOUND, hatch="////", linewidth=0.5, label="bounds (no statistics)")
            )
        return shown

    def _frame(self, axes: Axes) -> float:
        """Set the limits so that the vertical exaggeration is a round number; returns the bottom elevation."""
        span = max(self.along[-1] - self.along[0], 1e-6)
        margin = 0.06 * span
        axes.set_xlim(self.along[0] - margin, self.along[-1] + margin)
        lowest = np.concatenate(
            [(self.ground - part).ravel() for part in (self.high, self.deeper, self.deep_bound)] + [self.ground]
        )
        top, least = float(self.ground.max()), float(np.nanmin(lowest))
        relief = max(top - least, 0.1 * span * _SECTION_MM / _WIDTH_MM)
        needed = relief / (1 - _HALF_SPACE - _TOP)
        true_scale = (span + 2 * margin) * _SECTION_MM / _WIDTH_MM  # height of the axes at no exaggeration
        fitting = [factor for factor in _EXAGGERATIONS if true_scale / factor >= needed]
        factor = fitting[-1] if fitting else true_scale / needed
        height = true_scale / factor
        spare = height - needed
        upper = top + _TOP * height + 0.4 * spare
        axes.set_ylim(upper - height, upper)
        axes.text(
            0.995,
            0.015,
            f"vertical exaggeration {factor:.2g}",
            transform=axes.transAxes,
            ha="right",
            va="bottom",
            color=QUIET,
            fontsize=6.5,
        )
        return float(upper - height)

    def _layers(self, axes: Axes, bottom: float) -> None:
        """Tint each layer between the medians that bound it; nothing is tinted where its base is not known."""
        roof = self.ground
        for layer in range(self.section_.layers + 1):
            last = layer == self.section_.layers
            base = np.full(self.ground.size, bottom) if last else self.ground - self.depth[layer]
            known = np.isfinite(base) & np.isfinite(roof)
            axes.fill_between(
                self.along, base, roof, where=known, color=LAYERS[layer % len(LAYERS)], linewidth=0, zorder=0
            )
            roof = base
        unknown = ~np.isfinite(self.depth).all(axis=0)
        if unknown.any():
            known = np.vstack([self.ground, self.ground - self.depth])
            axes.fill_between(
                self.along,
                bottom,
                np.nanmin(known, axis=0),
                where=unknown,
                facecolor="none",
                edgecolor=FAINT,
                hatch="....",
                linewidth=0,
                zorder=0,
            )

    def _refractor(self, axes: Axes, layer: int, at: Callable[[FloatArray], FloatArray]) -> None:
        """Median, interval, bounds and what must be exceeded; `at` turns depths into heights on the axes."""
        colour = REFRACTORS[layer % len(REFRACTORS)]
        depth, coverage = self.depth[layer], self.section_.coverage[layer]
        low, high, middle = at(self.low[layer]), at(self.high[layer]), at(depth)
        seen = np.isfinite(depth)
        bound = np.isfinite(self.shallow_bound[layer]) & np.isfinite(self.deep_bound[layer]) & seen
        if bound.any():
            axes.fill_between(
                self.along,
                at(self.shallow_bound[layer]),
                at(self.deep_bound[layer]),
                where=bound,
                facecolor="none",
                edgecolor=BOUND,
                hatch="////",
                linewidth=0.5,
                linestyle="--",
                alpha=0.7,
                zorder=1,
            )
        axes.fill_between(self.along, low, high, where=seen, color=colour, alpha=0.28, linewidth=0, zorder=2)
        axes.vlines(self.along[seen], low[seen], high[seen], color=colour, linewidth=0.6, alpha=0.8, zorder=3)
        for stretch, kind in _stretches(coverage, seen):
            axes.plot(
                self.along[stretch], middle[stretch], color=colour, linestyle=_LINES[kind], linewidth=0.8, zorder=4
            )
        for kind, fill in (("two", colour), ("one", "white")):
            which = seen & (coverage == kind)
            axes.plot(
                self.along[which],
                middle[which],
                "o",
                color=colour,
                markerfacecolor=fill,
                markersize=self.dot,
                markeredgewidth=0.6,
                zorder=5,
            )
        self._arrows(axes, at(self.deeper[layer]), colour)

    def _arrows(self, axes: Axes, from_height: FloatArray, colour: str) -> None:
        """An arrow down from every depth that must be exceeded."""
        low, high = axes.get_ylim()
        length = 0.07 * (low - high if axes.yaxis_inverted() else high - low)
        known = np.isfinite(from_height)
        down = length if axes.yaxis_inverted() else -length
        axes.plot(self.along[known], from_height[known], "_", color=colour, markersize=5, zorder=4)
        axes.vlines(
            self.along[known], from_height[known], from_height[known] + down, color=colour, linewidth=0.7, zorder=4
        )
        axes.plot(self.along[known], from_height[known] + down, "v", color=colour, markersize=2.5, zorder=4)

    def _shots(self, axes: Axes, lift: float) -> None:
        """Shots above the ground; those beyond the ends of the section are named at its edges."""
        left, right = axes.get_xlim()
        inside = (self.shots >= left) & (self.shots <= right)
        axes.plot(
            self.shots[inside],
            self.shot_ground[inside] + lift,
            "*",
            color=INK,
            markersize=5.5,
            markeredgewidth=0,
            zorder=6,
        )
        for beyond, x, align, text in (
            (self.shots < left, 0.0, "left", "\u25c2 shots at {}"),
            (self.shots > right, 1.0, "right", "shots at {} \u25b8"),
        ):
            if beyond.any():
                places = [f"{place:.4g}" for place in self.shots[beyond]]
                few = (
                    ", ".join(places)
                    if len(places) <= _NAMED_SHOTS
                    else f"{len(places)} places, {places[0]} to {places[-1]}"
                )
                axes.text(x, 0.985, text.format(few), transform=axes.transAxes, ha=align, va="top", fontsize=6.5)

    def _velocities(self, axes: Axes, bottom: float) -> None:
        """Median and 90 % interval of each layer's velocity, written where the layer is."""
        for layer, low, high, text in self._labels():
            middle = 0.5 * (low + high)
            roof = self._height(layer - 1, middle)
            base = bottom if layer == self.section_.layers else self._height(layer, middle)
            if not np.isfinite(roof):
                continue
            height = axes.get_ylim()[1] - bottom
            if not np.isfinite(base):
                base = roof - 0.12 * height
            if (roof - base) / height * _SECTION_MM < _THIN_MM:
                text = text.replace("\n", ", ")
            axes.text(
                middle,
                0.5 * (roof + base),
                text,
                ha="center",
                va="center",
                fontsize=6.5,
                linespacing=1.15,
                zorder=7,
                bbox={"boxstyle": "round,pad=0.2", "facecolor": "white", "edgecolor": "none", "alpha": 0.75},
            )

    def _labels(self) -> Iterator[tuple[int, float, float, str]]:
        """Layer (from 0), the ends of the stretch and the words."""
        columns = columns_in(self.units, velocity_columns(self.section_))
        shown = cells(columns)
        name = f"velocity_{self.units}_s"
        low, high = (shown[f"velocity_{end}_{self.units}_s"] for end in ("lo", "hi"))
        for row, value in enumerate(shown[name]):
            if value:
                text = f"{value} {self.units}/s\n{low[row]} to {high[row]}"
                start, stop = (float(columns[f"{end}_{self.units}"][row]) for end in ("from", "to"))
                yield int(columns["layer"][row]) - 1, start, stop, text

    def _height(self, layer: int, along: float) -> float:
        """Elevation of a refractor (or of the ground, layer -1) at a distance; NaN where it is not known."""
        heights = self.ground if layer < 0 else self.ground - self.depth[layer]
        return float(np.interp(along, self.along, heights))

    def _ends(self, axes: Axes) -> None:
        """Say where the line begins and ends, so that left and right are known on the ground."""
        xy = lengths_in(self.units, self.section_.station_xyz[[0, -1], :2])
        for (x, y), at, align in zip(xy.tolist(), (0.0, 1.0), ("left", "right"), strict=True):
            axes.text(
                at,
                1.03,
                f"x {x:.2f}, y {y:.2f} {self.units}",
                transform=axes.transAxes,
                ha=align,
                va="bottom",
                fontsize=6.5,
                color=QUIET,
            )


def _stretches(coverage: npt.NDArray[np.str_], seen: npt.NDArray[np.bool_]) -> Iterator[tuple[slice, str]]:
    """Runs of stations to be joined by one kind of line: the weaker coverage of the two ends decides."""
    strength = {"two": 2, "one": 1, "none": 0}
    kinds = [
        min((str(coverage[n]), str(coverage[n + 1])), key=strength.__getitem__) if seen[n] and seen[n + 1] else ""
        for n in range(seen.size - 1)
    ]
    start = 0
    for n in range(1, len(kinds) + 1):
        if n == len(kinds) or kinds[n] != kinds[start]:
            if kinds[start]:
                yield slice(start, n + 1), kinds[start]
            start = n
