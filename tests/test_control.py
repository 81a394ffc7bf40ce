import numpy as np
import numpy.testing as npt

from interp.control import control_of_stations, least_depth_m

STATIONS = np.arange(0.0, 50.0, 5.0)


def control(shot, receiver, foot_in=2.0, head=True, believed=True):
    shot, receiver = np.broadcast_arrays(np.atleast_1d(shot).astype(float), np.atleast_1d(receiver).astype(float))
    way = np.sign(receiver - shot)
    rows = np.ones(shot.size, bool)
    return control_of_stations(
        STATIONS, shot, receiver, shot + foot_in * way, receiver - foot_in * way, rows & head, rows & believed
    )


def test_reversed_shots_give_two_sided_control_and_one_shot_one_sided():
    both = control([-5.0, 50.0], [45.0, 0.0])
    assert both.coverage[0] == "two"
    assert both.coverage[-1] == "two"
    one = control(-5.0, 20.0)
    assert one.coverage[4] == "one"


def test_a_gap_between_controlled_stations_is_interpolation_and_beyond_them_is_not():
    found = control([10.0], [40.0])
    assert found.coverage[5] == "none"
    assert found.between[5]
    assert not found.between[0]


def test_direct_waves_and_disbelieved_picks_control_nothing():
    assert (control(-5.0, 20.0, head=False).picks == 0).all()
    assert (control(-5.0, 20.0, believed=False).picks == 0).all()


def test_least_depth_is_the_depth_whose_crossover_is_the_longest_offset():
    # crossover 2 h sqrt((V2 + V1) / (V2 - V1)) of case LAY-2A: 12.90994449 m for 5 m, 500 and 2000 m/s
    npt.assert_allclose(least_depth_m(np.array([12.90994449]), 500.0, 2000.0), [5.0], rtol=1e-8)
