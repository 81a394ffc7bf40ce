"""Speed of onset kernels and of reading records, as ratios against general libraries in the same run.

Run by hand: pytest tests/benchmarks --run-benchmarks -s
"""

import time

import numpy as np
import pytest

pytestmark = pytest.mark.benchmark


def best_of(function, times=5):
    """Least wall-clock time of a few calls, the first (which compiles) not counted."""
    function()
    found = []
    for _ in range(times):
        began = time.perf_counter()
        function()
        found.append(time.perf_counter() - began)
    return min(found)


def told(what, ours_s, theirs_s):
    print(f"\n{what}: {1e3 * ours_s:.2f} ms against {1e3 * theirs_s:.2f} ms, {theirs_s / ours_s:.1f} times as fast")
    return theirs_s / ours_s


def test_aic_of_a_record_against_obspy():
    trigger = pytest.importorskip("obspy.signal.trigger")
    from picker.onsets import aic

    record = np.random.default_rng(1).normal(size=(48, 2000))
    ours = best_of(lambda: aic(record))
    theirs = best_of(lambda: [trigger.aic_simple(trace) for trace in record])
    # obspy's is compiled too and makes no more passes: slower than that would be a fault of ours
    assert told("AIC of 48 traces of 2,000 samples", ours, theirs) > 1.0


@pytest.mark.parametrize("code", [1, 5], ids=["IBM floats", "IEEE floats"])
def test_reading_samples_against_a_memory_map_by_segyio(tmp_path, code):
    segyio = pytest.importorskip("segyio")
    from picker.records import read_shot, scan_file

    traces, samples = 4000, 2000
    data = np.random.default_rng(2).normal(size=(traces, samples)).astype(np.float32)
    spec = segyio.spec()
    spec.format, spec.samples, spec.tracecount, spec.sorting = code, np.arange(samples) * 0.25, traces, None
    path = tmp_path / "line.sgy"
    with segyio.create(str(path), spec) as file:
        file.bin[segyio.BinField.Interval] = 250
        file.trace.raw[:] = data
        for number in range(traces):
            file.header[number] = {
                segyio.TraceField.FieldRecord: 1 + number // 48,
                segyio.TraceField.TraceNumber: 1 + number % 48,
                segyio.TraceField.GroupX: 2 * (number % 48),
                segyio.TraceField.SourceX: -2,
                segyio.TraceField.TRACE_SAMPLE_INTERVAL: 250,
                segyio.TraceField.TRACE_SAMPLE_COUNT: samples,
                segyio.TraceField.TraceIdentificationCode: 1,
            }

    def ours():
        headers, _ = scan_file(path)
        return [read_shot(header).samples for header in headers]

    def theirs():
        with segyio.open(str(path), strict=False, ignore_geometry=True) as file:
            file.mmap()
            return file.trace.raw[:]

    np.testing.assert_allclose(np.concatenate(ours()), theirs(), rtol=1e-6)  # one rounding of IBM fractions
    # ours also reads headers, finds the shots and checks their geometry, and turns samples into records
    told(f"{traces} traces of {samples} samples", best_of(ours, 3), best_of(theirs, 3))
