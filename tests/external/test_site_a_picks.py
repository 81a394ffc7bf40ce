"""Picks of real shot records against what must hold of first arrivals, whoever picks them."""

import numpy as np
import pytest

from picker.gather import pick_records
from picker.records import read_records

SHOT_RADIUS_M = 0.5


@pytest.fixture(scope="module")
def picks(field_records):
    files = sorted((field_records / "site_a" / "segy").glob("*.sgy"))
    if not files:
        pytest.skip("no SEG-Y records of site A")
    return pick_records(read_records(files))


def test_every_trace_has_a_row_and_most_near_ones_a_pick(picks):
    assert picks.channel.size == 960
    near = picks.offset_m < 30
    # within 30 m the first arrivals of a sledgehammer stand out on most traces
    assert picks.kept[near].mean() > 0.8


def test_no_kept_pick_is_faster_than_rock_or_slower_than_loose_soil(picks):
    kept = picks.kept
    assert np.all(picks.time_s[kept] > picks.offset_m[kept] / 7000.0 - 0.005)  # the bounds that picking itself states
    assert np.all(picks.time_s[kept] < picks.offset_m[kept] / 150.0 + 0.005)


def test_repeated_shots_scatter_about_as_their_errors_say(picks):
    # five blows at each of eight places: how far a pick is from the median of its repeats, over what both errors allow
    standard = []
    for place in np.unique(np.round(picks.source_xyz[:, 0], 1)):
        for channel in np.unique(picks.channel):
            rows = np.flatnonzero(
                (np.abs(picks.source_xyz[:, 0] - place) < SHOT_RADIUS_M) & (picks.channel == channel) & picks.kept
            )
            if rows.size < 3:
                continue
            error = picks.time_s[rows] - np.median(picks.time_s[rows])
            own = np.hypot(picks.reading_sigma_s[rows], picks.time_break_sigma_s[rows])
            standard.extend((error / own)[np.argsort(np.abs(error))[1:]])
    standard = np.array(standard)
    assert standard.size > 300
    # a normal would have two thirds within one; one wild blow in twenty is expected on a real site
    assert 0.5 < np.mean(np.abs(standard) < 1) < 0.97
    assert np.mean(np.abs(standard) > 5) < 0.06
