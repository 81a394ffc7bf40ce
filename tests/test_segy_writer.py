from __future__ import annotations

import dataclasses
import struct

import numpy as np
import numpy.testing as npt
import pytest

from synthetic_gathers.segy_writer import FieldRecord, write_segy

# First byte (counted from 1) and struct code of each word. SEG-Y revision 0 (Barry, Cavers, Kneale 1975) and 1 (2002),
# as read in repository TGSAI/segy, src/segy/standards/fields: checks SEGY-TRACE-BYTES and SEGY-BINARY-BYTES.
TRACE_WORDS = {
    "trace_sequence_line": (1, ">i"),
    "trace_sequence_file": (5, ">i"),
    "field_record": (9, ">i"),
    "trace_in_record": (13, ">i"),
    "energy_source_point": (17, ">i"),
    "trace_identification": (29, ">h"),
    "vertically_summed": (31, ">h"),
    "data_use": (35, ">h"),
    "offset": (37, ">i"),
    "receiver_elevation": (41, ">i"),
    "source_elevation": (45, ">i"),
    "source_depth": (49, ">i"),
    "elevation_scalar": (69, ">h"),
    "coordinate_scalar": (71, ">h"),
    "source_x": (73, ">i"),
    "source_y": (77, ">i"),
    "group_x": (81, ">i"),
    "group_y": (85, ">i"),
    "coordinate_units": (89, ">h"),
    "delay_recording_time": (109, ">h"),
    "sample_count": (115, ">H"),
    "sample_interval_us": (117, ">H"),
    "times_scalar": (215, ">h"),
}
BINARY_WORDS = {
    "traces_per_ensemble": (3213, ">h"),
    "sample_interval_us": (3217, ">H"),
    "original_sample_interval_us": (3219, ">H"),
    "samples_per_trace": (3221, ">H"),
    "original_samples_per_trace": (3223, ">H"),
    "format_code": (3225, ">h"),
    "sorting_code": (3229, ">h"),
    "measurement_system": (3255, ">h"),
    "revision_major": (3501, ">B"),
    "revision_minor": (3502, ">B"),
    "fixed_length_flag": (3503, ">h"),
    "extended_textual_headers": (3505, ">h"),
}
SAMPLES = 40


@pytest.fixture
def record():
    rng = np.random.default_rng(7)
    receivers = np.column_stack([[2.0, 4.0, 6.125], [0.0, 0.25, -0.5], [101.5, 101.75, -3.008]])
    return FieldRecord(
        samples=rng.standard_normal((3, SAMPLES)).astype(np.float32),
        interval_s=0.25e-3,
        start_s=-0.025,
        record=17,
        channel=np.array([5, 6, 7]),
        source_xyz=np.array([-31.037, 1.0, 100.913]),
        receiver_xyz=receivers,
        source_depth_m=0.4,
        dead=np.array([False, True, False]),
        stack=5,
        source_point=3,
    )


def words(data, table, start=0):
    return {name: struct.unpack_from(code, data, start + first - 1)[0] for name, (first, code) in table.items()}


def trace_headers(data):
    starts = range(3600, len(data), 240 + 4 * SAMPLES)
    return [words(data, TRACE_WORDS, start) for start in starts]


def scaled(value, scalar):
    # Positive multiplies, negative divides: check SEGY-SCALARS.
    return value * scalar if scalar > 0 else value / -scalar


def test_binary_header_states_revision_1_big_endian_ieee_in_metres(tmp_path, record):
    write_segy(tmp_path / "a.sgy", [record])
    data = (tmp_path / "a.sgy").read_bytes()
    # Layout and format codes: checks SEGY-LAYOUT, SEGY-FORMAT-CODES, SEGY-REVISION.
    assert len(data) == 3600 + 3 * (240 + 4 * SAMPLES)
    assert words(data, BINARY_WORDS) == {
        "traces_per_ensemble": 3,
        "sample_interval_us": 250,
        "original_sample_interval_us": 250,
        "samples_per_trace": SAMPLES,
        "original_samples_per_trace": SAMPLES,
        "format_code": 5,
        "sorting_code": 1,
        "measurement_system": 1,
        "revision_major": 1,
        "revision_minor": 0,
        "fixed_length_flag": 1,
        "extended_textual_headers": 0,
    }


def test_trace_header_words_stand_at_the_bytes_of_the_standard(tmp_path, record):
    write_segy(tmp_path / "a.sgy", [record])
    headers = trace_headers((tmp_path / "a.sgy").read_bytes())
    assert [header["trace_in_record"] for header in headers] == [5, 6, 7]
    assert [header["trace_sequence_file"] for header in headers] == [1, 2, 3]
    # 1 seismic data, 2 dead: check SEGY-TRACE-ID.
    assert [header["trace_identification"] for header in headers] == [1, 2, 1]
    for trace, header in enumerate(headers):
        assert header["field_record"] == 17
        assert header["energy_source_point"] == 3
        assert header["vertically_summed"] == 5
        assert header["data_use"] == 1
        assert header["coordinate_units"] == 1
        assert header["sample_count"] == SAMPLES
        assert header["sample_interval_us"] == 250
        assert header["offset"] == round(float(record.offset_m[trace]))
        across, up = header["coordinate_scalar"], header["elevation_scalar"]
        found = [scaled(header[name], across) for name in ("source_x", "source_y", "group_x", "group_y")]
        npt.assert_allclose(found, [*record.source_xyz[:2], *record.receiver_xyz[trace, :2]], atol=0.5e-3, rtol=0)
        heights = [scaled(header[name], up) for name in ("receiver_elevation", "source_elevation", "source_depth")]
        npt.assert_allclose(heights, [record.receiver_xyz[trace, 2], record.source_xyz[2], 0.4], atol=0.5e-3, rtol=0)


@pytest.mark.parametrize(
    ("start_ms", "raw", "scalar"),
    [(-25.0, -25, 1), (-25.5, -255, -10), (-25.25, -2525, -100), (-3.125, -3125, -1000), (0.0, 0, 1)],
)
def test_delay_recording_time_is_exact_with_its_scalar(tmp_path, record, start_ms, raw, scalar):
    # Bytes 215-216 scale the times of bytes 95-114 to milliseconds: check SEGY-TIMES-SCALAR.
    write_segy(tmp_path / "a.sgy", [dataclasses.replace(record, start_s=start_ms / 1000.0)])
    header = trace_headers((tmp_path / "a.sgy").read_bytes())[0]
    assert (header["delay_recording_time"], header["times_scalar"]) == (raw, scalar)
    assert scaled(raw, scalar) == start_ms


def test_coordinates_of_a_national_grid_keep_the_finest_scalar_that_fits(tmp_path, record):
    # 5 512 345.67 m is 5.5e9 mm, more than 2^31: centimetres are the finest that fit.
    far = dataclasses.replace(
        record,
        source_xyz=np.array([432100.25, 5512345.67, 100.0]),
        receiver_xyz=record.receiver_xyz + np.array([432100.0, 5512340.0, 0.0]),
    )
    write_segy(tmp_path / "a.sgy", [far])
    header = trace_headers((tmp_path / "a.sgy").read_bytes())[0]
    assert header["coordinate_scalar"] == -100
    assert header["source_y"] == 551234567
    assert header["elevation_scalar"] == -1000


def test_ieee_samples_are_written_bit_for_bit(tmp_path, record):
    write_segy(tmp_path / "a.sgy", [record])
    data = (tmp_path / "a.sgy").read_bytes()
    for trace in range(3):
        start = 3600 + trace * (240 + 4 * SAMPLES) + 240
        npt.assert_array_equal(np.frombuffer(data, ">f4", SAMPLES, start), record.samples[trace])


def test_ibm_samples_are_the_published_words(tmp_path, record):
    # System/360 hexadecimal floats, vectors of repository TGSAI/segy tests/test_ibm_float.py: checks SEGY-IBM-*.
    vectors = {
        0.0: "00000000",
        1.0: "41100000",
        -1.0: "C1100000",
        100.0: "42640000",
        118.625: "4276A000",
        -118.625: "C276A000",
        0.15625: "40280000",
        -0.0030517578125: "BEC80000",
    }
    samples = np.zeros((3, SAMPLES), np.float32)
    samples[0, : len(vectors)] = list(vectors)
    write_segy(tmp_path / "a.sgy", [dataclasses.replace(record, samples=samples)], ibm_float=True)
    data = (tmp_path / "a.sgy").read_bytes()
    assert words(data, BINARY_WORDS)["format_code"] == 1
    found = [data[3840 + 4 * k : 3844 + 4 * k].hex().upper() for k in range(len(vectors))]
    assert found == list(vectors.values())


def test_textual_header_is_ebcdic_with_forty_numbered_lines(tmp_path, record):
    write_segy(tmp_path / "a.sgy", [record], description=["LARCH RISE"])
    raw = (tmp_path / "a.sgy").read_bytes()[:3200]
    assert raw[:4] == bytes.fromhex("C340F140")  # "C 1 " in code page 037: check SEGY-EBCDIC
    text = raw.decode("cp037")
    lines = [text[start : start + 80] for start in range(0, 3200, 80)]
    assert [line[:3] for line in lines] == [f"C{number:2d}" for number in range(1, 41)]
    assert lines[0].rstrip() == "C 1 LARCH RISE"
    assert "SAMPLE INTERVAL 250 US" in lines[22]
    assert "-25 MS" in lines[23]
    assert lines[38].rstrip() == "C39 SEG Y REV1"
    assert lines[39].rstrip() == "C40 END TEXTUAL HEADER"


def test_several_shots_stand_in_one_file_in_order(tmp_path, record):
    second = dataclasses.replace(record, record=18, samples=record.samples * 2)
    write_segy(tmp_path / "a.sgy", [record, second])
    headers = trace_headers((tmp_path / "a.sgy").read_bytes())
    assert [header["field_record"] for header in headers] == [17] * 3 + [18] * 3
    assert [header["trace_sequence_line"] for header in headers] == list(range(1, 7))


def test_an_independent_reader_finds_the_samples(tmp_path, record):
    from obspy.io.segy.segy import _read_segy

    write_segy(tmp_path / "ieee.sgy", [record])
    write_segy(tmp_path / "ibm.sgy", [record], ibm_float=True)
    for name, rtol in (("ieee.sgy", 0.0), ("ibm.sgy", 2.0**-20)):  # an IBM float has 21 bits or more
        read = _read_segy(str(tmp_path / name), unpack_headers=True)
        found = np.array([trace.data for trace in read.traces])
        npt.assert_allclose(found, record.samples, rtol=rtol, atol=0)
        assert read.traces[0].header.sample_interval_in_ms_for_this_trace == 250


@pytest.mark.parametrize(
    ("change", "arguments", "message"),
    [
        ({"interval_s": 31.25e-6}, {}, "interval_s: expected a whole number of microseconds"),
        ({"interval_s": 0.05}, {}, "interval_s: expected a whole number of microseconds"),
        ({"samples": np.zeros((3, 40000), np.float32)}, {}, "at most 32767 a trace, found 40000"),
        ({"source_xyz": np.array([3e9, 0.0, 0.0])}, {}, "does not fit its header"),
        ({"start_s": -40.0}, {}, "does not fit its header"),
        ({}, {"description": ["x" * 77]}, "at most 76 ASCII characters"),
        ({}, {"description": ["x"] * 21}, "at most 20 lines, found 21"),
    ],
)
def test_what_does_not_fit_is_refused(tmp_path, record, change, arguments, message):
    with pytest.raises(ValueError, match=message):
        write_segy(tmp_path / "a.sgy", [dataclasses.replace(record, **change)], **arguments)
    assert not (tmp_path / "a.sgy").exists()


def test_records_that_differ_in_length_are_refused(tmp_path, record):
    shorter = dataclasses.replace(record, record=18, samples=record.samples[:, :-1])
    with pytest.raises(ValueError, match=r"record 18: expected 40 samples .* found 39"):
        write_segy(tmp_path / "a.sgy", [record, shorter])
    with pytest.raises(ValueError, match="records: expected at least one"):
        write_segy(tmp_path / "a.sgy", [])
