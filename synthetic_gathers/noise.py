"""Field conditions of a whole survey: how much of every disturbance, the state of the channels, one noisy record.

`FieldNoise` holds the settings; `none`, `quiet`, `field` and `rough` are the named levels. Amplitudes are relative to
the noise rms that the caller computes from the far offsets of the survey.
"""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from synthetic_gathers import disturbances

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

# A dead channel still has the recorder's own noise, this much of the noise rms of a live one.
DEAD_CHANNEL_RMS = 0.002


@dataclass(frozen=True)
class FieldNoise:
    """Settings of everything that field conditions do to a survey.

    Parameters
    ----------
    signal_to_noise : float
        Median over the far third of offsets of the largest amplitude in the first 0.7 source durations after
        the true onset, over the noise rms (all of ambient, traffic, mains and wind together, whole band);
        infinite for no noise.
    traffic_share, hum_share, wind_share : float
        Shares of the noise power; the rest is ambient noise of the ground and the recorder, independent from
        geophone to geophone. All of them together at most 1.
    noise_spread : float
        Standard deviation of the logarithm of the noise level from shot to shot.
    geophone_hz : float
        Natural frequency of the geophones, which roll the ambient noise off below it.
    mains_hz : float
        50 or 60.
    coupling_spread : float
        Standard deviation of the logarithm of the gain of a geophone's coupling; the same through a survey.
    geophone_delay_s : float
        Standard deviation of the delay that planting and the soil next to a geophone add; the same through a survey.
    time_break_s : float
        Standard deviation of the time-break error of a shot, seconds.
    strength_spread : float
        Standard deviation of the logarithm of the strength of a shot.
    weak_shots : int
        How many shots, drawn at random, have `weak_strength` times their strength.
    weak_strength : float
        Strength of those relative to the others.
    dead, reversed, spiky : int
        How many channels, drawn at random, are dead, wired in reverse, or disturbed by spikes all through the survey.
    spikes_per_s : float
        Rate of the spikes on a spiky channel.
    spike_size : float
        Median height of a spike over the noise rms.
    air_wave : float
        Amplitude of the air wave at the far third of offsets, over the reference amplitude; 0 for none.
    air_wave_hz : float
        Its dominant frequency.
    air_decay : float
        Its amplitude falls with distance to the power of minus this.
    temperature_c : float
        Of the air, degrees Celsius; it sets the speed of sound.
    pretrigger_s : float
        Length of the record before the time break.
    """

    signal_to_noise: float = 13.0
    traffic_share: float = 0.45
    hum_share: float = 0.04
    wind_share: float = 0.15
    noise_spread: float = 0.2
    geophone_hz: float = 10.0
    mains_hz: float = 50.0
    coupling_spread: float = 0.2
    geophone_delay_s: float = 0.1e-3
    time_break_s: float = 0.4e-3
    strength_spread: float = 0.2
    weak_shots: int = 0
    weak_strength: float = 0.4
    dead: int = 1
    reversed: int = 0
    spiky: int = 0
    spikes_per_s: float = 12.0
    spike_size: float = 15.0
    air_wave: float = 3.0
    air_wave_hz: float = 180.0
    air_decay: float = 1.5
    temperature_c: float = 12.0
    pretrigger_s: float = 0.03

    def __post_init__(self) -> None:
        for field in dataclasses.fields(self):
            value = getattr(self, field.name)
            if field.name == "signal_to_noise":
                if not value > 0:
                    raise ValueError(f"signal_to_noise: expected more than 0, found {value!r}")
            elif not np.isfinite(value) or (value < 0 and field.name != "temperature_c"):
                raise ValueError(f"{field.name}: expected a finite number of 0 or more, found {value!r}")
        if self.traffic_share + self.hum_share + self.wind_share > 1:
            raise ValueError("traffic_share, hum_share, wind_share: expected at most 1 together")

    @classmethod
    def level(cls, name: str) -> FieldNoise:
        """The settings of a named level.

        Parameters
        ----------
        name : str
            `none` (the clean gather with a clock that is right), `quiet` (a still Sunday), `field` (an ordinary
            working day) or `rough` (wind and traffic, single blows).

        Raises
        ------
        ValueError
            If there is no such level.
        """
        if name not in LEVELS:
            raise ValueError(f"noise level: expected one of {tuple(LEVELS)}, found {name!r}")
        return LEVELS[name]


LEVELS = {
    "none": FieldNoise(
        signal_to_noise=np.inf,
        noise_spread=0.0,
        coupling_spread=0.0,
        geophone_delay_s=0.0,
        time_break_s=0.0,
        strength_spread=0.0,
        dead=0,
        air_wave=0.0,
    ),
    "quiet": FieldNoise(
        signal_to_noise=60.0,
        traffic_share=0.3,
        wind_share=0.05,
        coupling_spread=0.1,
        geophone_delay_s=0.05e-3,
        time_break_s=0.1e-3,
        strength_spread=0.1,
        dead=0,
        air_wave=1.0,
    ),
    "field": FieldNoise(),
    "rough": FieldNoise(
        signal_to_noise=2.0,
        traffic_share=0.4,
        hum_share=0.06,
        wind_share=0.25,
        noise_spread=0.3,
        time_break_s=0.8e-3,
        strength_spread=0.3,
        weak_shots=1,
        dead=2,
        reversed=1,
        spiky=1,
        air_wave=4.0,
    ),
}


@dataclass(frozen=True, eq=False)
class Channels:
    """What stays the same on each channel through a survey; all arrays have shape (traces,).

    Parameters
    ----------
    gain : float
        Coupling of the geophone, 1 in the middle.
    delay_s : float
        Delay by planting and the soil next to the geophone, seconds.
    pickup, exposure : float
        How much mains hum and wind the channel takes up; mean square 1.
    dead, reversed, spiky : bool
        Bad channels; no channel is two of these.
    """

    gain: FloatArray
    delay_s: FloatArray
    pickup: FloatArray
    exposure: FloatArray
    dead: BoolArray
    reversed: BoolArray
    spiky: BoolArray


def _unit_power(rng: np.random.Generator, spread: float, size: int) -> FloatArray:
    """Log-normal factors with a mean square of one."""
    return rng.lognormal(-(spread**2), spread, size)


def draw_channels(rng: np.random.Generator, traces: int, noise: FieldNoise) -> Channels:
    """Draw the state of every channel for one survey.

    Parameters
    ----------
    rng : Generator
    traces : int
    noise : FieldNoise

    Raises
    ------
    ValueError
        If more bad channels are asked for than there are channels.
    """
    bad = noise.dead + noise.reversed + noise.spiky
    if bad > traces:
        raise ValueError(f"dead, reversed, spiky: expected at most {traces} channels together, found {bad}")
    order = rng.permutation(traces)
    rank = np.empty(traces, dtype=np.int64)
    rank[order] = np.arange(traces)
    return Channels(
        gain=rng.lognormal(0.0, noise.coupling_spread, traces),
        delay_s=rng.normal(0.0, noise.geophone_delay_s, traces),
        pickup=_unit_power(rng, 0.4, traces),
        exposure=_unit_power(rng, 0.4, traces),
        dead=rank < noise.dead,
        reversed=(rank >= noise.dead) & (rank < noise.dead + noise.reversed),
        spiky=(rank >= noise.dead + noise.reversed) & (rank < bad),
    )


def background(
    rng: np.random.Generator,
    noise: FieldNoise,
    channels: Channels,
    receiver_x_m: FloatArray,
    samples: int,
    interval_s: float,
) -> FloatArray:
    """All noise that is there without a shot: ambient, traffic, mains and wind; expected rms 1 on a perfect channel.

    Returns
    -------
    float (traces, samples)
    """
    traces = receiver_x_m.size
    rest = max(0.0, 1.0 - noise.traffic_share - noise.hum_share - noise.wind_share)
    ground = np.sqrt(rest) * disturbances.ambient(rng, traces, samples, interval_s, noise.geophone_hz)
    ground += np.sqrt(noise.traffic_share) * disturbances.traffic(rng, receiver_x_m, samples, interval_s)
    hum = disturbances.mains_hum(rng, channels.pickup, samples, interval_s, noise.mains_hz)
    gusts = disturbances.wind(rng, channels.exposure, samples, interval_s)
    total: FloatArray = (
        channels.gain[:, None] * ground + np.sqrt(noise.hum_share) * hum + np.sqrt(noise.wind_share) * gusts
    )
    return total


def record_in_the_field(
    rng: np.random.Generator,
    noise: FieldNoise,
    channels: Channels,
    waveforms: npt.NDArray[np.floating],
    receiver_x_m: FloatArray,
    distance_m: FloatArray,
    interval_s: float,
    *,
    noise_rms: float,
    air_wave_at_reference: float,
    reference_m: float,
    time_break_shift_s: float,
    strength: float,
) -> npt.NDArray[np.float32]:
    """One clean gather as the recorder stores it on a noisy day.

    Parameters
    ----------
    rng : Generator
    noise : FieldNoise
    channels : Channels
    waveforms : float (traces, samples)
        Clean gather; its first sample is at the true time break.
    receiver_x_m : float (traces,)
        Positions along the line, for noise that crosses the spread.
    distance_m : float (traces,)
        Straight distance source to geophone, for the air wave.
    interval_s : float
    noise_rms : float
        Rms of the background, in the unit of the waveforms.
    air_wave_at_reference, reference_m : float
        Amplitude of the air wave, in that unit, at that distance.
    time_break_shift_s : float
        How late everything of the shot comes on the record's clock.
    strength : float
        Strength of the shot, 1 in the middle.

    Returns
    -------
    float32 (traces, pretrigger + samples)
        Pretrigger samples are `pretrigger_samples(noise, interval_s)`.
    """
    before = pretrigger_samples(noise, interval_s)
    late_s = time_break_shift_s + channels.delay_s
    out = strength * channels.gain[:, None] * disturbances.delay(waveforms, late_s, interval_s, before)
    samples = out.shape[1]
    if air_wave_at_reference > 0:
        out += (
            strength
            * air_wave_at_reference
            * disturbances.air_wave(
                rng,
                distance_m,
                samples,
                interval_s,
                -before * interval_s - time_break_shift_s,
                disturbances.sound_speed_m_s(noise.temperature_c),
                noise.air_wave_hz,
                noise.air_decay,
                reference_m,
            )
        )
    if noise_rms > 0:
        out += noise_rms * background(rng, noise, channels, receiver_x_m, samples, interval_s)
        bad = disturbances.spikes(rng, int(channels.spiky.sum()), samples, interval_s, noise.spikes_per_s)
        out[channels.spiky] += noise.spike_size * noise_rms * bad
    out[channels.reversed] *= -1.0
    out[channels.dead] = DEAD_CHANNEL_RMS * noise_rms * rng.standard_normal((int(channels.dead.sum()), samples))
    return out.astype(np.float32)


def pretrigger_samples(noise: FieldNoise, interval_s: float) -> int:
    """Whole samples before the time break."""
    return round(noise.pretrigger_s / interval_s)
