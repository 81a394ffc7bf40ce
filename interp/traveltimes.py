"""Closed forms of first arrivals: direct, head and diving waves, flat and dipping plane layers, plus-minus times.

Arrays in, arrays out. Nothing here knows of picks or errors, and nothing here guesses: ground in which the wave
asked for cannot exist is refused.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]


def direct_time(offset_m: npt.ArrayLike, velocity_m_s: npt.ArrayLike) -> FloatArray:
    """Time of the direct wave.

    Parameters
    ----------
    offset_m : float (...)
        Distance from shot to receiver, metres, >= 0.
    velocity_m_s : float, broadcast against the offsets
        Velocity of the uppermost layer.

    Returns
    -------
    float (...), seconds

    Raises
    ------
    ValueError
        If an offset is negative or a velocity not above zero.

    Notes
    -----
    t = x / V1
    """
    offset = _not_negative("offset_m", offset_m)
    return offset / _positive("velocity_m_s", velocity_m_s)


def critical_angle(upper_m_s: npt.ArrayLike, lower_m_s: npt.ArrayLike) -> FloatArray:
    """Angle of incidence, radians, at which a head wave leaves along the refractor: asin(V1 / V2), by Snell's law.

    Raises
    ------
    ValueError
        If not 0 < upper < lower: there is no head wave.
    """
    upper, lower = _slower_above_faster(upper_m_s, lower_m_s)
    return np.asarray(np.arcsin(upper / lower))


def intercept_time(thickness_m: npt.ArrayLike, velocity_m_s: npt.ArrayLike) -> float:
    """Intercept time of the head wave on the deepest of some flat refractors.

    Parameters
    ----------
    thickness_m : float (layers - 1,)
        Thicknesses above the half-space, metres, top first, >= 0.
    velocity_m_s : float (layers,)
        Velocities, top first. The last must be the highest; the others may come in any order.

    Returns
    -------
    float, seconds

    Raises
    ------
    ValueError
        If sizes do not agree, a thickness is negative, a velocity is not above zero, or a layer is as fast as the
        refractor.

    Notes
    -----
    ti = sum_i 2 h_i cos(i_in) / V_i with sin(i_in) = V_i / V_n (Telford, Geldart and Sheriff, Applied Geophysics)
    """
    thickness, velocity = _layers(thickness_m, velocity_m_s)
    return float(np.sum(2 * thickness * _vertical_slowness(velocity)))


def intercept_times(thickness_m: npt.ArrayLike, velocity_m_s: npt.ArrayLike) -> FloatArray:
    """Intercept times of the head waves on every one of some flat refractors, top first; shape (layers - 1,).

    Parameters and errors as in `intercept_time`; here every layer must be faster than all above it.
    """
    thickness, velocity = _layers(thickness_m, velocity_m_s)
    return np.array([intercept_time(thickness[:k], velocity[: k + 1]) for k in range(1, velocity.size)])


def head_wave_time(offset_m: npt.ArrayLike, thickness_m: npt.ArrayLike, velocity_m_s: npt.ArrayLike) -> FloatArray:
    """Time of the head wave on the deepest of some flat refractors.

    Parameters
    ----------
    offset_m : float (...)
        Metres, >= 0. Not checked against the critical offset.
    thickness_m, velocity_m_s
        As in `intercept_time`.

    Returns
    -------
    float (...), seconds

    Raises
    ------
    ValueError
        As in `intercept_time`, or if an offset is negative.

    Notes
    -----
    t = x / V_n + ti
    """
    offset = _not_negative("offset_m", offset_m)
    last = float(np.atleast_1d(np.asarray(velocity_m_s, dtype=np.float64))[-1])
    return offset / last + intercept_time(thickness_m, velocity_m_s)


def crossover_distances(thickness_m: npt.ArrayLike, velocity_m_s: npt.ArrayLike) -> FloatArray:
    """Offsets at which successive branches of flat layers arrive together, metres; shape (layers - 1,).

    A layer whose crossover is not beyond the one above it never gives a first arrival: it is hidden.

    Raises
    ------
    ValueError
        As in `intercept_times`.

    Notes
    -----
    x_k = (ti_{k+1} - ti_k) / (1 / V_k - 1 / V_{k+1}); for one refractor 2 h sqrt((V2 + V1) / (V2 - V1))
    """
    intercept = np.concatenate([[0.0], intercept_times(thickness_m, velocity_m_s)])
    slowness = 1 / np.asarray(velocity_m_s, dtype=np.float64)
    return np.diff(intercept) / (slowness[:-1] - slowness[1:])


def depth_from_crossover(crossover_m: npt.ArrayLike, upper_m_s: npt.ArrayLike, lower_m_s: npt.ArrayLike) -> FloatArray:
    """Depth of a single flat refractor from its crossover distance: x / 2 sqrt((V2 - V1) / (V2 + V1)), metres.

    Raises
    ------
    ValueError
        If not 0 < upper < lower, or a distance is negative.
    """
    upper, lower = _slower_above_faster(upper_m_s, lower_m_s)
    return 0.5 * _not_negative("crossover_m", crossover_m) * np.sqrt((lower - upper) / (lower + upper))


def critical_offset(thickness_m: npt.ArrayLike, velocity_m_s: npt.ArrayLike) -> float:
    """Nearest offset at which the head wave on the deepest of some flat refractors exists, metres.

    Parameters and errors as in `intercept_time`.

    Notes
    -----
    x = 2 sum_i h_i tan(i_in), sin(i_in) = V_i / V_n
    """
    thickness, velocity = _layers(thickness_m, velocity_m_s)
    return float(np.sum(2 * thickness * np.tan(np.arcsin(velocity[:-1] / velocity[-1]))))


def first_arrival_time(
    offset_m: npt.ArrayLike, thickness_m: npt.ArrayLike, velocity_m_s: npt.ArrayLike
) -> tuple[FloatArray, npt.NDArray[np.int64]]:
    """Time of the first arrival over flat layers, and the branch it belongs to.

    Parameters
    ----------
    offset_m : float (receivers,)
        Metres, >= 0.
    thickness_m, velocity_m_s
        As in `intercept_times`.

    Returns
    -------
    time_s : float (receivers,)
    branch : int (receivers,)
        0 for the direct wave, k for the head wave on refractor k counted from 1.

    Raises
    ------
    ValueError
        As in `intercept_times`, or if an offset is negative.
    """
    offset = np.atleast_1d(_not_negative("offset_m", offset_m))
    velocity = np.asarray(velocity_m_s, dtype=np.float64)
    intercept = np.concatenate([[0.0], intercept_times(thickness_m, velocity)])
    times = offset[:, None] / velocity + intercept
    branch = np.argmin(times, axis=1)
    return times[np.arange(offset.size), branch], branch.astype(np.int64)


def delay_time(depth_m: npt.ArrayLike, upper_m_s: npt.ArrayLike, lower_m_s: npt.ArrayLike) -> FloatArray:
    """Delay time of one end of a head-wave path.

    The time along the slant leg less the time that the foot of the leg saves along the refractor. A station
    raised by e over a fixed refractor, and a refractor lower by e, both delay the wave by the delay time of e.

    Parameters
    ----------
    depth_m : float (...)
        Distance from the surface to the refractor at right angles to it, metres; on a flat refractor the depth.
    upper_m_s, lower_m_s : float, broadcast
        Velocities above and below, 0 < upper < lower.

    Returns
    -------
    float (...), seconds

    Raises
    ------
    ValueError
        If not 0 < upper < lower, or a depth is not finite.

    Notes
    -----
    z cos(theta) / V1 = z sqrt(V2^2 - V1^2) / (V1 V2), sin(theta) = V1 / V2 (Gardner 1939; Telford, Geldart and
    Sheriff, Applied Geophysics). Negative depths (differences of level) are taken as they are.
    """
    upper, lower = _slower_above_faster(upper_m_s, lower_m_s)
    return _finite("depth_m", depth_m) * np.sqrt(lower**2 - upper**2) / (upper * lower)


def depth_from_delay_time(delay_s: npt.ArrayLike, upper_m_s: npt.ArrayLike, lower_m_s: npt.ArrayLike) -> FloatArray:
    """Depth (or difference of level) from a delay time: the inverse of `delay_time`, metres.

    Raises
    ------
    ValueError
        If not 0 < upper < lower, or a delay is not finite.

    Notes
    -----
    z = T V1 V2 / sqrt(V2^2 - V1^2) = T V1 / cos(theta)
    """
    upper, lower = _slower_above_faster(upper_m_s, lower_m_s)
    return _finite("delay_s", delay_s) * upper * lower / np.sqrt(lower**2 - upper**2)


@dataclass(frozen=True)
class DippingRefractor:
    """What reversed shots see over one plane dipping refractor. A is the end from which dip is counted.

    Parameters
    ----------
    apparent_from_a_m_s, apparent_from_b_m_s : float
        Apparent velocities of the head wave shot from A and from B. Infinite or negative where the wave comes up
        steeply enough to reach the far receiver first.
    intercept_a_s, intercept_b_s : float
    reciprocal_s : float
        Time of the head wave between A and B.
    perpendicular_a_m, perpendicular_b_m : float
        Distances from the ends to the refractor at right angles to it.
    vertical_a_m, vertical_b_m : float
        Depths straight below the ends.
    """

    apparent_from_a_m_s: float
    apparent_from_b_m_s: float
    intercept_a_s: float
    intercept_b_s: float
    reciprocal_s: float
    perpendicular_a_m: float
    perpendicular_b_m: float
    vertical_a_m: float
    vertical_b_m: float


def dipping_refractor(
    perpendicular_a_m: float, dip_rad: float, upper_m_s: float, lower_m_s: float, separation_m: float
) -> DippingRefractor:
    """Apparent velocities, intercept times and depths of a reversed pair over one dipping refractor.

    Parameters
    ----------
    perpendicular_a_m : float
        Distance from A to the refractor at right angles to it, metres.
    dip_rad : float
        Dip, radians, positive where the refractor deepens from A to B; less than a right angle less the critical
        angle.
    upper_m_s, lower_m_s : float
        0 < upper < lower.
    separation_m : float
        From A to B along the surface, metres, > 0.

    Returns
    -------
    DippingRefractor

    Raises
    ------
    ValueError
        If no head wave exists, or the refractor comes out at the surface between A and B.

    Notes
    -----
    1 / V_down = sin(theta + dip) / V1, 1 / V_up = sin(theta - dip) / V1, ti = 2 z cos(theta) / V1 with z
    perpendicular; vertical depth z / cos(dip) (Telford, Geldart and Sheriff, Applied Geophysics)
    """
    theta = float(critical_angle(upper_m_s, lower_m_s))
    if not abs(dip_rad) < np.pi / 2 - theta:
        raise ValueError(f"dip_rad: expected less than {np.pi / 2 - theta:.4g} either way, found {dip_rad:g}")
    separation = float(_positive("separation_m", separation_m))
    perpendicular_b = perpendicular_a_m + separation * np.sin(dip_rad)
    if not min(perpendicular_a_m, perpendicular_b) >= 0:
        raise ValueError(
            f"expected the refractor below the surface at both ends, found perpendicular depths "
            f"{perpendicular_a_m:g} m and {perpendicular_b:g} m"
        )
    slowness_a = np.sin(theta + dip_rad) / upper_m_s
    slowness_b = np.sin(theta - dip_rad) / upper_m_s
    intercept_a = 2 * perpendicular_a_m * np.cos(theta) / upper_m_s
    return DippingRefractor(
        apparent_from_a_m_s=_inverse(slowness_a),
        apparent_from_b_m_s=_inverse(slowness_b),
        intercept_a_s=float(intercept_a),
        intercept_b_s=float(2 * perpendicular_b * np.cos(theta) / upper_m_s),
        reciprocal_s=float(intercept_a + separation * slowness_a),
        perpendicular_a_m=float(perpendicular_a_m),
        perpendicular_b_m=float(perpendicular_b),
        vertical_a_m=float(perpendicular_a_m / np.cos(dip_rad)),
        vertical_b_m=float(perpendicular_b / np.cos(dip_rad)),
    )


def dipping_head_wave(
    thickness_m: npt.ArrayLike, dip_rad: npt.ArrayLike, velocity_m_s: npt.ArrayLike
) -> tuple[float, float]:
    """Intercept time and apparent slowness of the head wave on the deepest of some plane dipping refractors.

    Parameters
    ----------
    thickness_m : float (layers - 1,)
        Thicknesses straight below the shot, metres, top first.
    dip_rad : float (layers - 1,)
        Dip of the base of each layer, radians, positive where it deepens in the direction of shooting.
    velocity_m_s : float (layers,)
        Velocities, top first.

    Returns
    -------
    intercept_s : float
    apparent_slowness_s_m : float
        Negative where the wave reaches the far receiver first.

    Raises
    ------
    ValueError
        If sizes do not agree or a ray of the head wave cannot pass one of the interfaces.

    Notes
    -----
    ti = sum_i h_i (cos(a_i) + cos(b_i)) / V_i, slowness sin(b_1) / V_1, with a and b the angles from the vertical
    of the ray down and the ray up (Adachi 1954; Geldart and Sheriff 2004, equations 11.5a-b), here by Snell's law
    through each interface from the refractor upwards. The layers must not pinch out under the path: see where
    with `layer_pinches_out`.
    """
    thickness, velocity = _layers(thickness_m, velocity_m_s)
    dip = np.asarray(dip_rad, dtype=np.float64)
    if dip.shape != thickness.shape:
        raise ValueError(f"dip_rad: expected shape {thickness.shape}, found {dip.shape}")
    last = thickness.size - 1
    critical = np.arcsin(velocity[last] / velocity[last + 1])
    down, up = critical - dip[last], critical + dip[last]
    total = 0.0
    for layer in range(last, -1, -1):
        if layer < last:
            ratio = velocity[layer] / velocity[layer + 1]
            down = _snell(ratio, down + dip[layer]) - dip[layer]
            up = _snell(ratio, up - dip[layer]) + dip[layer]
        if not max(abs(down), abs(up)) < np.pi / 2:
            raise ValueError(f"expected rays that reach the surface, found one turned back in layer {layer + 1}")
        total += thickness[layer] * (np.cos(down) + np.cos(up)) / velocity[layer]
    return float(total), float(np.sin(up) / velocity[0])


def layer_pinches_out(thickness_m: npt.ArrayLike, dip_rad: npt.ArrayLike) -> float:
    """Distance from the shot, in the direction of shooting, at which the first layer has no thickness left, metres.

    Parameters
    ----------
    thickness_m, dip_rad : float (layers - 1,)
        As in `dipping_head_wave`.

    Returns
    -------
    float
        Infinity if no layer thins.

    Raises
    ------
    ValueError
        If sizes do not agree.
    """
    thickness = np.asarray(thickness_m, dtype=np.float64)
    dip = np.asarray(dip_rad, dtype=np.float64)
    if dip.shape != thickness.shape:
        raise ValueError(f"dip_rad: expected shape {thickness.shape}, found {dip.shape}")
    closing = -np.diff(np.concatenate([[0.0], np.tan(dip)]))
    thinning = closing > 0
    return float(np.min(thickness[thinning] / closing[thinning], initial=np.inf))


def diving_time(offset_m: npt.ArrayLike, surface_velocity_m_s: float, gradient_per_s: float) -> FloatArray:
    """Time of the diving wave where velocity grows linearly with depth, v = v0 + k z.

    Parameters
    ----------
    offset_m : float (...)
        Metres, >= 0.
    surface_velocity_m_s, gradient_per_s : float
        v0 in m/s and k in 1/s, both > 0.

    Returns
    -------
    float (...), seconds

    Raises
    ------
    ValueError
        If an offset is negative or v0 or k not above zero.

    Notes
    -----
    t = (2 / k) asinh(k x / (2 v0)) (Geldart and Sheriff 2004, equations 4.20, inverted)
    """
    half, _, k = _diving(offset_m, surface_velocity_m_s, gradient_per_s)
    return np.asarray(2 / k * np.arcsinh(half))


def diving_depth(offset_m: npt.ArrayLike, surface_velocity_m_s: float, gradient_per_s: float) -> FloatArray:
    """Deepest point of the diving wave, metres: (v0 / k) (sqrt(1 + (k x / (2 v0))^2) - 1).

    Parameters and errors as in `diving_time`.
    """
    half, v0, k = _diving(offset_m, surface_velocity_m_s, gradient_per_s)
    return np.asarray(v0 / k * (np.hypot(1.0, half) - 1))


def diving_apparent_velocity(offset_m: npt.ArrayLike, surface_velocity_m_s: float, gradient_per_s: float) -> FloatArray:
    """Apparent velocity dx / dt of the diving wave, m/s: the velocity at its deepest point.

    Parameters and errors as in `diving_time`.
    """
    half, v0, _ = _diving(offset_m, surface_velocity_m_s, gradient_per_s)
    return np.asarray(v0 * np.hypot(1.0, half))


def plus_time(time_from_a_s: npt.ArrayLike, time_from_b_s: npt.ArrayLike, reciprocal_s: npt.ArrayLike) -> FloatArray:
    """Plus time of Hagedoorn 1959, tA + tB - tAB, seconds: twice the delay time under the receiver.

    Parameters
    ----------
    time_from_a_s, time_from_b_s : float (receivers,)
        Head-wave times at receivers between the shots A and B.
    reciprocal_s : float
        Head-wave time from A to B.

    Raises
    ------
    ValueError
        If a time is not finite.
    """
    both = _finite("time_from_a_s", time_from_a_s) + _finite("time_from_b_s", time_from_b_s)
    return both - _finite("reciprocal_s", reciprocal_s)


def plus_time_depth(plus_s: npt.ArrayLike, upper_m_s: npt.ArrayLike, lower_m_s: npt.ArrayLike) -> FloatArray:
    """Depth at right angles to the refractor from a plus time, metres: T+ V1 / (2 cos(theta)).

    Raises
    ------
    ValueError
        As in `depth_from_delay_time`.
    """
    return depth_from_delay_time(0.5 * np.asarray(plus_s, dtype=np.float64), upper_m_s, lower_m_s)


def minus_time(time_from_a_s: npt.ArrayLike, time_from_b_s: npt.ArrayLike) -> FloatArray:
    """Minus time of Hagedoorn 1959 without its constant, tA - tB, seconds.

    Its slope along the line from A to B is 2 cos(dip) / V2: delay times under the receivers cancel.

    Raises
    ------
    ValueError
        If a time is not finite.
    """
    return _finite("time_from_a_s", time_from_a_s) - _finite("time_from_b_s", time_from_b_s)


def _finite(name: str, value: npt.ArrayLike) -> FloatArray:
    array = np.asarray(value, dtype=np.float64)
    if not np.all(np.isfinite(array)):
        raise ValueError(f"{name}: expected finite numbers")
    return array


def _not_negative(name: str, value: npt.ArrayLike) -> FloatArray:
    array = _finite(name, value)
    if not np.all(array >= 0):
        raise ValueError(f"{name}: expected 0 or more, found {array.min():g}")
    return array


def _positive(name: str, value: npt.ArrayLike) -> FloatArray:
    array = _finite(name, value)
    if not np.all(array > 0):
        raise ValueError(f"{name}: expected more than 0, found {array.min():g}")
    return array


def _slower_above_faster(upper_m_s: npt.ArrayLike, lower_m_s: npt.ArrayLike) -> tuple[FloatArray, FloatArray]:
    upper, lower = _positive("upper_m_s", upper_m_s), _positive("lower_m_s", lower_m_s)
    if not np.all(upper < lower):
        raise ValueError("expected the velocity below to be higher than the one above: there is no head wave")
    return upper, lower


def _layers(thickness_m: npt.ArrayLike, velocity_m_s: npt.ArrayLike) -> tuple[FloatArray, FloatArray]:
    thickness = np.atleast_1d(_not_negative("thickness_m", thickness_m))
    velocity = np.atleast_1d(_positive("velocity_m_s", velocity_m_s))
    if thickness.ndim != 1 or velocity.shape != (thickness.size + 1,):
        raise ValueError(
            f"expected one velocity more than thicknesses, found {velocity.shape} velocities, {thickness.shape} "
            "thicknesses"
        )
    if not np.all(velocity[:-1] < velocity[-1]):
        raise ValueError(f"expected every layer slower than the refractor below it ({velocity[-1]:g} m/s)")
    return thickness, velocity


def _vertical_slowness(velocity: FloatArray) -> FloatArray:
    """Slowness times cos(i_in) in every layer above the half-space."""
    return np.asarray(np.sqrt(1 - (velocity[:-1] / velocity[-1]) ** 2) / velocity[:-1])


def _diving(
    offset_m: npt.ArrayLike, surface_velocity_m_s: float, gradient_per_s: float
) -> tuple[FloatArray, float, float]:
    v0 = float(_positive("surface_velocity_m_s", surface_velocity_m_s))
    k = float(_positive("gradient_per_s", gradient_per_s))
    return k * _not_negative("offset_m", offset_m) / (2 * v0), v0, k


def _snell(ratio: float, angle: float) -> float:
    sine = ratio * np.sin(angle)
    if not abs(sine) <= 1:
        raise ValueError("expected rays that pass every interface, found one beyond the critical angle")
    return float(np.arcsin(sine))


def _inverse(slowness: float) -> float:
    return float(1 / slowness) if slowness != 0 else float("inf")
