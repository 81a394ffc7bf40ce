"""The figures say what the result says: the drawn coordinates are compared with the arrays they stand for."""

from __future__ import annotations

import dataclasses
import io

import matplotlib
import numpy as np
import pytest
from made_section import made_picks, made_record, made_section
from matplotlib.collections import LineCollection, PolyCollection
from matplotlib.colors import to_hex
from matplotlib.figure import Figure
from PIL import Image

from interp.figure_style import PAGE_WIDTH_MM, png_bytes
from interp.figures_gather import gather_figure
from interp.figures_quality import pick_quality_figure
from interp.figures_section import section_figure
from interp.figures_travel_times import record_numbers, travel_time_figure
from interp.section import DepthSection
from interp.section_tables import cells, velocity_columns
from picker.picks import PickTable
from picker.records import ShotRecord
from picker.units import columns_in

FOOT_M = 0.3048  # the international foot, exact
ROUNDING = 1e-9  # the same numbers, only multiplied by constants


@pytest.fixture(scope="module")
def section() -> DepthSection:
    return made_section()


@pytest.fixture(scope="module")
def picks(section: DepthSection) -> PickTable:
    return made_picks(section)


def without_refractors(section: DepthSection) -> DepthSection:
    """The same survey told as ground of one layer: no refractors at all in the arrays."""
    nothing = {
        name: getattr(section, name)[:0]
        for name in ("bound_shallow_m", "bound_deep_m", "coverage", "deeper_than_m", "picks", "note")
    }
    return dataclasses.replace(
        section,
        depth_samples_m=section.depth_samples_m[:, :0],
        velocity_samples_m_s=section.velocity_samples_m_s[:, :1],
        bounds=(),
        **nothing,
    )


def unseen(section: DepthSection) -> DepthSection:
    """The lowest refractor of a section nowhere seen: no depths, no velocity, only what it must exceed."""
    depth, velocity = section.depth_samples_m.copy(), section.velocity_samples_m_s.copy()
    depth[:, -1], velocity[:, -1] = np.nan, np.nan
    coverage, deeper = section.coverage.copy(), section.deeper_than_m.copy()
    coverage[-1], deeper[-1] = "none", np.linspace(4.0, 9.0, section.along_m.size)
    return dataclasses.replace(
        section,
        depth_samples_m=depth,
        velocity_samples_m_s=velocity,
        coverage=coverage,
        deeper_than_m=deeper,
        bound_shallow_m=np.full_like(deeper, np.nan),
        bound_deep_m=np.full_like(deeper, np.nan),
        bounds=(),
    )


def texts(figure: Figure) -> list[str]:
    found = [text.get_text() for axes in figure.axes for text in axes.texts]
    found += [axes.get_title(loc="left") for axes in figure.axes]
    return found + [text.get_text() for legend in figure.legends for text in legend.get_texts()]


def bars(axes: matplotlib.axes.Axes) -> np.ndarray:
    """Every vertical line of the axes: x, one end, other end, sorted."""
    found = [
        (line[0, 0], min(line[:, 1]), max(line[:, 1]))
        for lines in axes.collections
        if isinstance(lines, LineCollection)
        for line in lines.get_segments()
        if len(line) == 2 and line[0, 0] == line[1, 0]
    ]
    return np.array(sorted(found)).reshape(-1, 3)


def points(axes: matplotlib.axes.Axes, marker: str) -> list[tuple[float, float, bool]]:
    """Every mark of a kind: x, y and whether it is filled."""
    return [
        (float(x), float(y), to_hex(line.get_markerfacecolor()) != "#ffffff")
        for line in axes.lines
        if line.get_marker() == marker
        for x, y in zip(line.get_xdata(), line.get_ydata(), strict=True)
    ]


# the section


def test_the_stated_vertical_exaggeration_is_that_of_the_axes(section, picks):
    for drawn in (section, unseen(section), without_refractors(section)):
        figure = section_figure(drawn, picks)
        axes = figure.axes[0]
        box = axes.get_position()
        width, height = box.width * figure.get_figwidth(), box.height * figure.get_figheight()
        exaggeration = (np.ptp(axes.get_xlim()) / width) / (np.ptp(axes.get_ylim()) / height)
        (told,) = (text for text in texts(figure) if text.startswith("vertical exaggeration"))
        assert float(told.split()[-1]) == pytest.approx(exaggeration, rel=ROUNDING)


@pytest.mark.parametrize("units", ["m", "ft"])
def test_every_geophone_with_control_has_its_interval_drawn_where_the_section_has_it(section, picks, units):
    per_unit = FOOT_M if units == "ft" else 1.0
    elevations, depths = section_figure(section, picks, units).axes
    low, high = section.depth_interval_90_m / per_unit
    ground, along = section.station_xyz[:, 2] / per_unit, section.along_m / per_unit
    for layer in range(section.layers):
        for station in np.flatnonzero(np.isfinite(low[layer])):
            as_depth = (along[station], low[layer, station], high[layer, station])
            as_height = (along[station], ground[station] - as_depth[2], ground[station] - as_depth[1])
            for axes, bar in ((depths, as_depth), (elevations, as_height)):
                # numpy's quantile and matplotlib's path keep doubles: only rounding may differ
                assert np.min(np.abs(bars(axes) - bar).max(axis=1)) < 1e-6


def test_a_gap_is_left_where_there_is_no_control_and_an_arrow_starts_at_the_depth_to_be_exceeded(section, picks):
    depths = section_figure(section, picks).axes[1]
    gap = np.flatnonzero(~np.isfinite(section.depth_m[1]))
    last = section.along_m[gap[0] - 1]
    lower = [
        band
        for band in depths.collections
        if isinstance(band, PolyCollection) and band.get_paths()[0].vertices[:, 1].min() > 6.0
    ]
    assert lower
    assert all(band.get_paths()[0].vertices[:, 0].max() <= last + 1e-6 for band in lower)
    starts = {(x, y) for x, y, _ in points(depths, "_")}
    assert starts == {(section.along_m[station], section.deeper_than_m[1, station]) for station in gap}
    assert "not seen: deeper than this" in texts(section_figure(section, picks))


def test_points_seen_from_one_side_are_hollow_and_those_from_both_filled(section, picks):
    depths = section_figure(section, picks).axes[1]
    told = {(round(x, 6), round(y, 6)): filled for x, y, filled in points(depths, "o")}
    for layer in range(section.layers):
        for station in np.flatnonzero(np.isfinite(section.depth_m[layer])):
            place = (round(section.along_m[station], 6), round(section.depth_m[layer, station], 6))
            assert told[place] == (section.coverage[layer, station] == "two")


def test_bounds_are_hatched_apart_from_the_interval_and_absent_where_none_were_computed(section, picks):
    none = np.full_like(section.bound_deep_m, np.nan)
    bare = dataclasses.replace(section, bound_shallow_m=none, bound_deep_m=none, bounds=())
    for drawn, expected in ((section, 1), (bare, 0)):
        figure = section_figure(drawn, picks)
        hatched = [band for band in figure.axes[1].collections if band.get_hatch() == "////"]
        assert len(hatched) == expected
        assert ("bounds (no statistics)" in texts(figure)) == bool(expected)
    vertices = (
        next(band for band in section_figure(section, picks).axes[1].collections if band.get_hatch())
        .get_paths()[0]
        .vertices
    )
    assert vertices[:, 1].max() == pytest.approx(np.nanmax(section.bound_deep_m))


@pytest.mark.parametrize("units", ["m", "ft"])
def test_velocities_are_written_as_the_table_has_them(section, picks, units):
    shown = cells(columns_in(units, velocity_columns(section)))
    written = " ".join(texts(section_figure(section, picks, units))).replace(", ", "\n")
    for row, value in enumerate(shown[f"velocity_{units}_s"]):
        low, high = shown[f"velocity_lo_{units}_s"][row], shown[f"velocity_hi_{units}_s"][row]
        assert f"{value} {units}/s\n{low} to {high}" in written


def test_shots_beyond_the_ends_are_named_at_the_edges(section, picks):
    told = texts(section_figure(section, picks))
    assert any("shots at -30" in text for text in told)
    assert any("shots at 145" in text for text in told)


def test_ground_without_a_refractor_is_drawn_as_one_layer(section, picks):
    figure = section_figure(without_refractors(section), picks)
    assert len(figure.axes) == 1
    assert not any("interval" in text for text in texts(figure))
    assert len(figure.axes[0].collections) == 1, "the tint of the one layer"


def test_a_refractor_seen_nowhere_has_arrows_only(section, picks):
    depths = section_figure(unseen(section), picks).axes[1]
    assert len(points(depths, "_")) == section.along_m.size


def test_axes_carry_their_units(section, picks):
    for units in ("m", "ft"):
        elevations, depths = section_figure(section, picks, units).axes
        assert elevations.get_ylabel() == f"elevation ({units})"
        assert depths.get_ylabel() == f"depth below ground ({units})"
        assert depths.get_xlabel() == f"distance along the line ({units})"


# travel times


def test_picks_stand_at_their_times_after_the_shot_hollow_where_set_aside(section):
    fit = section.fit
    axes = travel_time_figure(section).axes[0]
    shift = np.array([section.shot_shift_s[record][0] for record in fit.record.tolist()])
    expected = {
        (round(x, 6), round(1e3 * (time - moved), 6), direct): believed
        for x, time, moved, direct, believed in zip(
            fit.receiver_along_m, fit.time_s, shift, fit.branch == 0, fit.weight > 0.5, strict=True
        )
    }
    drawn = {
        (round(x, 6), round(y, 6), marker == "s"): filled for marker in "so" for x, y, filled in points(axes, marker)
    }
    assert drawn == expected
    assert set(expected.values()) == {True, False}


def test_predicted_curves_are_those_of_the_fit_less_the_shift_of_the_time_break(section):
    fit = section.fit
    axes = travel_time_figure(section).axes[0]
    curves = [line for line in axes.lines if line.get_linestyle() == "-" and line.get_marker() == "None"]
    drawn = sorted(
        (round(float(x), 6), round(float(y), 6))
        for line in curves
        if line.get_color() != "#d9dce0"  # the faint lines at the shots
        for x, y in zip(line.get_xdata(), line.get_ydata(), strict=True)
    )
    shift = np.array([section.shot_shift_s[record][0] for record in fit.record.tolist()])
    expected = sorted(zip(np.round(fit.receiver_along_m, 6), np.round(1e3 * (fit.predicted_s - shift), 6), strict=True))
    np.testing.assert_allclose(drawn, expected, atol=2e-6)  # both rounded to 1e-6


def test_error_bars_are_the_normal_90_percent_of_the_stated_error(section):
    fit = section.fit
    low_high = bars(travel_time_figure(section).axes[0])[:, 1:]
    # 1.6449: 95 % point of the standard normal, from any table
    np.testing.assert_allclose(np.sort(np.diff(low_high, axis=1).ravel()), np.sort(2 * 1644.9 * fit.sigma_s), rtol=1e-4)


def test_residuals_beyond_the_axes_are_put_on_their_edge(section):
    fit = section.fit
    axes = travel_time_figure(section).axes[1]
    most = axes.get_ylim()[1]
    beyond = int(np.sum(np.abs(fit.time_s - fit.predicted_s) * 1e3 > most))
    assert beyond > 0
    edge = points(axes, "^") + points(axes, "v")
    assert len(edge) == beyond
    assert all(abs(y) < most for _, y, _ in edge)


def test_record_numbers_are_told_in_runs():
    assert record_numbers([1, 2, 3, 7, 9, 10]) == "1\u20133, 7, 9\u201310"
    assert record_numbers([]) == ""


# gathers


def test_picks_of_a_gather_stand_at_their_times_with_their_intervals(section, picks):
    record = made_record(picks, 3)
    axes = gather_figure(record, picks, section).axes[0]
    mine = (picks.record == 3) & picks.kept
    expected = np.column_stack([1e3 * picks.early_s[mine], 1e3 * picks.late_s[mine]])
    drawn = bars(axes)
    assert drawn.shape[0] == mine.sum()
    np.testing.assert_allclose(np.sort(drawn[:, 1:], axis=0), np.sort(expected, axis=0), rtol=ROUNDING)
    dropped = (picks.record == 3) & (picks.state == "dropped")
    assert sorted(y for _, y, _ in points(axes, "x")) == pytest.approx(sorted(1e3 * picks.time_s[dropped]))
    assert dropped.any()


def test_a_gather_shows_the_noise_before_the_first_arrivals_and_all_picks(section, picks):
    record = made_record(picks, 3)
    last_ms, first_ms = gather_figure(record, picks, section).axes[0].get_ylim()
    mine = (picks.record == 3) & picks.kept
    assert first_ms < 1e3 * picks.early_s[mine].min()
    assert last_ms > 1e3 * picks.late_s[mine].max()


def test_a_pick_changed_by_hand_is_ringed(section, picks):
    by_hand = np.flatnonzero(picks.origin == "manual")
    assert by_hand.size == 1
    record = int(picks.record[by_hand[0]])
    axes = gather_figure(made_record(picks, record), picks, section).axes[0]
    (ring,) = points(axes, "o")
    assert ring[1] == pytest.approx(1e3 * picks.time_s[by_hand[0]])
    assert not points(gather_figure(made_record(picks, record + 1), picks, section).axes[0], "o")


def test_picks_that_are_all_by_hand_are_not_ringed(section, picks):
    handed_in = dataclasses.replace(picks, origin=np.full(len(picks), "manual"))
    figure = gather_figure(made_record(picks, 3), handed_in, section)
    assert not points(figure.axes[0], "o")
    assert "by hand" not in texts(figure)


def wide_record(traces: int = 96, samples: int = 6000) -> ShotRecord:
    """Ninety-six channels along the made line, some dead, one of them silent."""
    rng = np.random.default_rng(2)
    along = np.linspace(0.0, 115.0, traces)
    state = np.full(traces, "live", dtype="<U4")
    state[[5, 40]] = "dead"
    data = rng.normal(size=(traces, samples)).astype(np.float32)
    data[5] = 0.0
    return ShotRecord(
        samples=data,
        interval_s=0.000125,
        start_s=np.full(traces, -0.02),
        record=99,
        channel=np.arange(1, traces + 1),
        source_xyz=np.array([1000.0, 2000.0, 212.0]),
        receiver_xyz=np.column_stack([1000 + 0.8 * along, 2000 + 0.6 * along, np.full(traces, 212.0)]),
        state=state,
    )


def test_a_record_of_96_channels_without_picks_is_drawn_whole_with_its_dead_traces_named(section, picks):
    record = wide_record()
    figure = gather_figure(record, picks, section)
    axes = figure.axes[0]
    last_ms, first_ms = axes.get_ylim()
    assert first_ms == pytest.approx(-20.0)
    assert last_ms == pytest.approx(1e3 * (-0.02 + 6000 * 0.000125))
    (areas,) = (one for one in axes.collections if isinstance(one, PolyCollection))
    assert len(areas.get_paths()) == 96
    assert texts(figure).count("dead") == 2
    assert texts(figure).count("?") == 94
    assert len(png_bytes(figure)) < 400_000  # white noise hardly compresses; a gather of waves is a fifth of that


def test_traces_are_drawn_between_their_neighbours_whatever_their_amplitudes(section, picks):
    record = made_record(picks, 3)
    loud = dataclasses.replace(record, samples=record.samples * np.logspace(0, 6, record.samples.shape[0])[:, None])
    (areas,) = (
        one for one in gather_figure(loud, picks, section).axes[0].collections if isinstance(one, PolyCollection)
    )
    spacing_m = float(np.diff(section.along_m)[0])
    for path in areas.get_paths():
        assert np.ptp(path.vertices[:, 0]) < spacing_m
        assert np.ptp(path.vertices[:, 0]) > 0.2 * spacing_m


# the quality of picks


def test_states_of_every_record_add_up_to_its_traces(section, picks):
    axes = pick_quality_figure(picks, section).axes[2]
    tops = {}
    for bar in axes.patches:
        tops[round(bar.get_x() + bar.get_width() / 2)] = bar.get_y() + bar.get_height()
    counts = np.unique(picks.record, return_counts=True)[1]
    assert [tops[place] for place in range(counts.size)] == counts.tolist()


def test_the_share_of_residuals_in_the_shade_is_the_one_counted(section, picks):
    fit = section.fit
    believed = fit.weight > 0.5
    scaled = np.abs((fit.time_s - fit.predicted_s) / fit.sigma_s)[believed]
    assert any(
        f"{np.mean(scaled <= 1.6449):.0%} in the shade" in text for text in texts(pick_quality_figure(picks, section))
    )


# all of them


def all_figures(section: DepthSection, picks: PickTable, units: str = "m") -> list[Figure]:
    return [
        section_figure(section, picks, units),
        travel_time_figure(section, units),
        gather_figure(made_record(picks, 2), picks, section, units),
        pick_quality_figure(picks, section, units),
    ]


def test_the_same_figure_gives_the_same_bytes_whatever_matplotlib_is_set_to(section, picks):
    first = [png_bytes(figure) for figure in all_figures(section, picks)]
    with matplotlib.rc_context({"font.size": 20.0, "axes.grid": True, "figure.dpi": 40.0}):
        second = [png_bytes(figure) for figure in all_figures(section, picks)]
    assert first == second


def test_pictures_are_white_paper_of_the_width_of_the_page_and_small(section, picks):
    for figure in all_figures(section, picks):
        png = png_bytes(figure, dpi=100)
        picture = Image.open(io.BytesIO(png))
        assert picture.width == pytest.approx(PAGE_WIDTH_MM / 25.4 * 100, abs=1)
        assert picture.convert("RGB").getpixel((1, 1)) == (255, 255, 255)
        assert b"matplotlib" not in png
        assert len(png_bytes(figure)) < 150_000


def test_lengths_in_feet_stand_where_the_metres_stood(section, picks):
    for metric, imperial in zip(all_figures(section, picks), all_figures(section, picks, "ft"), strict=True):
        labels = [axes.get_xlabel() for axes in metric.axes]
        for axes, other in zip(metric.axes, imperial.axes, strict=True):
            if "(m)" in axes.get_xlabel():
                assert other.get_xlabel() == axes.get_xlabel().replace("(m)", "(ft)")
                np.testing.assert_allclose(other.get_xlim(), np.array(axes.get_xlim()) / FOOT_M, rtol=1e-6, atol=1e-6)
        assert any("(m)" in label for label in labels)
