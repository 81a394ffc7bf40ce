"""SEG-2 records against another decoder (obspy) and against the same records as SEG-Y."""

import warnings

import numpy as np
import numpy.testing as npt
import pytest
from made_seg2 import seg2, spread

from picker.records import read_records

obspy = pytest.importorskip("obspy")


def theirs(path):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # it warns that it leaves DELAY out
        return obspy.read(str(path), format="SEG2")


@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("code", [1, 2, 3, 4, 5])
def test_samples_agree_with_obspy(tmp_path, code, order):
    path = tmp_path / "7.dat"
    path.write_bytes(seg2(spread(), code=code, order=order))
    (record,) = read_records([path])
    npt.assert_array_equal(record.samples, np.array([trace.data for trace in theirs(path)], dtype=np.float32))


@pytest.fixture(scope="module")
def site_a(field_records):
    folder = field_records / "site_a"
    raw = {record.record: record for record in read_records(sorted((folder / "seg2").glob("*.dat")))}
    converted = {record.record: record for record in read_records(sorted((folder / "segy").glob("*.sgy")))}
    return folder, raw, converted


def test_raw_records_of_site_a_are_those_of_their_segy_versions(site_a):
    folder, raw, converted = site_a
    assert len(raw) == 40
    assert raw.keys() == converted.keys()
    for number, record in raw.items():
        other = converted[number]
        assert record.interval_s == pytest.approx(other.interval_s, rel=1e-12)
        npt.assert_array_equal(record.channel, other.channel)
        npt.assert_allclose(record.source_xyz, other.source_xyz, atol=1e-9)
        npt.assert_allclose(record.receiver_xyz, other.receiver_xyz, atol=1e-9)
        first = (other.start_s[0] - record.start_s[0]) / record.interval_s
        # the same second: the SEG-Y versions begin a whole number of samples later
        assert abs(first - round(first)) < 1e-6
        cut = record.samples[:, round(first) : round(first) + other.samples.shape[1]]
        # the SEG-Y versions hold the recorder's counts; SEG-2 says what turns those into millivolts
        factor = float(theirs(folder / "seg2" / f"{number}.dat")[0].stats.seg2["DESCALING_FACTOR"])
        npt.assert_allclose(cut, other.samples * factor, rtol=3e-7, atol=0)  # one rounding of float32
