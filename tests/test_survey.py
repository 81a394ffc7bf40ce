"""The survey file: what is loaded once stays, what a person says stays on top, nothing is lost or half done."""

from __future__ import annotations

import dataclasses
import os
import shutil
import sqlite3
import subprocess
import sys
import time

import numpy as np
import numpy.testing as npt
import pytest
from made_segy import segy, spread

from picker.errors import InputError
from picker.loading import load_files
from picker.picks import PickTable
from picker.records import read_records
from picker.schema import APPLICATION_ID, VERSION
from picker.survey import Override, Survey


@pytest.fixture
def folder(tmp_path):
    """Two shots in two files beside a survey file that is not there yet."""
    for record, source_x in ((1, -5), (2, 11)):
        (tmp_path / f"shot{record}.sgy").write_bytes(segy(spread(record=record, source_x=source_x)))
    return tmp_path


@pytest.fixture
def path(folder):
    """The survey file with both shots loaded."""
    load_files(folder / "line.survey", [folder / "shot1.sgy", folder / "shot2.sgy"])
    return folder / "line.survey"


@pytest.fixture
def survey(path):
    with Survey.open(path) as opened:
        yield opened


def table_of(survey: Survey, time_s: float = 0.005, records: tuple[int, ...] = (1, 2)) -> PickTable:
    """Automatic picks of all traces: their times in sequence from one on, with every error another number."""
    headers = [header for header in survey.records() if header.record in records]
    channel = np.concatenate([header.channel for header in headers])
    rows = channel.size
    source = np.concatenate([np.tile(header.source_xyz, (header.channel.size, 1)) for header in headers])
    receiver = np.concatenate([header.receiver_xyz for header in headers])
    return PickTable(
        record=np.concatenate([np.full(header.channel.size, header.record) for header in headers]),
        channel=channel,
        source_xyz=source,
        receiver_xyz=receiver,
        offset_m=np.hypot(*(receiver - source)[:, :2].T),
        time_s=time_s + 1e-3 * np.arange(rows) / 7,
        sigma_s=np.full(rows, 1e-4) / 3,
        early_s=np.full(rows, 2e-3),
        late_s=np.full(rows, 3e-3),
        reading_sigma_s=np.full(rows, 4e-4),
        bias_removed_s=np.full(rows, 5e-5),
        time_break_shift_s=np.full(rows, -6e-4),
        time_break_sigma_s=np.full(rows, 7e-5),
        geophone_sigma_s=np.full(rows, 8e-5),
        confidence=np.full(rows, 0.97),
        state=np.full(rows, "kept"),
        origin=np.full(rows, "auto"),
        note=np.full(rows, "clear"),
    )


def same(left: PickTable, right: PickTable) -> None:
    for field in dataclasses.fields(PickTable):
        npt.assert_array_equal(getattr(left, field.name), getattr(right, field.name), err_msg=field.name)


def content(path) -> dict[str, list[tuple]]:
    """Everything a survey file holds, except when its files were last touched."""
    connection = sqlite3.connect(path)
    names = [row[0] for row in connection.execute("SELECT name FROM sqlite_master WHERE type = 'table' ORDER BY 1")]
    found = {name: connection.execute(f"SELECT * FROM {name}").fetchall() for name in names}
    connection.close()
    return found


# records


def test_records_come_back_as_they_lie_in_their_files(survey, folder):
    for record in read_records([folder / "shot1.sgy", folder / "shot2.sgy"]):
        again = survey.read(record.record)
        for name in ("samples", "start_s", "channel", "source_xyz", "receiver_xyz", "valid", "state", "polarity"):
            npt.assert_array_equal(getattr(again, name), getattr(record, name), err_msg=name)
        assert again.interval_s == record.interval_s
        assert again.origin.format == record.origin.format
        assert os.path.samefile(again.origin.file, record.origin.file)
    assert [header.record for header in survey.records()] == [1, 2]


def test_the_survey_holds_no_samples(path, folder):
    (folder / "long.sgy").write_bytes(segy(spread(record=9, samples=20000), samples=20000))
    before = path.stat().st_size
    load_files(path, [folder / "long.sgy"])
    assert path.stat().st_size - before < 20000


def test_survey_and_records_can_be_moved_together(path, folder, tmp_path):
    moved = tmp_path / "elsewhere"
    moved.mkdir()
    for name in ("line.survey", "shot1.sgy", "shot2.sgy"):
        shutil.move(folder / name, moved / name)
    with Survey.open(moved / "line.survey") as survey:
        assert survey.read(1).samples.shape == (4, 50)


def test_loading_the_same_files_again_changes_nothing(path, folder):
    before = content(path)
    loaded = load_files(path, [folder / "shot1.sgy", folder / "shot2.sgy"])
    assert content(path) == before
    assert not loaded.new
    assert len(loaded.known_files) == 2
    assert [header.record for header in loaded.records] == [1, 2]


def test_a_copy_of_a_known_file_changes_nothing_and_a_moved_file_is_found_again(path, folder):
    shutil.copy(folder / "shot1.sgy", folder / "copy.sgy")
    before = content(path)
    load_files(path, [folder / "copy.sgy"])
    assert content(path) == before
    (folder / "shot1.sgy").unlink()
    with Survey.open(path) as survey, pytest.raises(InputError, match=r"shot1.sgy, record 1: the file .* is gone"):
        survey.read(1)
    load_files(path, [folder / "copy.sgy"])
    with Survey.open(path) as survey:
        assert survey.read(1).origin.file.endswith("copy.sgy")
        assert survey.log()[-1].kind == "relocate"


def test_record_numbers_that_repeat_between_files_are_made_unique_and_the_original_is_kept(path, folder):
    (folder / "more.sgy").write_bytes(segy(spread(record=2, source_x=30) + spread(record=3, source_x=40)))
    loaded = load_files(path, [folder / "more.sgy"])
    assert [(header.record, header.original_record) for header in loaded.records] == [(3, 3), (4, 2)]
    assert loaded.new == {3, 4}
    assert any("2 is 4" in finding.text for finding in loaded.findings)
    with Survey.open(path) as survey:
        assert survey.read(4).source_xyz[0] == 30


def test_a_file_changed_since_loading_is_noticed_before_use(survey, folder):
    changed = bytearray((folder / "shot1.sgy").read_bytes())
    changed[-1] ^= 1
    (folder / "shot1.sgy").write_bytes(bytes(changed))
    with pytest.raises(InputError, match=r"shot1.sgy, record 1: the file has changed since it was loaded.*checksum"):
        survey.read(1)
    with pytest.raises(InputError, match="has changed"):
        survey.check_files()
    survey.read(2)


def test_a_file_that_was_only_touched_is_still_good(survey, folder):
    os.utime(folder / "shot1.sgy", (1, 1))
    assert survey.read(1).samples.shape == (4, 50)


def test_a_corrected_file_replaces_its_records_until_there_are_picks(path, folder):
    (folder / "shot1.sgy").write_bytes(segy(spread(record=1, source_x=-6)))
    load_files(path, [folder / "shot1.sgy"])
    with Survey.open(path) as survey:
        assert survey.read(1).source_xyz[0] == -6
        assert len(survey.records()) == 2
        survey.store_picks(table_of(survey))
    (folder / "shot1.sgy").write_bytes(segy(spread(record=1, source_x=-7)))
    before = content(path)
    with pytest.raises(InputError, match=r"record 1: was loaded before with other content and has picks"):
        load_files(path, [folder / "shot1.sgy"])
    assert content(path) == before


def test_a_sample_interval_given_later_replaces_that_of_the_headers(path, folder):
    load_files(path, [folder / "shot1.sgy"], interval_s=312.5e-6)
    with Survey.open(path) as survey:
        assert survey.read(1).interval_s == 312.5e-6
        assert survey.read(2).interval_s == pytest.approx(250e-6, rel=1e-12)


# refusals leave what was there


def test_a_failed_load_leaves_the_survey_or_its_absence_as_it_was(path, folder):
    (folder / "cut.sgy").write_bytes(segy(spread(record=7))[:-3])
    (folder / "good.sgy").write_bytes(segy(spread(record=8)))
    before, files = content(path), sorted(os.listdir(folder))
    for target in (path, folder / "new.survey"):
        with pytest.raises(InputError, match="cut off"):
            load_files(target, [folder / "good.sgy", folder / "cut.sgy"])
    assert content(path) == before
    assert sorted(os.listdir(folder)) == files


def test_a_load_that_fails_while_writing_leaves_nothing(folder, monkeypatch):
    def fail(*_args, **_kwargs):
        raise sqlite3.OperationalError("database or disk is full")

    monkeypatch.setattr("picker.record_rows.add_traces", fail)
    with pytest.raises(InputError, match=r"line.survey: the survey file cannot be used \(database or disk is full\)"):
        load_files(folder / "line.survey", [folder / "shot1.sgy"])
    assert sorted(os.listdir(folder)) == ["shot1.sgy", "shot2.sgy"]


def test_an_exception_in_the_middle_of_a_transaction_takes_everything_in_it_back(survey, path):
    before = content(path)

    def change_and_fail():
        with survey.transaction():
            survey.store_picks(table_of(survey))
            survey.override(1, 1, time_s=0.004, why="test")
            raise RuntimeError("power")

    with pytest.raises(RuntimeError, match="power"):
        change_and_fail()
    assert content(path) == before
    assert len(survey.picks()) == 0


@pytest.mark.parametrize(
    ("prepare", "message"),
    [
        (lambda path: None, "there is no such survey file.*rockhead load"),
        (lambda path: path.write_text("picks"), "is no survey file"),
        (lambda path: path.write_bytes(b""), "is no survey file"),
        (lambda path: path.write_bytes(b"SQLite format 3\0" + bytes(2000)), "is no survey file"),
        (lambda path: path.mkdir(), "is no survey file.*found a folder"),
        (lambda path: sqlite3.connect(path).execute("CREATE TABLE other (x)").connection.close(), "is no survey file"),
    ],
    ids=["missing", "text", "empty", "torn", "folder", "other database"],
)
def test_what_is_no_survey_file_is_refused_and_left_alone(tmp_path, prepare, message):
    path = tmp_path / "a.survey"
    prepare(path)
    before = path.read_bytes() if path.is_file() else None
    with pytest.raises(InputError, match=rf"a.survey: {message}"):
        Survey.open(path)
    assert (path.read_bytes() if path.is_file() else None) == before


def test_a_survey_of_a_newer_program_is_refused(path):
    connection = sqlite3.connect(path)
    assert connection.execute("PRAGMA application_id").fetchone()[0] == APPLICATION_ID
    connection.execute(f"PRAGMA user_version = {VERSION + 1}")
    connection.close()
    with pytest.raises(
        InputError, match=rf"newer version.*expected schema version {VERSION} or less, found {VERSION + 1}"
    ):
        Survey.open(path)


def test_creating_over_something_is_refused(path, tmp_path):
    with pytest.raises(InputError, match="is there already"):
        Survey.create(path)
    with pytest.raises(InputError, match="no such folder"):
        Survey.create(tmp_path / "none" / "a.survey")


def test_the_file_is_kept_with_write_ahead_log_foreign_keys_and_a_stated_schema(survey):
    pragmas = {name: survey._connection.execute(f"PRAGMA {name}").fetchone()[0] for name in
               ("journal_mode", "foreign_keys", "synchronous", "user_version")}  # fmt: skip
    assert pragmas == {"journal_mode": "wal", "foreign_keys": 1, "synchronous": 2, "user_version": VERSION}
    assert [row["version"] for row in survey._connection.execute("SELECT * FROM migration")] == [*range(1, VERSION + 1)]


def test_a_survey_that_another_program_writes_is_not_waited_for_forever(path, monkeypatch):
    monkeypatch.setattr("picker.schema.BUSY_TIMEOUT_S", 0.05)
    other = sqlite3.connect(path, isolation_level=None)
    other.execute("BEGIN IMMEDIATE")
    with Survey.open(path) as survey:
        with pytest.raises(InputError, match=r"locked.*[Cc]lose the other program"):
            survey.override(1, 1, time_s=0.004, sigma_s=0.001, why="test")
        assert len(survey.picks()) == 0, "reading goes on"
    other.close()


# picks in two layers


def test_picks_come_back_to_the_last_bit(survey, path):
    table = table_of(survey)
    assert survey.store_picks(table) == 8
    same(survey.picks(), table)
    with Survey.open(path) as again:
        same(again.picks(), table)


def test_a_trace_without_an_onset_keeps_its_missing_numbers(survey):
    table = table_of(survey)
    missing = np.where(table.channel == 2, np.nan, table.time_s)
    table = dataclasses.replace(table, time_s=missing, state=np.where(table.channel == 2, "none", "kept"))
    survey.store_picks(table)
    same(survey.picks(), table)


def test_storing_the_same_picks_again_changes_nothing(survey, path):
    survey.store_picks(table_of(survey))
    before = content(path)
    assert survey.store_picks(table_of(survey)) == 0
    assert content(path) == before


def test_picking_one_record_again_leaves_the_others_and_forgets_traces_no_longer_looked_at(survey):
    survey.store_picks(table_of(survey))
    one = table_of(survey, time_s=0.009, records=(2,))
    fewer = PickTable(**{field.name: getattr(one, field.name)[:3] for field in dataclasses.fields(PickTable)})
    assert survey.store_picks(fewer) == 4
    picks = survey.picks()
    npt.assert_array_equal(picks.record, [1, 1, 1, 1, 2, 2, 2])
    assert picks.time_s[4] == 0.009
    assert picks.time_s[0] == 0.005


def test_picks_of_a_trace_that_is_not_there_or_elsewhere_are_refused(survey, path):
    table = table_of(survey)
    before = content(path)
    with pytest.raises(
        InputError, match="record 1, trace 40: there is a pick of a trace that the survey does not have"
    ):
        survey.store_picks(dataclasses.replace(table, channel=np.where(table.channel == 4, 40, table.channel)))
    with pytest.raises(InputError, match=r"record 1, trace 1: .*shot at \(-5, 0\) m and geophone at \(0, 0\) m, found"):
        survey.store_picks(dataclasses.replace(table, receiver_xyz=table.receiver_xyz + 1.0))
    assert content(path) == before


def row(picks: PickTable, record: int, channel: int) -> int:
    return int(np.flatnonzero((picks.record == record) & (picks.channel == channel))[0])


def test_an_override_lies_on_top_and_lends_what_it_does_not_say(survey):
    survey.store_picks(table_of(survey))
    survey.override(1, 3, time_s=0.0044, why="a better look")
    picks = survey.picks()
    at = row(picks, 1, 3)
    below = table_of(survey)
    assert picks.time_s[at] == 0.0044
    assert picks.sigma_s[at] == picks.reading_sigma_s[at] == below.sigma_s[at]
    assert picks.time_break_shift_s[at] == below.time_break_shift_s[at]
    assert (picks.state[at], picks.origin[at], picks.note[at]) == ("kept", "manual", "a better look")
    assert (picks.confidence[at], picks.bias_removed_s[at]) == (1.0, 0.0)
    # 1.645: 5 % and 95 % points of a normal distribution (any table)
    npt.assert_allclose(picks.late_s[at] - picks.time_s[at], 1.645 * picks.sigma_s[at], rtol=2e-4)
    others = np.arange(len(picks)) != at
    npt.assert_array_equal(picks.time_s[others], below.time_s[others])


def test_picking_again_keeps_overrides_and_undoing_shows_the_present_automatic_pick(survey):
    survey.store_picks(table_of(survey, time_s=0.005))
    survey.override(1, 1, time_s=0.0044, sigma_s=0.0002, why="by eye")
    survey.override(1, 2, drop=True, why="air wave")
    survey.store_picks(table_of(survey, time_s=0.006))
    picks = survey.picks()
    assert picks.time_s[row(picks, 1, 1)] == 0.0044
    assert picks.state[row(picks, 1, 2)] == "dropped"
    assert survey.undo(2) == 2
    same(survey.picks(), table_of(survey, time_s=0.006))


def test_undo_and_redo_walk_back_and_forth_and_only_ever_add_to_the_log(survey):
    survey.store_picks(table_of(survey))
    survey.override(1, 1, time_s=0.001, why="one")
    survey.override(1, 1, time_s=0.002, why="two")
    survey.override(2, 1, drop=True, why="three")
    start = len(survey.log())

    def state():
        picks = survey.picks()
        return float(picks.time_s[row(picks, 1, 1)]), str(picks.state[row(picks, 2, 1)])

    assert state() == (0.002, "dropped")
    seen = []
    for step in (
        survey.undo,
        survey.undo,
        survey.undo,
        survey.undo,
        survey.redo,
        survey.redo,
        survey.redo,
        survey.redo,
    ):
        seen.append((step(), state()))
    assert seen == [
        (1, (0.002, "kept")),
        (1, (0.001, "kept")),
        (1, (0.005, "kept")),
        (0, (0.005, "kept")),
        (1, (0.001, "kept")),
        (1, (0.002, "kept")),
        (1, (0.002, "dropped")),
        (0, (0.002, "dropped")),
    ]
    assert [entry.kind for entry in survey.log()[start:]] == ["undo"] * 3 + ["redo"] * 3
    assert survey.undo() == 1, "what was redone can be undone again"
    survey.override(1, 4, time_s=0.003, why="new")
    assert survey.redo() == 0, "a new change ends what can be redone"
    assert survey.undo(5) == 3


def test_changes_made_together_are_undone_together_or_not_made_at_all(survey):
    survey.store_picks(table_of(survey))
    with pytest.raises(InputError, match="no such channel"):
        survey.apply([Override(1, 1, time_s=0.001), Override(1, 99, time_s=0.001)])
    same(survey.picks(), table_of(survey))
    survey.apply([Override(1, 1, time_s=0.001), Override(1, 1, time_s=0.002), Override(2, 2, drop=True)])
    assert survey.undo() == 1
    same(survey.picks(), table_of(survey))


def test_a_pick_can_be_set_where_none_was_looked_for(survey):
    survey.store_picks(table_of(survey, records=(1,)))
    survey.override(2, 3, time_s=0.004, sigma_s=0.001, why="seen on paper")
    picks = survey.picks()
    at = row(picks, 2, 3)
    assert (picks.time_s[at], picks.sigma_s[at], picks.origin[at]) == (0.004, 0.001, "manual")
    assert picks.offset_m[at] == 7.0
    assert np.isnan(picks.time_break_shift_s[at])


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (Override(9, 1, time_s=0.004), "record 9, trace 1: the survey has no such record; expected 1 to 2, found 9"),
        (Override(1, 9, time_s=0.004), "record 1, trace 9: the record has no such channel; expected 1 to 4, found 9"),
        (Override(1, 1, time_s=0.004), "no pick whose standard error"),
        (Override(1, 1, sigma_s=0.004), "no pick whose error could be changed"),
        (Override(1, 1), "says nothing"),
        (Override(1, 1, time_s=0.004, drop=True), "either dropped or given a time"),
        (Override(1, 1, time_s=0.004, sigma_s=0.0), "expected more than 0 ms, found 0 ms"),
        (Override(1, 1, time_s=0.004, sigma_s=float("nan")), "standard error is not positive"),
        (Override(1, 1, time_s=0.013, sigma_s=0.001), r"outside the record; expected 0 to 12\.25 ms, found 13 ms"),
        (Override(1, 1, time_s=float("nan"), sigma_s=0.001), "outside the record"),
    ],
)
def test_a_change_that_cannot_be_meant_is_refused(survey, path, change, message):
    before = content(path)
    with pytest.raises(InputError, match=message):
        survey.apply([change])
    assert content(path) == before


# the log


def test_every_change_stands_in_the_log_with_old_and_new_value_reason_and_time(survey):
    survey.store_picks(table_of(survey), reason="settings")
    survey.override(1, 1, time_s=0.001, why="one")
    entry = survey.log()[-1]
    assert (entry.kind, entry.record, entry.channel, entry.reason) == ("override", 1, 1, "one")
    assert entry.old["pick"]["time_s"] == 0.005
    assert entry.new["pick"]["time_s"] == 0.001
    assert entry.utc.endswith("Z")
    assert abs(time.time() - time.mktime(time.strptime(entry.utc[:19], "%Y-%m-%dT%H:%M:%S")) + time.timezone) < 60
    picks = [entry for entry in survey.log() if entry.kind == "pick"]
    assert len(picks) == 8
    assert {entry.reason for entry in picks} == {"settings"}
    assert len({entry.batch for entry in picks}) == 1


@pytest.mark.parametrize(
    "statement", ["UPDATE log SET reason = 'other'", "DELETE FROM log", "DELETE FROM interpretation"]
)
def test_nothing_can_be_taken_out_of_the_log_or_the_results(survey, statement):
    survey.store_interpretation({}, "{}")
    with pytest.raises(sqlite3.IntegrityError, match=r"append-only|kept as they were"):
        survey._connection.execute(statement)


def test_interpretations_are_kept_with_their_settings_and_the_latest_is_given(survey):
    assert survey.latest_interpretation() is None
    first = survey.store_interpretation({"seed": 1}, '{"depth": [1.5]}')
    second = survey.store_interpretation({"seed": 2}, '{"depth": [1.6]}')
    assert survey.latest_interpretation() == (second, {"seed": 2}, '{"depth": [1.6]}')
    assert second > first


# picks of other people


def write_picks(folder, text: str, name: str = "picks.csv"):
    (folder / name).write_text(text, encoding="utf-8")
    return folder / name


def test_picks_alone_make_a_survey_without_samples(folder):
    path = folder / "picks.survey"
    loaded = load_files(path, [write_picks(folder, "shot_x,geophone_x,time_ms\n0,4,5\n0,8,7\n10,4,6\n")], sigma_s=0.001)
    assert loaded.picks_changed == 3
    with Survey.open(path) as survey:
        picks = survey.picks()
        npt.assert_array_equal(picks.record, [1, 1, 2])
        npt.assert_array_equal(picks.offset_m, [4, 8, 6])
        assert not survey.records()[0].has_samples
        with pytest.raises(InputError, match="record 1: there are picks only, no samples"):
            survey.read(1)
        survey.override(1, 2, time_s=0.0075, why="misread")
        assert survey.picks().time_s[1] == 0.0075
    assert load_files(path, [folder / "picks.csv"], sigma_s=0.001).picks_changed == 0


def test_picks_without_numbers_find_their_records_by_place(path, folder):
    load_files(path, [write_picks(folder, "shot_x,geophone_x,time_ms,sigma_ms\n11,6,3,1\n-5,0,4,1\n90,0,9,1\n")])
    with Survey.open(path) as survey:
        picks = survey.picks()
        npt.assert_array_equal(picks.record, [1, 2, 3])
        npt.assert_array_equal(picks.channel, [1, 4, 1])
        npt.assert_allclose(picks.time_s, [0.004, 0.003, 0.009], rtol=1e-15)


def test_picks_without_numbers_are_refused_where_several_records_were_shot_at_the_place(path, folder):
    (folder / "again.sgy").write_bytes(segy(spread(record=6, source_x=-5, seed=2)))
    load_files(path, [folder / "again.sgy"])
    before = content(path)
    with pytest.raises(InputError, match=r"several records .* \(-5, 0\) m: 1, 6; expected a column record"):
        load_files(path, [write_picks(folder, "shot_x,geophone_x,time_ms,sigma_ms\n-5,0,4,1\n")])
    assert content(path) == before


def test_picks_with_numbers_at_other_places_are_refused(path, folder):
    text = "record,channel,shot_x,geophone_x,time_ms,sigma_ms\n1,1,-5,3,4,1\n"
    with pytest.raises(InputError, match=r"record 1, trace 1: the pick stands at another place"):
        load_files(path, [write_picks(folder, text)])


# killing the program

KILLED_WHILE_LOADING = """
import sys, pathlib, picker.record_rows as rows
from picker.loading import load_files
real = rows.add_traces
def slow(*args):
    real(*args)
    print("writing", flush=True)
    import time; time.sleep(60)
rows.add_traces = slow
load_files(pathlib.Path(sys.argv[1]), [pathlib.Path(name) for name in sys.argv[2:]])
"""

KILLED_WHILE_CHANGING = """
import sys
from picker.survey import Survey
survey = Survey.open(sys.argv[1])
for step in range(1, 10**6):
    survey.override(1, 1, time_s=step * 1e-8, sigma_s=1e-3, why=str(step))
    print(step, flush=True)
"""


def killed(script: str, *arguments: object, after_lines: int) -> list[str]:
    """Run a script and kill it after it has printed some lines; what it printed."""
    process = subprocess.Popen([sys.executable, "-c", script, *map(str, arguments)], stdout=subprocess.PIPE, text=True)
    lines = [process.stdout.readline() for _ in range(after_lines)]
    process.kill()
    lines += process.stdout.readlines()
    process.wait()
    process.stdout.close()
    assert lines[-1], "the script ended by itself"
    return lines


def test_killed_while_loading_the_survey_is_as_it_was_and_can_be_loaded_again(path, folder):
    (folder / "more.sgy").write_bytes(segy(spread(record=3)))
    before = content(path)
    killed(KILLED_WHILE_LOADING, path, folder / "more.sgy", after_lines=1)
    assert content(path) == before
    assert load_files(path, [folder / "more.sgy"]).new == {3}


def test_killed_while_creating_there_is_no_survey_file(folder):
    path = folder / "new.survey"
    killed(KILLED_WHILE_LOADING, path, folder / "shot1.sgy", after_lines=1)
    assert not path.exists()
    assert load_files(path, [folder / "shot1.sgy"]).created


def test_killed_while_changing_everything_reported_as_done_is_there(path):
    reported = killed(KILLED_WHILE_CHANGING, path, after_lines=20)
    with Survey.open(path) as survey:
        changes = [entry for entry in survey.log() if entry.kind == "override"]
        assert len(changes) - len(reported) in (0, 1), "at most the one that was not reported yet"
        assert survey.picks().time_s[0] == len(changes) * 1e-8
        assert survey._connection.execute("PRAGMA integrity_check").fetchone()[0] == "ok"
