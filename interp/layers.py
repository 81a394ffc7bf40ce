"""Intercept-time solution of plane layers: velocities, thicknesses and dips from straight travel-time branches.

One direction of shooting gives flat layers only, and says so. A reversed pair gives dips. Errors are first-order
propagation of the errors of the fitted lines with all their covariances; they hold on plane layers, whatever the
ground really is.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

STEP = 1e-20  # of the complex step: derivatives exact to rounding (Squire and Trapp 1998)


@dataclass(frozen=True, eq=False)
class BranchLines:
    """Straight travel-time branches on one side of a shot, nearest first.

    Parameters
    ----------
    slowness_s_m : float (branches,)
        Slopes: of the direct wave, then of the head waves.
    intercept_s : float (branches,)
        Intercept times after the shot; the direct wave's is 0.
    covariance : float (2 branches, 2 branches)
        Of slopes followed by intercepts.

    Raises
    ------
    ValueError
        If shapes do not agree, numbers are not finite, or the covariance is not symmetric with no negative variance.
    """

    slowness_s_m: FloatArray
    intercept_s: FloatArray
    covariance: FloatArray

    def __post_init__(self) -> None:
        count = np.atleast_1d(np.asarray(self.slowness_s_m)).size
        for name, shape in (
            ("slowness_s_m", (count,)),
            ("intercept_s", (count,)),
            ("covariance", (2 * count, 2 * count)),
        ):
            array = np.array(getattr(self, name), dtype=np.float64)
            if array.shape != shape:
                raise ValueError(f"{name}: expected shape {shape}, found {array.shape}")
            if not np.all(np.isfinite(array)):
                raise ValueError(f"{name}: expected finite numbers")
            array.flags.writeable = False
            object.__setattr__(self, name, array)
        scale = float(np.abs(self.covariance).max())
        if not np.allclose(self.covariance, self.covariance.T, rtol=1e-6, atol=1e-12 * scale):
            raise ValueError("covariance: expected a symmetric matrix")
        if np.any(np.diag(self.covariance) < 0):
            raise ValueError("covariance: expected no negative variance")


@dataclass(frozen=True, eq=False)
class PlaneLayers:
    """Plane layers with standard errors (first order, given the branches).

    Parameters
    ----------
    velocity_m_s, velocity_sigma_m_s : float (layers,)
    thickness_m, thickness_sigma_m : float (layers - 1,)
        Straight below the shot.
    depth_m, depth_sigma_m : float (layers - 1,)
        Of the base of each layer straight below the shot, metres below the surface.
    dip_rad, dip_sigma_rad : float (layers - 1,)
        Of the base of each layer, positive where it deepens in the direction of shooting; NaN where unknown.
    dip_known : bool
        False for shots in one direction only: velocities below the first are apparent ones, and depths are those of
        flat layers.
    covariance : float
        Of velocities, thicknesses and, where known, dips, in this order.
    """

    velocity_m_s: FloatArray
    velocity_sigma_m_s: FloatArray
    thickness_m: FloatArray
    thickness_sigma_m: FloatArray
    depth_m: FloatArray
    depth_sigma_m: FloatArray
    dip_rad: FloatArray
    dip_sigma_rad: FloatArray
    dip_known: bool
    covariance: FloatArray


@dataclass(frozen=True, eq=False)
class ReversedLayers:
    """Plane dipping layers from a reversed pair of shots, seen from either end.

    Parameters
    ----------
    at_a, at_b : PlaneLayers
        Thicknesses and depths straight below either shot; velocities are the same. Dips are positive where
        interfaces deepen from A to B in `at_a`, from B to A in `at_b`.
    perpendicular_a_m, perpendicular_b_m : float
        Distance from either end to the first refractor at right angles to it.
    reciprocal_mismatch_s, reciprocal_sigma_s : float (layers - 1,)
        Time from A to B less time from B to A along every head-wave branch, which should be 0, and its standard
        error. A mismatch beyond about twice its error (95 %) says that branches, time breaks or plane layers are
        wrong.
    """

    at_a: PlaneLayers
    at_b: PlaneLayers
    perpendicular_a_m: float
    perpendicular_b_m: float
    reciprocal_mismatch_s: FloatArray
    reciprocal_sigma_s: FloatArray


def fit_branch_lines(
    offset_m: npt.ArrayLike,
    time_s: npt.ArrayLike,
    sigma_s: npt.ArrayLike,
    branch: npt.ArrayLike,
    time_break_sigma_s: float = 0.0,
) -> BranchLines:
    """Weighted least-squares lines through the picks of every branch of one side of one shot.

    Parameters
    ----------
    offset_m, time_s, sigma_s : float (picks,)
        Offsets, first arrivals and their standard errors, > 0.
    branch : int (picks,)
        0 direct, 1, 2, ... head waves on successive refractors; picks with a negative number are left out.
    time_break_sigma_s : float
        Standard error of the shot's time break. 0 holds the direct line to the shot; more lets all branches shift
        together, and the direct wave is what decides by how much.

    Returns
    -------
    BranchLines
        Intercepts are free of the shift of the time break.

    Raises
    ------
    ValueError
        If sizes differ, a branch from 0 to the highest has no picks (one offset only, for head waves), or sigma is
        not above zero.
    """
    offset, time, sigma = (np.asarray(value, dtype=np.float64) for value in (offset_m, time_s, sigma_s))
    number = np.asarray(branch, dtype=np.int64)
    if not offset.ndim == 1 or not offset.shape == time.shape == sigma.shape == number.shape:
        raise ValueError("expected offset_m, time_s, sigma_s and branch of one length")
    if not np.all(sigma > 0) or not np.all(np.isfinite(offset + time + sigma)):
        raise ValueError("expected finite offsets and times, and sigma_s above 0")
    if not 0 <= time_break_sigma_s < np.inf:
        raise ValueError(f"time_break_sigma_s: expected 0 or more, found {time_break_sigma_s!r}")
    count = int(number.max(initial=-1)) + 1
    if count < 1:
        raise ValueError("branch: expected picks on branch 0, found none")
    for wanted in range(count):
        places = np.unique(offset[number == wanted])
        if wanted == 0 and not np.any(places > 0):
            raise ValueError("branch 0: expected picks away from the shot, found none")
        if wanted and places.size < 2:
            raise ValueError(f"branch {wanted}: expected picks at two offsets or more, found {places.size}")
    used = number >= 0
    design = np.zeros((int(used.sum()), 2 * count))
    rows = np.arange(design.shape[0])
    design[rows, number[used]] = offset[used]
    design[rows, count + number[used]] = 1.0
    design[:, count] = 1.0  # the shift of the time break, common to all; the direct wave has no intercept of its own
    free = np.ones(2 * count, dtype=bool)
    free[count] = time_break_sigma_s > 0
    pull = design[:, free] / sigma[used, None]
    normal = pull.T @ pull
    if time_break_sigma_s > 0:
        normal[count, count] += time_break_sigma_s**-2
    scale = 1 / np.sqrt(np.diag(normal))  # slopes and intercepts differ by orders of magnitude
    inverse = scale[:, None] * np.linalg.inv(normal * scale[:, None] * scale) * scale
    fitted = np.zeros(2 * count)
    fitted[free] = inverse @ (pull.T @ (time[used] / sigma[used]))
    covariance = np.zeros((2 * count, 2 * count))
    covariance[np.ix_(free, free)] = inverse
    # the shift itself is no intercept: what is wanted is free of it
    fitted[count] = 0.0
    covariance[count] = covariance[:, count] = 0.0
    return BranchLines(fitted[:count], fitted[count:], covariance)


def intercept_time_solution(lines: BranchLines) -> PlaneLayers:
    """Flat layers from the branches of one side of a shot, stripped from the top.

    Parameters
    ----------
    lines : BranchLines
        Two branches or more, each faster than the one before.

    Returns
    -------
    PlaneLayers
        With `dip_known` False: one direction of shooting cannot tell dip from velocity.

    Raises
    ------
    ValueError
        If there is one branch only, or a branch is not faster than the one before or not later at the shot: no
        layers make such branches.

    Notes
    -----
    h_k = (ti_k - sum_{i<k} 2 h_i cos(i_ik) / V_i) V_k / (2 cos(i_k,k+1)) (Telford, Geldart and Sheriff, Applied
    Geophysics). A layer hidden by slowness or thinness is not in the branches and not in the result.
    """
    count = _branch_count(lines)
    _rising(lines.slowness_s_m)
    unknowns = np.concatenate([lines.slowness_s_m, lines.intercept_s])

    def strip(values: npt.NDArray[np.complex128]) -> npt.NDArray[np.complex128]:
        velocity = 1 / values[:count]
        return np.concatenate([velocity, _strip_flat(velocity, values[count:])])

    solved, jacobian = _with_derivatives(strip, unknowns)
    return _plane_layers(solved, jacobian @ lines.covariance @ jacobian.T, count, dip_known=False)


def reversed_solution(from_a: BranchLines, from_b: BranchLines, separation_m: float) -> ReversedLayers:
    """Plane dipping layers from a reversed pair of shots.

    Parameters
    ----------
    from_a, from_b : BranchLines
        Branches from the shot at A towards B and from the shot at B towards A, the same number of both, two at
        least.
    separation_m : float
        From A to B, metres.

    Returns
    -------
    ReversedLayers

    Raises
    ------
    ValueError
        If the numbers of branches differ, the separation is not above zero, or no plane layers make such branches.

    Notes
    -----
    Rays of every head wave are followed down through the interfaces found so far by Snell's law; half the sum of
    the angles of the rays down and up from the vertical is the critical angle, half their difference the dip (Adachi
    1954; Geldart and Sheriff 2004, section 11; with one refractor the two-layer dip formulas of Telford, Geldart and
    Sheriff). The velocity of the first layer is the mean of both ends by their errors. The two depths come each from
    the intercept of its own end.
    """
    count = _branch_count(from_a)
    if _branch_count(from_b) != count:
        raise ValueError(f"expected as many branches from B as from A ({count}), found {from_b.slowness_s_m.size}")
    if not 0 < separation_m < np.inf:
        raise ValueError(f"separation_m: expected more than 0, found {separation_m!r}")
    unknowns = np.concatenate([from_a.slowness_s_m, from_a.intercept_s, from_b.slowness_s_m, from_b.intercept_s])
    covariance = np.zeros((4 * count, 4 * count))
    covariance[: 2 * count, : 2 * count] = from_a.covariance
    covariance[2 * count :, 2 * count :] = from_b.covariance
    share_a = _share(from_a.covariance[0, 0], from_b.covariance[0, 0])

    def strip(values: npt.NDArray[np.complex128]) -> npt.NDArray[np.complex128]:
        slow_a, time_a, slow_b, time_b = values.reshape(4, count)
        first = 1 / (share_a * slow_a[0] + (1 - share_a) * slow_b[0])
        return _strip_dipping(first, slow_a[1:], time_a[1:], slow_b[1:], time_b[1:])

    solved, jacobian = _with_derivatives(strip, unknowns)
    error = jacobian @ covariance @ jacobian.T
    layers = count - 1
    velocity, at_a, at_b, dip = np.split(np.arange(solved.size), [count, count + layers, count + 2 * layers])
    first = solved[dip[0]]
    ends = []
    for rows, sign in ((at_a, 1.0), (at_b, -1.0)):
        chosen = np.concatenate([velocity, rows, dip])
        turn = np.concatenate([np.ones(count + layers), np.full(layers, sign)])
        ends.append(
            _plane_layers(turn * solved[chosen], np.outer(turn, turn) * error[np.ix_(chosen, chosen)], count, True)
        )
    across = np.zeros((layers, 4 * count))
    for k in range(1, count):
        across[k - 1, [k, 2 * count + k]] = separation_m, -separation_m
        across[k - 1, [count + k, 3 * count + k]] = 1.0, -1.0
    return ReversedLayers(
        at_a=ends[0],
        at_b=ends[1],
        perpendicular_a_m=float(solved[at_a[0]] * np.cos(first)),
        perpendicular_b_m=float(solved[at_b[0]] * np.cos(first)),
        reciprocal_mismatch_s=across @ unknowns,
        reciprocal_sigma_s=np.sqrt(np.diag(across @ covariance @ across.T)),
    )


def _branch_count(lines: BranchLines) -> int:
    count = lines.slowness_s_m.size
    if count < 2:
        raise ValueError("expected a direct branch and a head-wave branch or more, found one branch")
    if not lines.slowness_s_m[0] > 0:
        raise ValueError(f"expected a direct wave that takes time, found slowness {lines.slowness_s_m[0]:g} s/m")
    return count


def _rising(slowness: FloatArray) -> None:
    if not (np.all(np.diff(slowness) < 0) and slowness[-1] > 0):
        raise ValueError(f"expected every branch faster than the one before, found slownesses {slowness.tolist()} s/m")


def _strip_flat(
    velocity: npt.NDArray[np.complex128], intercept: npt.NDArray[np.complex128]
) -> npt.NDArray[np.complex128]:
    """Thicknesses of flat layers from velocities and intercepts, top first."""
    thickness = np.zeros(velocity.size - 1, dtype=np.complex128)
    for k in range(1, velocity.size):
        cosine = np.sqrt(1 - (velocity[:k] / velocity[k]) ** 2)
        above = np.sum(2 * thickness[: k - 1] * cosine[:-1] / velocity[: k - 1])
        thickness[k - 1] = (intercept[k] - above) * velocity[k - 1] / (2 * cosine[-1])
        _has_thickness(k, thickness[k - 1])
    return thickness


def _strip_dipping(
    first: complex,
    slow_a: npt.NDArray[np.complex128],
    time_a: npt.NDArray[np.complex128],
    slow_b: npt.NDArray[np.complex128],
    time_b: npt.NDArray[np.complex128],
) -> npt.NDArray[np.complex128]:
    """Velocities, thicknesses below A and below B, and dips (deepening from A to B), top first."""
    velocity: list[complex] = [first]
    thick_a: list[complex] = []
    thick_b: list[complex] = []
    dip: list[complex] = []
    for k in range(slow_a.size):
        down, up = _arcsine(first * slow_b[k]), _arcsine(first * slow_a[k])
        left_a, left_b = time_a[k], time_b[k]
        for layer in range(k):
            both = (np.cos(down) + np.cos(up)) / velocity[layer]
            left_a, left_b = left_a - thick_a[layer] * both, left_b - thick_b[layer] * both
            ratio = velocity[layer + 1] / velocity[layer]
            down = _arcsine(ratio * np.sin(down + dip[layer])) - dip[layer]
            up = _arcsine(ratio * np.sin(up - dip[layer])) + dip[layer]
        critical = 0.5 * (down + up)
        if not 0 < critical.real < np.pi / 2:
            raise ValueError(f"head wave {k + 1}: expected a refractor faster than the layer above it, found none")
        both = (np.cos(down) + np.cos(up)) / velocity[k]
        thick_a.append(_has_thickness(k + 1, left_a / both))
        thick_b.append(_has_thickness(k + 1, left_b / both))
        dip.append(0.5 * (up - down))
        velocity.append(velocity[k] / np.sin(critical))
    return np.array(velocity + thick_a + thick_b + dip)


def _arcsine(sine: complex) -> complex:
    if not abs(sine.real) < 1:
        raise ValueError(f"expected head waves faster along the surface than the layer above, found sine {sine.real:g}")
    return complex(np.arcsin(sine.real), sine.imag / np.sqrt(1 - sine.real**2))  # first order in the imaginary step


def _has_thickness(layer: int, thickness: complex) -> complex:
    if not thickness.real > 0:
        raise ValueError(f"layer {layer}: expected a thickness above 0, found {thickness.real:g} m")
    return thickness


def _with_derivatives(
    function: Callable[[npt.NDArray[np.complex128]], npt.NDArray[np.complex128]], at: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Value and Jacobian of a function of complex numbers, by the complex step."""
    value = function(at.astype(np.complex128)).real
    steps = []
    for place in range(at.size):
        moved = at.astype(np.complex128)
        moved[place] += 1j * STEP
        steps.append(function(moved).imag / STEP)
    return value, np.stack(steps, axis=1)


def _plane_layers(solved: FloatArray, covariance: FloatArray, count: int, dip_known: bool) -> PlaneLayers:
    """Result from velocities, thicknesses and (where known) dips with their covariance."""
    layers = count - 1
    sigma = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    inside = slice(count, count + layers)
    summing = np.tril(np.ones((layers, layers)))
    depth_error = summing @ covariance[inside, inside] @ summing.T
    unknown = np.full(layers, np.nan)
    return PlaneLayers(
        velocity_m_s=solved[:count],
        velocity_sigma_m_s=sigma[:count],
        thickness_m=solved[inside],
        thickness_sigma_m=sigma[inside],
        depth_m=summing @ solved[inside],
        depth_sigma_m=np.sqrt(np.maximum(np.diag(depth_error), 0.0)),
        dip_rad=solved[count + layers :] if dip_known else unknown,
        dip_sigma_rad=sigma[count + layers :] if dip_known else unknown,
        dip_known=dip_known,
        covariance=covariance,
    )


def _share(variance_a: float, variance_b: float) -> float:
    """Weight of A in the mean by errors; half where neither has an error."""
    total = variance_a + variance_b
    return float(variance_b / total) if total > 0 else 0.5
