"""How often the 90 % intervals hold the truth on the demo's elastic waveforms, over many seeds of field noise.

The whole line but the files: noise, picking, interpretation. Run by hand for the full study:
python tests/coverage_demo.py --seeds 100
"""

from __future__ import annotations

import argparse
from dataclasses import dataclass

import numpy as np

from interp.interpretation import InterpretSettings, interpret
from picker.gather import pick_records
from picker.records import ShotRecord
from synthetic_gathers.demo_survey import demo_noise, load_demo
from synthetic_gathers.gathers import RecordedSurvey, SyntheticSurvey
from synthetic_gathers.noise import FieldNoise


@dataclass(frozen=True)
class DemoCoverage:
    """Pooled over stations and seeds."""

    held: float
    median_depth_error: float
    worst_decile_error: float
    median_width: float
    kept_share: float
    median_pick_error_ms: float
    picks_held: float
    upper_m_s: float
    lower_m_s: float
    upper_held: float
    lower_held: float
    shallow_share: float


def as_records(recorded: RecordedSurvey) -> list[ShotRecord]:
    """The records as a reader would give them."""
    return [
        ShotRecord(
            samples=record.samples,
            interval_s=record.interval_s,
            start_s=np.full(record.samples.shape[0], record.start_s),
            record=record.record,
            channel=record.channel,
            source_xyz=record.source_xyz,
            receiver_xyz=record.receiver_xyz,
            source_depth_m=record.source_depth_m,
        )
        for record in recorded.records
    ]


def coverage(survey: SyntheticSurvey, seeds: range, noise: FieldNoise, draws: int = 400) -> DemoCoverage:
    """Coverage over seeds of noise laid on one survey's clean waveforms."""
    true = survey.depth_m[0]
    held, errors, widths, kept, pick_errors, pick_held, shallow = [], [], [], [], [], [], []
    velocities, velocities_held = [], []
    true_m_s = np.array([layer.vp_m_s for layer in survey.model.layers])
    for seed in seeds:
        recorded = survey.noisy(seed, noise)
        picks = pick_records(as_records(recorded))
        section = interpret(picks, InterpretSettings(seed=seed, draws=draws))
        known = np.isfinite(section.depth_m[0])
        low, high = section.depth_interval_90_m[:, 0, known]
        held.append((low <= true[known]) & (true[known] <= high))
        errors.append((section.depth_m[0, known] - true[known]) / true[known])
        widths.append((high - low) / true[known])
        live = ~np.tile(recorded.dead, len(recorded.records))
        onset = recorded.onset_s.ravel()
        used = picks.kept & live
        kept.append(used.sum() / live.sum())
        pick_errors.append(picks.time_s[used] - onset[used])
        pick_held.append((picks.early_s[used] <= onset[used]) & (onset[used] <= picks.late_s[used]))
        velocities.append(np.median(section.velocity_m_s, axis=1))
        slowest, fastest = section.velocity_interval_90_m_s.mean(axis=2)
        velocities_held.append((slowest <= true_m_s) & (true_m_s <= fastest))
        shallow.append(section.depth_m[0, known] < true[known])
    error = np.concatenate(errors)
    upper, lower = np.median(velocities, axis=0)
    upper_held, lower_held = np.mean(velocities_held, axis=0)
    return DemoCoverage(
        held=float(np.mean(np.concatenate(held))),
        median_depth_error=float(np.median(np.abs(error))),
        worst_decile_error=float(np.quantile(np.abs(error), 0.9)),
        median_width=float(np.median(np.concatenate(widths))),
        kept_share=float(np.mean(kept)),
        median_pick_error_ms=float(1e3 * np.median(np.concatenate(pick_errors))),
        picks_held=float(np.mean(np.concatenate(pick_held))),
        upper_m_s=float(upper),
        lower_m_s=float(lower),
        upper_held=float(upper_held),
        lower_held=float(lower_held),
        shallow_share=float(np.mean(np.concatenate(shallow))),
    )


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seeds", type=int, default=100)
    parser.add_argument("--level", choices=["demo", "quiet", "field", "rough"], default="demo")
    chosen = parser.parse_args()
    level = demo_noise() if chosen.level == "demo" else FieldNoise.level(chosen.level)
    print(coverage(load_demo(), range(chosen.seeds), level))
