"""One physical case for the tests of what leaves the program: a spread over a buried channel, told as a DepthSection.

The depths are drawn, not interpreted: these tests ask whether a result is told truly, not whether it is true.
"""

from __future__ import annotations

import numpy as np

from interp.section import Bound, DepthSection, PickFit
from picker.picks import PickTable
from picker.records import ShotRecord

SHOTS_M = (-30.0, -2.5, 28.0, 57.5, 88.0, 117.5, 145.0)


def made_section(layers: int = 2, draws: int = 200, stations: int = 24, gap: bool = True) -> DepthSection:
    """A section of one or two refractors; the last stations have no control on the lowest one if `gap`."""
    rng = np.random.default_rng(4)
    along = np.arange(stations) * 5.0
    surface = 212.0 + 1.5 * np.sin(along / 35.0)
    bottom = np.stack([3.2 + 0.6 * np.cos(along / 20), 11.0 + 4.5 * np.exp(-(((along - 70) / 18) ** 2))])[-layers:]
    common = 1 + rng.normal(0.0, 0.05, (draws, layers, 1))
    depth = bottom * common + rng.normal(0, 0.12, (draws, layers, stations))
    velocity = np.array([[420.0], [1450.0], [3100.0]])[2 - layers :] * np.ones((draws, layers + 1, stations))
    velocity *= 1 + rng.normal(0, 0.025, (draws, layers + 1, 1))
    velocity[:, -1, :] *= 1 - 0.12 * np.exp(-(((along - 70) / 25) ** 2))
    coverage = np.full((layers, stations), "two", dtype="<U4")
    coverage[-1, :4] = "one"
    deeper = np.full((layers, stations), np.nan)
    note = np.full((layers, stations), "", dtype="<U80")
    picks = np.full((layers, stations), 6)
    if gap:
        coverage[-1, -3:] = "none"
        depth[:, -1, -3:] = np.nan
        deeper[-1, -3:] = 9.0
        picks[-1, -3:] = 0
        note[-1, 10] = "interval rests on interpolation between controlled points"
    middle = np.median(depth, axis=0)
    bounds = tuple(
        Bound(
            float(x), layers, "hidden layer", "a layer of 800 m/s that never arrives first", float(d), float(d * 1.25)
        )
        for x, d in zip(along, middle[-1], strict=True)
        if np.isfinite(d)
    )
    return DepthSection(
        station_xyz=np.column_stack([1000 + along * 0.8, 2000 + along * 0.6, surface]),
        along_m=along,
        depth_samples_m=depth,
        velocity_samples_m_s=velocity,
        bound_shallow_m=np.concatenate([np.full((layers - 1, stations), np.nan), middle[-1:]]),
        bound_deep_m=np.concatenate([np.full((layers - 1, stations), np.nan), middle[-1:] * 1.25]),
        coverage=coverage,
        deeper_than_m=deeper,
        picks=picks,
        note=note,
        fit=_fit(along, middle, np.median(velocity, axis=0), rng),
        rms_misfit_s=0.0011,
        chi2_per_pick=1.08,
        refractor_probability={1: 0.04, 2: 0.93, 3: 0.03} if layers == 2 else {1: 0.9, 2: 0.1},
        shot_shift_s={number: (0.0002 * number, 0.0004) for number in range(1, len(SHOTS_M) + 1)},
        bounds=bounds,
        warnings=("Record 4: its time break seems late by 0.8 ms.",),
        settings={"seed": 1, "draws": draws},
    )


def _fit(along: np.ndarray, depth: np.ndarray, velocity: np.ndarray, rng: np.random.Generator) -> PickFit:
    """Picks with noise about plane-layer times over the local mean depth."""
    source, receiver = (grid.ravel() for grid in np.meshgrid(SHOTS_M, along, indexing="ij"))
    record, channel = (grid.ravel() + 1 for grid in np.indices((len(SHOTS_M), along.size)))
    offset = np.abs(receiver - source)
    speed = velocity.mean(axis=1)
    times = [offset / speed[0]]
    for refractor in range(1, speed.size):
        delay = sum(
            (
                (np.nanmean(depth[n]) - (np.nanmean(depth[n - 1]) if n else 0.0))
                * 2
                * np.sqrt(1 / speed[n] ** 2 - 1 / speed[refractor] ** 2)
                for n in range(refractor)
            ),
            start=0.0,
        )
        wave = 0.0006 * np.sin(receiver / 15) * refractor
        times.append(offset / speed[refractor] + delay + wave)
    predicted = np.min(times, axis=0)
    sigma = 0.0004 + offset * 8e-6
    weight = np.ones(offset.size)
    weight[::37] = 0.02
    time = predicted + rng.normal(0, sigma) + np.where(weight < 0.5, 0.006, 0.0)
    branch = np.argmin(times, axis=0)
    one = np.ones(offset.size)
    return PickFit(record, channel, source, receiver, offset, time, sigma, predicted, branch, 0.97 * one, weight)


def made_picks(section: DepthSection) -> PickTable:
    """The pick table the made section could have come from, with a few picks dropped, missing or moved by hand."""
    fit = section.fit
    rows = fit.time_s.size
    nearest = np.argmin(np.abs(fit.receiver_along_m[:, None] - section.along_m), axis=1)
    azimuth = np.array([0.8, 0.6])
    origin_xy = section.station_xyz[0, :2]
    source_xyz = np.column_stack([origin_xy + fit.source_along_m[:, None] * azimuth, np.full(rows, 212.0)])
    state = np.full(rows, "kept", dtype="<U8")
    state[5::53] = "dropped"
    state[20::61] = "none"
    none = state == "none"
    origin = np.full(rows, "auto", dtype="<U8")
    note = np.full(rows, "", dtype="<U60")
    origin[12] = "manual"
    note[12] = "moved to the earlier <b>break</b>"
    full = np.ones(rows)
    return PickTable(
        record=fit.record,
        channel=fit.channel,
        source_xyz=source_xyz,
        receiver_xyz=section.station_xyz[nearest],
        offset_m=fit.offset_m,
        time_s=np.where(none, np.nan, fit.time_s),
        sigma_s=np.where(none, np.nan, fit.sigma_s),
        early_s=np.where(none, np.nan, fit.time_s - 1.4 * fit.sigma_s),
        late_s=np.where(none, np.nan, fit.time_s + 2.0 * fit.sigma_s),
        reading_sigma_s=np.where(none, np.nan, fit.sigma_s),
        bias_removed_s=0.0002 * full,
        time_break_shift_s=0.0 * full,
        time_break_sigma_s=0.0003 * full,
        geophone_sigma_s=0.0002 * full,
        confidence=np.where(none, 0.0, np.clip(1.02 - fit.sigma_s * 60, 0, 1)),
        state=state,
        origin=origin,
        note=note,
    )


def made_record(picks: PickTable, number: int) -> ShotRecord:
    """Samples for one record of the made picks: a wavelet that starts at each pick, and noise."""
    rng = np.random.default_rng(number)
    mine = np.flatnonzero(picks.record == number)
    interval_s = 0.00025
    clock = np.arange(800) * interval_s - 0.01
    onset = np.where(np.isfinite(picks.time_s[mine]), picks.time_s[mine], 1.0)
    late = clock - onset[:, None]
    wave = np.where(late > 0, np.sin(2 * np.pi * 55 * late) * np.exp(-np.maximum(late, 0) * 35), 0.0)
    samples = wave * 1e-3 / (1 + picks.offset_m[mine, None] / 20) + rng.normal(0, 6e-6, late.shape)
    return ShotRecord(
        samples=samples.astype(np.float32),
        interval_s=interval_s,
        start_s=np.full(mine.size, -0.01),
        record=number,
        channel=picks.channel[mine],
        source_xyz=picks.source_xyz[mine[0]],
        receiver_xyz=picks.receiver_xyz[mine],
    )
