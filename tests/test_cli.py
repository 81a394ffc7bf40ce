"""The command rockhead as a person runs it: what it prints, what it leaves behind, how it ends."""

from __future__ import annotations

import csv
import hashlib
import json
import os
import re
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import click
import numpy as np
import pytest
from click.testing import CliRunner, Result
from made_segy import segy, spread

from interp.cli import main
from picker.survey import Survey
from picker.terminal import CommandGroup
from picker.units import METRES_PER_FOOT

EXPORTS = ("picks.csv", "depths.csv", "bounds.csv", "velocities.csv", "section.json")
HELP_WITHIN_S = 1.0  # what a person notices; measured 0.1 s on two shared cores


def run(*arguments: object, status: int = 0) -> Result:
    result = CliRunner().invoke(main, [str(argument) for argument in arguments])
    assert result.exit_code == status, result.output + repr(result.exception)
    return result


def run_done(*arguments: object) -> Result:
    """Run a command that may have findings for a person to look at, but must do its work."""
    result = CliRunner().invoke(main, [str(argument) for argument in arguments])
    assert result.exit_code in (0, 1), result.output
    assert (result.exit_code == 1) == ("LOOK" in result.stdout), result.stdout
    return result


def table(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def digests(folder: Path) -> dict[str, str]:
    return {
        path.relative_to(folder).as_posix(): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Result]:
    """The demo run once: its folder and what it printed. Do not change the folder."""
    folder = tmp_path_factory.mktemp("demo") / "larch"
    return folder, run_done("demo", folder)


@pytest.fixture
def survey(demo: tuple[Path, Result], tmp_path: Path) -> Path:
    """A copy of the demo's survey file of one's own, its records beside it."""
    folder = shutil.copytree(demo[0], tmp_path / "larch")
    return folder / "result" / "line.survey"


def three_shots(demo: tuple[Path, Result]) -> list[Path]:
    """A small line: the shots at either end and in the middle."""
    return [demo[0] / "records" / f"shot_{number:02d}.sgy" for number in (3, 6, 9)]


# demo and process


def test_demo_prints_a_depth_for_every_geophone_and_the_truth_at_the_end(demo):
    folder, result = demo
    lines = result.stdout.splitlines()
    head = next(number for number, line in enumerate(lines) if line.startswith("x (m)"))
    assert re.split("  +", lines[head])[:7] == [
        "x (m)",
        "along (m)",
        "depth (m)",
        "90 % from",
        "to",
        "coverage",
        "picks",
    ]
    rows = [line.split() for line in lines[head + 1 : head + 49]]
    # 48 geophones 2 m apart (synthetic_gathers.demo_survey)
    assert [float(row[0]) for row in rows] == np.arange(0.0, 95.0, 2.0).tolist()
    told = table(folder / "result" / "depths.csv")
    assert [row[2:5] for row in rows] == [[one["depth_m"], one["depth_lo_m"], one["depth_hi_m"]] for one in told]
    assert re.search(r"The truth: \d+ of 48 depth intervals hold the true depth", result.stdout)
    assert f"Report: {folder / 'result' / 'report.html'}" in result.stdout


def test_results_go_to_standard_output_and_progress_to_standard_error(demo):
    _, result = demo
    for word in ("compiles", "Picking", "Interpreting", "Drawing"):
        assert word in result.stderr
        assert word not in result.stdout


def test_demo_ends_with_the_command_that_does_the_same_by_hand(demo):
    folder, result = demo
    told = result.stdout.splitlines()[-1]
    assert told == f"The same by hand: rockhead process {folder}/records/*.sgy --out {folder}/result"


def test_demo_leaves_records_tables_figures_and_a_report(demo):
    folder, _ = demo
    there = set(digests(folder))
    assert {f"result/{name}" for name in (*EXPORTS, "line.survey", "report.html")} <= there
    assert {"records/README.txt", "records/shot_01.sgy", "records/truth/true_depths.csv"} <= there
    assert any(re.fullmatch(r"result/figures/.*\.png", name) for name in there)
    assert not [name for name in there if ".part" in name or name.split("/")[-1].startswith(".")]


def test_demo_over_a_demo_of_another_seed_is_refused_and_changes_nothing(survey):
    folder = survey.parents[1]
    before = digests(folder)
    message = run("demo", folder, "--seed", 7, status=2).stderr
    assert "does not hold the demo records of this seed" in message
    assert digests(folder) == before


def test_demo_twice_says_that_nothing_changed(survey):
    before = digests(survey.parents[1])
    result = run_done("demo", survey.parents[1])
    assert "in the survey already, nothing changed" in result.stdout
    assert "is there already" in result.stdout
    after = digests(survey.parents[1])
    same = [name for name in before if name.startswith("records/") or name.endswith((".csv", ".json", ".png"))]
    assert {name: after[name] for name in same} == {name: before[name] for name in same}
    with Survey.open(survey) as opened:
        assert [entry.kind for entry in opened.log()].count("interpret") == 1


def test_process_with_picks_of_another_program_uses_them_and_says_so(demo, tmp_path):
    rows = table(demo[0] / "result" / "picks.csv")
    lines = ["shot_x,geophone_x,ms"] + [
        f"{row['source_x_m']},{row['receiver_x_m']},{row['time_ms']}" for row in rows if row["state"] == "kept"
    ]
    (tmp_path / "theirs.csv").write_text("\n".join(lines).replace(",ms", ",time_ms") + "\n")
    message = run("process", tmp_path / "theirs.csv", "--out", tmp_path / "out", status=2).stderr
    assert "--sigma-ms" in message
    assert not (tmp_path / "out").exists()
    run_done("process", tmp_path / "theirs.csv", "--sigma-ms", 0.5, "--out", tmp_path / "out")
    picks = table(tmp_path / "out" / "picks.csv")
    assert {row["sigma_ms"] for row in picks} == {"0.5"}
    assert all("assumed" in row["note"] for row in picks)
    assert "it was assumed" in (tmp_path / "out" / "report.html").read_text()
    # the same times but flat ground and one error for all; the dead geophone has no pick and is not known here.
    # Relief changes delay times by its height over a spacing of shots or so, some tenths of a metre
    theirs = {row["x_m"]: float(row["depth_m"]) for row in table(tmp_path / "out" / "depths.csv")}
    ours = {row["x_m"]: float(row["depth_m"]) for row in table(demo[0] / "result" / "depths.csv")}
    assert len(theirs) == 47
    assert np.median([abs(depth - ours[x]) for x, depth in theirs.items()]) < 0.5


def test_process_picks_only_the_records_whose_picks_did_not_come_in(demo, tmp_path):
    mine = [row for row in table(demo[0] / "result" / "picks.csv") if row["record"] == "6"]
    with (tmp_path / "six.csv").open("w", newline="") as file:
        writer = csv.DictWriter(file, mine[0])
        writer.writeheader()
        writer.writerows(row | {"note": "theirs"} for row in mine)
    result = run_done("process", *three_shots(demo), tmp_path / "six.csv", "--out", tmp_path / "out")
    assert "Picks that came in from a file are used for 1 record." in result.stdout
    notes = {row["record"]: row["note"] for row in table(tmp_path / "out" / "picks.csv") if row["channel"] == "5"}
    assert notes["6"] == "theirs"
    assert notes["3"] == ""


def test_process_never_writes_over_its_own_input(demo, tmp_path):
    shutil.copy(demo[0] / "result" / "picks.csv", tmp_path / "picks.csv")
    before = digests(tmp_path)
    message = run("process", tmp_path / "picks.csv", "--out", tmp_path, status=2).stderr
    assert "written over this input" in message
    assert digests(tmp_path) == before


# single commands


def test_interpret_tells_the_same_again_and_stores_it_once(survey):
    first = run_done("interpret", survey)
    assert f"The same as interpretation 1 in {survey}: nothing changed." in first.stdout
    other = run_done("interpret", survey, "--seed", 2, "--draws", 300)
    assert f"Kept in {survey} as interpretation 2." in other.stdout
    with Survey.open(survey) as opened:
        number, settings, _ = opened.latest_interpretation()
    assert (number, settings["seed"], settings["draws"]) == (2, 2, 300)


def test_interpret_prints_velocities_and_the_plane_layer_check_with_their_units(survey):
    metres, feet = run_done("interpret", survey).stdout, run_done("interpret", survey, "--units", "ft").stdout
    assert "velocity (m/s)" in metres
    assert "velocity (ft/s)" in feet
    check = re.search(
        r"Check by plane layers \(not a result\), shots at (\S+) and (\S+) m: (\d+) and (\d+) m/s", metres
    )
    # shots stand at -1 and 95 m; a channel lies between, so only the overburden (520 m/s) must agree: two significant
    # digits are what straight lines through picks with 0.3 ms of error give over the first 20 m
    assert check.groups()[:2] == ("-1.00", "95.00")
    assert float(check[3]) == pytest.approx(520, rel=0.1)
    in_feet = re.search(r"shots at (\S+) and (\S+) ft: (\d+)", feet)
    assert float(in_feet[3]) * METRES_PER_FOOT == pytest.approx(float(check[3]), abs=1)
    assert float(in_feet[2]) * METRES_PER_FOOT == pytest.approx(95.0, abs=0.01)


def test_warnings_of_the_section_end_with_1(demo, tmp_path):
    # one shot sees every point from one side only
    run("load", tmp_path / "line.survey", three_shots(demo)[0])
    run_done("pick", tmp_path / "line.survey")
    result = run("interpret", tmp_path / "line.survey", status=1)
    assert "LOOK All head waves ran in one direction" in result.stdout


def test_export_in_feet_changes_names_and_numbers_of_every_table_but_not_the_section(demo, survey, tmp_path):
    run_done("export", survey, tmp_path / "ft", "--units", "ft")
    in_metres = demo[0] / "result"
    for name in ("picks.csv", "depths.csv", "velocities.csv"):
        metres, feet = table(in_metres / name), table(tmp_path / "ft" / name)
        assert len(metres) == len(feet)
        for column, other in zip(metres[0], feet[0], strict=True):
            length = column.endswith(("_m", "_m_s"))
            assert other == (re.sub(r"_m(_s)?$", r"_ft\1", column) if length else column)
            for left, right in zip(metres, feet, strict=True):
                if length and left[column]:
                    # tables are rounded to 0.01 and to whole m/s; half a unit of either system on either side
                    half = 0.5 * (1 + METRES_PER_FOOT) * (1.0 if column.endswith("_s") else 0.01)
                    assert float(right[other]) * METRES_PER_FOOT == pytest.approx(float(left[column]), abs=half + 1e-9)
                elif not length:
                    assert right[other] == left[column]
    header = (tmp_path / "ft" / "bounds.csv").read_text().splitlines()[0]
    assert header == "along_ft,layer,kind,assumption,depth_shallow_ft,depth_deep_ft"
    assert (tmp_path / "ft" / "section.json").read_bytes() == (in_metres / "section.json").read_bytes()


def test_exported_picks_can_be_loaded_again_and_give_the_same_depths(demo, tmp_path):
    """The hand-off is whole: nothing that interpretation needs is lost in picks.csv."""
    run_done("load", tmp_path / "back.survey", demo[0] / "result" / "picks.csv")
    run_done("interpret", tmp_path / "back.survey")
    run_done("export", tmp_path / "back.survey", tmp_path / "back")
    assert (tmp_path / "back" / "depths.csv").read_text() == (demo[0] / "result" / "depths.csv").read_text()


def test_export_replaces_its_own_files_and_refuses_to_write_over_others(survey, tmp_path):
    run_done("export", survey, tmp_path / "out")
    first = digests(tmp_path / "out")
    run_done("export", survey, tmp_path / "out", "--units", "ft")
    assert digests(tmp_path / "out") != first
    run_done("export", survey, tmp_path / "out")
    assert digests(tmp_path / "out") == first
    (tmp_path / "out" / "depths.csv").write_text("somebody's own depths\n")
    before = digests(tmp_path / "out")
    message = run("export", survey, tmp_path / "out", status=2).stderr
    assert "depths.csv: a file of this name is there that rockhead did not write" in message
    assert digests(tmp_path / "out") == before


def test_before_the_first_interpretation_only_picks_are_exported(demo, tmp_path):
    run("load", tmp_path / "line.survey", three_shots(demo)[0])
    run_done("pick", tmp_path / "line.survey")
    result = run("export", tmp_path / "line.survey", tmp_path / "out", status=1)
    assert "has not been interpreted yet" in result.stdout
    assert sorted(os.listdir(tmp_path / "out")) == ["picks.csv"]


def test_picks_changed_after_the_interpretation_are_told_until_it_is_made_again(survey, tmp_path):
    run("override", survey, "--record", 6, "--channel", 20, "--drop", "--why", "a gust of wind")
    assert "Picks have been changed" in run("export", survey, tmp_path / "out", status=1).stdout
    report = run("report", survey, tmp_path / "out", "--title", "Mill Lane", status=1)
    assert "Picks have been changed" in report.stdout
    assert f"Report: {tmp_path / 'out' / 'report.html'}" in report.stdout
    text = (tmp_path / "out" / "report.html").read_text(encoding="utf-8")
    assert "Mill Lane" in text
    assert "Picks have been changed" in text
    run_done("interpret", survey)
    assert "Picks have been changed" not in run("export", survey, tmp_path / "out").stdout


def test_an_override_changes_the_depths(survey, tmp_path):
    before = table(survey.parent / "depths.csv")
    for channel in range(30, 36):
        run("override", survey, "--record", 1, "--channel", channel, "--time-ms", 60, "--sigma-ms", 0.2, "--why", "try")
    run_done("interpret", survey)
    run_done("export", survey, tmp_path / "out")
    assert table(tmp_path / "out" / "depths.csv") != before
    changed = [row for row in table(tmp_path / "out" / "picks.csv") if row["note"] == "try"]
    assert [(row["time_ms"], row["origin"]) for row in changed] == [("60", "manual")] * 6


def test_report_of_records_that_are_gone_names_the_file_and_writes_nothing(survey, tmp_path):
    (survey.parents[1] / "records" / "shot_04.sgy").unlink()
    message = run("report", survey, tmp_path / "report", status=2).stderr
    assert "shot_04.sgy" in message
    assert not (tmp_path / "report").exists()


# what cannot be used

BAD_FILES = {
    "cut.sgy": (segy(spread(record=5))[:-7], "trace 4: the file is cut off; expected 440 bytes"),
    "text.sgy": (b"not seismic at all\n" * 400, "is no SEG-Y file"),
    "empty.sgy": (b"", "the file is empty"),
    "no_interval.sgy": (segy(spread(sample_interval_us=0), sample_interval_us=0), "there is no sample interval"),
    "folder.sgy": (None, "is a folder"),
    "missing.sgy": ("missing", "there is no such file"),
}


@pytest.fixture
def bad(tmp_path: Path, request: pytest.FixtureRequest) -> Path:
    """One of the bad files, made."""
    content = BAD_FILES[request.param][0]
    path = tmp_path / request.param
    if content is None:
        path.mkdir()
    elif isinstance(content, bytes):
        path.write_bytes(content)
    return path


def assert_refused(result: subprocess.CompletedProcess[str] | Result, path: Path) -> None:
    """One message that names the file and says what is wrong, and nothing else."""
    assert result.stdout == ""
    assert result.stderr.startswith("Error: ")
    assert result.stderr.count("\n") == 1
    assert path.name in result.stderr
    assert BAD_FILES[path.name][1] in result.stderr


@pytest.mark.parametrize("bad", BAD_FILES, indirect=True)
def test_process_of_a_bad_file_gives_one_message_and_makes_nothing(bad, demo, tmp_path):
    result = run("process", three_shots(demo)[0], bad, "--out", tmp_path / "deep" / "out", status=2)
    assert_refused(result, bad)
    assert not (tmp_path / "deep").exists()


@pytest.mark.parametrize("bad", BAD_FILES, indirect=True)
def test_a_bad_file_beside_good_ones_leaves_survey_and_results_as_they_were_to_the_byte(bad, survey):
    before = digests(survey.parents[1])
    assert_refused(run("load", survey, bad, status=2), bad)
    result = run("process", bad, "--out", survey.parent, status=2)
    assert result.stderr.count("\n") == 1
    assert BAD_FILES[bad.name][1] in result.stderr
    assert digests(survey.parents[1]) == before


@pytest.mark.parametrize("bad", ["cut.sgy", "text.sgy"], indirect=True)
def test_the_installed_command_refuses_as_the_function_does(bad, tmp_path):
    shown = subprocess.run(
        [sys.executable, "-m", "interp", "process", bad, "--out", tmp_path / "out"], capture_output=True, text=True
    )
    assert shown.returncode == 2
    assert_refused(shown, bad)


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="the superuser may read everything")
def test_a_file_that_may_not_be_read_is_refused(demo, tmp_path):
    path = Path(shutil.copy(three_shots(demo)[0], tmp_path / "closed.sgy"))
    path.chmod(0)
    assert "closed.sgy: cannot be read" in run("process", path, "--out", tmp_path / "out", status=2).stderr


@pytest.mark.skipif(not Path("/proc/self/mem").exists(), reason="needs a file that opens and cannot be read")
def test_a_file_that_fails_when_it_is_read_is_refused(tmp_path):
    message = run("process", "/proc/self/mem", "--out", tmp_path / "out", status=2).stderr
    assert "/proc/self/mem: cannot be read" in message
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("rows", "message"),
    [
        ([(-1, 10, 22)], "expected at least"),
        ([(shot, 10, 5 + abs(10 - shot)) for shot in (0, 5, 20, 30)], "two geophone places"),
        ([(x, x, 0.1) for x in range(6)], "three picks away from their shots"),
        ([(-1, x, x - 200) for x in range(10)], "later than their time breaks"),
    ],
    ids=["one pick", "one geophone", "no offsets", "before the time break"],
)
def test_picks_that_cannot_carry_depths_are_refused_with_what_is_missing(tmp_path, rows, message):
    text = "shot_x,geophone_x,time_ms,sigma_ms\n" + "".join(f"{s},{g},{t},0.5\n" for s, g, t in rows)
    (tmp_path / "few.csv").write_text(text)
    run_done("load", tmp_path / "few.survey", tmp_path / "few.csv")
    result = run("interpret", tmp_path / "few.survey", status=2)
    assert "the picks cannot be interpreted" in result.stderr
    assert message in result.stderr


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (("interpret", "none.survey"), "there is no such survey file"),
        (("export", "none.survey", "out"), "there is no such survey file"),
        (("report", "none.survey", "out"), "there is no such survey file"),
        (("interpret", "text.survey"), "is no survey file"),
        (("interpret", "line.survey"), "the survey has no kept picks to interpret"),
        (("report", "line.survey", "out"), "has not been interpreted yet"),
        (("export", "line.survey", "text.survey"), "is not a folder"),
        (("process", "shot.sgy", "--out", "text.survey"), "is not a folder"),
        (("process", "shot.sgy"), "Missing option '--out'"),
        (("process", "--out", "out"), "Missing argument 'FILE...'"),
        (("interpret", "line.survey", "--units", "yd"), "'yd' is not one of 'm', 'ft'"),
        (("interpret", "line.survey", "--draws", "1"), "Invalid value for '--draws'"),
    ],
)
def test_every_wrong_command_ends_with_2_and_says_why(tmp_path, monkeypatch, arguments, message):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "shot.sgy").write_bytes(segy(spread(receiver_elevation=100, source_elevation=100)))
    (tmp_path / "text.survey").write_text("text")
    run("load", "line.survey", "shot.sgy")
    before = digests(tmp_path)
    result = run(*arguments, status=2)
    assert message in result.stderr
    assert result.stdout == ""
    assert digests(tmp_path) == before


def test_a_fault_of_the_program_is_one_message_and_shows_its_place_on_request(monkeypatch):
    @click.group(cls=CommandGroup)
    def group() -> None:
        """Group."""

    @group.command()
    def go() -> None:
        """Go."""
        raise IndexError("index -1 is out of bounds")

    result = CliRunner().invoke(group, ["go"])
    assert result.exit_code == 2
    assert "a fault in rockhead itself (IndexError: index -1 is out of bounds)" in result.stderr
    monkeypatch.setenv("ROCKHEAD_TRACEBACK", "1")
    assert isinstance(CliRunner().invoke(group, ["go"]).exception, IndexError)


# stopped half-way


@pytest.mark.skipif(os.name != "posix", reason="sends signals")
@pytest.mark.parametrize("stop", [signal.SIGINT, signal.SIGKILL])
def test_a_process_stopped_after_loading_leaves_a_survey_that_goes_on(demo, tmp_path, stop):
    command = [sys.executable, "-m", "interp", "process", *three_shots(demo), "--out", tmp_path / "out"]
    begun = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    for line in begun.stdout:
        if line.startswith("Created"):
            begun.send_signal(stop)
            break
    _, errors = begun.communicate(timeout=120)
    if stop is signal.SIGINT:
        assert begun.returncode == 130
        assert errors.endswith("Stopped. What was reported as done is kept.\n")
    else:
        assert begun.returncode == -signal.SIGKILL
    with Survey.open(tmp_path / "out" / "line.survey") as opened:
        assert len(opened.records()) == 3
        assert opened.latest_interpretation() is None
    run_done("pick", tmp_path / "out" / "line.survey")
    assert "depth (m)" in run_done("interpret", tmp_path / "out" / "line.survey").stdout


# help


@pytest.mark.parametrize("command", sorted(main.commands))
def test_every_command_has_help_with_an_example(command):
    assert f"Example:\n    rockhead {command}" in run(command, "--help").stdout


def test_the_commands_are_those_of_the_line():
    assert sorted(main.commands) == ["demo", "export", "interpret", "load", "override", "pick", "process", "report"]


def test_help_and_version_come_at_once():
    for option, shown in (("--help", "process"), ("--version", "rockhead, version")):
        times = []
        for _ in range(3):  # the best of three: the machine may be busy
            begin = time.perf_counter()
            text = subprocess.run([sys.executable, "-m", "interp", option], capture_output=True, text=True, check=True)
            times.append(time.perf_counter() - begin)
        assert shown in text.stdout
        assert min(times) < HELP_WITHIN_S


def test_section_json_holds_what_was_chosen(demo):
    document = json.loads((demo[0] / "result" / "section.json").read_text())
    assert (document["settings"]["seed"], document["settings"]["draws"]) == (1, 1000)
    assert len(document["depth_samples_m"]) == 1000
