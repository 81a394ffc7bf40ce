from __future__ import annotations

import numpy as np
import numpy.testing as npt
import pytest

from synthetic_gathers.arrivals import first_arrivals_s
from synthetic_gathers.demo_survey import RECEIVER_X_M, SOURCE_X_M, demo_model
from synthetic_gathers.model import Layer, LayeredModel

# A ray must bend at a point: at 0.1 m spacing that costs up to (0.05 m)^2 / (2 * 1 m * 400 m/s) a crossing, 0.003 ms.
ATOL_BEND_S = 5e-6
# Over a step the polyline of the interface is a ramp one spacing wide, a few per cent of the throw's delay each 0.1 m.
ATOL_RAMP_S = 1e-5


def layer(vp_m_s):
    return Layer(vp_m_s=vp_m_s, vs_m_s=250.0, density_kg_m3=1800.0)


def plane(depth_m, dip_deg=0.0):
    return lambda x: -(depth_m + np.asarray(x) * np.tan(np.radians(dip_deg)))


def model(velocities, interfaces, surface=lambda x: np.zeros_like(x)):
    return LayeredModel(surface, tuple(layer(v) for v in velocities), tuple(interfaces))


def flat_model(thickness_m, velocities):
    return model(velocities, [plane(depth) for depth in np.cumsum(thickness_m)])


@pytest.mark.parametrize(
    ("thickness_m", "velocities", "offset_m", "expected_s"),
    [
        # Plane-layer intercept formula (Telford, Geldart, Sheriff): checks LAY-2A, LAY-3A and LAY-4A.
        ([5], [500, 2000], 50.0, 0.04436491673103708),
        ([3, 12], [400, 1500, 4000], 120.0, 0.059757208530790626),
        ([2, 6, 15], [350, 800, 1800, 4500], 150.0, 0.07476359662350288),
    ],
)
def test_head_wave_over_flat_layers_is_the_closed_form(thickness_m, velocities, offset_m, expected_s):
    found = first_arrivals_s(flat_model(thickness_m, velocities), 0.0, offset_m)
    npt.assert_allclose(found, expected_s, atol=ATOL_BEND_S * len(thickness_m), rtol=0)


def test_first_arrivals_are_the_earlier_of_direct_and_head_wave_on_both_sides_of_the_crossover():
    # Closed forms of Telford, Geldart and Sheriff; crossover at 12.91 m (LAY-2A).
    offset_m = np.arange(1.0, 40.0)
    expected_s = np.minimum(offset_m / 500, offset_m / 2000 + 0.019364916731037084)
    receivers = np.concatenate([-offset_m, offset_m])
    found = first_arrivals_s(flat_model([5], [500, 2000]), 0.0, receivers)[0]
    npt.assert_allclose(found, np.tile(expected_s, 2), atol=ATOL_BEND_S, rtol=0)


@pytest.mark.parametrize(
    ("v1", "v2", "dip_deg", "depth_m", "spread_m", "v_down", "v_up", "intercept_a", "intercept_b"),
    [
        # Dipping two-layer formulas (repository geoscixyz/gpg, seismic_refraction_dipping_layers.rst): DIP-2A, DIP-2B.
        (1000, 3000, 6, 8, 100, 2325.269491661849, 4292.639204675962, 0.015084944665313014, 0.03479502071959747),
        (500, 2000, 4, 5, 60, 1577.6233546288759, 2749.5249230799814, 0.019364916731037084, 0.035574856397106225),
    ],
)
def test_dipping_refractor_gives_down_and_up_dip_times(
    v1, v2, dip_deg, depth_m, spread_m, v_down, v_up, intercept_a, intercept_b
):
    ground = model([v1, v2], [plane(depth_m / np.cos(np.radians(dip_deg)), dip_deg)])
    distance_m = np.linspace(0.6 * spread_m, spread_m, 5)
    down = first_arrivals_s(ground, 0.0, distance_m)[0]
    up = first_arrivals_s(ground, spread_m, spread_m - distance_m)[0]
    npt.assert_allclose(down, intercept_a + distance_m / v_down, atol=ATOL_BEND_S, rtol=0)
    npt.assert_allclose(up, intercept_b + distance_m / v_up, atol=ATOL_BEND_S, rtol=0)


def test_two_dipping_refractors_give_the_times_of_adachi():
    # Adachi 1954, equations 11.5a-b of Geldart and Sheriff: DIP-3A.
    ground = model([800, 2000, 4500], [plane(8, 4), plane(25, -1)])
    found = first_arrivals_s(ground, 0.0, [80.0, 120.0, 160.0])[0]
    expected = [0.056348294761799596, 0.06707461488853626, 0.07780093501527292]
    npt.assert_allclose(found, expected, atol=2 * ATOL_BEND_S, rtol=0)


@pytest.mark.parametrize(
    ("v1", "v2", "depth_m", "throw_m", "step_at_m", "receiver_m", "delay_s"),
    [
        # Fermat delays over a step in the refractor, checked with an eikonal solver: STEP-1, STEP-3 and STEP-4.
        (500, 2000, 10, 2, 50, 100, 0.0038940624650035394),
        (350, 1500, 5, 1, 40, 80, 0.002786866144010497),
        (1500, 4000, 10, 3, 80, 160, 0.0018688549329675674),
    ],
)
def test_a_step_down_in_the_refractor_delays_the_far_receiver(v1, v2, depth_m, throw_m, step_at_m, receiver_m, delay_s):
    flat = first_arrivals_s(flat_model([depth_m], [v1, v2]), 0.0, receiver_m)
    stepped = model([v1, v2], [lambda x: -np.where(np.asarray(x) < step_at_m, depth_m, depth_m + throw_m)])
    npt.assert_allclose(first_arrivals_s(stepped, 0.0, receiver_m) - flat, delay_s, atol=ATOL_RAMP_S, rtol=0)


@pytest.mark.parametrize(
    ("v1", "v2", "height_m", "depth_m", "shift_s", "buried_intercept_s"),
    [
        # A raised station is later by e cos(theta) / V1; a buried shot is earlier by the same: ELEV-1 and ELEV-2.
        (500, 2000, 2, 10, 0.003872983346207417, 0.034856850115866755),
        (800, 3200, 3, 12, 0.0036309218870694535, 0.025416453209486174),
    ],
)
def test_relief_and_source_depth_shift_the_head_wave_by_their_delay(
    v1, v2, height_m, depth_m, shift_s, buried_intercept_s
):
    receiver_m = 90.0
    flat_ground = flat_model([depth_m], [v1, v2])
    raised = model([v1, v2], [plane(depth_m)], lambda x: np.where(np.asarray(x) > 50.0, float(height_m), 0.0))
    difference = first_arrivals_s(raised, 0.0, receiver_m) - first_arrivals_s(flat_ground, 0.0, receiver_m)
    npt.assert_allclose(difference, shift_s, atol=ATOL_BEND_S, rtol=0)
    buried = first_arrivals_s(flat_ground, 0.0, receiver_m, source_depth_m=height_m)
    npt.assert_allclose(buried, buried_intercept_s + receiver_m / v2, atol=ATOL_BEND_S, rtol=0)


def test_lateral_gradient_bends_rays_as_its_closed_form():
    # t = arccosh(1 + k^2 r^2 / (2 v_a v_b)) / k between any two points of a linear gradient (Slotnick 1959, from
    # memory). Without bending these rays are up to 0.06 ms late; the layer's rows of points, 5 m apart, take a chord of
    # length L late by L^3 k^2 / (24 v^3): 0.004 ms over 5 m, four of them in the longest ray.
    v0, k, depth_m = 500.0, 10.0, 9.0
    ground = model([lambda x: v0 + k * np.asarray(x), 100.0], [plane(15.0)])
    x = np.array([-12.0, 0.0, 3.0, 12.0, 20.0])
    found = first_arrivals_s(ground, 0.0, x, source_depth_m=depth_m, margin_m=5.0)[0]
    expected = np.arccosh(1 + k**2 * (x**2 + depth_m**2) / (2 * v0 * (v0 + k * x))) / k
    npt.assert_allclose(found, expected, atol=2e-5, rtol=0)


def test_rays_along_a_lateral_change_take_the_integral_of_slowness():
    ground = model([lambda x: np.where(np.asarray(x) < 20.0, 400.0, 800.0), 5000.0], [plane(200.0)])
    found = first_arrivals_s(ground, 0.0, [10.0, 40.0])[0]
    # The jump falls somewhere within one spacing: 0.1 m of the difference of slownesses, 0.06 ms at most.
    npt.assert_allclose(found, [10 / 400, 20 / 400 + 20 / 800], atol=0.5 * 0.1 * (1 / 400 - 1 / 800) + 1e-9, rtol=0)


def test_a_layer_that_pinches_out_is_the_two_layer_case_where_it_is_gone():
    # The middle layer's base rises above its top at x > 0: nothing of it is left there.
    pinching = model([500, 1200, 3000], [plane(5.0), lambda x: np.where(np.asarray(x) > -5.0, -4.0, -12.0)])
    two_layers = flat_model([5.0], [500, 3000])
    npt.assert_allclose(
        first_arrivals_s(pinching, 0.0, [30.0, 60.0]), first_arrivals_s(two_layers, 0.0, [30.0, 60.0]), atol=1e-9
    )


def test_source_and_receiver_can_be_exchanged_over_the_demo_ground():
    ends = first_arrivals_s(demo_model(), [0.0, 90.0], [0.0, 90.0])
    npt.assert_allclose(ends[0, 1], ends[1, 0], rtol=1e-12)
    npt.assert_array_equal(np.diag(ends), 0.0)


def test_halving_the_spacing_changes_nothing_that_matters_over_the_demo_ground():
    shots = SOURCE_X_M[[0, 5]]
    coarse = first_arrivals_s(demo_model(), shots, RECEIVER_X_M[::4], spacing_m=0.2)
    fine = first_arrivals_s(demo_model(), shots, RECEIVER_X_M[::4], spacing_m=0.1)
    assert np.max(np.abs(coarse - fine)) < 2 * ATOL_BEND_S
    # Every path over coarse points is a possible one: refining can only find earlier ones, chords aside.
    assert np.max(fine - coarse) < 1e-6


@pytest.mark.slow
def test_curved_refractor_agrees_with_a_general_eikonal_library():
    # fteikpy 2.4 on cells of 0.1 m that hold the mean slowness of what lies in them; its own error on a flat case of
    # this kind is 0.01 ms (check LIB-FTEIK), and a curved interface smeared over a cell adds up to 0.1 m / 500 m/s / 4.
    import fteikpy

    cell_m, width_m, height_m = 0.1, 70.0, 30.0

    def rock(x):
        return -6.0 - 3.0 * np.exp(-0.5 * ((np.asarray(x) - 40.0) / 8.0) ** 2) + 0.5 * np.sin(np.asarray(x) / 6.0)

    ground = model([500.0, 2500.0], [rock])
    x = (np.arange(round(width_m / cell_m)) + 0.5) * cell_m
    tops = np.arange(round(height_m / cell_m)) * cell_m
    above = np.clip((-rock(x)[None, :] - tops[:, None]) / cell_m, 0.0, 1.0)
    slowness = above / 500.0 + (1.0 - above) / 2500.0
    receivers = np.arange(5.0, 70.0, 5.0)
    solver = fteikpy.Eikonal2D(1.0 / slowness, gridsize=(cell_m, cell_m))
    times = solver.solve((0.0, 2.0), nsweep=2)
    expected = times(np.column_stack([np.zeros_like(receivers), receivers]))
    found = first_arrivals_s(ground, 2.0, receivers)[0]
    npt.assert_allclose(found, expected, atol=5e-5, rtol=0)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"spacing_m": 0.0}, "spacing_m: expected more than 0 m, found 0.0"),
        ({"source_depth_m": -1.0}, "source_depth_m: expected 0 m or more, found -1"),
    ],
)
def test_impossible_settings_are_refused(arguments, message):
    with pytest.raises(ValueError, match=message):
        first_arrivals_s(flat_model([5], [500, 2000]), 0.0, 10.0, **arguments)


def test_a_velocity_that_is_not_positive_is_refused():
    with pytest.raises(ValueError, match="vp_m_s: expected positive"):
        first_arrivals_s(flat_model([5], [500, -2000]), 0.0, 10.0)
