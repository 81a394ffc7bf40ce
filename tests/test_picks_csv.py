"""Picks as CSV: ours there and back, somebody else's from shot, geophone and time upwards, bad cells refused."""

from __future__ import annotations

import dataclasses

import numpy as np
import numpy.testing as npt
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from picker.errors import InputError
from picker.picks import PickTable
from picker.picks_csv import COLUMNS, picks_to_csv, read_picks_csv, write_picks_csv

NUMBERS = st.floats(-1e4, 1e4, allow_nan=False).map(lambda value: value + 0.0)  # no negative zero
SMALL = st.floats(1e-9, 10.0)
OR_MISSING = st.one_of(st.just(float("nan")), st.floats(-10, 10).map(lambda value: value + 0.0))
NOTES = st.text(st.characters(codec="utf-8", exclude_characters="\0\r", exclude_categories=["Cs"]), max_size=12)


@st.composite
def tables(draw):
    """Any picks that a survey can hold: one shot place a record."""
    traces = draw(st.lists(st.tuples(st.integers(1, 9), st.integers(1, 10**6)), min_size=1, max_size=8, unique=True))
    shots = {record: draw(st.tuples(NUMBERS, NUMBERS, NUMBERS)) for record, _ in traces}
    rows = len(traces)

    def column(values):
        return np.array([draw(values) for _ in range(rows)])

    source = np.array([shots[record] for record, _ in traces])
    receiver = np.array([draw(st.tuples(NUMBERS, NUMBERS, NUMBERS)) for _ in traces])
    state = column(st.sampled_from(["kept", "dropped", "none"]))
    kept = state == "kept"
    return PickTable(
        record=np.array([record for record, _ in traces]),
        channel=np.array([channel for _, channel in traces]),
        source_xyz=source,
        receiver_xyz=receiver,
        offset_m=np.hypot(*(receiver - source)[:, :2].T),
        time_s=np.where(kept, column(st.floats(-1, 10).map(lambda value: value + 0.0)), column(OR_MISSING)),
        sigma_s=np.where(kept, column(SMALL), column(st.one_of(st.just(float("nan")), SMALL))),
        early_s=column(OR_MISSING),
        late_s=column(OR_MISSING),
        reading_sigma_s=column(OR_MISSING),
        bias_removed_s=column(OR_MISSING),
        time_break_shift_s=column(OR_MISSING),
        time_break_sigma_s=column(OR_MISSING),
        geophone_sigma_s=column(OR_MISSING),
        confidence=column(OR_MISSING),
        state=state,
        origin=column(st.sampled_from(["auto", "manual"])),
        note=np.array([draw(NOTES) for _ in range(rows)], dtype=np.str_),
    )


@given(table=tables())
@settings(deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=80)
def test_picks_written_and_read_back_are_the_same_to_the_last_bit(tmp_path, table):
    path = tmp_path / "picks.csv"
    write_picks_csv(table, path)
    back = read_picks_csv(path)
    for field in dataclasses.fields(PickTable):
        npt.assert_array_equal(getattr(back.table, field.name), getattr(table, field.name), err_msg=field.name)
    assert back.has_record
    assert back.has_channel


def a_table() -> PickTable:
    return PickTable(
        record=[3, 3],
        channel=[1, 2],
        source_xyz=[[-5.0, 0.0, 101.5]] * 2,
        receiver_xyz=[[0.0, 0.0, 101.0], [2.0, 0.0, 100.5]],
        offset_m=[5.0, 7.0],
        time_s=[0.0123, np.nan],
        sigma_s=[0.0005, np.nan],
        early_s=[0.0115, np.nan],
        late_s=[0.0131, np.nan],
        reading_sigma_s=[0.0006, np.nan],
        bias_removed_s=[0.0, np.nan],
        time_break_shift_s=[0.001, 0.001],
        time_break_sigma_s=[0.0002, 0.0002],
        geophone_sigma_s=[0.0003, 0.0003],
        confidence=[0.99, 0.0],
        state=["kept", "none"],
        origin=["auto", "auto"],
        note=["", "noise, all of it"],
    )


def test_columns_stand_in_the_order_of_the_contract_with_times_in_milliseconds_and_short_numbers():
    lines = picks_to_csv(a_table()).splitlines()
    # the order that everybody's picks come in through
    assert lines[0] == (
        "record,channel,source_x_m,source_y_m,source_z_m,receiver_x_m,receiver_y_m,receiver_z_m,offset_m,time_ms,"
        "sigma_ms,early_ms,late_ms,reading_sigma_ms,bias_removed_ms,time_break_shift_ms,time_break_sigma_ms,"
        "geophone_sigma_ms,confidence,state,origin,note"
    )
    assert tuple(lines[0].split(",")) == COLUMNS
    assert lines[1] == "3,1,-5,0,101.5,0,0,101,5,12.3,0.5,11.5,13.1,0.6,0,1,0.2,0.3,0.99,kept,auto,"
    assert lines[2].startswith("3,2,-5,0,101.5,2,0,100.5,7,,,,,,,1,0.2,0.3,0,none,auto,")
    assert lines[2].endswith('"noise, all of it"')


def test_line_ends_in_a_note_come_back_as_plain_ones(tmp_path):
    path = tmp_path / "picks.csv"
    write_picks_csv(dataclasses.replace(a_table(), note=["one\rtwo\r\nthree", "x"]), path)
    npt.assert_array_equal(read_picks_csv(path).table.note, ["one\ntwo\nthree", "x"])


def test_feet_leave_and_come_back(tmp_path):
    path = tmp_path / "picks.csv"
    write_picks_csv(a_table(), path, units="ft")
    assert "source_x_ft" in path.read_text(encoding="utf-8")
    back = read_picks_csv(path).table
    npt.assert_allclose(back.receiver_xyz, a_table().receiver_xyz, rtol=1e-14, atol=1e-14)  # rounding twice
    npt.assert_array_equal(back.time_s, a_table().time_s)


@pytest.fixture
def put(tmp_path):
    def write(text: str | bytes, name: str = "picks.csv"):
        path = tmp_path / name
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return path

    return write


PLAIN = "time_ms,shot_x,geophone_x,sigma_ms\n5,0,4,0.5\n7,0,8,0.5\n6,10,4,0.5\n"


@pytest.mark.parametrize(
    "text",
    [
        PLAIN.encode(),
        PLAIN.encode("utf-8-sig"),
        PLAIN.encode("utf-16"),
        PLAIN.replace(",", ";").replace(".", ",").encode(),
        PLAIN.replace(",", "\t").replace("\n", "\r\n").encode(),
        ("# read by eye\n\n" + PLAIN + "\n,,,\n").encode(),
        PLAIN.replace("time_ms,shot_x,geophone_x", "Time (ms),Source X (m),Receiver X [m]").encode(),
    ],
    ids=["plain", "mark", "utf-16", "semicolons", "tabs", "comments", "other names"],
)
def test_shot_geophone_and_time_are_enough_in_any_dress(put, text):
    read = read_picks_csv(put(text))
    table = read.table
    npt.assert_allclose(table.time_s, [0.005, 0.007, 0.006], rtol=1e-15)
    npt.assert_allclose(table.sigma_s, 0.0005, rtol=1e-15)
    npt.assert_array_equal(table.record, [1, 1, 2])
    npt.assert_array_equal(table.channel, [1, 2, 1])
    npt.assert_array_equal(table.offset_m, [4, 8, 6])
    npt.assert_array_equal(table.state, "kept")
    npt.assert_array_equal(table.origin, "manual")
    assert np.isnan(table.time_break_sigma_s).all(), "what nobody gave is not known, not zero"
    assert (read.has_record, read.has_channel) == (False, False)


def test_numbers_in_feet_are_understood(put):
    table = read_picks_csv(put("shot_x_ft,receiver_x_ft,source_z_ft,time_ms,sigma_ms\n0,10,100,5,1\n")).table
    npt.assert_allclose(table.receiver_xyz[0, 0], 3.048, rtol=1e-15)
    npt.assert_allclose(table.source_xyz[0, 2], 30.48, rtol=1e-15)


def test_picks_without_errors_are_refused_until_one_is_given_and_then_say_so(put):
    path = put("shot_x,geophone_x,time_ms\n0,4,5\n0,8,7\n")
    with pytest.raises(InputError, match=r"picks come without errors.*--sigma-ms"):
        read_picks_csv(path)
    read = read_picks_csv(path, sigma_s=0.001)
    npt.assert_array_equal(read.table.sigma_s, 0.001)
    assert all("1 ms assumed" in note for note in read.table.note)
    assert any("1 ms is assumed" in finding.text for finding in read.findings)
    # 5 % and 95 % points of a normal distribution: 1.645 standard errors (any table of the normal distribution)
    npt.assert_allclose(read.table.late_s - read.table.time_s, 1.645e-3, rtol=2e-4)


def test_an_empty_time_is_a_trace_without_an_onset(put):
    table = read_picks_csv(put("shot_x,geophone_x,time_ms,sigma_ms\n0,4,5,1\n0,8,,\n")).table
    npt.assert_array_equal(table.state, ["kept", "none"])


def test_times_that_are_too_short_for_their_offsets_are_found(put):
    read = read_picks_csv(put("shot_x,geophone_x,time_ms,sigma_ms\n0,20,0.02,0.001\n0,40,0.03,0.001\n"))
    assert any(finding.severity == "look" and "milliseconds" in finding.proposal for finding in read.findings)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "holds no rows.*nothing"),
        ("shot_x,geophone_x,time_ms,sigma_ms\n", "holds no rows.*one line"),
        ("shot_x,time_ms\n0,5\n", r"line 1: no column receiver_x_m; expected.*found shot_x, time_ms"),
        ("shot_x,geophone_x,receiver_x_m,time_ms\n0,1,1,5\n", "line 1: two columns for receiver_x_m"),
        (
            "shot_x,geophone_x,time_ms,sigma_ms\n0,4,5,1\n0,8,soon,1\n",
            "line 3, column time_ms: .*a number, found 'soon'",
        ),
        ("shot_x,geophone_x,time_ms,sigma_ms\n0,4,5,1\n0,,6,1\n", "line 3, column geophone_x: .*a number, found ''"),
        ("shot_x,geophone_x,time_ms,sigma_ms\n0,4,inf,1\n", "line 2, column time_ms"),
        ("shot_x,geophone_x,time_ms,sigma_ms\n0,4,1e999999,1\n", "line 2, column time_ms"),
        ("shot_x,geophone_x,time_ms,sigma_ms\n0,4,5,0\n", "line 2, column sigma_ms: .*more than 0 ms, found '0'"),
        ("shot_x,geophone_x,time_ms,sigma_ms\n0,4,5,-1\n", "line 2, column sigma_ms: .*more than 0 ms"),
        ("shot_x,geophone_x,time_ms,sigma_ms\n0,4,5,\n", "line 2, column sigma_ms: .*--sigma-ms"),
        ("shot_x,geophone_x,time_ms,sigma_ms,state\n0,4,,1,kept\n", "line 2, column time_ms: .*a pick that is kept"),
        ("shot_x,geophone_x,time_ms,sigma_ms,state\n0,4,5,1,good\n", "line 2, column state: .*kept, dropped, none"),
        ("record,shot_x,geophone_x,time_ms,sigma_ms\n1.5,0,4,5,1\n", "line 2, column record: .*whole number"),
        ("record,shot_x,geophone_x,time_ms,sigma_ms\n1e99,0,4,5,1\n", "line 2, column record: .*whole number"),
        ("shot_x,geophone_x,time_ms,sigma_ms\n0,4,5\n", "line 2: wrong number of cells; expected 4, found 3"),
        ("shot_x,geophone_x,time_ms,sigma_ms\n0,4,5,1\n\n0,4,6,1\n", "line 4: the same shot and geophone as in line 2"),
        ("record,shot_x,geophone_x,time_ms,sigma_ms\n1,0,4,5,1\n1,2,8,6,1\n", "line 3: the shot stands elsewhere"),
    ],
)
def test_what_cannot_be_meant_is_refused_with_line_and_column(put, text, message):
    with pytest.raises(InputError, match=rf"picks.csv\b.*: {message}"):
        read_picks_csv(put(text))


def test_binary_data_and_a_missing_file_are_refused(put, tmp_path):
    with pytest.raises(InputError, match="is no text"):
        read_picks_csv(put(b"PK\x03\x04\0\0"))
    with pytest.raises(InputError, match="cannot be read"):
        read_picks_csv(tmp_path / "none.csv")


@pytest.mark.parametrize(
    "header",
    ["shot x,geophone x,ms", "Shot X (m),Geophone X (m),Time (ms)", "sx,gx,t_ms", "x_source,x_receiver,pick_ms"],
)
def test_other_common_headings_are_understood(put, header):
    read = read_picks_csv(put(f"{header}\n0,4,5\n0,8,7\n"), 5e-4)
    assert read.table.time_s.tolist() == [0.005, 0.007]
    assert read.table.receiver_xyz[:, 0].tolist() == [4, 8]
    assert not any("no unit" in finding.text for finding in read.findings)


def test_a_time_without_unit_is_milliseconds_and_that_is_said(put):
    read = read_picks_csv(put("shot_x,geophone_x,time\n0,4,5\n0,8,7\n"), 5e-4)
    assert read.table.time_s.tolist() == [0.005, 0.007]
    assert any("time has no unit: it is taken as milliseconds" in finding.text for finding in read.findings)


def test_numbers_without_column_names_are_shot_geophone_time_and_record_and_that_is_said(put):
    read = read_picks_csv(put("0,4,5.5,3\n0,8,7.25,3\n10,4,6,4\n"), 5e-4)
    assert read.table.record.tolist() == [3, 3, 4]
    assert read.table.source_xyz[:, 0].tolist() == [0, 0, 10]
    assert read.table.time_s.tolist() == [0.0055, 0.00725, 0.006]
    assert any(finding.severity == "look" and "no line of column names" in finding.text for finding in read.findings)
    assert read_picks_csv(put("0;4;5,5\n0;8;7,25\n"), 5e-4).table.time_s.tolist() == [0.0055, 0.00725]


def test_five_columns_without_names_are_refused_rather_than_guessed(put):
    with pytest.raises(InputError, match="no column source_x_m"):
        read_picks_csv(put("0,4,5,1,1\n0,8,7,1,2\n"), 5e-4)
