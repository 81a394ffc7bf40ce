"""How often the 90 % intervals hold the truth, over seeded two-layer surveys with exact times and known noise.

Run by hand for the full study: python tests/coverage_two_layers.py --surveys 200
"""

from __future__ import annotations

import argparse
from dataclasses import dataclass

import numpy as np
from made_survey import PlaneGround, plane_survey

from interp.interpretation import InterpretSettings, interpret


@dataclass(frozen=True)
class Coverage:
    """Shares of truths held: depth pooled over stations, velocities over surveys; and how good the middle was."""

    depth: float
    upper: float
    lower: float
    median_depth_error: float
    median_width: float


def random_case(seed: int) -> tuple[PlaneGround, np.ndarray, np.ndarray]:
    """A two-layer ground and a reversed spread of 24 geophones and 7 shots, drawn from the seed."""
    rng = np.random.default_rng(seed)
    spacing = rng.uniform(2.0, 5.0)
    receivers = np.arange(24) * spacing
    length = receivers[-1]
    upper = rng.uniform(300.0, 1200.0)
    depth = rng.uniform(0.05, 0.14) * length
    slope = np.tan(np.radians(rng.uniform(-5.0, 5.0)))
    slope = float(np.clip(slope, -0.7 * depth / length, 0.7 * depth / length))
    ground = PlaneGround(upper, upper * rng.uniform(2.2, 5.0), depth - slope * length / 2, slope)
    shots = np.array([-0.3, -0.02, 0.27, 0.52, 0.77, 1.02, 1.3]) * length
    # the plane must stay below the ground under the far shots too
    shots = shots[ground.depth_at(shots) > 0.2 * depth]
    return ground, shots, receivers


def coverage(surveys: int, *, sigma_s: float = 5e-4, draws: int = 400, first_seed: int = 0) -> Coverage:
    """Coverage over `surveys` seeded surveys; reading error `sigma_s`, time break 0.3 ms, geophones 0.2 ms."""
    depth_held, upper_held, lower_held, errors, widths = [], [], [], [], []
    for seed in range(first_seed, first_seed + surveys):
        ground, shots, receivers = random_case(seed)
        rng = np.random.default_rng([seed, 1])
        picks = plane_survey(ground, shots, receivers, sigma_s, rng, time_break_sigma_s=3e-4, geophone_sigma_s=2e-4)
        section = interpret(picks, InterpretSettings(seed=seed, draws=draws))
        known = np.isfinite(section.depth_m[0])
        low, high = section.depth_interval_90_m[:, 0, known]
        true = ground.depth_at(receivers)[known]
        depth_held.append((low <= true) & (true <= high))
        errors.append(np.abs(section.depth_m[0, known] - true) / true)
        widths.append((high - low) / true)
        velocity = 1 / np.mean(1 / section.velocity_samples_m_s, axis=2)
        v_low, v_high = np.quantile(velocity, (0.05, 0.95), axis=0)
        upper_held.append(v_low[0] <= ground.upper_m_s <= v_high[0])
        lower_held.append(v_low[1] <= ground.lower_m_s <= v_high[1])
    return Coverage(
        depth=float(np.mean(np.concatenate(depth_held))),
        upper=float(np.mean(upper_held)),
        lower=float(np.mean(lower_held)),
        median_depth_error=float(np.median(np.concatenate(errors))),
        median_width=float(np.median(np.concatenate(widths))),
    )


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--surveys", type=int, default=200)
    parser.add_argument("--sigma-ms", type=float, default=0.5)
    chosen = parser.parse_args()
    print(coverage(chosen.surveys, sigma_s=chosen.sigma_ms / 1e3))
