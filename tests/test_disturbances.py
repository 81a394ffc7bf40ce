from __future__ import annotations

import numpy as np
import numpy.testing as npt
import pytest

from synthetic_gathers import disturbances

INTERVAL_S = 0.5e-3
SAMPLES = 2048


def power_between(samples, low_hz, high_hz):
    power = np.mean(np.abs(np.fft.rfft(samples, axis=1)) ** 2, axis=0)
    frequency_hz = np.fft.rfftfreq(samples.shape[1], INTERVAL_S)
    return float(np.mean(power[(frequency_hz >= low_hz) & (frequency_hz < high_hz)]))


@pytest.mark.parametrize(
    ("temperature_c", "sound_m_s"), [(0, 331.3), (20, 343.21462268256795), (30, 349.01944191506897)]
)
def test_sound_speed_follows_the_temperature(temperature_c, sound_m_s):
    # c = 331.3 sqrt(1 + T / 273.15): checks AIR-1 to AIR-3 (343 m/s at 20 deg C read in repository geoscixyz/gpg).
    assert disturbances.sound_speed_m_s(temperature_c) == pytest.approx(sound_m_s, abs=0.05)


def test_ambient_noise_has_unit_rms_and_rises_towards_low_frequencies():
    noise = disturbances.ambient(np.random.default_rng(1), 400, SAMPLES, INTERVAL_S)
    # 400 traces of about 200 independent values each: standard error of the mean square below 1 %.
    assert np.mean(noise**2) == pytest.approx(1.0, abs=0.04)
    # 1/f power between the geophone's and the upper corner: by four from 20-25 Hz to 80-100 Hz, less the corners.
    ratio = power_between(noise, 20, 25) / power_between(noise, 80, 100)
    assert 3.5 < ratio < 6.0
    # Below the geophone's natural frequency it rolls off again, f^4 against 1/f.
    assert power_between(noise, 2, 4) < 0.2 * power_between(noise, 10, 20)


def test_ambient_noise_is_independent_from_trace_to_trace():
    noise = disturbances.ambient(np.random.default_rng(2), 2, 200_000, INTERVAL_S)
    # Some 1e4 independent values: the correlation of independent traces has a standard error of 0.01.
    assert abs(np.corrcoef(noise)[0, 1]) < 0.05


def test_traffic_noise_has_unit_rms_and_one_apparent_velocity_over_the_spread():
    x_m = np.arange(0.0, 24.0, 2.0)
    rng = np.random.default_rng(3)
    power = [np.mean(disturbances.traffic(rng, x_m, SAMPLES, INTERVAL_S) ** 2) for _ in range(60)]
    assert np.mean(power) == pytest.approx(1.0, abs=0.15)  # narrow bands: each second holds few independent values
    one_wave = disturbances.traffic(np.random.default_rng(4), x_m, SAMPLES, INTERVAL_S, waves=1)
    lags = []
    for near in range(x_m.size - 1):
        correlation = np.correlate(one_wave[near + 1], one_wave[near], "full")
        lags.append((np.argmax(correlation) - (SAMPLES - 1)) * INTERVAL_S)
        assert correlation.max() > 0.95 * np.sum(one_wave[near] ** 2)
    # Same delay from each geophone to the next, and no more than 2 m at 150 m/s.
    assert np.ptp(lags) <= INTERVAL_S
    assert np.max(np.abs(lags)) <= 2.0 / 150.0 + INTERVAL_S


@pytest.mark.parametrize("mains_hz", [50.0, 60.0])
def test_hum_is_mains_and_harmonics_only_and_in_phase_on_all_channels(mains_hz):
    pickup = np.array([1.0, 2.0, 0.5])
    samples = round(1.0 / INTERVAL_S)
    hum = disturbances.mains_hum(np.random.default_rng(5), pickup, samples, INTERVAL_S, mains_hz)
    npt.assert_allclose(hum, pickup[:, None] / pickup[0] * hum[0], rtol=1e-12)
    power = np.abs(np.fft.rfft(hum[0])) ** 2
    lines = [round(mains_hz * harmonic) for harmonic in (1, 2, 3, 5)]
    # Up to 0.06 Hz off nominal (three sigma) leaks 1 % out of a line of 1 Hz, and 26 % at the weak fifth harmonic.
    assert power[lines].sum() > 0.95 * power.sum()
    assert np.argmax(power) == mains_hz
    assert np.sqrt(np.mean(hum**2, axis=1)) == pytest.approx(pickup, rel=0.02)


def test_hum_meets_the_time_break_at_any_phase():
    first = [
        disturbances.mains_hum(np.random.default_rng(k), np.ones(1), 4, INTERVAL_S, 50.0)[0, 0] for k in range(200)
    ]
    # A mean of 200 values of rms 1 has a standard error of 0.07.
    assert abs(np.mean(first)) < 0.25
    assert np.std(first) == pytest.approx(1.0, abs=0.2)


def test_wind_comes_in_bursts_with_the_rms_of_each_geophones_exposure():
    exposure = np.repeat([1.0, 3.0], 300)
    noise = disturbances.wind(np.random.default_rng(6), exposure, SAMPLES, INTERVAL_S)
    rms = np.sqrt([np.mean(noise[:300] ** 2), np.mean(noise[300:] ** 2)])
    npt.assert_allclose(rms, [1.0, 3.0], rtol=0.06)  # 300 traces of about eight gusts of exponential height
    pieces = np.mean(noise[:300].reshape(300, 16, -1) ** 2, axis=2)
    steady = np.mean(
        disturbances.ambient(np.random.default_rng(7), 300, SAMPLES, INTERVAL_S).reshape(300, 16, -1) ** 2, 2
    )
    # Power from one sixteenth of the record to the next varies far more than that of steady noise does.
    assert np.std(pieces) > 2.0 * np.std(steady)


def test_spikes_are_rare_and_high():
    noise = disturbances.spikes(np.random.default_rng(8), 200, SAMPLES, INTERVAL_S, 10.0)
    jumps = noise[:, 1:] - noise[:, :-1] * np.exp(-INTERVAL_S / disturbances.SPIKE_DECAY_S)
    heights = np.abs(jumps[np.abs(jumps) > 1e-9])
    # 10 a second over 1.024 s and 200 traces: 2048 expected, Poisson error 45; about twenty fall on one another.
    assert 1850 < heights.size < 2200
    # The median of 2000 log-normal heights of spread 0.5 has a standard error of 1.4 %.
    assert np.median(heights) == pytest.approx(1.0, rel=0.06)
    assert np.median(np.abs(noise)) < 0.02


def test_air_wave_starts_at_distance_over_the_speed_of_sound_and_decays_with_distance():
    distance_m = np.repeat([10.0, 30.0, 90.0], 400)
    sound_m_s = 340.0
    noise = disturbances.air_wave(
        np.random.default_rng(9), distance_m, SAMPLES, INTERVAL_S, -0.05, sound_m_s, 180.0, 1.5, 30.0
    )
    time_s = -0.05 + np.arange(SAMPLES) * INTERVAL_S
    npt.assert_array_equal(noise[time_s[None, :] <= distance_m[:, None] / sound_m_s], 0.0)
    first = np.argmax(noise != 0.0, axis=1)
    assert np.all(time_s[first] - distance_m / sound_m_s <= INTERVAL_S + 1e-12)
    # Geometric means of log-normal strengths of spread 0.3: 400 of them leave 1.5 %; sampling the peak 4 times a half
    # cycle loses up to 5 %.
    largest = np.exp(np.mean(np.log(np.abs(noise).max(axis=1).reshape(3, 400)), axis=1))
    npt.assert_allclose(largest, (np.array([10.0, 30.0, 90.0]) / 30.0) ** -1.5, rtol=0.08)


@pytest.mark.parametrize("delay_s", [0.0, 0.13e-3, -0.37e-3, 4.0e-3, -13.3e-3, 90e-3])
def test_delay_moves_a_band_limited_pulse_by_fractions_of_a_sample(delay_s):
    def pulse(time_s):
        inside = (time_s > 0.1) & (time_s < 0.2)
        return np.where(inside, np.sin(np.pi * (time_s - 0.1) / 0.1) ** 4 * np.sin(2 * np.pi * 150 * time_s), 0.0)

    before = 60
    time_s = np.arange(1000) * INTERVAL_S
    delayed = disturbances.delay(np.tile(pulse(time_s), (2, 1)), np.array([delay_s, 0.2e-3]), INTERVAL_S, before)
    record_s = (np.arange(1000 + before) - before) * INTERVAL_S
    # The windowed sinc is right to 1e-4 of the pulse up to a third of the sampling frequency.
    npt.assert_allclose(delayed[0], pulse(record_s - delay_s), atol=1e-4)
    npt.assert_allclose(delayed[1], pulse(record_s - 0.2e-3), atol=1e-4)


def test_delay_leaves_nothing_of_a_strong_late_wave_before_it():
    late = np.zeros((1, 1000))
    late[0, 500:] = 1e6
    delayed = disturbances.delay(late, np.array([0.3e-3]), INTERVAL_S, 60)
    npt.assert_array_equal(delayed[0, : 60 + 500 - disturbances.SHIFT_HALF_WIDTH], 0.0)
