"""AIC, Akaike weights and energy ratios against obspy and against values worked from the published formulas."""

import numpy as np
import numpy.testing as npt
import pytest

from picker.onsets import aic, akaike_weights, energy_ratio, logarithms, modified_energy_ratio

trigger = pytest.importorskip("obspy.signal.trigger")


def made_trace(amplitude):
    """200 samples that anybody can make again: a linear congruential generator and a damped sine from sample 120 on.

    Constants of the generator: Press et al., Numerical Recipes, 2nd edition, section 7.1 ("quick and dirty").
    """
    state, noise = 12345, []
    for _ in range(200):
        state = (1664525 * state + 1013904223) % 2**32
        noise.append(state / 2**32 - 0.5)
    k = np.arange(200)
    late = k - 120
    signal = np.where(late >= 0, np.sin(2 * np.pi * 0.05 * late) * np.exp(-0.02 * np.maximum(late, 0)), 0.0)
    return 0.2 * np.array(noise) + amplitude * signal


def plain_trace():
    k = np.arange(100)
    before = 0.1 * np.cos(2.0 * k) + 0.03 * np.cos(0.7 * k)
    return np.where(k < 60, before, np.sin(0.6 * (k - 60)) + 0.1 * np.cos(2.0 * k))


@pytest.mark.parametrize("seed", range(5))
@pytest.mark.parametrize("scale", [1e-6, 1.0, 1e6])
def test_aic_is_that_of_obspy_on_the_same_samples(seed, scale):
    rng = np.random.default_rng(seed)
    trace = scale * np.concatenate([rng.normal(size=300), 8 * rng.normal(size=200)])
    theirs = trigger.aic_simple(trace)
    ours = aic(trace)
    # obspy leaves the two ends, where one part has fewer than two samples, to repeat their neighbours
    inner = slice(2, -2)
    # both sum 500 squares in double precision: relative rounding of 1e-13 in variances, times 500 in AIC
    npt.assert_allclose(ours[inner], theirs[inner], rtol=0, atol=1e-9)
    assert int(np.argmin(ours[inner])) == int(np.argmin(theirs[inner]))


# Worked from Maeda (1985) and Coppens (1985) by plain loops in double precision, apart from this program.
@pytest.mark.parametrize(
    ("trace", "window", "least", "aic_at", "aic_values", "ratio_at", "ratio", "modified_at", "modified"),
    [
        (
            made_trace(1.0), 20, 120, [99, 119, 120, 150],
            [-786.6797667404659, -837.3787582612089, -840.8569132344415, -557.5611230624378],
            116, 104.32264234077972, 122, 31518.58844476358,
        ),
        (
            made_trace(0.5), 20, 121, [99, 119, 120, 150],
            [-916.0515269872847, -941.9906075950136, -944.1595165640543, -807.1865040132915],
            116, 27.763560879746745, 122, 268.73312118477514,
        ),
        (
            made_trace(0.3), 20, 121, [99, 119, 120, 150],
            [-1000.9720939010324, -1012.4518245056249, -1013.750907407642, -958.0101764635692],
            116, 11.234435334447413, 123, 11.559404037344871,
        ),
        (
            plain_trace(), 10, 60, [58, 59, 60, 61, 62],
            [-333.9964200284948, -338.4981682086668, -341.8772048184289, -315.47493530309, -264.4190006747663],
            60, 101.2494577692054, 61, 99352.33854534436,
        ),
    ],
)  # fmt: skip
def test_values_worked_from_the_published_formulas(
    trace, window, least, aic_at, aic_values, ratio_at, ratio, modified_at, modified
):
    # the worked values stand for "onset before sample k + 1", as ours do
    values = aic(trace)
    npt.assert_allclose(values[aic_at], aic_values, rtol=0, atol=1e-9)
    assert int(np.argmin(values[10:-10])) + 10 == least
    ratios = energy_ratio(trace, window)
    assert int(np.argmax(ratios)) == ratio_at
    npt.assert_allclose(ratios[ratio_at], ratio, rtol=1e-9)  # ratio of prefix sums of some ten squares
    sharper = modified_energy_ratio(trace, window)
    assert int(np.argmax(sharper)) == modified_at
    npt.assert_allclose(sharper[modified_at], modified, rtol=1e-9)


def test_akaike_weights_worked_from_the_published_formula():
    # Burnham and Anderson (2002), section 2.9, over candidates 10..189 of the made trace
    weights = akaike_weights(aic(made_trace(1.0))[10:190])
    k = np.arange(10, 190)
    mean = float(k @ weights)
    assert int(k[np.argmax(weights)]) == 120
    npt.assert_allclose(weights.max(), 0.7343930146815177, rtol=1e-9)
    npt.assert_allclose(mean, 119.54275678443942, rtol=1e-9)
    npt.assert_allclose(np.sqrt(((k - mean) ** 2) @ weights), 0.9511589794946544, rtol=1e-8)


def test_logarithms_of_the_kernel_are_those_of_the_mathematical_library():
    values = np.concatenate([np.geomspace(1e-300, 1e300, 5001), np.nextafter(1.0, [0.0, 2.0]), [1.0, np.sqrt(2.0)]])
    # a few units in the last place; near 1 the logarithm itself is small and the error is absolute
    npt.assert_allclose(logarithms(values), np.log(values), rtol=4e-16, atol=2e-17)
