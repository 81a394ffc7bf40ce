import numpy as np
import numpy.testing as npt
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from picker.onsets import aic, akaike_weights, change_scores, energy_ratio, modified_energy_ratio


def step_trace(onset=120, samples=200, ratio=10.0, seed=3):
    trace = np.random.default_rng(seed).normal(size=samples)
    trace[onset:] *= ratio
    return trace


@settings(max_examples=30, deadline=None)
@given(scale=st.floats(1e-9, 1e9), seed=st.integers(0, 1000))
def test_onsets_do_not_depend_on_scale_or_polarity(scale, seed):
    trace = step_trace(seed=seed)
    other = -scale * trace
    assert np.argmin(aic(trace)[2:-2]) == np.argmin(aic(other)[2:-2])
    npt.assert_allclose(energy_ratio(other, 20), energy_ratio(trace, 20), rtol=1e-9)  # rounding of prefix sums


def test_aic_does_not_depend_on_the_mean():
    trace = step_trace()
    # taking a thousand standard deviations off costs six of sixteen digits in the variances, times 200 in AIC
    npt.assert_allclose(aic(trace + 1000.0)[2:-2], aic(trace)[2:-2], rtol=0, atol=1e-6)


def test_records_are_read_as_their_traces_one_by_one():
    rng = np.random.default_rng(0)
    record = rng.normal(size=(7, 150))
    for kernel in (aic, lambda a: energy_ratio(a, 15), lambda a: modified_energy_ratio(a, 15)):
        npt.assert_array_equal(kernel(record), np.array([kernel(trace) for trace in record]))


@pytest.mark.parametrize("seed", range(10))
def test_aic_finds_a_step_of_strength_to_a_few_samples(seed):
    # behind a step of 10 the first strong sample is as weak as noise with probability 0.08: three in a row hardly ever
    assert abs(int(np.argmin(aic(step_trace(seed=seed))[2:-2])) + 2 - 119) <= 3


def test_aic_of_flat_traces_is_finite():
    for trace in (np.zeros(50), np.full(50, 7.0), np.concatenate([np.zeros(25), np.ones(25)])):
        assert np.all(np.isfinite(aic(trace)))


def test_an_energy_ratio_with_nothing_before_is_zero_not_infinite():
    trace = np.concatenate([np.zeros(50), np.ones(50)])
    ratios = energy_ratio(trace, 10)
    assert np.all(np.isfinite(ratios))
    assert ratios[50] == 0


def test_energy_ratio_is_the_direct_sum():
    trace = step_trace()
    squares = trace**2
    for i in (20, 77, 120, 180):
        # prefix sums of 200 squares against the direct sums: rounding
        npt.assert_allclose(
            energy_ratio(trace, 20)[i], squares[i : i + 20].sum() / squares[i - 20 : i].sum(), rtol=1e-10
        )


def test_weights_sum_to_one_and_correlated_samples_spread_them():
    values = aic(step_trace(ratio=3.0))
    sharp, broad = akaike_weights(values), akaike_weights(values, correlation_samples=10.0)
    npt.assert_allclose([sharp.sum(), broad.sum()], 1.0, rtol=1e-12)
    assert broad.max() < sharp.max()


def test_what_cannot_be_read_is_refused_with_what_was_expected():
    with pytest.raises(ValueError, match="at least 3"):
        aic(np.zeros(2))
    with pytest.raises(ValueError, match="expected 1 to 50"):
        energy_ratio(np.zeros(100), 51)
    with pytest.raises(ValueError, match="shape"):
        aic(np.zeros((2, 3, 4)))
    with pytest.raises(ValueError, match="at least 1"):
        akaike_weights(np.zeros(5), correlation_samples=0.5)


def test_a_weak_first_arrival_wins_over_a_strong_later_one():
    rng = np.random.default_rng(8)
    white = rng.normal(size=(1, 400))
    k = np.arange(400)
    white[0] += np.where(k >= 150, 6 * np.sin(0.5 * (k - 150)), 0.0)
    white[0] += np.where(k >= 200, 600 * np.sin(0.2 * (k - 200)), 0.0)
    scores = change_scores(white, np.zeros(1), 8)[0]
    # the sine of the first arrival is above the noise from its second sample on
    assert abs(int(np.argmax(scores)) - 150) <= 3


def test_noise_alone_scores_best_without_an_onset():
    rng = np.random.default_rng(9)
    scores = change_scores(rng.normal(size=(200, 300)), np.zeros(200), 8)
    # the log-likelihood ratio of any one of 300 onsets exceeds 9 by chance in well under 1 % of traces
    assert np.mean(scores.max(axis=1) - scores[:, -1] > 9) < 0.05
