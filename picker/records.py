"""ShotRecord: the samples of one shot on the record's own clock, with where everything stood.

Readers of file formats live in modules of their own (`picker.segy`); they all give ShotRecords.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
TRACE_STATES = ("live", "dead", "clipped", "noisy")


@dataclass(frozen=True)
class Origin:
    """Where a record lies: path of the file, name of the format, byte offset of its first trace (from 0)."""

    file: str = ""
    format: str = ""
    first_byte: int = 0


@dataclass(frozen=True, eq=False)
class ShotRecord:
    """One shot as recorded: samples, clock and geometry, SI units.

    Parameters
    ----------
    samples : float32 (traces, samples)
        Amplitudes as recorded, in the file's own unit.
    interval_s : float
        Sample interval, seconds.
    start_s : float (traces,)
        Time of each trace's first sample after the time break; negative with pre-trigger samples.
    record : int
        Record number, unique in a survey.
    channel : int (traces,)
        Recorder channel, from 1.
    source_xyz : float (3,)
        Source position, metres; z is elevation of the ground above the source, up.
    receiver_xyz : float (traces, 3)
        Geophone positions, metres; z is elevation, up.
    source_depth_m : float
        Depth of the source below the ground at its place.
    valid : int (traces,), optional
        How many samples of each trace are real; all of them unless given.
    state : str (traces,), optional
        `live`, `dead`, `clipped` or `noisy`; `live` unless given.
    polarity : int (traces,), optional
        +1, or -1 where the trace is known to be wired in reverse.
    origin : Origin
        The file it came from.

    Raises
    ------
    ValueError
        If a shape, an interval or a state is not as described, or a start or position is not finite.
    """

    samples: npt.NDArray[np.float32]
    interval_s: float
    start_s: FloatArray
    record: int
    channel: npt.NDArray[np.int64]
    source_xyz: FloatArray
    receiver_xyz: FloatArray
    source_depth_m: float = 0.0
    valid: npt.NDArray[np.int64] | None = None
    state: npt.NDArray[np.str_] | None = None
    polarity: npt.NDArray[np.int64] | None = None
    origin: Origin = field(default_factory=Origin)

    def __post_init__(self) -> None:
        samples = np.array(self.samples, dtype=np.float32)
        if samples.ndim != 2:
            raise ValueError(f"samples: expected shape (traces, samples), found {samples.shape}")
        if not (self.interval_s > 0 and np.isfinite(self.interval_s)):
            raise ValueError(f"interval_s: expected more than 0 s, found {self.interval_s!r}")
        traces, length = samples.shape
        arrays: dict[str, npt.NDArray[np.generic]] = {
            "samples": samples,
            "start_s": np.array(np.broadcast_to(np.asarray(self.start_s, dtype=np.float64), (traces,))),
            "channel": np.array(self.channel, dtype=np.int64),
            "source_xyz": np.array(self.source_xyz, dtype=np.float64),
            "receiver_xyz": np.array(self.receiver_xyz, dtype=np.float64),
            "valid": np.full(traces, length) if self.valid is None else np.array(self.valid, dtype=np.int64),
            "state": np.full(traces, "live") if self.state is None else np.array(self.state, dtype=np.str_),
            "polarity": np.ones(traces, np.int64) if self.polarity is None else np.array(self.polarity, np.int64),
        }
        shapes = {
            "channel": (traces,),
            "source_xyz": (3,),
            "receiver_xyz": (traces, 3),
            "valid": (traces,),
            "state": (traces,),
            "polarity": (traces,),
        }
        for name, shape in shapes.items():
            if arrays[name].shape != shape:
                raise ValueError(f"{name}: expected shape {shape}, found {arrays[name].shape}")
        for name in ("start_s", "source_xyz", "receiver_xyz"):
            if not np.all(np.isfinite(arrays[name].astype(np.float64))):
                raise ValueError(f"{name}: expected finite numbers, found {arrays[name]}")
        unknown = sorted(set(arrays["state"].astype(str).tolist()) - set(TRACE_STATES))
        if unknown:
            raise ValueError(f"state: expected one of {TRACE_STATES}, found {unknown}")
        for name, array in arrays.items():
            array.flags.writeable = False
            object.__setattr__(self, name, array)

    @property
    def offset_m(self) -> FloatArray:
        """Horizontal distance from shot to each geophone, metres, never negative; shape (traces,)."""
        offset: FloatArray = np.hypot(
            self.receiver_xyz[:, 0] - self.source_xyz[0], self.receiver_xyz[:, 1] - self.source_xyz[1]
        )
        return offset
