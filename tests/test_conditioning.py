import numpy as np
import numpy.testing as npt
import pytest

from picker.conditioning import (
    block_means,
    fit_noise,
    quiet_start,
    recent_level,
    remove_drift,
    remove_mains_hum,
    remove_offset,
    trace_states,
    whiten,
)

INTERVAL_S = 0.0005
TIME_S = INTERVAL_S * np.arange(800)


def whole(traces):
    return np.zeros(traces, dtype=np.int64), np.full(traces, 400, dtype=np.int64)


def test_flat_short_and_clipped_traces_are_told_from_live_ones():
    rng = np.random.default_rng(1)
    samples = np.vstack(
        [
            rng.normal(size=500),
            np.zeros(500),
            np.full(500, 3.0),
            np.clip(5 * rng.normal(size=500), -4, 4),
            rng.normal(size=500),
            np.where(np.arange(500) == 250, np.nan, rng.normal(size=500)),
        ]
    )
    valid = np.array([500, 500, 500, 500, 5, 500])
    assert trace_states(samples, valid).tolist() == ["live", "dead", "dead", "clipped", "dead", "dead"]


def test_a_trace_with_nothing_but_amplifier_noise_is_dead():
    rng = np.random.default_rng(10)
    samples = rng.normal(size=(12, 500)) * np.geomspace(1, 1e-2, 12)[:, None]
    samples[5] *= 1e-5
    assert np.flatnonzero(trace_states(samples, np.full(12, 500)) == "dead").tolist() == [5]


def test_a_smooth_peak_is_not_taken_for_clipping():
    assert trace_states(np.sin(2 * np.pi * 30 * TIME_S)[None], np.array([800])).tolist() == ["live"]


@pytest.mark.parametrize("mains_hz", [50, 60])
def test_mains_hum_with_harmonics_is_fitted_and_taken_off(mains_hz):
    rng = np.random.default_rng(2)
    noise = rng.normal(size=(1, 800))
    hum = 20 * np.sin(2 * np.pi * mains_hz * TIME_S + 1) + 8 * np.cos(2 * np.pi * 3 * mains_hz * TIME_S)
    arrival = np.where(TIME_S > 0.3, 50 * np.sin(2 * np.pi * 40 * (TIME_S - 0.3)), 0.0)
    cleaned, found = remove_mains_hum(noise + hum + arrival, INTERVAL_S, *whole(1))
    assert found[0] == mains_hz
    # ten amplitudes fitted to 400 samples: error of each sqrt(2 / 400), carried a window's length beyond the fit
    assert (cleaned - noise - arrival)[0].std() < 0.5


def test_noise_without_hum_is_left_as_it_was():
    rng = np.random.default_rng(3)
    samples = rng.normal(size=(50, 800))
    cleaned, found = remove_mains_hum(samples, INTERVAL_S, *whole(50))
    assert not found.any()
    npt.assert_array_equal(cleaned, samples)


def test_the_drift_filter_looks_back_only():
    rng = np.random.default_rng(4)
    samples = rng.normal(size=(1, 800))
    changed = samples.copy()
    changed[0, 500:] += 100.0
    before = slice(0, 500)
    npt.assert_array_equal(
        remove_drift(changed, INTERVAL_S, 4.0)[0, before], remove_drift(samples, INTERVAL_S, 4.0)[0, before]
    )


def test_the_drift_filter_takes_drift_off_and_leaves_the_first_milliseconds_of_an_onset():
    drift = 100 * np.sin(2 * np.pi * 0.5 * TIME_S)
    arrival = np.where(TIME_S > 0.3, np.sin(2 * np.pi * 50 * (TIME_S - 0.3)), 0.0)
    filtered = remove_drift((drift + arrival)[None], INTERVAL_S, 4.0)[0]
    near = (TIME_S > 0.29) & (TIME_S < 0.305)
    # two poles at 4 Hz pass (0.5 / 4)^2 = 1.6 % of a drift at 0.5 Hz; an onset loses 2 * 2 pi * 4 Hz * 5 ms
    npt.assert_allclose(filtered[near] - filtered[TIME_S < 0.3][-1], arrival[near], atol=0.3)
    assert np.abs(filtered[TIME_S < 0.3]).max() < 0.1 * np.abs(drift).max()


def test_the_mean_of_the_noise_is_taken_off():
    rng = np.random.default_rng(5)
    samples = rng.normal(size=(2, 800)) + np.array([[100.0], [-3.0]])
    # 400 samples know their mean to 0.05, and not beyond rounding when it is taken off
    npt.assert_allclose(remove_offset(samples, *whole(2))[:, :400].mean(axis=1), 0.0, atol=1e-12)


def test_coloured_noise_comes_out_white_and_in_units_of_its_level():
    rng = np.random.default_rng(6)
    noise = np.zeros((6, 3000))
    kicks = rng.normal(size=(6, 3000))
    for k in range(2, 3000):
        noise[:, k] = 1.6 * noise[:, k - 1] - 0.8 * noise[:, k - 2] + kicks[:, k]
    noise *= np.array([1, 2, 5, 10, 0.1, 1])[:, None]
    model = fit_noise(noise, np.zeros(6, dtype=np.int64), np.full(6, 3000), 12)
    white = whiten(noise, model)[:, 50:]
    npt.assert_allclose(white.std(axis=1), 1.0, atol=0.05)  # 3000 samples: 1.3 %, four standard errors
    for lag in range(1, 6):
        correlation = np.mean(white[:, lag:] * white[:, :-lag], axis=1)
        assert np.abs(correlation).max() < 5 / np.sqrt(2950)  # five standard errors


def test_a_trace_without_noise_samples_borrows_from_the_others():
    rng = np.random.default_rng(7)
    samples = rng.normal(size=(5, 500))
    stop = np.array([300, 300, 0, 300, 300])
    model = fit_noise(samples, np.zeros(5, dtype=np.int64), stop, 4)
    assert model.samples[2] == 0
    npt.assert_allclose(model.level[2], np.median(model.level[[0, 1, 3, 4]]))


def test_a_record_without_any_noise_has_a_level_all_the_same():
    samples = np.zeros((3, 400))
    samples[:, 200:] = np.sin(0.1 * np.arange(200))
    model = fit_noise(samples, np.zeros(3, dtype=np.int64), np.full(3, 150), 8)
    assert np.all(model.level > 0)


def test_a_gust_before_the_arrival_raises_the_level_and_quiet_does_not_lower_it():
    rng = np.random.default_rng(8)
    samples = rng.normal(size=(1, 1000))
    model = fit_noise(samples, np.zeros(1, dtype=np.int64), np.array([500]), 4)
    gusty = samples[0].copy()
    gusty[700:800] *= 5
    calm = samples[0].copy()
    calm[700:800] *= 0.1
    assert recent_level(gusty, model, 0, 800, 60) > 3 * model.level[0]
    assert recent_level(calm, model, 0, 800, 60) == model.level[0]


def test_blocks_are_means_and_a_rest_is_left_out():
    npt.assert_array_equal(block_means(np.arange(11.0)[None], 4), [[1.5, 5.5]])


def test_a_trace_is_quiet_until_a_share_of_its_peak():
    assert quiet_start(np.array([[0.0, 0.001, 0.2, 10.0]]), 0.01).tolist() == [2]
