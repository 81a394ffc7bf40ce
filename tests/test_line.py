import dataclasses

import numpy as np
import numpy.testing as npt
import pytest
from made_survey import picks_from_times

from interp.line import lay_out_line


def table(source_xy, receiver_xy, z=0.0):
    rows = len(source_xy)
    base = picks_from_times(
        np.zeros((rows, 2)), np.ones((rows, 2)), np.full(rows, 0.01), 1e-3, np.arange(rows) + 1, np.ones(rows)
    )
    source = np.column_stack([source_xy, np.full(rows, z)])
    receiver = np.column_stack([receiver_xy, np.full(rows, z)])
    return dataclasses.replace(
        base,
        source_xyz=source,
        receiver_xyz=receiver,
        offset_m=np.hypot(*(receiver - source)[:, :2].T),
    )


def test_distance_along_a_straight_line_is_counted_from_the_first_geophone():
    line = lay_out_line(table([(90.0, 5.0)] * 3, [(100.0, 5.0), (104.0, 5.0), (108.0, 5.0)]))
    npt.assert_allclose(line.station_along_m, [0, 4, 8])
    npt.assert_allclose(line.shot_along_m, [-10])
    npt.assert_allclose(line.stretch, 1)


def test_a_line_laid_out_backwards_keeps_x_increasing():
    line = lay_out_line(table([(0.0, 0.0)] * 3, [(9.0, 0.0), (3.0, 0.0), (6.0, 0.0)]))
    npt.assert_allclose(line.station_xyz[:, 0], [3, 6, 9])
    npt.assert_array_equal(line.station_of, [2, 0, 1])


def test_a_crooked_line_has_its_true_length_and_paths_their_true_offset():
    line = lay_out_line(table([(0.0, 0.0)] * 3, [(0.0, 0.0), (10.0, 0.0), (10.0, 8.0)]))
    assert line.station_along_m[-1] == pytest.approx(18.0)
    longest = int(np.argmax(line.station_of))
    assert line.stretch[longest] * 18.0 == pytest.approx(np.hypot(10, 8))


def test_repeated_shots_at_one_place_are_one_place():
    line = lay_out_line(table([(0.0, 0.0), (0.01, 0.0), (50.0, 0.0)], [(10.0, 0.0), (20.0, 0.0), (30.0, 0.0)]))
    assert line.shot_along_m.size == 2


def test_a_shot_beside_the_line_is_marked_broadside():
    line = lay_out_line(table([(20.0, 40.0)] * 3, [(10.0, 0.0), (20.0, 0.0), (30.0, 0.0)]))
    assert line.broadside.all()


def test_elevation_between_places_is_interpolated():
    low = table([(0.0, 0.0)] * 2, [(10.0, 0.0), (20.0, 0.0)])
    receiver = low.receiver_xyz.copy()
    receiver[:, 2] = [4.0, 6.0]
    line = lay_out_line(dataclasses.replace(low, receiver_xyz=receiver))
    npt.assert_allclose(line.ground_z_m(np.array([-10.0, -5.0, 5.0, 99.0])), [0.0, 2.0, 5.0, 6.0])


def test_one_geophone_place_is_refused():
    with pytest.raises(ValueError, match="two geophone places"):
        lay_out_line(table([(0.0, 0.0)] * 2, [(10.0, 0.0)] * 2))
