"""Lengths in feet where numbers leave."""

from __future__ import annotations

import numpy as np
import numpy.testing as npt
import pytest

from picker.units import METRES_PER_FOOT, columns_in

RTOL_ROUNDING = 1e-15  # one division


def test_the_foot_is_the_international_foot():
    # 0.3048 m exactly: international yard and pound agreement, 1959
    assert METRES_PER_FOOT == 0.3048
    npt.assert_allclose(columns_in("ft", {"depth_m": [3.048, 0.3048]})["depth_ft"], [10.0, 1.0], rtol=RTOL_ROUNDING)


def test_lengths_velocities_and_slownesses_change_name_and_value_and_nothing_else_does():
    columns = {
        "x_m": [30.48],
        "velocity_m_s": [304.8],
        "slowness_s_m": [0.001],
        "time_ms": [1.0],
        "layer": [2],
        "from_m": [0.0],
    }
    converted = columns_in("ft", columns)
    assert list(converted) == ["x_ft", "velocity_ft_s", "slowness_s_ft", "time_ms", "layer", "from_ft"]
    npt.assert_allclose(
        [float(values[0]) for values in converted.values()], [100, 1000, 0.0003048, 1, 2, 0], rtol=1e-15
    )


def test_metres_leave_everything_as_it_is_with_empty_cells_and_words():
    columns = {"depth_m": np.array([1.5, np.nan]), "note": np.array(["", "flat"])}
    same = columns_in("m", columns)
    npt.assert_array_equal(same["depth_m"], columns["depth_m"])
    npt.assert_array_equal(columns_in("ft", columns)["note"], columns["note"])
    assert np.isnan(columns_in("ft", columns)["depth_ft"][1])


def test_other_units_are_refused():
    with pytest.raises(ValueError, match="expected one of"):
        columns_in("yd", {})
