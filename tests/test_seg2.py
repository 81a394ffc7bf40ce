import os
import struct
import time

import numpy as np
import numpy.testing as npt
import pytest
from click.testing import CliRunner
from made_seg2 import seg2, spread, trace_entries

from interp.cli import main
from picker.errors import InputError
from picker.records import read_records, scan_file
from picker.seg2_layout import unpack_20_bits
from picker.units import METRES_PER_FOOT


@pytest.fixture
def put(tmp_path):
    def write(content, name="7.dat"):
        path = tmp_path / name
        path.write_bytes(content)
        return path

    return write


def texts(findings, severity=None):
    return [finding.text for finding in findings if severity in (None, finding.severity)]


@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("code", [1, 2, 3, 4, 5])
def test_a_record_reads_back_equal_in_every_format_and_byte_order(put, code, order):
    traces = spread()
    (record,) = read_records([put(seg2(traces, code=code, order=order))])
    npt.assert_array_equal(record.samples, np.array([samples for samples, _ in traces], dtype=np.float32))
    assert record.interval_s == 0.00025
    npt.assert_array_equal(record.start_s, np.full(4, -0.01))
    npt.assert_array_equal(record.channel, [1, 2, 3, 4])
    npt.assert_array_equal(record.receiver_xyz[:, 0], [0, 2, 4, 6])
    npt.assert_array_equal(record.source_xyz, [-2, 0, 0])
    assert record.record == 7


def test_packed_samples_decode_to_the_values_of_the_standard():
    # one word of four exponents, the lowest first, and four mantissas in ones' complement: 1, 2 * 2, -3 * 4, 4 * 8
    assert unpack_20_bits(bytes.fromhex("10320100 0200FCFF0400"), "<", 4).tolist() == [1, 4, -12, 32]
    assert unpack_20_bits(bytes.fromhex("32100001 0002FFFC0004"), ">", 3).tolist() == [1, 4, -12]


def test_samples_are_descaled_and_delay_is_applied(put):
    # Pullan (1990): DESCALING_FACTOR times the sample is millivolts, DELAY is from the time break to the first sample
    (record,) = read_records([put(seg2([([3, -2, 0, 1] * 10, trace_entries(DESCALING_FACTOR="0.5", delay="-0.01"))]))])
    npt.assert_array_equal(record.samples[0, :4], [1.5, -1.0, 0.0, 0.5])
    assert record.start_s[0] == -0.01


def test_three_coordinates_polarity_and_feet_are_read(put):
    entries = trace_entries(receiver="12.5 0 1.5", source="0 0 0.3", POLARITY="-1")
    (record,) = read_records([put(seg2([([1, 2, 3, 4] * 20, entries)]))])
    npt.assert_allclose(record.receiver_xyz[0], [12.5, 0, 1.5])
    npt.assert_allclose(record.source_xyz, [0, 0, 0.3])
    assert record.polarity[0] == -1
    feet = put(seg2([([1, 2, 3, 4] * 20, entries)], file_entries=["UNITS FEET"]), "feet.dat")
    npt.assert_allclose(read_records([feet])[0].receiver_xyz[0], np.array([12.5, 0, 1.5]) * METRES_PER_FOOT)


def test_traces_come_by_channel_and_their_delays_stay_their_own(put):
    traces = [
        ([1] * 40, trace_entries(channel=2, receiver="2", delay="-0.02")),
        ([2] * 30, trace_entries(channel=1, receiver="0", delay="0.005")),
    ]
    (record,) = read_records([put(seg2(traces))])
    npt.assert_array_equal(record.samples[:, 0], [2, 1])
    npt.assert_array_equal(record.start_s, [0.005, -0.02])
    npt.assert_array_equal(record.valid, [30, 40])
    npt.assert_array_equal(record.samples[0, 30:], 0)


def test_what_a_file_leaves_open_is_said(put):
    entries = trace_entries(delay=None, SHOT_SEQUENCE_NUMBER=None, SKEW="-0.0001")
    headers, findings = scan_file(put(seg2([([1, 2] * 40, entries)], file_entries=[]), "line2_0012.dat"))
    assert headers[0].record == 12
    assert any("No DELAY" in text for text in texts(findings, "look"))
    assert any("unit of length (UNITS) is not set" in text for text in texts(findings, "look"))
    assert any("record 12 here, after its name" in text for text in texts(findings, "note"))
    assert any("SKEW of up to 0.1 ms" in text for text in texts(findings, "note"))


def test_a_file_in_order_needs_no_look(put):
    _, findings = scan_file(put(seg2(spread())))
    assert texts(findings, "look") == []


def test_a_source_that_moves_within_a_record_is_pointed_out(put):
    traces = spread(traces=2)
    traces[1] = (traces[1][0], trace_entries(channel=2, receiver="2", source="5"))
    assert any("SOURCE_LOCATION changes" in text for text in texts(scan_file(put(seg2(traces)))[1], "look"))


def test_uphole_traces_are_left_out(put):
    traces = [*spread(traces=2), ([1] * 60, trace_entries(channel=3, receiver="4", TRACE_TYPE="UPHOLE_DATA"))]
    headers, findings = scan_file(put(seg2(traces)))
    assert headers[0].channel.tolist() == [1, 2]
    assert any("left out: 1 (UPHOLE_DATA)" in text for text in texts(findings))


def test_long_notes_and_room_between_pointers_do_not_confuse(put):
    entries = [*trace_entries(), "NOTE \n DISPLAY_SCALE 50 \n\n", "NOTE twice"]
    content = seg2([([1, 2] * 40, entries)], pointer_room=4224)
    assert read_records([put(content)])[0].samples.shape == (1, 80)


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"\x55\x3a", "the file is cut off"),
        (b"\x55\x3a\x01\x00" + bytes(400), "gives no room for its traces"),
        (b"\x3a\x55\x00\x01" + bytes(400), "gives no room for its traces"),
        (seg2(spread())[:-1], "trace 4: the file is cut off"),
        (seg2(spread())[:200], "is cut off"),
        (seg2(spread()).replace(b"\x22\x44", b"\x00\x00"), "does not lead to a trace"),
        (seg2([([1] * 60, trace_entries(interval=None))]), "no sample interval"),
        (seg2([([1] * 60, trace_entries(interval="0"))]), "no sample interval"),
        (seg2([([1] * 60, trace_entries(receiver=None))]), "no position of a shot or geophone"),
        (seg2([([], trace_entries())]), "no traces of geophones with samples"),
    ],
)
def test_what_cannot_be_used_is_refused_with_one_message(put, content, message):
    with pytest.raises(InputError, match=message):
        scan_file(put(content))


def test_an_unknown_format_code_is_refused(put):
    content = bytearray(seg2(spread(traces=1)))
    first = struct.unpack("<I", content[32:36])[0]
    content[first + 12] = 9
    with pytest.raises(InputError, match="unknown format of samples; expected a data format code from 1 to 5"):
        scan_file(put(bytes(content)))


def test_no_damage_gives_anything_but_a_record_or_a_message(put):
    rng = np.random.default_rng(5)
    whole = seg2(spread())
    began = time.monotonic()
    read = 0
    for number in range(400):
        content = bytearray(whole)
        kind = number % 4
        if kind == 0:
            for place in rng.integers(0, 900, 6):
                content[place] = rng.integers(256)
        elif kind == 1:
            content = content[: rng.integers(2, len(content))]
        elif kind == 2:
            place = int(rng.integers(2, len(content) - 4))
            content[place : place + 4] = b"\xff\xff\xff\xff"
        else:
            a, b = sorted(rng.integers(2, len(content), 2).tolist())
            content = content[:a] + content[b:] + content[a:b]
        try:
            read += len(read_records([put(bytes(content))]))
        except InputError:
            continue
    assert 0 < read < 400
    assert time.monotonic() - began < 60  # nothing hangs: a file takes milliseconds


def test_a_file_that_changed_after_loading_is_noticed(put, tmp_path):
    path = put(seg2(spread()))
    headers, _ = scan_file(path)
    path.write_bytes(seg2(spread(traces=3)))
    from picker.records import read_shot

    with pytest.raises(InputError, match="is not the file that was loaded"):
        read_shot(headers[0])


def test_the_commands_take_them(put, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    put(seg2(spread(samples=400)))
    runner = CliRunner()
    result = runner.invoke(main, ["load", "line.survey", "7.dat"])
    assert result.exit_code == 0, result.output
    assert "1 record loaded" in result.output
    assert "in the survey already" in runner.invoke(main, ["load", "line.survey", "7.dat"]).output
    assert runner.invoke(main, ["pick", "line.survey"]).exit_code in (0, 1)
    before = (tmp_path / "line.survey").read_bytes()
    put(seg2(spread())[:-9], "8.dat")
    refused = runner.invoke(main, ["load", "line.survey", "8.dat"])
    assert refused.exit_code == 2
    assert "8.dat, trace 4: the file is cut off" in refused.output
    assert (tmp_path / "line.survey").read_bytes() == before
    assert not [name for name in os.listdir(tmp_path) if name.startswith(".")]
