"""Plane-layer solutions against published numbers, against the closed forms turned round, and against random draws."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from interp import traveltimes as tt
from interp.layers import BranchLines, fit_branch_lines, intercept_time_solution, reversed_solution

RTOL_ROUNDING = 1e-9  # a closed form turned round: only rounding may differ
RTOL_PUBLISHED = 1e-8  # published numbers are given to ten figures


def exact(slowness, intercept):
    size = len(slowness)
    return BranchLines(np.asarray(slowness), np.asarray(intercept), np.zeros((2 * size, 2 * size)))


def flat_lines(thickness, velocity):
    return exact(1 / np.asarray(velocity, float), [0.0, *tt.intercept_times(thickness, velocity)])


def dipping_lines(thickness, dip, velocity):
    """Branches from one end over plane dipping layers."""
    heads = [tt.dipping_head_wave(thickness[:k], dip[:k], velocity[: k + 1]) for k in range(1, len(velocity))]
    return exact([1 / velocity[0], *(s for _, s in heads)], [0.0, *(t for t, _ in heads)])


@pytest.mark.parametrize(
    ("thickness", "velocity", "intercepts"),
    # Telford, Geldart and Sheriff, Applied Geophysics, N-layer formulas; derived
    [
        ([5], [500, 2000], [0.01936491673]),
        ([5], [350, 1500], [0.02778276599]),
        ([12], [800, 3200], [0.0290473751]),
        ([3, 12], [400, 1500, 4000], [0.01445683229, 0.02975720853]),
        ([2, 6, 15], [350, 800, 1800, 4500], [0.01027678184, 0.02464753662, 0.04143026329]),
    ],
)
def test_flat_layers_come_back_from_their_published_intercept_times(thickness, velocity, intercepts):
    found = intercept_time_solution(exact(1 / np.array(velocity, float), [0.0, *intercepts]))
    np.testing.assert_allclose(found.velocity_m_s, velocity, rtol=RTOL_ROUNDING)
    np.testing.assert_allclose(found.thickness_m, thickness, rtol=RTOL_PUBLISHED)
    np.testing.assert_allclose(found.depth_m, np.cumsum(thickness), rtol=RTOL_PUBLISHED)


@given(
    first=st.floats(200, 800),
    steps=st.lists(st.tuples(st.floats(1.2, 2.5), st.floats(1, 20)), min_size=1, max_size=4),
)
def test_two_to_five_flat_layers_come_back_from_their_closed_forms(first, steps):
    velocity = first * np.cumprod([1.0, *(ratio for ratio, _ in steps)])
    thickness = [h for _, h in steps]
    found = intercept_time_solution(flat_lines(thickness, velocity))
    # stripping four layers loses a few digits where a thin layer lies below thick ones
    np.testing.assert_allclose(found.thickness_m, thickness, rtol=1e-7)


def test_one_direction_of_shooting_leaves_dip_unknown_and_says_so():
    found = intercept_time_solution(flat_lines([5], [500, 2000]))
    assert not found.dip_known
    assert np.isnan(found.dip_rad).all()
    assert np.isnan(found.dip_sigma_rad).all()


DIP = [  # GeoSci.xyz, dipping layers; derived, Fermat minimisation agrees: V1, V2, dip deg, zA, separation;
    # then V down, V up, intercepts at A and B; perpendicular depth at B, vertical depths at A and B
    (
        (1000, 3000, 6, 8, 100),
        (2325.269492, 4292.639205, 0.01508494467, 0.03479502072),
        (18.45284633, 8.044066237, 18.55448976),
    ),
    (
        (500, 2000, 4, 5, 60),
        (1577.623355, 2749.524923, 0.01936491673, 0.0355748564),
        (9.185388425, 5.01220949, 9.207818207),
    ),
    (
        (1500, 4000, 10, 20, 200),
        (2828.699201, 7200.227931, 0.02472066162, 0.06764764004),
        (54.72963553, 20.30853224, 55.57392838),
    ),
]


@pytest.mark.parametrize("case", DIP, ids=["dip 6", "dip 4", "dip 10"])
def test_a_reversed_pair_gives_true_velocity_dip_and_both_depths(case):
    (v1, v2, dip_deg, z_a, separation), (v_down, v_up, t_a, t_b), (z_b, vertical_a, vertical_b) = case
    found = reversed_solution(exact([1 / v1, 1 / v_down], [0, t_a]), exact([1 / v1, 1 / v_up], [0, t_b]), separation)
    np.testing.assert_allclose(found.at_a.velocity_m_s, [v1, v2], rtol=RTOL_PUBLISHED)
    assert np.degrees(found.at_a.dip_rad[0]) == pytest.approx(dip_deg, rel=1e-7)  # a difference of two angles
    assert found.at_b.dip_rad[0] == -found.at_a.dip_rad[0]
    assert found.at_a.depth_m[0] == pytest.approx(vertical_a, rel=RTOL_PUBLISHED)
    assert found.at_b.depth_m[0] == pytest.approx(vertical_b, rel=RTOL_PUBLISHED)
    assert (found.perpendicular_a_m, found.perpendicular_b_m) == pytest.approx((z_a, z_b), rel=RTOL_PUBLISHED)
    assert abs(found.reciprocal_mismatch_s[0]) < 3e-11  # published times are given to 1e-11 s or so
    assert found.at_a.dip_known


def test_three_dipping_layers_come_back_from_a_reversed_pair():
    # Adachi 1954; Geldart and Sheriff 2004, problem 11.5; derived, four-leg Fermat minimisation agrees
    from_a = exact([1 / 800, 1 / 1728.016717, 1 / 3729.144714], [0, 0.01828565108, 0.03489565451])
    from_b = exact([1 / 800, 1 / 2387.398671, 1 / 5730.750841], [0, 0.04385879678, 0.04988138233])
    found = reversed_solution(from_a, from_b, 160)
    np.testing.assert_allclose(found.at_a.velocity_m_s, [800, 2000, 4500], rtol=1e-7)  # ten figures, differenced twice
    np.testing.assert_allclose(found.at_a.depth_m, [8, 25], rtol=1e-7)
    np.testing.assert_allclose(np.degrees(found.at_a.dip_rad), [4, -1], rtol=1e-6)
    at_b = [8 + 160 * np.tan(np.radians(4)), 25 - 160 * np.tan(np.radians(1))]
    np.testing.assert_allclose(found.at_b.depth_m, at_b, rtol=1e-7)


@given(
    v1=st.floats(200, 900),
    ratios=st.lists(st.floats(1.5, 2.5), min_size=1, max_size=3),
    thickness=st.lists(st.floats(4, 20), min_size=3, max_size=3),
    dips=st.lists(st.floats(-0.04, 0.04), min_size=3, max_size=3),
)
def test_dipping_layers_come_back_and_mirror_each_other(v1, ratios, thickness, dips):
    velocity = v1 * np.cumprod([1.0, *ratios])
    layers = len(ratios)
    at_a, dip, separation = np.array(thickness[:layers]), np.array(dips[:layers]), 25.0
    at_b = at_a + separation * np.diff(np.concatenate([[0.0], np.tan(dip)]))
    lines_a, lines_b = dipping_lines(at_a, dip, velocity), dipping_lines(at_b, -dip, velocity)
    found, turned = reversed_solution(lines_a, lines_b, separation), reversed_solution(lines_b, lines_a, separation)
    np.testing.assert_allclose(found.at_a.velocity_m_s, velocity, rtol=1e-7)
    np.testing.assert_allclose(found.at_a.thickness_m, at_a, rtol=1e-6)  # stripped: errors of rounding add up
    np.testing.assert_allclose(found.at_b.thickness_m, at_b, rtol=1e-6)
    np.testing.assert_allclose(found.at_a.dip_rad, dip, atol=1e-9)
    np.testing.assert_allclose(turned.at_a.depth_m, found.at_b.depth_m, rtol=RTOL_ROUNDING)
    np.testing.assert_allclose(turned.at_a.dip_rad, found.at_b.dip_rad, atol=1e-12)
    np.testing.assert_allclose(found.reciprocal_mismatch_s, 0.0, atol=1e-12)


@pytest.mark.parametrize(
    ("intercept", "v1", "v2", "depth", "m_per_ms", "by_v1", "by_v2"),
    # partial derivatives of the two-layer depth; derived, central differences agree
    [
        (0.02, 500, 2000, 5.163977795, 0.2581988897, 1.066666667, -0.06666666667),
        (0.02, 1500, 4000, 16.1807967, 0.809039835, 1.163636364, -0.1636363636),
        (0.03, 1000, 1500, 20.1246118, 0.6708203932, 1.8, -0.8),
    ],
)
def test_each_error_alone_moves_the_depth_as_its_derivative_says(intercept, v1, v2, depth, m_per_ms, by_v1, by_v2):
    slowness = np.array([1 / v1, 1 / v2])
    for place, sigma, expected in (
        (3, 1e-3, m_per_ms),
        (0, 0.01 / v1, 0.01 * abs(by_v1) * depth),  # one per cent of slowness is one per cent of velocity
        (1, 0.01 / v2, 0.01 * abs(by_v2) * depth),
    ):
        covariance = np.zeros((4, 4))
        covariance[place, place] = sigma**2
        found = intercept_time_solution(BranchLines(slowness, np.array([0.0, intercept]), covariance))
        assert found.depth_m[0] == pytest.approx(depth, rel=RTOL_PUBLISHED)
        assert found.depth_sigma_m[0] == pytest.approx(expected, rel=RTOL_PUBLISHED)


def test_fitted_lines_carry_the_covariance_of_slope_and_intercept_into_the_depth():
    # ordinary least squares and first-order propagation; derived, 200 000 random draws agree: V1 known as 500 m/s
    x = np.arange(30.0, 70.0, 3.0)
    offset = np.concatenate([[10.0], x])
    time = np.concatenate([[0.02], 0.02 + x / 2000])
    sigma = np.full(offset.size, 1e-3)
    sigma[0] = 1e-12  # V1 known
    lines = fit_branch_lines(offset, time, sigma, [0] + [1] * x.size)
    error = np.sqrt(np.diag(lines.covariance))
    assert error[3] == pytest.approx(0.001126113612, rel=1e-6)
    assert error[1] == pytest.approx(2.20997848e-05, rel=1e-6)
    assert lines.covariance[1, 3] / (error[1] * error[3]) == pytest.approx(-0.9714289355, rel=1e-6)
    found = intercept_time_solution(lines)
    assert found.velocity_sigma_m_s[1] == pytest.approx(88.39913922, rel=1e-6)
    assert found.depth_sigma_m[0] == pytest.approx(0.2760032861, rel=1e-6)  # 0.2908 m if the slope were left out


def draw_pair(rng, sigma_s, time_break_s, draws):
    """Reversed shots over a dipping refractor, drawn with errors of picks and time breaks, and their solutions."""
    truth = tt.dipping_refractor(6.0, np.radians(3), 600.0, 2400.0, 69.0)
    x = np.arange(1.5, 69.0, 3.0)
    found = []
    for _ in range(draws):
        lines = []
        for apparent, intercept in (
            (truth.apparent_from_a_m_s, truth.intercept_a_s),
            (truth.apparent_from_b_m_s, truth.intercept_b_s),
        ):
            direct, head = x / 600.0, intercept + x / apparent
            time = np.minimum(direct, head) + sigma_s * rng.standard_normal(x.size) + time_break_s * rng.normal()
            branch = (head < direct).astype(int)
            lines.append(fit_branch_lines(x, time, np.full(x.size, sigma_s), branch, time_break_s))
        found.append(reversed_solution(lines[0], lines[1], 69.0))
    return truth, found


@pytest.mark.slow
@pytest.mark.parametrize("time_break_s", [0.0, 1e-3])
def test_standard_errors_are_the_scatter_of_repeated_surveys(time_break_s):
    draws = 1500
    truth, found = draw_pair(np.random.default_rng(3), 3e-4, time_break_s, draws)
    within = 5 / np.sqrt(2 * draws)  # five standard errors of a standard deviation; first-order bias is smaller still
    for value, sigma, true in (
        ([f.at_a.depth_m[0] for f in found], [f.at_a.depth_sigma_m[0] for f in found], truth.vertical_a_m),
        ([f.at_b.depth_m[0] for f in found], [f.at_b.depth_sigma_m[0] for f in found], truth.vertical_b_m),
        ([f.at_a.velocity_m_s[1] for f in found], [f.at_a.velocity_sigma_m_s[1] for f in found], 2400.0),
        ([f.at_a.dip_rad[0] for f in found], [f.at_a.dip_sigma_rad[0] for f in found], np.radians(3)),
        ([f.reciprocal_mismatch_s[0] for f in found], [f.reciprocal_sigma_s[0] for f in found], 0.0),
    ):
        score = (np.array(value) - true) / np.array(sigma)
        assert score.std() == pytest.approx(1.0, abs=within)
        assert abs(score.mean()) < 5 / np.sqrt(draws) + 0.05  # second-order bias of first-order propagation
        inside = np.mean(np.abs(score) < 1.645)
        assert inside == pytest.approx(0.9, abs=4 * np.sqrt(0.9 * 0.1 / draws))


def test_a_late_time_break_is_taken_out_where_it_is_allowed_for():
    x = np.arange(1.0, 60.0, 2.0)
    direct, head = x / 500, 0.02 + x / 2000
    branch = (head < direct).astype(int)
    late = np.minimum(direct, head) + 2e-3
    sigma = np.full(x.size, 1e-5)
    free = fit_branch_lines(x, late, sigma, branch, time_break_sigma_s=5e-3)
    # the prior on the shift pulls by (error of the shift / 5 ms)^2 of 2 ms: nanoseconds
    np.testing.assert_allclose(free.intercept_s, [0.0, 0.02], atol=1e-7)
    held = fit_branch_lines(x, late, sigma, branch)
    assert held.intercept_s[1] == pytest.approx(0.022, abs=1e-9)


@pytest.mark.parametrize(
    ("call", "text"),
    [
        (lambda: intercept_time_solution(exact([1 / 500], [0.0])), "one branch"),
        (lambda: intercept_time_solution(exact([1 / 500, 1 / 400], [0.0, 0.01])), "faster than the one before"),
        (lambda: intercept_time_solution(exact([1 / 500, -1e-4], [0.0, 0.01])), "faster than the one before"),
        (lambda: intercept_time_solution(exact([1 / 500, 1 / 2000], [0.0, -0.01])), "thickness above 0"),
        (lambda: reversed_solution(flat_lines([5], [500, 2000]), flat_lines([5, 5], [500, 900, 2000]), 50), "branches"),
        (lambda: reversed_solution(flat_lines([5], [500, 2000]), flat_lines([5], [500, 2000]), 0.0), "separation_m"),
        (
            lambda: reversed_solution(exact([1e-3, -6e-4], [0, 0.01]), exact([1e-3, 5e-4], [0, 0.01]), 50.0),
            "faster than the layer",
        ),
        (
            lambda: reversed_solution(exact([1e-3, 2e-3], [0, 0.01]), exact([1e-3, 5e-4], [0, 0.01]), 50.0),
            "faster along the surface",
        ),
        (lambda: fit_branch_lines([1, 2], [0.1, 0.2], [1, 1], [1, 1]), "branch 0"),
        (lambda: fit_branch_lines([1, 2], [0.1, 0.2], [1, 1], [0, 1]), "two offsets"),
        (lambda: fit_branch_lines([1, 2], [0.1, 0.2], [1, 0], [0, 0]), "sigma_s above 0"),
        (lambda: fit_branch_lines([1, 2], [0.1], [1, 1], [0, 0]), "one length"),
        (lambda: fit_branch_lines([1, 2], [0.1, 0.2], [1, 1], [-1, -1]), "found none"),
        (lambda: fit_branch_lines([1, 2], [0.1, 0.2], [1, 1], [0, 0], -1.0), "time_break_sigma_s"),
        (lambda: BranchLines(np.array([1e-3]), np.array([0.0]), np.array([[1.0, 2.0], [0.0, 1.0]])), "symmetric"),
        (lambda: BranchLines(np.array([1e-3]), np.array([0.0]), -np.eye(2)), "negative variance"),
        (lambda: BranchLines(np.array([1e-3]), np.array([0.0]), np.eye(3)), "shape"),
        (lambda: BranchLines(np.array([np.nan]), np.array([0.0]), np.eye(2)), "finite"),
    ],
)
def test_branches_that_no_plane_layers_make_are_refused(call, text):
    with pytest.raises(ValueError, match=text):
        call()
