"""The SEG-Y reader on files as they come: contradicting headers, cut files, several shots in a file."""

from __future__ import annotations

import numpy as np
import numpy.testing as npt
import pytest
from made_segy import segy, spread, trace

from picker.errors import InputError
from picker.records import read_records, read_records_and_findings, read_shot, scan_file


@pytest.fixture
def put(tmp_path):
    def write(content: bytes, name: str = "shot.sgy"):
        path = tmp_path / name
        path.write_bytes(content)
        return path

    return write


def texts(findings, severity=None):
    return [finding.text for finding in findings if severity in (None, finding.severity)]


def test_a_plain_record_gives_no_finding_but_that_the_ground_is_flat(put):
    (record,), findings = read_records_and_findings([put(segy(spread(record=3)))])
    assert texts(findings) == ["All elevations are zero: the ground is taken as flat."]
    assert not texts(findings, "look")
    assert record.record == 3
    npt.assert_array_equal(record.channel, [1, 2, 3, 4])
    npt.assert_array_equal(record.receiver_xyz[:, 0], [0, 2, 4, 6])
    npt.assert_array_equal(record.state, "live")
    assert record.origin.format == "SEG-Y 1.0, IEEE floats, big-endian"


def test_byte_order_is_found_and_reported(put):
    (big,) = read_records([put(segy(spread()), "big.sgy")])
    (little,) = read_records([put(segy(spread(order="<"), "<"), "little.sgy")])
    npt.assert_array_equal(big.samples, little.samples)
    npt.assert_array_equal(big.receiver_xyz, little.receiver_xyz)
    assert little.origin.format.endswith("little-endian")


def test_shots_of_one_file_are_split_by_field_record_in_any_order_of_traces(put):
    first, second = spread(record=8, source_x=-5), spread(record=9, source_x=11)
    mixed = [one for pair in zip(second[::-1], first, strict=True) for one in pair]
    records = {record.record: record for record in read_records([put(segy(mixed))])}
    (alone,) = read_records([put(segy(first), "alone.sgy")])
    assert sorted(records) == [8, 9]
    npt.assert_array_equal(records[8].samples, alone.samples)
    npt.assert_array_equal(records[9].channel, [1, 2, 3, 4])
    assert records[9].source_xyz[0] == 11


def test_shots_at_two_places_under_one_number_become_two_records(put):
    path = put(segy(spread(record=1, source_x=-5) + spread(record=1, source_x=11)))
    headers, findings = scan_file(path)
    assert [header.record for header in headers] == [1, 2]
    assert [header.original_record for header in headers] == [1, 1]
    assert [header.source_xyz[0] for header in headers] == [-5, 11]
    assert any(
        "Shots with a record number that was taken or not set (1): they are records 2 here." in text
        for text in texts(findings, "note")
    )


def test_repeats_at_one_place_under_one_number_become_records_of_their_own(put):
    headers, _ = scan_file(put(segy(spread(record=5, seed=1) + spread(record=5, seed=2))))
    assert [header.channel.tolist() for header in headers] == [[1, 2, 3, 4]] * 2
    assert not np.array_equal(read_shot(headers[0]).samples, read_shot(headers[1]).samples)


def test_source_point_stands_in_for_a_field_record_that_is_not_set(put):
    headers, _ = scan_file(put(segy(spread(record=0, source_point=4) + spread(record=0, source_point=6))))
    assert [header.record for header in headers] == [4, 6]


def test_channels_that_repeat_are_counted_in_the_order_of_the_file(put):
    headers, findings = scan_file(put(segy(spread(trace_in_record=1))))
    npt.assert_array_equal(headers[0].channel, [1, 2, 3, 4])
    assert any("trace numbers" in text for text in texts(findings, "note"))


def test_traces_that_nothing_tells_apart_stay_one_record(put):
    traces = [trace(np.ones(50), sample_interval_us=250) for _ in range(6)]
    headers, findings = scan_file(put(segy(traces)))
    assert [header.channel.size for header in headers] == [6]
    assert "All coordinates are zero." in texts(findings, "look")


def test_dead_traces_are_marked_and_auxiliary_ones_left_out(put):
    dead = trace(np.zeros(50), field_record=1, trace_in_record=5, trace_id=2, sample_interval_us=250)
    time_break = trace(np.ones(50), field_record=1, trace_in_record=6, trace_id=4, sample_interval_us=250)
    (header,), findings = scan_file(put(segy([*spread(), dead, time_break])))
    npt.assert_array_equal(header.state, ["live"] * 4 + ["dead"])
    assert header.source_xyz[0] == -5
    assert any("Auxiliary traces left out: 1 (time break)." in text for text in texts(findings))


def test_a_file_with_auxiliary_traces_only_is_refused(put):
    with pytest.raises(InputError, match=r"no traces of geophones.*found 4"):
        scan_file(put(segy(spread(trace_id=4))))


# sample interval


def test_interval_of_the_traces_is_taken_where_the_file_header_disagrees_and_a_person_must_look(put):
    headers, findings = scan_file(put(segy(spread(), sample_interval_us=4000)))
    assert headers[0].interval_s == pytest.approx(250e-6, rel=1e-12)
    assert any("4000 us" in text and "250 us" in text for text in texts(findings, "look"))


@pytest.mark.parametrize("missing", [0, -4])
def test_interval_of_either_header_serves_where_the_other_has_none(put, missing):
    for content in (segy(spread(), sample_interval_us=missing), segy(spread(sample_interval_us=missing))):
        assert scan_file(put(content))[0][0].interval_s == pytest.approx(250e-6, rel=1e-12)


@pytest.mark.parametrize("missing", [0, -4])
def test_no_interval_anywhere_is_refused_until_one_is_given(put, missing):
    path = put(segy(spread(record=3, sample_interval_us=missing), sample_interval_us=missing))
    with pytest.raises(InputError, match=r"shot.sgy, record 3: there is no sample interval.*--interval-us"):
        scan_file(path)
    assert scan_file(path, interval_s=1e-3)[0][0].interval_s == 1e-3


def test_interval_that_changes_within_a_record_is_refused_with_the_trace(put):
    traces = spread()
    traces[2] = spread(sample_interval_us=500)[2]
    with pytest.raises(InputError, match=r"trace 3: the sample interval changes.*250 us.*500 us"):
        scan_file(put(segy(traces)))


def test_interval_whose_fraction_is_cut_off_is_pointed_out(put):
    # recorders sample at 1/16 ms = 62.5 us: common practice, no source
    _, findings = scan_file(put(segy(spread(sample_interval_us=62), sample_interval_us=62)))
    assert any("62.5 us" in text for text in texts(findings, "look"))


@pytest.mark.parametrize("interval_us", [1, 32000])
def test_a_record_of_impossible_length_is_pointed_out(put, interval_us):
    words = {"sample_interval_us": interval_us}
    long = segy(spread(samples=3000, **words), samples=3000, **words)
    _, findings = scan_file(put(long))
    assert any(f"At {interval_us} us a sample" in text for text in texts(findings, "look"))


def test_two_sample_intervals_in_one_file_stay_with_their_records(put):
    path = put(segy(spread(record=1) + spread(record=2, sample_interval_us=500)))
    headers, _ = scan_file(path)
    npt.assert_allclose([header.interval_s for header in headers], [250e-6, 500e-6], rtol=1e-12)


# sample format


def test_ieee_floats_under_the_code_of_ibm_floats_are_read_as_what_they_are(put):
    traces = spread(samples=400)
    (right,), (stated,) = (read_records([put(segy(traces, code=code, samples=400), f"{code}.sgy")]) for code in (5, 1))
    npt.assert_array_equal(right.samples, stated.samples)
    findings = scan_file(put(segy(traces, code=1, samples=400)))[1]
    assert any("code says IBM floats, but the samples are IEEE floats" in text for text in texts(findings, "look"))


def as_ibm(values: np.ndarray) -> np.ndarray:
    """IBM words of numbers, by the definition: 16^(e-64) f / 2^24 with the first digit of f not zero."""
    size = np.abs(values)
    exponent = np.where(size > 0, np.floor(np.log2(np.maximum(size, 1e-300)) / 4) + 1, 0)
    fraction = np.floor(size / 16.0**exponent * 2**24).astype(np.uint32)
    return ((values < 0).astype(np.uint32) << 31) | ((exponent + 64).astype(np.uint32) << 24) | fraction


def test_ibm_floats_are_left_alone_under_their_own_code_and_found_under_another(put):
    values = np.random.default_rng(2).normal(size=(3, 500)) * np.exp(np.linspace(0, 6, 500))
    for code, doubted in ((1, False), (5, True)):
        traces = [
            trace(as_ibm(row), 1, trace_in_record=n + 1, group_x=n, sample_interval_us=250)
            for n, row in enumerate(values)
        ]
        path = put(segy(traces, code=code, samples=500))
        (record,), findings = read_records_and_findings([path])
        # 21 bits of the fraction at least are significant
        npt.assert_allclose(record.samples, values, rtol=2.0**-20)
        assert any("the samples are IBM floats" in text for text in texts(findings, "look")) is doubted


def test_whole_numbers_written_as_unnormalised_ibm_floats_are_not_taken_for_ieee(put):
    values = np.arange(-600, 600)
    words = ((values < 0).astype(np.uint32) << 31) | np.uint32(0x46000000) | np.abs(values).astype(np.uint32)
    (record,) = read_records([put(segy([trace(words, 1, sample_interval_us=250)], code=1, samples=1200))])
    npt.assert_array_equal(record.samples[0], values)


def test_a_trace_with_samples_that_are_no_numbers_is_dead(put):
    traces = spread()
    traces[1] = trace(
        np.full(50, np.nan),
        field_record=1,
        trace_in_record=2,
        source_x=-5,
        group_x=2,
        trace_id=1,
        sample_interval_us=250,
    )
    (record,) = read_records([put(segy(traces))])
    npt.assert_array_equal(record.state, ["live", "dead", "live", "live"])
    assert np.isfinite(record.samples).all()


@pytest.mark.parametrize(("code", "text"), [(4, "fixed point with gain"), (7, "3-byte integers")])
def test_formats_that_are_not_read_are_refused_by_name(put, code, text):
    with pytest.raises(InputError, match=text):
        scan_file(put(segy(spread(), format_code=code)))


def test_a_format_code_that_is_not_set_is_refused(put):
    with pytest.raises(InputError, match=r"does not say how its samples are written.*found 0"):
        scan_file(put(segy(spread(), format_code=0)))


# lengths of traces


def test_traces_of_unequal_length_are_read_by_their_own_counts(put):
    long, short = spread(record=1, samples=60), spread(record=1, samples=40)
    (record,), findings = read_records_and_findings([put(segy([*long[:2], *short[2:]], samples=60))])
    npt.assert_array_equal(record.valid, [60, 60, 40, 40])
    assert not record.samples[2, 40:].any()
    assert record.samples[2, :40].all()
    assert any("40 to 60" in text for text in texts(findings))


def test_sample_count_that_the_file_header_lacks_is_taken_from_the_traces(put):
    (record,) = read_records([put(segy(spread(), sample_count=0))])
    assert record.samples.shape == (4, 50)


def test_sample_counts_of_traces_that_do_not_fit_the_file_give_way_to_the_file_header(put):
    (record,), findings = read_records_and_findings([put(segy(spread(sample_count=33)))])
    assert record.samples.shape == (4, 33)
    assert any("4 trace headers do not fit the file" in text for text in texts(findings, "look"))


@pytest.mark.parametrize("missing", [1, 199, 200, 300, 439])
def test_a_file_that_ends_inside_a_trace_is_refused_with_trace_and_byte(put, missing):
    content = segy(spread())
    # the fourth trace begins behind 3600 + 3 * (240 + 50 * 4) = 4920 bytes and takes 440
    with pytest.raises(
        InputError, match=rf"trace 4: .*cut off; expected 440 bytes from byte 4921, found {440 - missing}"
    ):
        scan_file(put(content[:-missing]))


def test_a_file_that_ends_after_a_whole_trace_shows_by_its_short_record(put):
    _, findings = scan_file(put(segy(spread(record=1) + spread(record=2) + spread(record=3)[:3])))
    assert any("3 traces, though most records of the file have 4" in text for text in texts(findings, "look"))


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "the file is empty"),
        (b"record 1\nrecord 2\n", "is no SEG-Y file.*found text"),
        (b"time,amplitude\n" * 400, "is no SEG-Y file.*found text"),
        (b"\x89PNG" + bytes(100), "is no SEG-Y file.*found 104 bytes"),
        (np.random.default_rng(1).bytes(5000), "is no SEG-Y file.*format codes"),
        (segy([]), "has no traces.*byte 3601"),
        (segy(spread(samples=0), samples=0), "has traces without samples"),
    ],
    ids=["empty", "short text", "long text", "other", "noise", "no traces", "no samples"],
)
def test_what_is_no_segy_file_is_refused_and_the_message_says_what_it_is(put, content, message):
    with pytest.raises(InputError, match=f"shot.sgy: {message}"):
        scan_file(put(content))


def test_a_folder_and_a_missing_path_are_refused(tmp_path):
    with pytest.raises(InputError, match="is a folder"):
        scan_file(tmp_path)
    with pytest.raises(InputError, match="there is no such file"):
        scan_file(tmp_path / "none.sgy")


def test_a_trace_without_samples_among_others_is_dead(put):
    traces = spread(samples=50)
    traces[2] = spread(samples=0)[2]
    (record,) = read_records([put(segy(traces, sample_count=0))])
    npt.assert_array_equal(record.state, ["live", "live", "dead", "live"])


def test_no_damage_to_headers_or_length_gives_anything_but_a_record_or_a_message(put):
    rng = np.random.default_rng(11)
    whole = segy(spread(record=1) + spread(record=2, source_x=11))
    places = [*range(3200, 3600), *(3600 + 440 * n + byte for n in range(8) for byte in range(240))]
    read, messages = 0, []
    for _ in range(600):
        damaged = bytearray(whole)
        # the words that say how the file is laid out are hit more often than their share
        hit = rng.choice([*places, *([3221, 3225, 3500, 3501, 3505, 3271, 3273, 3527, 3531] * 40)], rng.integers(1, 6))
        for at in hit.tolist():
            damaged[at] = int(rng.integers(256))
        path = put(bytes(damaged[: len(damaged) - (int(rng.integers(900)) if rng.random() < 0.2 else 0)]))
        try:
            records = read_records([path])
        except InputError as error:
            messages.append(str(error))
        else:
            assert all(np.isfinite(record.samples).all() for record in records)
            read += 1
    assert all("shot.sgy" in message for message in messages)
    assert min(read, len(messages)) > 60, "the damage should neither always nor never matter"


# geometry


def test_feet_become_metres_and_that_is_said(put):
    (header,), findings = scan_file(put(segy(spread(receiver_elevation=10, source_depth=3), measurement_system=2)))
    npt.assert_allclose(header.receiver_xyz[:, 0], [0, 0.6096, 1.2192, 1.8288], rtol=1e-12)
    npt.assert_allclose(header.receiver_xyz[:, 2], 3.048, rtol=1e-12)
    assert header.source_depth_m == pytest.approx(0.9144, rel=1e-12)
    assert any("in feet" in text for text in texts(findings, "note"))
    assert not texts(findings, "look")


def test_zero_coordinates_are_found_and_the_offsets_that_there_are_are_named(put):
    _, findings = scan_file(put(segy(spread(source_x=0, group_x=0, offset=12))))
    assert "All coordinates are zero, though offsets from 12 to 12 m are given." in texts(findings, "look")


def test_offsets_that_contradict_the_coordinates_are_found(put):
    _, findings = scan_file(put(segy(spread(offset=40))))
    assert any("offset words of 4 of 4 traces contradict" in text for text in texts(findings, "look"))


@pytest.mark.parametrize("offset_scale", [1, 100])
def test_offsets_with_or_without_the_scalar_of_coordinates_are_no_contradiction(put, offset_scale):
    traces = [
        trace(
            np.ones(50),
            trace_in_record=n + 1,
            source_x=-500,
            group_x=200 * n,
            coordinate_scalar=-100,
            offset=(5 + 2 * n) * offset_scale,
            sample_interval_us=250,
        )
        for n in range(4)
    ]
    assert not texts(scan_file(put(segy(traces)))[1], "look")


def test_geophones_at_one_place_are_found(put):
    traces = spread()
    traces[3] = spread(group_x=4)[3]
    _, findings = scan_file(put(segy(traces)))
    assert any(
        "Geophones that stand where another one does: 1, first channels 3 and 4 at x = 4 m" in t
        for t in texts(findings)
    )


def test_a_scalar_of_times_that_is_no_power_of_ten_is_found_and_taken_as_one(put):
    (header,), findings = scan_file(put(segy(spread(delay=-20, times_scalar=7))))
    npt.assert_allclose(header.start_s, -0.02, rtol=1e-12)
    assert any("215-216 is 7" in text for text in texts(findings, "look"))
