from __future__ import annotations

import numpy as np
import numpy.testing as npt
import pytest

from picker.records import read_records
from synthetic_gathers import demo_survey, waveform_store
from synthetic_gathers.arrivals import first_arrivals_s
from synthetic_gathers.noise import FieldNoise

LARGEST_DATA_BYTES = 2_000_000  # what may be shipped without making the package heavy


@pytest.fixture(scope="module")
def demo():
    return demo_survey.load_demo()


def test_the_shipped_gathers_are_small_and_complete(demo):
    assert demo_survey.STORED.stat().st_size < LARGEST_DATA_BYTES
    assert demo.waveforms.shape == (11, 48, 1200)
    assert np.all(np.isfinite(demo.waveforms))
    npt.assert_array_equal(demo.source_x_m, demo_survey.SOURCE_X_M)
    npt.assert_array_equal(demo.receiver_x_m, demo_survey.RECEIVER_X_M)


def test_the_stored_onsets_are_the_first_arrivals_of_the_model(demo):
    shots = [0, 5]
    expected = first_arrivals_s(demo_survey.demo_model(), demo.source_x_m, demo.receiver_x_m[::6])[shots]
    # Other columns for fewer receivers: second-order differences of the points only.
    npt.assert_allclose(demo.onset_s[shots][:, ::6], expected, atol=5e-6)


def test_waveforms_begin_at_the_true_onsets(demo):
    time_s = np.arange(demo.waveforms.shape[-1]) * demo.interval_s
    after_s = time_s - demo.onset_s[..., None]
    relative = np.abs(demo.waveforms) / demo.first_arrival_amplitude[..., None]
    # Before: nothing but the dispersion of the grid. Within a quarter of the source duration: something.
    assert np.max(np.where(after_s < -demo.interval_s, relative, 0.0)) < 2e-3
    started = np.max(np.where((after_s > 0) & (after_s < 0.25 * demo.source_duration_s), relative, 0.0), axis=-1)
    assert np.min(started) > 0.01


def test_ground_roll_is_far_stronger_than_the_first_arrival_at_mid_offsets(demo):
    # On hammer records the ground roll is tens to a hundred times stronger (common practice, no source).
    middle = (demo.offset_m > 20.0) & (demo.offset_m < 40.0)
    ratio = np.max(np.abs(demo.waveforms), axis=-1) / demo.first_arrival_amplitude
    assert 10 < np.median(ratio[middle]) < 1000


def test_the_ground_is_as_the_scenario_tells(demo):
    depth_m, x_m = demo.depth_m[0], demo.receiver_x_m
    assert 4.0 <= depth_m.min() < 4.5
    assert 10.3 < depth_m.max() < 10.8
    assert abs(x_m[np.argmax(depth_m)] - 60.0) <= 2.0
    assert np.all((depth_m[x_m >= 84] > 6.0) & (depth_m[x_m >= 84] < 7.2))
    assert 2.0 < np.ptp(demo.receiver_xyz[:, 2]) < 4.0
    under_tank = (x_m >= demo_survey.TANK_X_M[0]) & (x_m <= demo_survey.TANK_X_M[1])
    # The client's second question has an answer to be found: the depth changes under the tank by metres.
    assert np.ptp(depth_m[under_tank]) > 4.0


def test_rock_is_crossed_in_both_directions_under_every_geophone(demo):
    direct_s = demo.offset_m / 520.0
    head_wave = demo.onset_s < direct_s - 1e-3
    shot_left = demo.source_x_m[:, None] < demo.receiver_x_m[None, :]
    assert np.min(np.sum(head_wave & shot_left, axis=0)) >= 1
    assert np.min(np.sum(head_wave & ~shot_left, axis=0)) >= 1


def test_the_written_demo_reads_back_as_it_was_recorded(tmp_path):
    recorded = demo_survey.write_demo(tmp_path / "demo", seed=5)
    paths = sorted((tmp_path / "demo").glob("*.sgy"))
    records = read_records(paths)
    assert len(records) == 11
    for read, made in zip(records, recorded.records, strict=True):
        npt.assert_array_equal(read.samples, made.samples)
        assert read.interval_s == made.interval_s
        npt.assert_allclose(read.start_s, made.start_s, atol=1e-12)
        npt.assert_allclose(read.receiver_xyz, made.receiver_xyz, atol=0.51e-3)  # headers hold millimetres
        npt.assert_allclose(read.source_xyz, made.source_xyz, atol=0.51e-3)
        npt.assert_array_equal(read.channel, made.channel)
        assert read.record == made.record
    assert (tmp_path / "demo" / "truth" / "true_onsets.csv").exists()
    readme = (tmp_path / "demo" / "README.txt").read_text()
    assert all(path.name in readme for path in paths)
    assert max(len(line) for line in readme.splitlines()) <= 120


def test_the_demo_has_a_dead_geophone_a_weak_shot_and_an_uncertain_time_break():
    recorded = demo_survey.load_demo().noisy(demo_survey.DEFAULT_SEED, demo_survey.demo_noise())
    assert recorded.dead.sum() == 1
    (dead,) = np.flatnonzero(recorded.dead)
    rms = np.array([np.std(record.samples, axis=1) for record in recorded.records])
    assert np.all(np.argmin(rms, axis=1) == dead)
    strength = np.sort(recorded.strength)
    assert strength[0] < 0.75 * strength[1]
    assert np.std(recorded.time_break_shift_s) > 0.1e-3


@pytest.mark.parametrize(("level", "expected"), [("field", 13.0), ("rough", 2.0)])
def test_signal_to_noise_of_the_far_third_of_the_demo(demo, level, expected):
    amplitude = np.median(demo.first_arrival_amplitude[demo.far_third])
    found = []
    for seed in range(6):
        recorded = demo.noisy(seed, FieldNoise.level(level))
        good = demo.far_third & ~(recorded.dead | recorded.spiky)[None, :]
        before = np.array([record.samples[:, :120] for record in recorded.records], dtype=np.float64)
        found.append(amplitude / np.sqrt(np.mean(before[good] ** 2)))
    # 30 ms of noise hold one or two values a trace, and its level varies from shot to shot.
    assert np.mean(found) == pytest.approx(expected, rel=0.25)


@pytest.mark.slow
def test_one_shot_made_again_is_the_one_that_is_shipped(demo):
    again = demo_survey.simulate_demo(demo_survey.SOURCE_X_M[:1])
    with np.load(demo_survey.STORED) as stored:
        halves = np.stack([stored["low"][0], stored["high"][0]], axis=-1)
        largest = stored["largest"][0]
    shipped = np.cumsum(np.ascontiguousarray(halves).view("<i2")[..., 0], axis=-1, dtype=np.int16)
    counts, again_largest = waveform_store.pack(again.waveforms[0])
    npt.assert_allclose(again_largest, largest, rtol=1e-6)
    # The same machine gives the same bits; another may round sines and powers otherwise: one count, 3e-4 of a value.
    assert np.max(np.abs(counts.astype(int) - shipped.astype(int))) <= 1
