"""A synthetic survey: clean gathers over a model with its truth, and the records a crew would bring home from it."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from synthetic_gathers.model import LayeredModel
from synthetic_gathers.noise import FieldNoise, draw_channels, pretrigger_samples, record_in_the_field
from synthetic_gathers.segy_writer import FieldRecord, write_segy

if TYPE_CHECKING:
    from synthetic_gathers.wavelets import Wavelet

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

# The strength of a first arrival is its largest amplitude within this many source durations after the true onset:
# later arrivals than the first are not in it yet.
FIRST_ARRIVAL_DURATIONS = 0.7


@dataclass(frozen=True, eq=False)
class SyntheticSurvey:
    """Clean gathers over ground of known truth.

    Parameters
    ----------
    model : LayeredModel
        The ground.
    waveforms : float32 (shots, receivers, samples)
        Vertical particle velocity; the first sample is at the time break.
    interval_s : float
        Sample interval, seconds.
    source_x_m : float (shots,)
        Shots along the line, metres.
    receiver_x_m : float (receivers,)
        Geophones along the line, metres.
    source_depth_m : float (shots,)
        Depth of the shots below the ground, metres.
    onset_s : float (shots, receivers)
        True time of the first arrival, seconds after the blow.
    source_duration_s : float
        How long the source acts.
    """

    model: LayeredModel
    waveforms: npt.NDArray[np.float32]
    interval_s: float
    source_x_m: FloatArray
    receiver_x_m: FloatArray
    source_depth_m: FloatArray
    onset_s: FloatArray
    source_duration_s: float

    def __post_init__(self) -> None:
        shots, receivers = self.source_x_m.size, self.receiver_x_m.size
        for name, shape in (
            ("waveforms", (shots, receivers, self.waveforms.shape[-1])),
            ("onset_s", (shots, receivers)),
            ("source_depth_m", (shots,)),
        ):
            found = getattr(self, name).shape
            if found != shape:
                raise ValueError(f"{name}: expected shape {shape}, found {found}")
        for name in ("waveforms", "source_x_m", "receiver_x_m", "source_depth_m", "onset_s"):
            array = np.array(getattr(self, name))
            array.flags.writeable = False
            object.__setattr__(self, name, array)

    @cached_property
    def receiver_xyz(self) -> FloatArray:
        """Geophones (receivers, 3), metres; the line runs along x."""
        return _on_the_ground(self.model, self.receiver_x_m)

    @cached_property
    def source_xyz(self) -> FloatArray:
        """Ground above the shots (shots, 3), metres."""
        return _on_the_ground(self.model, self.source_x_m)

    @property
    def offset_m(self) -> FloatArray:
        """Horizontal distance shot to geophone (shots, receivers), metres."""
        return np.abs(self.source_x_m[:, None] - self.receiver_x_m[None, :])

    @property
    def depth_m(self) -> FloatArray:
        """True vertical depth of every interface under every geophone (interfaces, receivers), metres."""
        interfaces = range(len(self.model.interface_z_m))
        return np.array([self.model.depth_m(number, self.receiver_x_m) for number in interfaces])

    @property
    def velocity_m_s(self) -> FloatArray:
        """True P velocity of every layer at every geophone (layers, receivers), m/s."""
        x = self.receiver_x_m
        return np.array(
            [
                layer.vp_m_s(x) if callable(layer.vp_m_s) else np.full(x.shape, layer.vp_m_s)
                for layer in self.model.layers
            ]
        )

    @cached_property
    def first_arrival_amplitude(self) -> FloatArray:
        """Largest amplitude in the first 0.7 source durations after the true onset (shots, receivers)."""
        time_s = np.arange(self.waveforms.shape[-1]) * self.interval_s
        after = time_s - self.onset_s[..., None]
        window = (after >= 0) & (after <= FIRST_ARRIVAL_DURATIONS * self.source_duration_s)
        return np.asarray(np.max(np.where(window, np.abs(self.waveforms), 0.0), axis=-1), dtype=np.float64)

    @cached_property
    def far_third(self) -> BoolArray:
        """True for the third of all traces with the largest offsets (shots, receivers)."""
        return np.asarray(self.offset_m >= np.quantile(self.offset_m, 2.0 / 3.0))

    def noisy(self, seed: int | np.random.SeedSequence, noise: FieldNoise) -> RecordedSurvey:
        """The survey as recorded on one day in the field.

        Parameters
        ----------
        seed : int or SeedSequence
            Every shot and the channels draw from their own stream of it.
        noise : FieldNoise
            The conditions.

        Returns
        -------
        RecordedSurvey
        """
        root = seed if isinstance(seed, np.random.SeedSequence) else np.random.SeedSequence(seed)
        shots = self.source_x_m.size
        survey_stream, *streams = [np.random.default_rng(child) for child in root.spawn(shots + 1)]
        channels = draw_channels(survey_stream, self.receiver_x_m.size, noise)
        if noise.weak_shots > shots:
            raise ValueError(f"weak_shots: expected at most {shots}, found {noise.weak_shots}")
        weak = np.isin(np.arange(shots), survey_stream.permutation(shots)[: noise.weak_shots])
        reference = float(np.median(self.first_arrival_amplitude[self.far_third]))
        shift_s = np.empty(shots)
        strength = np.empty(shots)
        noise_rms = np.empty(shots)
        records = []
        for shot, rng in enumerate(streams):
            shift_s[shot] = rng.normal(0.0, noise.time_break_s)
            strength[shot] = rng.lognormal(0.0, noise.strength_spread) * (noise.weak_strength if weak[shot] else 1.0)
            noise_rms[shot] = reference / noise.signal_to_noise * rng.lognormal(0.0, noise.noise_spread)
            samples = record_in_the_field(
                rng,
                noise,
                channels,
                self.waveforms[shot],
                self.receiver_x_m,
                np.linalg.norm(self.receiver_xyz - self.source_xyz[shot], axis=1),
                self.interval_s,
                noise_rms=float(noise_rms[shot]),
                air_wave_at_reference=noise.air_wave * reference,
                reference_m=float(np.median(self.offset_m[self.far_third])),
                time_break_shift_s=float(shift_s[shot]),
                strength=float(strength[shot]),
            )
            records.append(
                FieldRecord(
                    samples=samples,
                    interval_s=self.interval_s,
                    start_s=-pretrigger_samples(noise, self.interval_s) * self.interval_s,
                    record=shot + 1,
                    channel=np.arange(1, self.receiver_x_m.size + 1),
                    source_xyz=self.source_xyz[shot],
                    receiver_xyz=self.receiver_xyz,
                    source_depth_m=float(self.source_depth_m[shot]),
                    dead=np.zeros(self.receiver_x_m.size, dtype=np.bool_),
                    source_point=shot + 1,
                )
            )
        return RecordedSurvey(
            survey=self,
            records=tuple(records),
            time_break_shift_s=shift_s,
            geophone_delay_s=channels.delay_s,
            strength=strength,
            noise_rms=noise_rms,
            dead=channels.dead,
            reversed=channels.reversed,
            spiky=channels.spiky,
        )


@dataclass(frozen=True, eq=False)
class RecordedSurvey:
    """Records from the field with the truth about them.

    Parameters
    ----------
    survey : SyntheticSurvey
        The clean survey below it.
    records : tuple of FieldRecord
        One a shot, in the order of the shots. No trace is marked dead: the recorder does not know.
    time_break_shift_s : float (shots,)
        Error of the time break; onsets on the record's clock are later by it.
    geophone_delay_s : float (receivers,)
        Delay at the geophone; onsets are later by it too.
    strength : float (shots,)
        Strength of the shots.
    noise_rms : float (shots,)
        Expected rms of the background on a perfect channel.
    dead, reversed, spiky : bool (receivers,)
        Bad channels.
    """

    survey: SyntheticSurvey
    records: tuple[FieldRecord, ...]
    time_break_shift_s: FloatArray
    geophone_delay_s: FloatArray
    strength: FloatArray
    noise_rms: FloatArray
    dead: BoolArray
    reversed: BoolArray
    spiky: BoolArray

    @property
    def onset_s(self) -> FloatArray:
        """True onset on the record's own clock (shots, receivers): travel time, time-break error, geophone delay."""
        return self.survey.onset_s + self.time_break_shift_s[:, None] + self.geophone_delay_s[None, :]

    def write(
        self,
        directory: str | os.PathLike[str],
        *,
        one_file: bool = False,
        ibm_float: bool = False,
        description: Sequence[str] = (),
    ) -> list[Path]:
        """Write the records as SEG-Y files into a folder, and the truth into its subfolder `truth`.

        Parameters
        ----------
        directory : path
            Made if it is not there.
        one_file : bool
            All shots into `shots.sgy` instead of a file `shot_NN.sgy` for each.
        ibm_float : bool
            Samples as IBM floats.
        description : sequence of str
            Lines for the textual headers.

        Returns
        -------
        list of Path
            The SEG-Y files.
        """
        place = Path(directory)
        place.mkdir(parents=True, exist_ok=True)
        if one_file:
            files = {place / "shots.sgy": list(self.records)}
        else:
            files = {place / f"shot_{record.record:02d}.sgy": [record] for record in self.records}
        for path, records in files.items():
            write_segy(path, records, ibm_float=ibm_float, description=description)
        self.write_truth(place / "truth")
        return list(files)

    def write_truth(self, directory: str | os.PathLike[str]) -> None:
        """Write `true_onsets.csv`, `true_depths.csv` and `true_velocities.csv` into a folder."""
        place = Path(directory)
        place.mkdir(parents=True, exist_ok=True)
        survey = self.survey
        onset_s = self.onset_s
        _write_table(
            place / "true_onsets.csv",
            "record,channel,source_x_m,receiver_x_m,travel_time_ms,time_break_shift_ms,geophone_delay_ms,onset_ms,state",
            (
                f"{record.record},{record.channel[trace]},{survey.source_x_m[shot]:.3f},{survey.receiver_x_m[trace]:.3f},"
                f"{survey.onset_s[shot, trace] * 1e3:.4f},{self.time_break_shift_s[shot] * 1e3:.4f},"
                f"{self.geophone_delay_s[trace] * 1e3:.4f},{onset_s[shot, trace] * 1e3:.4f},{self._state(trace)}"
                for shot, record in enumerate(self.records)
                for trace in range(survey.receiver_x_m.size)
            ),
        )
        depth_m, velocity_m_s = survey.depth_m, survey.velocity_m_s
        _write_table(
            place / "true_depths.csv",
            "x_m,surface_z_m,layer,depth_m",
            (
                f"{x:.3f},{survey.receiver_xyz[trace, 2]:.4f},{layer + 1},{depth_m[layer, trace]:.4f}"
                for trace, x in enumerate(survey.receiver_x_m)
                for layer in range(depth_m.shape[0])
            ),
        )
        _write_table(
            place / "true_velocities.csv",
            "x_m,layer,velocity_m_s",
            (
                f"{x:.3f},{layer + 1},{velocity_m_s[layer, trace]:.1f}"
                for trace, x in enumerate(survey.receiver_x_m)
                for layer in range(velocity_m_s.shape[0])
            ),
        )

    def _state(self, trace: int) -> str:
        """What is wrong with a channel, for the truth file."""
        for name in ("dead", "reversed", "spiky"):
            if getattr(self, name)[trace]:
                return name
        return "live"


def simulate_survey(
    model: LayeredModel,
    source_x_m: npt.ArrayLike,
    receiver_x_m: npt.ArrayLike,
    *,
    wavelet: Wavelet,
    duration_s: float,
    interval_s: float,
    source_depth_m: npt.ArrayLike = 0.0,
    spacing_m: float | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> SyntheticSurvey:
    """Simulate every shot of a survey with elastic waves, and find its true onsets.

    Parameters
    ----------
    model : LayeredModel
        The ground.
    source_x_m, receiver_x_m : float (shots,), (receivers,)
        Positions along the line, metres.
    wavelet : Wavelet
        Force of the source in time.
    duration_s, interval_s : float
        Length and sample interval of the gathers, seconds.
    source_depth_m : float or float (shots,)
        Depth of the shots below the ground.
    spacing_m : float, optional
        Grid spacing of the simulation; its own choice unless given.
    progress : function, optional
        Called with the number of shots done and of all shots.

    Returns
    -------
    SyntheticSurvey
    """
    from synthetic_gathers.arrivals import first_arrivals_s
    from synthetic_gathers.elastic import simulate

    sources = np.atleast_1d(np.asarray(source_x_m, dtype=np.float64))
    receivers = np.atleast_1d(np.asarray(receiver_x_m, dtype=np.float64))
    depths = np.broadcast_to(np.asarray(source_depth_m, dtype=np.float64), sources.shape)
    gathers = []
    # The simulation's source is a line across the section; waves of a point spread along it as well, by about the root
    # of the distance. The factor is one a trace: times and shapes stay.
    spreading = 1.0 / np.sqrt(1.0 + np.abs(sources[:, None] - receivers[None, :]))
    for number, (source, depth) in enumerate(zip(sources, depths, strict=True)):
        gathers.append(
            spreading[number, :, None]
            * simulate(
                model,
                float(source),
                receivers,
                source_depth_m=float(depth),
                duration_s=duration_s,
                interval_s=interval_s,
                wavelet=wavelet,
                spacing_m=spacing_m,
            )
        )
        if progress is not None:
            progress(number + 1, sources.size)
    return SyntheticSurvey(
        model=model,
        waveforms=np.array(gathers, dtype=np.float32),
        interval_s=interval_s,
        source_x_m=sources,
        receiver_x_m=receivers,
        source_depth_m=np.array(depths),
        onset_s=first_arrivals_s(model, sources, receivers, source_depth_m=depths),
        source_duration_s=wavelet.duration_s,
    )


def _on_the_ground(model: LayeredModel, x_m: FloatArray) -> FloatArray:
    """Points of the surface (n, 3)."""
    z_m = np.broadcast_to(model.surface_z_m(x_m), x_m.shape)
    return np.column_stack([x_m, np.zeros_like(x_m), z_m])


def _write_table(path: Path, header: str, rows: Iterable[str]) -> None:
    """A header and rows of numbers and words that need no quoting."""
    path.write_text("\n".join([header, *rows]) + "\n", encoding="ascii")
