import numpy as np
import numpy.testing as npt
import pytest
from made_survey import PlaneGround, plane_survey

from interp.interpretation import InterpretSettings, interpret
from interp.plane_pairs import plane_pairs

GROUND = PlaneGround(500.0, 2200.0, 5.0, 0.03)
RECEIVERS = np.arange(24) * 3.0
SIGMA_S = 2e-4


@pytest.fixture(scope="module")
def section():
    shots = np.array([-1.5, 34.5, 70.5])
    picks = plane_survey(GROUND, shots, RECEIVERS, SIGMA_S, np.random.default_rng(4))
    return interpret(picks, InterpretSettings(draws=100))


def test_the_widest_pair_gives_the_dipping_plane_within_three_standard_errors(section):
    pair = plane_pairs(section)[0]
    assert (pair.along_a_m, pair.along_b_m) == (-1.5, 70.5)
    at_a, at_b = pair.layers.at_a, pair.layers.at_b
    for found, sigma, true in (
        (at_a.depth_m[0], at_a.depth_sigma_m[0], GROUND.depth_at(-1.5)),
        (at_b.depth_m[0], at_b.depth_sigma_m[0], GROUND.depth_at(70.5)),
        (at_a.velocity_m_s[0], at_a.velocity_sigma_m_s[0], 500.0),
        (at_a.velocity_m_s[1], at_a.velocity_sigma_m_s[1], 2200.0),
        (at_a.dip_rad[0], at_a.dip_sigma_rad[0], np.arctan(0.03)),
    ):
        assert abs(found - true) < 3 * sigma


def test_plane_pairs_agree_with_the_delay_time_section_on_a_plane(section):
    pair = plane_pairs(section)[0]
    # both come from the same picks; their difference is well within the error of either
    npt.assert_allclose(pair.layers.at_a.depth_m[0], section.depth_m[0, 0] - 0.03 * 1.5, rtol=0.05)
    npt.assert_allclose(pair.layers.at_b.depth_m[0], section.depth_m[0, -1] + 0.03 * 1.5, rtol=0.05)


def test_one_direction_of_shooting_gives_no_pair():
    picks = plane_survey(GROUND, np.array([-1.5]), RECEIVERS, SIGMA_S, np.random.default_rng(4))
    assert plane_pairs(interpret(picks, InterpretSettings(draws=100))) == []
