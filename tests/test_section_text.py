"""What a person reads of a section at the terminal."""

from __future__ import annotations

import dataclasses
import re

import numpy as np
import pytest
from made_section import made_section
from made_survey import PlaneGround, plane_survey

from interp.interpretation import InterpretSettings, interpret
from interp.section_text import depth_table, plane_check_line, quality_line, velocity_table
from picker.units import METRES_PER_FOOT


def test_one_refractor_is_a_row_a_geophone_without_a_column_for_its_number() -> None:
    table = depth_table(made_section(layers=1, gap=False), "m")
    assert table.header == ("x (m)", "along (m)", "depth (m)", "90 % from", "to", "coverage", "picks")
    assert len(table.rows) == 24


def test_two_refractors_are_told_apart_by_number() -> None:
    table = depth_table(made_section(layers=2), "m")
    assert [row[table.header.index("layer")] for row in table.rows[:4]] == ["1", "2", "1", "2"]


def test_a_refractor_that_was_not_seen_reads_as_the_depth_it_must_exceed() -> None:
    metres, feet = (depth_table(made_section(layers=1), units) for units in ("m", "ft"))
    assert [row[2:5] for row in metres.rows[-3:]] == [("> 9.00", "", "")] * 3
    assert feet.rows[-1][2] == f"> {9 / METRES_PER_FOOT:.2f}"


def test_notes_stand_once_below_the_table_with_a_letter_in_their_rows() -> None:
    table = depth_table(made_section(layers=1), "m")
    assert table.header[-1] == "note"
    assert [row[-1] for row in table.rows] == [""] * 10 + ["a"] + [""] * 10 + ["b"] * 3
    assert table.notes[0] == "a: interval rests on interpolation between controlled points"
    assert [note[0] for note in table.notes] == ["a", "b"]


def test_more_notes_than_letters_are_still_told() -> None:
    section = made_section(layers=1, stations=40, gap=False)
    notes = np.array([[f"note {number}" for number in range(40)]])
    table = depth_table(dataclasses.replace(section, note=notes), "m")
    assert len(table.notes) == 40


def test_velocities_in_feet_say_so() -> None:
    section = made_section(layers=1, gap=False)
    metres, feet = velocity_table(section, "m"), velocity_table(section, "ft")
    assert feet.header[:4] == ("layer", "from (ft)", "to (ft)", "velocity (ft/s)")
    for slow, fast in zip(metres.rows, feet.rows, strict=True):
        # both are rounded to whole units
        assert float(fast[3]) * METRES_PER_FOOT == pytest.approx(float(slow[3]), abs=0.5 * (1 + METRES_PER_FOOT) + 1e-9)


def test_quality_tells_misfit_believed_picks_and_the_probability_of_other_numbers_of_refractors() -> None:
    section = made_section(layers=1)
    believed = int(np.sum(section.fit.weight > 0.5))
    line = quality_line(section)
    assert f"{section.fit.time_s.size} picks, {believed} of them believed" in line
    assert "rms misfit 1.10 ms" in line
    assert line.endswith("refractors seen: 1 (probability 0.90), 2 (probability 0.10).")


def test_plane_layers_agree_with_the_section_over_plane_ground() -> None:
    """500 over 2000 m/s, 4 m deep at x = 0, sloping down 2 in 100: both ways of solving must find it."""
    ground = PlaneGround(500.0, 2000.0, 4.0, slope=0.02)
    shots = np.array([-1.0, 23.0, 47.0])
    picks = plane_survey(ground, shots, np.arange(0.0, 47.0, 2.0), 3e-4, np.random.default_rng(3))
    section = interpret(picks, InterpretSettings(draws=300))
    told = plane_check_line(section, "m").split(" at ", 1)[1]
    numbers = [float(number) for number in re.findall(r"-?\d+(?:\.\d+)?", told)]
    at_a, at_b, slow, fast, plane_a, plane_b, own_a, own_b = numbers
    assert (at_a, at_b) == (-1.0, 47.0)
    assert (slow, fast) == (pytest.approx(500, rel=0.05), pytest.approx(2000, rel=0.05))
    # 0.3 ms of error over 24 geophones leaves the intercept times good to 0.2 ms, 0.05 m of depth; three times that
    assert plane_a == pytest.approx(3.98, abs=0.15)
    assert plane_b == pytest.approx(4.94, abs=0.15)
    assert own_a == pytest.approx(4.0, abs=0.25)
    assert own_b == pytest.approx(4.92, abs=0.25)


def test_no_reversed_pair_is_said() -> None:
    section = made_section(layers=1)
    alone = dataclasses.replace(section.fit, branch=np.zeros_like(section.fit.branch))
    assert "none, as no two facing shots" in plane_check_line(dataclasses.replace(section, fit=alone), "m")
