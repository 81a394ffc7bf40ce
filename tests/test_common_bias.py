import dataclasses

import numpy as np
import numpy.testing as npt
from made_survey import PlaneGround, plane_survey

from interp.common_bias import BIAS_SIGMA, SATURATES_S, bias_derivatives
from interp.interpretation import InterpretSettings, interpret

GROUND = PlaneGround(500.0, 2200.0, 5.0, 0.0)
RECEIVERS = np.arange(24) * 3.0
SHOTS = np.array([-20.0, -1.5, 34.5, 70.5, 90.0])


def test_direct_and_head_waves_have_parts_of_their_own():
    offset_m = np.linspace(1.0, 60.0, 100)
    direct, head = bias_derivatives(np.full(100, 0.001), offset_m)
    assert direct.shape == head.shape == (100, len(BIAS_SIGMA))
    assert not np.any((direct != 0) & (head != 0))
    left_s = 0.001 / (1 + 0.001 / SATURATES_S)
    npt.assert_allclose(direct[:, 0], left_s)
    npt.assert_allclose(head[:, 1], left_s)
    npt.assert_allclose(head[:, 2], left_s * offset_m / 60.0)


def test_weak_onsets_do_not_carry_ever_more_of_what_is_common():
    direct, _ = bias_derivatives(np.full(50, 1.0), np.linspace(1.0, 60.0, 50))
    assert np.all(direct[:, 0] < SATURATES_S)


def test_noise_of_single_picks_does_not_enter_what_is_common():
    rng = np.random.default_rng(1)
    offset_m = np.linspace(1.0, 60.0, 400)
    direct, _ = bias_derivatives(0.001 + 0.0005 * rng.normal(size=400), offset_m)
    # a median of twenty: 0.5 ms * 1.25 / sqrt(20) = 0.14 ms, four standard errors
    assert np.abs(direct[:, 0] - 0.001 / (1 + 0.001 / SATURATES_S)).max() < 0.00056


def test_late_bias_widens_the_intervals_and_without_it_nothing_changes():
    picks = plane_survey(GROUND, SHOTS, RECEIVERS, 3e-4, np.random.default_rng(5))
    settings = InterpretSettings(draws=200)
    plain = interpret(picks, settings)
    late = interpret(dataclasses.replace(picks, bias_removed_s=np.full(picks.time_s.size, 0.002)), settings)
    width = [np.ptp(section.depth_interval_90_m[:, 0], axis=0).mean() for section in (plain, late)]
    # 1.2 ms that saturate, times 0.4: half a millisecond of common error at an intercept of 19 ms, 2.5 % of the depth
    assert width[1] > 1.3 * width[0]
    unknown = interpret(dataclasses.replace(picks, bias_removed_s=np.full(picks.time_s.size, np.nan)), settings)
    npt.assert_array_equal(unknown.depth_m, plain.depth_m)
