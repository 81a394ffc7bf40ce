"""The commands of picking as a person runs them: what they print, how they end, what they leave alone."""

from __future__ import annotations

import os
import sqlite3
import subprocess
import sys
import time

import click
import numpy as np
import pytest
from click.testing import CliRunner
from made_segy import segy, spread

from picker.cli import CommandGroup, main
from picker.errors import InputError
from picker.survey import Survey

# Python, click and our own modules without numpy; measured 0.12 s on a slow machine, the limit is what a person notices
HELP_WITHIN_S = 0.5


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """A folder to work in with one good record and picks."""
    monkeypatch.chdir(tmp_path)
    # an elevation and geophones 2 m apart: nothing that a person must look at
    (tmp_path / "shot.sgy").write_bytes(segy(spread(record=1, receiver_elevation=100, source_elevation=100)))
    (tmp_path / "picks.csv").write_text("record,channel,shot_x,geophone_x,time_ms\n1,1,-5,0,5\n1,2,-5,2,6\n")
    return tmp_path


def run(*arguments, status=0):
    result = CliRunner().invoke(main, [str(argument) for argument in arguments])
    assert result.exit_code == status, result.output + repr(result.exception)
    assert result.exception is None or isinstance(result.exception, SystemExit)
    return result


def content(path):
    connection = sqlite3.connect(path)
    dump = list(connection.iterdump())
    connection.close()
    return dump


def test_load_prints_a_line_a_record_and_what_was_done(folder):
    result = run("load", "line.survey", "shot.sgy")
    header, line, done = result.stdout.splitlines()
    assert header.split("  ")[0] == "record"
    assert line.split() == ["1", "-5.0", "4", "0.0", "to", "6.0", "0.25", "50", "0"]
    assert done == "Created line.survey: 1 record loaded."
    assert result.stderr == ""
    again = run("load", "line.survey", "shot.sgy")
    assert "in the survey already, nothing changed" in again.stdout
    assert again.stdout.splitlines()[-1] == "Nothing new: line.survey is as it was."


def test_load_prints_feet_where_they_are_asked_for(folder):
    result = run("load", "line.survey", "shot.sgy", "--units", "ft")
    assert "shot x (ft)" in result.stdout
    assert "-16.4" in result.stdout  # 5 m / 0.3048


def test_load_ends_with_1_where_a_person_must_look(folder):
    (folder / "odd.sgy").write_bytes(segy(spread(offset=90)))
    result = run("load", "line.survey", "odd.sgy", status=1)
    assert "LOOK odd.sgy, record 1: The offset words" in result.stdout
    assert (folder / "line.survey").exists()


def test_findings_that_repeat_are_printed_once(folder):
    names = []
    for record in range(2, 9):
        names.append(f"shot{record}.sgy")
        (folder / names[-1]).write_bytes(segy(spread(record=record)))
    result = run("load", "line.survey", *names)
    assert result.stdout.count("All elevations are zero") == 1
    assert "and 3 more" in result.stdout


def test_picks_are_loaded_with_an_error_given_and_go_onto_the_records(folder):
    message = run("load", "line.survey", "picks.csv", "shot.sgy", status=2).stderr
    assert "Error: file picks.csv: the picks come without errors" in message
    assert not (folder / "line.survey").exists()
    result = run("load", "line.survey", "picks.csv", "shot.sgy", "--sigma-ms", "0.5")
    assert "1 record and 2 picks loaded" in result.stdout
    with Survey.open("line.survey") as survey:
        assert len(survey.records()) == 1
        assert survey.picks().sigma_s.tolist() == [0.0005, 0.0005]


BAD_FILES = {
    "cut.sgy": (segy(spread(record=5))[:-7], "trace 4: the file is cut off; expected 440 bytes"),
    "text.sgy": (b"not seismic at all", "is no SEG-Y file"),
    "empty.sgy": (b"", "the file is empty"),
    "no_interval.sgy": (segy(spread(sample_interval_us=0), sample_interval_us=0), "there is no sample interval"),
    "no_traces.sgy": (segy([]), "has no traces"),
    "record.dat": (b"\x55\x3a\x01\x00" + bytes(400), "the file descriptor block gives no room for its traces"),
    "bad.csv": (b"shot_x,geophone_x,time_ms,sigma_ms\n0,1,x,1\n", "line 2, column time_ms"),
    "columns.csv": (b"x,z\n1,2\n", "no column source_x_m, receiver_x_m, time_ms"),
}


@pytest.mark.parametrize("name", BAD_FILES)
@pytest.mark.parametrize("exists", [True, False])
def test_a_file_that_cannot_be_used_ends_with_2_and_one_message_and_leaves_the_survey_alone(folder, name, exists):
    made, message = BAD_FILES[name]
    (folder / name).write_bytes(made)
    (folder / "other.sgy").write_bytes(segy(spread(record=2)))
    if exists:
        run("load", "line.survey", "shot.sgy")
        before = content("line.survey")
    result = run("load", "line.survey", "other.sgy", name, status=2)
    assert result.stdout == ""
    assert result.stderr.startswith("Error: ")
    assert result.stderr.count("\n") == 1
    assert name in result.stderr
    assert message in result.stderr
    assert (folder / "line.survey").exists() is exists
    if exists:
        assert content("line.survey") == before
    assert not [left for left in os.listdir(folder) if left.startswith(".")]


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (("load", "line.survey", "none.sgy"), "none.sgy: there is no such file"),
        (("load", "line.survey", "."), "is a folder"),
        (("load", "shot.sgy", "picks.csv"), "is named like a file to load"),
        (("load", "text.survey", "shot.sgy"), "is no survey file"),
        (("load", "none/line.survey", "shot.sgy"), "none: there is no such folder"),
        (("load", "line.survey"), "Missing argument 'FILE...'"),
        (("load", "line.survey", "shot.sgy", "--sigma-ms", "0"), "Invalid value for '--sigma-ms'"),
        (("pick", "none.survey"), "there is no such survey file"),
        (("override", "none.survey", "--log"), "there is no such survey file"),
        (("override", "none.survey"), "Give a change, or one of"),
        (("unknown",), "No such command"),
    ],
)
def test_every_wrong_command_ends_with_2_and_says_why(folder, arguments, message):
    (folder / "text.survey").write_text("text")
    before = sorted(os.listdir(folder))
    result = run(*arguments, status=2)
    assert message in result.stderr
    assert "Traceback" not in result.output
    assert sorted(os.listdir(folder)) == before


def test_a_damaged_survey_file_ends_with_2_and_one_message(folder):
    (folder / "many.sgy").write_bytes(segy([one for record in range(1, 200) for one in spread(record=record)]))
    run("load", "line.survey", "many.sgy")
    torn = bytearray((folder / "line.survey").read_bytes())
    torn[20000:60000] = bytes(40000)
    (folder / "line.survey").write_bytes(bytes(torn))
    assert "Error: the survey file is damaged" in run("pick", "line.survey", status=2).stderr


@pytest.mark.skipif(os.geteuid() == 0 if hasattr(os, "geteuid") else True, reason="root may read everything")
def test_a_file_that_may_not_be_read_ends_with_2(folder):
    (folder / "shot.sgy").chmod(0)
    assert "shot.sgy: cannot be read" in run("load", "line.survey", "shot.sgy", status=2).stderr


def test_an_interval_given_serves_records_without_one(folder):
    (folder / "no_interval.sgy").write_bytes(BAD_FILES["no_interval.sgy"][0])
    run("load", "line.survey", "no_interval.sgy", "--interval-us", "125")
    with Survey.open("line.survey") as survey:
        assert survey.read(1).interval_s == pytest.approx(125e-6, rel=1e-12)


# changes by hand


@pytest.fixture
def picked(folder):
    run("load", "line.survey", "shot.sgy", "picks.csv", "--sigma-ms", "0.5")
    return folder / "line.survey"


def test_override_drop_undo_redo_and_log(picked):
    trace = ("--record", 1, "--channel", 2)
    changed = run("override", picked, *trace, "--time-ms", "7.25", "--why", "weak onset").stdout
    assert "record 1, channel 2: 6.000 ms +- 0.500 ms (manual) -> 7.250 ms +- 0.500 ms (manual)" in changed
    assert "(weak onset)" in changed
    assert "-> dropped" in run("override", picked, *trace, "--drop", "--why", "air wave").stdout
    assert "dropped -> 7.250 ms" in run("override", picked, "--undo").stdout
    assert "7.250 ms +- 0.500 ms (manual) -> 6.000 ms" in run("override", picked, "--undo").stdout
    assert "nothing to undo" in run("override", picked, "--undo", status=2).stderr
    assert "6.000 ms +- 0.500 ms (manual) -> 7.250 ms" in run("override", picked, "--redo").stdout
    log = run("override", picked, "--log").stdout
    kinds = [line.split()[2] for line in log.splitlines() if line.strip()]
    assert kinds == ["load", "import", "import", "override", "drop", "undo", "undo", "redo"]


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ("--record 1 --channel 2 --time-ms 7", "Say why"),
        ("--record 1 --channel 2 --time-ms 7 --why", "requires an argument"),
        ("--record 1 --time-ms 7 --why x", "Name the trace"),
        ("--record 9 --channel 2 --time-ms 7 --why x", "record 9, trace 2: the survey has no such record"),
        ("--record 1 --channel 9 --time-ms 7 --why x", "record 1, trace 9: the record has no such channel"),
        ("--record 1 --channel 3 --time-ms 7 --why x", "no pick whose standard error"),
        ("--record 1 --channel 2 --time-ms 70 --why x", "outside the record"),
        ("--record 1 --channel 2 --time-ms 7 --sigma-ms -1 --why x", "standard error is not positive"),
        ("--record 1 --channel 2 --time-ms 7 --drop --why x", "either dropped or given a time"),
        ("--undo --log", "one of --undo, --redo and --log"),
        ("--record 1 --undo", "one of --undo, --redo and --log"),
    ],
)
def test_a_change_that_cannot_be_meant_ends_with_2_and_changes_nothing(picked, options, message):
    before = content(picked)
    assert message in run("override", picked, *options.split(), status=2).stderr
    assert content(picked) == before


# picking


def shots_with_an_arrival(records=(1, 2)) -> bytes:
    """Shots whose traces are quiet noise and, from an onset at offset / 500 m/s on, a strong 60 Hz wave."""
    from made_segy import trace

    rng = np.random.default_rng(3)
    time_s = np.arange(400) * 250e-6
    traces = []
    for record in records:
        for number in range(12):
            since = time_s - (5 + 2 * number) / 500
            wave = np.where(since > 0, np.sin(2 * np.pi * 60 * since) * np.exp(-30 * np.abs(since)), 0.0)
            traces.append(
                trace(
                    wave + 1e-3 * rng.normal(size=400),
                    field_record=record,
                    trace_in_record=number + 1,
                    trace_id=1,
                    source_x=-5,
                    group_x=2 * number,
                    sample_interval_us=250,
                )
            )
    return segy(traces, samples=400)


def test_pick_prints_a_line_a_record_keeps_changes_by_hand_and_changes_nothing_the_second_time(folder):
    (folder / "arrivals.sgy").write_bytes(shots_with_an_arrival())
    run("load", "line.survey", "arrivals.sgy")
    run("override", "line.survey", "--record", 1, "--channel", 3, "--time-ms", 20, "--sigma-ms", 1, "--why", "by eye")
    result = run("pick", "line.survey")
    lines = result.stdout.splitlines()
    assert lines[0].split() == ["record", "kept", "none", "dropped", "by", "hand", "median", "sigma", "(ms)"]
    assert [line.split()[0] for line in lines[1:3]] == ["1", "2"]
    assert "compiles" in result.stderr
    with Survey.open("line.survey") as survey:
        picks = survey.picks()
        assert picks.time_s[2] == 0.02
        assert lines[3].startswith(f"{picks.kept.sum()} picks kept of 24 traces, median sigma")
        others = picks.kept & (picks.origin == "auto")
        # how good the picks are is tested where picking is; here they must only be those of these records
        assert np.median(np.abs(picks.time_s - picks.offset_m / 500)[others]) < 2e-3
        entries = len(survey.log())
    run("pick", "line.survey")
    with Survey.open("line.survey") as survey:
        assert len(survey.log()) == entries


def test_pick_passes_its_settings_on_and_says_when_imported_picks_are_replaced(folder):
    (folder / "arrivals.sgy").write_bytes(shots_with_an_arrival(records=(1,)))
    run("load", "line.survey", "arrivals.sgy", "picks.csv", "--sigma-ms", "1")
    result = run("pick", "line.survey", "--time-break-sigma-ms", "0.25", "--slowest-m-s", "200")
    assert "Imported picks of records 1 are replaced" in result.stderr
    with Survey.open("line.survey") as survey:
        assert set(survey.picks().time_break_sigma_s.tolist()) == {0.00025}
        assert "slowest_m_s=200" in survey.log()[-1].reason
    assert "less than --fastest" in run("pick", "line.survey", "--slowest-m-s", "9000", status=2).stderr


def test_pick_refuses_a_survey_of_picks_only_and_one_whose_file_changed(folder):
    run("load", "picks.survey", "picks.csv", "--sigma-ms", "1")
    assert "no records to pick" in run("pick", "picks.survey", status=2).stderr
    run("load", "line.survey", "shot.sgy")
    (folder / "shot.sgy").write_bytes(segy(spread(record=1, seed=8)))
    before = content("line.survey")
    assert "the file has changed since it was loaded" in run("pick", "line.survey", status=2).stderr
    assert content("line.survey") == before


# the group


def group_that_raises(error: BaseException) -> click.Group:
    @click.group(cls=CommandGroup)
    def group() -> None:
        """Group."""

    @group.command()
    def go() -> None:
        """Go."""
        raise error

    return group


@pytest.mark.parametrize(
    ("error", "status", "message"),
    [
        (InputError("cannot be read", file="a.sgy", remedy="Look."), 2, "Error: file a.sgy: cannot be read. Look.\n"),
        (PermissionError(13, "Permission denied", "a.csv"), 2, "Error: a.csv: Permission denied.\n"),
        (click.FileError("a.csv", "gone"), 2, "Error: Could not open file 'a.csv': gone\n"),
        (KeyboardInterrupt(), 130, "Stopped. What was reported as done is kept.\n"),
        (
            sqlite3.DatabaseError("database disk image is malformed"),
            2,
            "Error: the survey file is damaged (database disk image is malformed). Put a copy in its place.\n",
        ),
        (click.Abort(), 130, "Stopped. What was reported as done is kept.\n"),
        (click.exceptions.Exit(1), 1, ""),
    ],
)
def test_the_group_turns_what_happens_into_exit_status_and_one_message(error, status, message):
    result = CliRunner().invoke(group_that_raises(error), ["go"])
    assert (result.exit_code, result.stderr) == (status, message)


@pytest.mark.parametrize("command", ["load", "pick", "override"])
def test_every_command_has_help_with_an_example(command):
    shown = run(command, "--help").stdout
    assert f"Example:\n    rockhead {command} mill_lane.survey" in shown


def test_python_m_picker_works_and_shows_its_help_at_once():
    times = []
    for _ in range(3):  # the best of three: the machine may be busy
        begin = time.perf_counter()
        shown = subprocess.run([sys.executable, "-m", "picker", "--help"], capture_output=True, text=True, check=True)
        times.append(time.perf_counter() - begin)
    assert "override" in shown.stdout
    assert min(times) < HELP_WITHIN_S


def test_help_loads_no_heavy_library():
    script = (
        "import sys, picker.cli\n"
        "print([name for name in ('numpy', 'numba', 'scipy', 'matplotlib', 'segyio') if name in sys.modules])"
    )
    shown = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert shown.stdout.strip() == "[]"
