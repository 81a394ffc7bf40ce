"""Positions from a table beside the records."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import numpy.testing as npt
import pytest
from click.testing import CliRunner
from made_segy import segy, spread

from picker.cli import main
from picker.errors import InputError
from picker.geometry_csv import read_geometry_csv
from picker.records import scan_file
from picker.survey import Survey


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """Two shots in one file without coordinates, and a table that has them."""
    monkeypatch.chdir(tmp_path)
    nowhere = {"source_x": 0, "group_x": 0, "offset": 0, "receiver_elevation": 7}
    (tmp_path / "shots.sgy").write_bytes(segy(spread(record=1, **nowhere) + spread(record=2, **nowhere)))
    lines = ["record;channel;shot_x;geophone_x;geophone_elevation"]
    lines += [
        f"{record};{channel};{shot_x};{2.5 * channel};{100 + channel}".replace(".", ",")
        for record, shot_x in ((1, -5), (2, 15))
        for channel in range(1, 5)
    ]
    (tmp_path / "positions.csv").write_text("\n".join(lines))
    return tmp_path


def test_positions_of_a_table_replace_those_of_the_headers_and_columns_left_out_keep_them(folder):
    headers, findings = scan_file("shots.sgy", geometry=read_geometry_csv(Path("positions.csv")))
    assert [header.source_xyz.tolist() for header in headers] == [[-5, 0, 0], [15, 0, 0]]
    npt.assert_array_equal(headers[1].receiver_xyz, [[2.5 * n, 0, 100 + n] for n in range(1, 5)])
    assert not [finding for finding in findings if finding.severity == "look"], "nothing is zero any more"


def test_loading_again_with_a_table_corrects_the_records_and_without_it_leaves_them(folder):
    assert CliRunner().invoke(main, ["load", "line.survey", "shots.sgy"]).exit_code == 1
    fixed = CliRunner().invoke(main, ["load", "line.survey", "shots.sgy", "--geometry", "positions.csv"])
    assert fixed.exit_code == 0, fixed.output

    def positions():
        with Survey.open("line.survey") as survey:
            return [header.source_xyz[0] for header in survey.records()], len(survey.log())

    assert positions() == ([-5.0, 15.0], 3)
    assert "nothing changed" in CliRunner().invoke(main, ["load", "line.survey", "shots.sgy"]).stdout
    again = CliRunner().invoke(main, ["load", "line.survey", "shots.sgy", "--geometry", "positions.csv"])
    assert "nothing changed" in again.stdout
    assert positions() == ([-5.0, 15.0], 3)


def test_another_geometry_is_refused_once_there_are_picks(folder):
    CliRunner().invoke(main, ["load", "line.survey", "shots.sgy", "--geometry", "positions.csv"])
    with Survey.open("line.survey") as survey:
        survey.override(1, 2, time_s=0.005, sigma_s=0.001, why="by eye")
        survey.undo()
    table = (folder / "positions.csv").read_text()
    (folder / "positions.csv").write_text(table.replace(";-5;", ";-6;"))
    result = CliRunner().invoke(main, ["load", "line.survey", "shots.sgy", "--geometry", "positions.csv"])
    assert result.exit_code == 2
    assert "another sample interval or geometry and has picks already" in result.stderr


def test_rows_may_name_the_file_of_their_record(folder):
    lines = ["file,record,channel,source_x_m,receiver_x_m"]
    lines += [f"a.sgy,1,{channel},3,{channel}" for channel in range(1, 5)]
    lines += [f"b.sgy,1,{channel},8,{channel}" for channel in range(1, 5)]
    (folder / "g.csv").write_text("\n".join(lines))
    table = read_geometry_csv(Path("g.csv"))
    for name, shot_x in (("a.sgy", 3), ("b.sgy", 8)):
        source_xyz, _ = table.place(Path("in") / name, 1, np.array([1, 4]), np.zeros(3), np.zeros((2, 3)))
        assert source_xyz.tolist() == [shot_x, 0, 0]


def test_degrees_do_not_stand_in_for_a_column_left_out(folder):
    (folder / "degrees.sgy").write_bytes(segy(spread(record=1, coordinate_units=3, group_y=51, source_y=51)))
    (header,), _ = scan_file("degrees.sgy", geometry=read_geometry_csv(Path("positions.csv")))
    assert not header.receiver_xyz[:, 1].any()
    assert header.source_xyz[1] == 0


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda text: text.replace("2;4;", "2;5;"), r"positions.csv, record 2, trace 4: the geometry has no row"),
        (lambda text: text.replace("2;4;15;", "2;4;16;"), r"record 2, trace 4: the geometry gives the shot two places"),
        (lambda text: text.replace("2;4;", "2;3;"), r"record 2, trace 3: line 9: the trace has a row already"),
        (lambda text: text.replace("shot_x", "x"), r"no column source_x_m"),
        (lambda text: text.replace("2;4;15;", "2;4;;"), r"line 9, column shot_x: .*expected a number"),
    ],
)
def test_a_table_that_does_not_fit_is_refused_and_nothing_is_loaded(folder, change, message):
    (folder / "positions.csv").write_text(change((folder / "positions.csv").read_text()))
    with pytest.raises(InputError, match=message):
        scan_file("shots.sgy", geometry=read_geometry_csv(Path("positions.csv")))
    result = CliRunner().invoke(main, ["load", "line.survey", "shots.sgy", "--geometry", "positions.csv"])
    assert result.exit_code == 2
    assert not os.path.exists("line.survey")


def test_the_geometry_table_of_site_a_gives_what_its_headers_say(field_records):
    site_a = field_records / "site_a" / "segy"
    table = read_geometry_csv(site_a / "geometry.csv")
    for path in sorted(site_a.glob("*.sgy")):
        for plain, placed in zip(scan_file(path)[0], scan_file(path, geometry=table)[0], strict=True):
            npt.assert_array_equal(plain.source_xyz, placed.source_xyz)
            npt.assert_array_equal(plain.receiver_xyz, placed.receiver_xyz)
