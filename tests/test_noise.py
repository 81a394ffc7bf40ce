from __future__ import annotations

import dataclasses

import numpy as np
import numpy.testing as npt
import pytest

from synthetic_gathers.noise import (
    DEAD_CHANNEL_RMS,
    FieldNoise,
    background,
    draw_channels,
    pretrigger_samples,
    record_in_the_field,
)

INTERVAL_S = 0.25e-3
TRACES = 24
RECEIVER_X_M = np.arange(TRACES) * 2.0


def pulse(samples=800, at_s=0.05):
    time_s = np.clip(np.arange(samples) * INTERVAL_S - at_s, 0.0, 0.05)
    shape = np.sin(np.pi * time_s / 0.05) ** 4 * np.sin(2 * np.pi * 80 * time_s)
    return np.tile(shape, (TRACES, 1))


def record(seed, noise, channels, noise_rms=0.01, shift_s=0.0, air_wave=0.0):
    return record_in_the_field(
        np.random.default_rng(seed),
        noise,
        channels,
        pulse(),
        RECEIVER_X_M,
        RECEIVER_X_M + 5.0,
        INTERVAL_S,
        noise_rms=noise_rms,
        air_wave_at_reference=air_wave,
        reference_m=30.0,
        time_break_shift_s=shift_s,
        strength=1.0,
    )


@pytest.mark.parametrize("level", ["quiet", "field", "rough"])
def test_background_of_every_level_has_unit_rms(level):
    noise = dataclasses.replace(FieldNoise.level(level), coupling_spread=0.0)
    rng = np.random.default_rng(11)
    power = []
    for _ in range(80):
        channels = draw_channels(rng, TRACES, noise)
        power.append(np.mean(background(rng, noise, channels, RECEIVER_X_M, 1200, INTERVAL_S) ** 2))
    # Traffic is common to the whole spread: one record of 0.3 s holds few independent values of it.
    assert np.sqrt(np.mean(power)) == pytest.approx(1.0, abs=0.08)


def test_levels_are_ordered_and_an_unknown_one_is_refused():
    quiet, field, rough = (FieldNoise.level(name) for name in ("quiet", "field", "rough"))
    assert quiet.signal_to_noise > field.signal_to_noise == 13 > rough.signal_to_noise == 2
    assert quiet.time_break_s < field.time_break_s < rough.time_break_s
    with pytest.raises(ValueError, match=r"expected one of \('none', 'quiet', 'field', 'rough'\), found 'storm'"):
        FieldNoise.level("storm")


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"signal_to_noise": 0.0}, "signal_to_noise: expected more than 0, found 0.0"),
        ({"signal_to_noise": np.nan}, "signal_to_noise: expected more than 0"),
        ({"time_break_s": -1e-3}, "time_break_s: expected a finite number of 0 or more"),
        ({"air_wave": np.inf}, "air_wave: expected a finite number"),
        ({"traffic_share": 0.8, "wind_share": 0.3}, "expected at most 1 together"),
    ],
)
def test_impossible_conditions_are_refused(change, message):
    with pytest.raises(ValueError, match=message):
        FieldNoise(**change)


def test_bad_channels_are_as_many_as_asked_and_none_is_bad_twice():
    noise = FieldNoise(dead=3, reversed=2, spiky=4)
    channels = draw_channels(np.random.default_rng(1), TRACES, noise)
    assert (channels.dead.sum(), channels.reversed.sum(), channels.spiky.sum()) == (3, 2, 4)
    assert np.max(channels.dead.astype(int) + channels.reversed + channels.spiky) == 1
    with pytest.raises(ValueError, match="at most 24 channels together, found 30"):
        draw_channels(np.random.default_rng(1), TRACES, FieldNoise(dead=30))


def test_without_noise_the_record_is_the_clean_gather_after_its_pretrigger():
    noise = FieldNoise.level("none")
    channels = draw_channels(np.random.default_rng(1), TRACES, noise)
    found = record(1, noise, channels, noise_rms=0.0)
    before = pretrigger_samples(noise, INTERVAL_S)
    assert before == 120
    npt.assert_array_equal(found[:, :before], 0.0)
    npt.assert_allclose(found[:, before:], pulse().astype(np.float32), atol=1e-7)


def test_a_late_time_break_makes_every_arrival_late_by_as_much():
    noise = FieldNoise.level("none")
    channels = draw_channels(np.random.default_rng(1), TRACES, noise)
    before = pretrigger_samples(noise, INTERVAL_S)
    found = record(1, noise, channels, noise_rms=0.0, shift_s=1.3e-3)
    npt.assert_allclose(found[:, before:], pulse(at_s=0.05 + 1.3e-3), atol=1e-4)  # the interpolator is right to this


def test_the_air_wave_shares_the_time_break_of_the_ground():
    noise = FieldNoise.level("none")
    channels = draw_channels(np.random.default_rng(1), TRACES, noise)
    shifts = [
        np.argmax(record(1, noise, channels, noise_rms=0.0, shift_s=shift_s, air_wave=100.0) != 0.0, axis=1)
        for shift_s in (0.0, 20 * INTERVAL_S)
    ]
    near = RECEIVER_X_M + 5.0 < 0.045 * 330.0  # where it comes before the pulse of the ground
    assert near.any()
    npt.assert_array_equal((shifts[1] - shifts[0])[near], 20)


def test_a_reversed_channel_is_the_negative_of_itself_and_a_dead_one_has_only_the_recorders_noise():
    noise = FieldNoise(dead=1, reversed=1)
    wired_wrong = draw_channels(np.random.default_rng(3), TRACES, noise)
    wired_right = dataclasses.replace(wired_wrong, reversed=np.zeros(TRACES, bool))
    wrong, right = record(5, noise, wired_wrong), record(5, noise, wired_right)
    sign = np.where(wired_wrong.reversed, -1.0, 1.0)[:, None]
    npt.assert_array_equal(wrong, (sign * right).astype(np.float32))
    # 920 values: the rms has a standard error of 2.3 %.
    assert np.std(wrong[wired_wrong.dead]) == pytest.approx(DEAD_CHANNEL_RMS * 0.01, rel=0.1)


def test_geophone_delays_and_gains_have_their_spread_over_many_channels():
    noise = FieldNoise(coupling_spread=0.2, geophone_delay_s=0.1e-3, dead=0)
    channels = draw_channels(np.random.default_rng(4), 4000, noise)
    # Standard errors of a standard deviation of 4000 values: 1.1 %.
    assert np.std(channels.delay_s) == pytest.approx(0.1e-3, rel=0.05)
    assert np.std(np.log(channels.gain)) == pytest.approx(0.2, rel=0.05)
    assert np.mean(channels.pickup**2) == pytest.approx(1.0, abs=0.1)
    assert np.mean(channels.exposure**2) == pytest.approx(1.0, abs=0.1)
