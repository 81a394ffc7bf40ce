from __future__ import annotations

import csv
import dataclasses

import numpy as np
import numpy.testing as npt
import pytest

from synthetic_gathers.gathers import SyntheticSurvey
from synthetic_gathers.model import Layer, LayeredModel
from synthetic_gathers.noise import FieldNoise

INTERVAL_S = 0.25e-3
SOURCE_DURATION_S = 0.012
V1_M_S, V2_M_S, DEPTH_M = 500.0, 2000.0, 5.0


@pytest.fixture(scope="module")
def survey():
    """Pulses at the closed-form first arrivals over a flat refractor, with a strong slow wave behind them."""
    model = LayeredModel(
        surface_z_m=lambda x: np.full(np.shape(x), 50.0),
        layers=(Layer(V1_M_S, 250.0, 1800.0), Layer(V2_M_S, 1100.0, 2200.0)),
        interface_z_m=(lambda x: np.full(np.shape(x), 50.0 - DEPTH_M),),
    )
    source_x_m = np.array([-21.0, -1.0, 23.0, 47.0, 67.0])
    receiver_x_m = np.arange(0.0, 47.0, 2.0)
    offset_m = np.abs(source_x_m[:, None] - receiver_x_m[None, :])
    # Intercept time of one flat layer (Telford, Geldart, Sheriff).
    intercept_s = 2 * DEPTH_M * np.sqrt(1 / V1_M_S**2 - 1 / V2_M_S**2)
    onset_s = np.minimum(offset_m / V1_M_S, offset_m / V2_M_S + intercept_s)
    time_s = np.arange(800) * INTERVAL_S
    first = _pulse(time_s - onset_s[..., None], SOURCE_DURATION_S) * (5.0 / (5.0 + offset_m[..., None])) ** 2
    slow = 40.0 * _pulse(time_s - offset_m[..., None] / 200.0, 0.03)
    return SyntheticSurvey(
        model=model,
        waveforms=(first + slow).astype(np.float32),
        interval_s=INTERVAL_S,
        source_x_m=source_x_m,
        receiver_x_m=receiver_x_m,
        source_depth_m=np.zeros(5),
        onset_s=onset_s,
        source_duration_s=SOURCE_DURATION_S,
    )


def _pulse(time_s, length_s):
    inside = np.clip(time_s, 0.0, length_s)
    return np.sin(np.pi * inside / length_s) ** 3 * np.sin(2 * np.pi * inside / length_s)


def rows_of(path):
    with path.open(newline="") as file:
        return list(csv.DictReader(file))


def test_the_same_seed_gives_the_same_records_and_another_seed_others(survey):
    noise = FieldNoise.level("field")
    first, again, other = survey.noisy(1, noise), survey.noisy(1, noise), survey.noisy(2, noise)
    for one, two, three in zip(first.records, again.records, other.records, strict=True):
        npt.assert_array_equal(one.samples, two.samples)
        assert np.mean(one.samples != three.samples) > 0.9
    npt.assert_array_equal(first.onset_s, again.onset_s)


def test_records_of_one_survey_have_noise_of_their_own(survey):
    records = survey.noisy(1, dataclasses.replace(FieldNoise.level("rough"), dead=0, spiky=0)).records
    before = [record.samples[5, :100] for record in records]
    correlation = np.corrcoef(before) - np.eye(len(before))
    assert np.max(np.abs(correlation)) < 0.99


def test_onsets_on_the_clock_of_the_record_are_late_by_time_break_and_geophone(survey):
    noise = dataclasses.replace(FieldNoise.level("none"), time_break_s=2e-3, geophone_delay_s=1e-3)
    recorded = survey.noisy(3, noise)
    npt.assert_allclose(
        recorded.onset_s - survey.onset_s,
        recorded.time_break_shift_s[:, None] + recorded.geophone_delay_s[None, :],
        atol=1e-15,
    )
    assert np.min(np.abs(recorded.time_break_shift_s)) > 0
    # What stands in the records agrees: the first sample above a millionth of the trace's largest, against the onset.
    for shot, record in enumerate(recorded.records):
        time_s = record.start_s + np.arange(record.samples.shape[1]) * INTERVAL_S
        started = np.abs(record.samples) > 1e-3 * survey.first_arrival_amplitude[shot][:, None]
        late_s = time_s[np.argmax(started, axis=1)] - recorded.onset_s[shot]
        assert np.all(late_s > -INTERVAL_S)
        assert np.all(late_s < 0.1 * SOURCE_DURATION_S)


def test_time_breaks_and_strengths_have_their_spread_over_many_surveys(survey):
    noise = dataclasses.replace(FieldNoise.level("none"), time_break_s=0.4e-3, strength_spread=0.2)
    days = [survey.noisy(seed, noise) for seed in range(100)]
    shifts = np.concatenate([day.time_break_shift_s for day in days])
    strengths = np.concatenate([day.strength for day in days])
    # 500 values: the standard deviation has a standard error of 3.2 %, the mean one of 4.5 % of a standard deviation.
    assert np.std(shifts) == pytest.approx(0.4e-3, rel=0.12)
    assert abs(np.mean(shifts)) < 0.15 * 0.4e-3
    assert np.std(np.log(strengths)) == pytest.approx(0.2, rel=0.12)


@pytest.mark.parametrize(("level", "expected"), [("quiet", 60.0), ("field", 13.0), ("rough", 2.0)])
def test_signal_to_noise_of_the_far_third_is_that_of_the_level(survey, level, expected):
    noise = dataclasses.replace(FieldNoise.level(level), spiky=0, dead=0, reversed=0, weak_shots=0)
    found = []
    for seed in range(20):
        recorded = survey.noisy(seed, noise)
        before = np.array([record.samples[:, :100] for record in recorded.records], dtype=np.float64)
        rms = np.sqrt(np.mean(before[survey.far_third] ** 2))
        found.append(np.median(survey.first_arrival_amplitude[survey.far_third]) / rms)
    # 25 ms of noise whose strongest part is below 30 Hz are one or two values a trace, and noise varies by a factor of
    # 1.2 to 1.35 from shot to shot, which adds to the mean square.
    assert np.mean(found) == pytest.approx(expected, rel=0.15)


def test_weak_shots_are_weak(survey):
    noise = dataclasses.replace(FieldNoise.level("none"), weak_shots=2, weak_strength=0.25)
    strength = survey.noisy(1, noise).strength
    npt.assert_array_equal(np.sort(strength), [0.25, 0.25, 1.0, 1.0, 1.0])
    with pytest.raises(ValueError, match="weak_shots: expected at most 5, found 6"):
        survey.noisy(1, dataclasses.replace(noise, weak_shots=6))


def test_first_arrival_amplitude_leaves_the_strong_slow_wave_out(survey):
    far = (survey.offset_m > 15.0) & (survey.offset_m < 35.0)  # the slow wave is on the record up to 40 m
    largest = np.max(np.abs(survey.waveforms), axis=-1)
    assert np.all(largest[far] > 100 * survey.first_arrival_amplitude[far])
    # sin^3(x) sin(2 x) is largest where tan^2(x) = 4: 2 * 0.8^2 * sqrt(0.2) = 0.5724, at 0.35 of the pulse.
    npt.assert_allclose(
        survey.first_arrival_amplitude[far], 0.5724 * (5.0 / (5.0 + survey.offset_m[far])) ** 2, rtol=0.02
    )


def test_depths_and_velocities_are_those_of_the_model(survey):
    npt.assert_allclose(survey.depth_m, np.full((1, 24), DEPTH_M))
    npt.assert_allclose(survey.velocity_m_s, np.repeat([[V1_M_S], [V2_M_S]], 24, axis=1))


def test_the_truth_files_hold_what_was_recorded(survey, tmp_path):
    noise = dataclasses.replace(FieldNoise.level("rough"), dead=1, reversed=1, spiky=1)
    recorded = survey.noisy(4, noise)
    files = recorded.write(tmp_path / "line")
    assert [path.name for path in files] == [f"shot_{number:02d}.sgy" for number in range(1, 6)]
    onsets = rows_of(tmp_path / "line" / "truth" / "true_onsets.csv")
    assert len(onsets) == 5 * 24
    found_ms = np.array([float(row["onset_ms"]) for row in onsets]).reshape(5, 24)
    npt.assert_allclose(found_ms, recorded.onset_s * 1e3, atol=0.5e-4 + 1e-9)  # four decimals
    parts = [
        float(row["travel_time_ms"]) + float(row["time_break_shift_ms"]) + float(row["geophone_delay_ms"])
        for row in onsets
    ]
    npt.assert_allclose(parts, found_ms.ravel(), atol=2.1e-4)  # four numbers, each rounded to four decimals
    states = {row["state"] for row in onsets}
    assert states == {"live", "dead", "reversed", "spiky"}
    dead = {int(row["channel"]) for row in onsets if row["state"] == "dead"}
    assert dead == set(np.flatnonzero(recorded.dead) + 1)
    depths = rows_of(tmp_path / "line" / "truth" / "true_depths.csv")
    assert [(row["x_m"], row["layer"], row["depth_m"]) for row in depths[:2]] == [
        ("0.000", "1", "5.0000"),
        ("2.000", "1", "5.0000"),
    ]
    velocities = rows_of(tmp_path / "line" / "truth" / "true_velocities.csv")
    assert {(row["layer"], row["velocity_m_s"]) for row in velocities} == {("1", "500.0"), ("2", "2000.0")}


def test_all_shots_can_go_into_one_file(survey, tmp_path):
    recorded = survey.noisy(4, FieldNoise.level("field"))
    (path,) = recorded.write(tmp_path, one_file=True)
    samples = recorded.records[0].samples.shape[1]
    assert path.stat().st_size == 3600 + 5 * 24 * (240 + 4 * samples)


def test_arrays_that_do_not_belong_together_are_refused(survey):
    with pytest.raises(ValueError, match=r"onset_s: expected shape \(5, 24\), found \(5, 23\)"):
        dataclasses.replace(survey, onset_s=survey.onset_s[:, :-1])
