import numpy as np
import numpy.testing as npt
import pytest
from made_survey import PlaneGround

from interp.fermat import two_layer_arrivals

# nodes 0.5 m apart and legs of 5 m at 500 m/s: d**2 / (8 l V1) = 13 us a leg, see two_layer_arrivals
ATOL_NODES_S = 2.6e-5


def arrivals(x, surface, refractor, v1, v2, shot_m, receiver_m):
    shot = np.searchsorted(x, np.atleast_1d(shot_m))
    receiver = np.searchsorted(x, np.atleast_1d(receiver_m))
    return two_layer_arrivals(x, surface, refractor, np.full(x.size, 1 / v1), np.full(x.size, 1 / v2), shot, receiver)


@pytest.mark.parametrize("slope", [-0.12, 0.0, 0.07])
def test_times_over_a_plane_refractor_match_a_continuous_minimisation(slope):
    x = np.arange(-40, 141, 0.5)
    ground = PlaneGround(500.0, 2000.0, 7.0 if slope >= 0 else 20.0, slope)
    receivers = np.arange(0.0, 100.0, 7.5)
    depth = np.maximum(ground.depth_at(x), 0.5)
    found = arrivals(x, np.zeros(x.size), -depth, 500.0, 2000.0, np.full(receivers.size, 2.0), receivers)
    exact = np.array([ground.first_arrival_s(2.0, receiver) for receiver in receivers])
    npt.assert_allclose(np.minimum(found.direct_s, found.head_s), exact, atol=ATOL_NODES_S)


def test_times_are_the_same_with_shot_and_receiver_swapped():
    rng = np.random.default_rng(3)
    x = np.arange(0, 80, 0.5)
    surface = 2 * np.sin(x / 11)
    refractor = surface - 6 + 2 * np.sin(x / 7 + 1)
    ends = rng.choice(x, size=(12, 2))
    there = arrivals(x, surface, refractor, 450.0, 2100.0, ends[:, 0], ends[:, 1])
    back = arrivals(x, surface, refractor, 450.0, 2100.0, ends[:, 1], ends[:, 0])
    npt.assert_allclose(there.direct_s, back.direct_s, rtol=1e-12)  # the same sums in another order
    npt.assert_allclose(there.head_s, back.head_s, rtol=1e-12)


def test_direct_wave_goes_straight_below_a_hill_and_round_a_valley():
    x = np.arange(0, 41, 1.0)
    hill = np.where((x > 10) & (x < 30), 5.0, 0.0)
    flat = np.full(x.size, -50.0)
    over_hill = arrivals(x, hill, flat, 400.0, 2000.0, 0.0, 40.0).direct_s
    npt.assert_allclose(over_hill, 40 / 400, rtol=1e-12)
    valley = -4.0 * np.maximum(0, 1 - np.abs(x - 20) / 20)
    round_valley = arrivals(x, valley, flat, 400.0, 2000.0, 0.0, 40.0).direct_s
    npt.assert_allclose(round_valley, 2 * np.hypot(20, 4) / 400, rtol=1e-12)


def test_head_wave_cuts_below_a_ridge_of_the_refractor():
    x = np.arange(0, 121, 0.5)
    flat = np.full(x.size, -8.0)
    ridge = flat + 3 * np.exp(-(((x - 60) / 4) ** 2))
    surface = np.zeros(x.size)
    plain = arrivals(x, surface, flat, 500.0, 2500.0, 5.0, 115.0).head_s
    ridged = arrivals(x, surface, ridge, 500.0, 2500.0, 5.0, 115.0).head_s
    npt.assert_allclose(ridged, plain, rtol=1e-9)  # the path below the ridge is the very same straight line


def test_feet_lie_a_critical_angle_away_from_shot_and_receiver():
    x = np.arange(0, 101, 0.5)
    found = arrivals(x, np.zeros(x.size), np.full(x.size, -6.0), 500.0, 2000.0, 10.0, 90.0)
    offset = 6 * np.tan(np.arcsin(0.25))
    assert abs(x[found.shot_foot[0]] - (10 + offset)) <= 0.5  # one node
    assert abs(x[found.receiver_foot[0]] - (90 - offset)) <= 0.5


def test_nodes_that_do_not_increase_are_refused():
    with pytest.raises(ValueError, match="increasing"):
        arrivals(np.array([0.0, 1.0, 1.0]), np.zeros(3), -np.ones(3), 500.0, 2000.0, 0.0, 1.0)
