"""Two-layer surveys of known truth for the tests: exact first arrivals plus known normal noise.

The times come from a minimisation of its own (scipy, over where the ray enters and leaves a plane refractor), not
from the program's travel-time code nor from the formulas that the program inverts.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize

from picker.picks import PickTable


def picks_from_times(
    source_xz: np.ndarray,
    receiver_xz: np.ndarray,
    time_s: np.ndarray,
    sigma_s: float,
    record: np.ndarray,
    channel: np.ndarray,
    *,
    time_break_sigma_s: float = 0.0,
    geophone_sigma_s: float = 0.0,
) -> PickTable:
    """A PickTable of kept picks along the x axis with one error for all."""
    rows = time_s.size
    zero, one = np.zeros(rows), np.ones(rows)
    return PickTable(
        record=record,
        channel=channel,
        source_xyz=np.stack([source_xz[:, 0], zero, source_xz[:, 1]], axis=1),
        receiver_xyz=np.stack([receiver_xz[:, 0], zero, receiver_xz[:, 1]], axis=1),
        offset_m=np.abs(receiver_xz[:, 0] - source_xz[:, 0]),
        time_s=time_s,
        sigma_s=sigma_s * one,
        early_s=time_s - 1.6448536 * sigma_s,
        late_s=time_s + 1.6448536 * sigma_s,
        reading_sigma_s=sigma_s * one,
        bias_removed_s=zero,
        time_break_shift_s=zero,
        time_break_sigma_s=time_break_sigma_s * one,
        geophone_sigma_s=geophone_sigma_s * one,
        confidence=one,
        state=np.full(rows, "kept"),
        origin=np.full(rows, "auto"),
        note=np.full(rows, ""),
    )


@dataclass(frozen=True)
class PlaneGround:
    """Flat ground at z = 0 over a plane refractor: vertical depth at x = 0, slope (positive deepens with x)."""

    upper_m_s: float
    lower_m_s: float
    depth_m: float
    slope: float = 0.0

    def depth_at(self, x_m: np.ndarray) -> np.ndarray:
        """Vertical depth of the refractor at x."""
        return self.depth_m + self.slope * np.asarray(x_m, dtype=float)

    def first_arrival_s(self, shot_m: float, receiver_m: float) -> float:
        """Least time over the direct path and all paths that enter and leave the refractor anywhere."""
        direct = abs(receiver_m - shot_m) / self.upper_m_s
        span = receiver_m - shot_m
        stretch = np.hypot(1.0, self.slope)

        def head(feet: np.ndarray) -> float:
            a, b = shot_m + feet[0] * span, shot_m + feet[1] * span
            down = np.hypot(a - shot_m, self.depth_at(a))
            up = np.hypot(b - receiver_m, self.depth_at(b))
            return float((down + up) / self.upper_m_s + abs(b - a) * stretch / self.lower_m_s)

        if abs(span) < 1e-9:
            return direct
        best = minimize(head, np.array([0.2, 0.8]), bounds=[(-0.5, 1.5)] * 2, method="L-BFGS-B", tol=1e-15)
        return min(direct, float(best.fun))


def plane_survey(
    ground: PlaneGround,
    shots_m: np.ndarray,
    receivers_m: np.ndarray,
    sigma_s: float,
    rng: np.random.Generator,
    *,
    time_break_sigma_s: float = 0.0,
    geophone_sigma_s: float = 0.0,
) -> PickTable:
    """Picks of a whole survey over a plane refractor with normal reading, time-break and geophone errors."""
    shot_row = np.repeat(np.arange(len(shots_m)), len(receivers_m))
    receiver_row = np.tile(np.arange(len(receivers_m)), len(shots_m))
    exact = np.array(
        [ground.first_arrival_s(shots_m[s], receivers_m[r]) for s, r in zip(shot_row, receiver_row, strict=True)]
    )
    noise = (
        sigma_s * rng.standard_normal(exact.size)
        + time_break_sigma_s * rng.standard_normal(len(shots_m))[shot_row]
        + geophone_sigma_s * rng.standard_normal(len(receivers_m))[receiver_row]
    )
    zero = np.zeros(exact.size)
    return picks_from_times(
        np.stack([np.asarray(shots_m)[shot_row], zero], axis=1),
        np.stack([np.asarray(receivers_m)[receiver_row], zero], axis=1),
        exact + noise,
        sigma_s,
        shot_row + 1,
        receiver_row + 1,
        time_break_sigma_s=time_break_sigma_s,
        geophone_sigma_s=geophone_sigma_s,
    )
