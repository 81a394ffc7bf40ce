"""The SEG-Y reader against values that the standard and other people's decoders give."""

from __future__ import annotations

import csv
import struct
from pathlib import Path

import numpy as np
import numpy.testing as npt
import pytest
from made_segy import file_header, segy, spread, trace

from picker.records import read_records, scan_file

# System/360 single-precision hexadecimal floats. Words with their values as published in the tests of the open reader
# TGSAI/segy (tests/test_ibm_float.py) and by the definition (-1)^s 16^(e-64) f / 2^24; checked with obspy's decoder.
IBM_WORDS = {
    0x00000000: 0.0,
    0x41100000: 1.0,
    0xC1100000: -1.0,
    0x41200000: 2.0,
    0x42640000: 100.0,
    0x4276A000: 118.625,
    0xC276A000: -118.625,
    0x40280000: 0.15625,
    0xC0280000: -0.15625,
    0x40600000: 0.375,
    0xBEC80000: -0.0030517578125,
    0xC2808000: -128.5,
    0x427B7333: 123.44999694824219,
    0x40199999: 0.09999996423721313,
    0x413243F7: 3.1415929794311523,
    0xC6820783: -8521603.0,
    0x46000001: 1.0,  # not normalised, must decode all the same
}
IBM_LARGEST_FLOAT32 = 0x60FFFFFF
LARGEST_FLOAT32 = 3.4028234663852886e38


@pytest.fixture
def site_a(field_records):
    return field_records / "site_a" / "segy"


def read_one(path: Path, content: bytes):
    path.write_bytes(content)
    (record,) = read_records([path])
    return record


@pytest.mark.parametrize("order", [">", "<"])
def test_ibm_words_of_the_standard_decode_to_their_published_values(tmp_path, order):
    words = np.array(list(IBM_WORDS), dtype=np.uint32)
    content = segy([trace(words, 1, order, sample_interval_us=250)], order, 1, len(words))
    record = read_one(tmp_path / "ibm.sgy", content)
    npt.assert_array_equal(record.samples[0], np.array(list(IBM_WORDS.values()), dtype=np.float32))


def test_largest_ibm_word_that_float32_holds_does_not_become_infinite_and_larger_ones_stop_there(tmp_path):
    words = np.array([IBM_LARGEST_FLOAT32, 0x7FFFFFFF, 0xFFFFFFFF, 0x00100000], dtype=np.uint32)
    record = read_one(tmp_path / "ibm.sgy", segy([trace(words, 1, sample_interval_us=250)], ">", 1, 4))
    # SEGY-IBM-60FFFFFF gives the value to 1e-7; 5.4e-79 is below the smallest float32
    npt.assert_allclose(record.samples[0], [LARGEST_FLOAT32, LARGEST_FLOAT32, -LARGEST_FLOAT32, 0.0], rtol=1e-7)


@pytest.mark.parametrize("order", [">", "<"])
def test_doubles_that_float32_cannot_hold_stop_at_the_largest_that_it_can(tmp_path, order):
    content = segy([trace(np.array([1e300, -1e300, 0.1]), 6, order, sample_interval_us=250)], order, 6, 3)
    record = read_one(tmp_path / "a.sgy", content)
    npt.assert_allclose(record.samples[0], [LARGEST_FLOAT32, -LARGEST_FLOAT32, 0.1], rtol=1e-7)  # float32 rounding


@pytest.mark.parametrize("order", [">", "<"])
@pytest.mark.parametrize("code", [2, 3, 5, 6, 8, 9])
def test_integers_and_ieee_floats_read_as_written_in_both_byte_orders(tmp_path, order, code):
    values = np.array([[0, 1, -1, 100, -128, 127]])
    record = read_one(tmp_path / "a.sgy", segy([trace(values[0], code, order, sample_interval_us=250)], order, code, 6))
    npt.assert_array_equal(record.samples, values)


@pytest.mark.parametrize("code", [10, 11, 12, 16])
def test_unsigned_integers_of_revision_2_read_as_written(tmp_path, code):
    values = np.array([0, 1, 200, 255])
    record = read_one(tmp_path / "a.sgy", segy([trace(values, code, sample_interval_us=250)], ">", code, 4))
    npt.assert_array_equal(record.samples[0], values)


def test_samples_and_headers_agree_with_two_independent_readers(tmp_path):
    segyio = pytest.importorskip("segyio")
    from obspy.io.segy.segy import _read_segy

    path = tmp_path / "a.sgy"
    words = np.random.default_rng(5).integers(0, 2**32, size=(3, 40), dtype=np.uint32)
    words = (words & 0x80FFFFFF) | 0x41000000 | (np.uint32(5) << 20)  # exponents and first digits of ordinary numbers
    traces = [
        trace(row, 1, field_record=7, trace_in_record=n + 1, group_x=3 * n, source_x=-4, sample_interval_us=125)
        for n, row in enumerate(words)
    ]
    record = read_one(path, segy(traces, ">", 1, 40, sample_interval_us=125))
    with segyio.open(path, strict=False, ignore_geometry=True) as file:
        npt.assert_array_equal(record.samples, file.trace.raw[:])
        npt.assert_array_equal(record.channel, file.attributes(segyio.TraceField.TraceNumber)[:])
        npt.assert_array_equal(record.receiver_xyz[:, 0], file.attributes(segyio.TraceField.GroupX)[:])
    npt.assert_array_equal(record.samples, [one.data for one in _read_segy(str(path)).traces])
    assert record.record == 7
    assert record.interval_s == pytest.approx(125e-6, rel=1e-12)


@pytest.mark.parametrize(
    ("raw", "scalar", "metres"),
    # SEG-Y rev 1: positive multiplies, negative divides; zero counts as one (the latter from memory)
    [
        (12345, -100, 123.45),
        (12, 10, 120.0),
        (7, 1, 7.0),
        (7, -1, 7.0),
        (5012345, -10, 501234.5),
        (7, 0, 7.0),
        (-20, 0, -20.0),
    ],
)
def test_scalars_of_coordinates_and_elevations_multiply_divide_or_count_as_one(tmp_path, raw, scalar, metres):
    words = dict.fromkeys(("source_x", "group_y", "receiver_elevation", "source_elevation", "source_depth"), raw)
    made = trace(
        np.ones(4), sample_interval_us=250, coordinate_scalar=scalar, elevation_scalar=scalar, trace_id=1, **words
    )
    record = read_one(tmp_path / "a.sgy", segy([made], samples=4))
    found = [
        record.source_xyz[0],
        record.receiver_xyz[0, 1],
        record.receiver_xyz[0, 2],
        record.source_xyz[2],
        record.source_depth_m,
    ]
    npt.assert_allclose(found, metres, rtol=1e-12)


def test_elevations_do_not_take_the_scalar_of_coordinates(tmp_path):
    # SEGY-SCALARS: the scalar at 69-70 serves bytes 41-68, that at 71-72 serves 73-88
    made = trace(np.ones(4), sample_interval_us=250, coordinate_scalar=-100, group_x=250, receiver_elevation=12)
    record = read_one(tmp_path / "a.sgy", segy([made], samples=4))
    npt.assert_array_equal(record.receiver_xyz, [[2.5, 0.0, 12.0]])


@pytest.mark.parametrize(
    ("raw", "scalar", "start_ms"), [(-5, -10, -0.5), (-20, 1, -20.0), (100, -100, 1.0), (-100, 0, -100)]
)
def test_delay_recording_time_with_its_scalar_is_the_time_of_the_first_sample(tmp_path, raw, scalar, start_ms):
    # SEGY-TIMES-SCALAR: bytes 215-216 scale bytes 95-114 to milliseconds
    made = trace(np.ones(4), sample_interval_us=250, delay=raw, times_scalar=scalar)
    record = read_one(tmp_path / "a.sgy", segy([made], samples=4))
    npt.assert_allclose(record.start_s, start_ms * 1e-3, rtol=1e-12)


@pytest.mark.parametrize(("blocks", "first_byte"), [(0, 3600), (1, 6800), (2, 10000)])
def test_extended_textual_headers_move_the_first_trace(tmp_path, blocks, first_byte):
    # SEGY-LAYOUT: 24 traces of 1000 samples of 4 bytes give files of 105360, 108560 and 111760 bytes
    traces = [trace(np.ones(1000), trace_in_record=n + 1, sample_interval_us=250) for n in range(24)]
    content = segy(traces, samples=1000, extended_text=blocks)
    assert len(content) == 105360 + 3200 * blocks
    record = read_one(tmp_path / "a.sgy", content)
    assert record.origin.first_byte == first_byte
    assert record.samples.shape == (24, 1000)


def test_extended_textual_headers_of_unstated_number_end_with_their_stanza(tmp_path):
    # -1 in bytes 3505-3506: as many as come before ((SEG: EndText)) (SEG-Y rev 1, from memory)
    header = file_header(sample_interval_us=250, sample_count=4, format_code=5, revision=256, extended_text=-1)
    blocks = b"\x40" * 3200 + "((SEG: EndText))".encode("cp037").ljust(3200, b"\x40")
    record = read_one(tmp_path / "a.sgy", header + blocks + trace(np.arange(4), sample_interval_us=250))
    npt.assert_array_equal(record.samples, [[0, 1, 2, 3]])


def test_revision_2_words_override_the_short_ones(tmp_path):
    # SEGY-BINARY-BYTES: 3269 samples, 3273 interval (float64), 3521 first trace; SEGY-REVISION: 0200 is 2.0
    header = bytearray(file_header(sample_interval_us=31, sample_count=9, format_code=5, revision=0x0200))
    struct.pack_into(">i", header, 3268, 4)
    struct.pack_into(">d", header, 3272, 31.25)
    struct.pack_into(">Q", header, 3520, 3700)
    record = read_one(tmp_path / "a.sgy", bytes(header) + b"\0" * 100 + trace(np.arange(4)))
    npt.assert_array_equal(record.samples, [[0, 1, 2, 3]])
    assert record.interval_s == 31.25e-6


@pytest.mark.parametrize("code", [2, 3, 4])
def test_positions_in_degrees_are_refused(tmp_path, code):
    from picker.errors import InputError

    path = tmp_path / "a.sgy"
    path.write_bytes(segy(spread(coordinate_units=code)))  # SEGY-COORD-UNITS
    with pytest.raises(InputError, match=r"trace 1: has positions in degrees.*metres"):
        scan_file(path)


def test_field_records_of_site_a_read_with_the_geometry_of_their_table(site_a):
    files = sorted(site_a.glob("*.sgy"))
    records = read_records(files)
    assert len(records) == 40
    assert sum(record.samples.shape[0] for record in records) == 960
    with (site_a / "geometry.csv").open(encoding="utf-8", newline="") as file:
        table = {(int(row["record"]), int(row["channel"])): row for row in csv.DictReader(file)}
    for record in records:
        npt.assert_array_equal(record.start_s, -0.1)
        assert record.interval_s in (0.000125, 0.001)
        for row, channel in enumerate(record.channel):
            line = table.pop((record.record, int(channel)))
            assert record.source_xyz.tolist() == [float(line["source_x_m"]), 0.0, float(line["source_z_m"])]
            assert record.receiver_xyz[row].tolist() == [float(line["receiver_x_m"]), 0.0, float(line["receiver_z_m"])]
    assert not table
    assert {record.interval_s for record in records} == {0.000125, 0.001}


def test_samples_of_site_a_agree_with_segyio_bit_for_bit(site_a):
    segyio = pytest.importorskip("segyio")
    for path in sorted(site_a.glob("*.sgy")):
        with segyio.open(path, strict=False, ignore_geometry=True) as file:
            npt.assert_array_equal(
                np.concatenate([record.samples for record in read_records([path])]), file.trace.raw[:]
            )
