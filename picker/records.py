"""ShotRecord: the samples of one shot on the record's own clock, with where everything stood.

Readers of file formats live in modules of their own (`picker.segy`); they all give ShotHeaders, from which a
ShotRecord is read when its samples are wanted.
"""

from __future__ import annotations

import os
from collections.abc import Iterable
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from picker.errors import InputError

if TYPE_CHECKING:
    from picker.findings import Finding
    from picker.geometry_csv import GeometryTable

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


@dataclass(frozen=True, eq=False)
class ShotHeader:
    """One shot as it lies in a file: everything of a ShotRecord but its samples, and where those are.

    Parameters
    ----------
    record, original_record : int
        Record number that is unique in the survey, and the one the file gives.
    interval_s, start_s, channel, source_xyz, receiver_xyz, source_depth_m, valid, state, polarity
        As in ShotRecord.
    file : Path
        The file with the samples; meaningless where `encoding` is empty.
    format : str
        Name of the format, for people.
    encoding : str
        Byte order and kind of the samples (`picker.samples`), or `seg2` where each trace says it itself; empty where
        there are picks only, no samples.
    first_byte : int
        Byte offset of the first trace, from 0.
    sample_byte : int (traces,)
        Byte offset of each trace's first sample, from 0.
    """

    record: int
    original_record: int
    interval_s: float
    start_s: FloatArray
    channel: npt.NDArray[np.int64]
    source_xyz: FloatArray
    receiver_xyz: FloatArray
    source_depth_m: float
    valid: npt.NDArray[np.int64]
    state: npt.NDArray[np.str_]
    polarity: npt.NDArray[np.int64]
    file: Path
    format: str
    encoding: str
    first_byte: int
    sample_byte: npt.NDArray[np.int64]

    @property
    def has_samples(self) -> bool:
        """True where there is a file with samples, False where there are picks only."""
        return bool(self.encoding)


def read_shot(header: ShotHeader) -> ShotRecord:
    """Read the samples of one shot.

    Parameters
    ----------
    header : ShotHeader
        Where the shot lies.

    Returns
    -------
    ShotRecord
        A trace with samples that are not numbers is `dead` and zero throughout: nothing on it can be believed.

    Raises
    ------
    InputError
        If there are no samples, or the file cannot be read or is shorter than it was.
    """
    if not header.has_samples:
        raise InputError(
            "there are picks only, no samples",
            record=header.record,
            remedy="Load the file with the shot record first",
        )
    try:
        samples = _samples(header)
    except OSError as error:
        raise InputError(
            f"cannot be read ({error.strerror or error})",
            file=header.file,
            record=header.record,
            remedy="Put the file back where it was, or check who may read it",
        ) from error
    broken = ~np.isfinite(samples).all(axis=1)
    samples[broken] = 0.0
    return ShotRecord(
        samples=samples,
        interval_s=header.interval_s,
        start_s=header.start_s,
        record=header.record,
        channel=header.channel,
        source_xyz=header.source_xyz,
        receiver_xyz=header.receiver_xyz,
        source_depth_m=header.source_depth_m,
        valid=header.valid,
        state=np.where(broken, "dead", header.state),
        polarity=header.polarity,
        origin=Origin(os.fspath(header.file), header.format, header.first_byte),
    )


def _samples(header: ShotHeader) -> npt.NDArray[np.float32]:
    """Samples of a shot, whatever its format."""
    if header.encoding == "seg2":
        from picker.seg2 import read_seg2_samples

        return read_seg2_samples(header.file, header.sample_byte, header.valid)
    from picker.samples import read_samples, sample_bytes

    size = header.file.stat().st_size
    end = int((header.sample_byte + header.valid * sample_bytes(header.encoding)).max())
    if size < end:
        raise InputError(
            "the file is shorter than when it was loaded",
            file=header.file,
            record=header.record,
            expected=f"at least {end} bytes",
            found=f"{size}",
            remedy="Put the original file back",
        )
    return read_samples(header.file, header.encoding, header.sample_byte, header.valid)


def scan_file(
    path: str | os.PathLike[str], interval_s: float | None = None, geometry: GeometryTable | None = None
) -> tuple[list[ShotHeader], list[Finding]]:
    """Find the shots of one file of records, whatever its format, without reading the samples.

    Parameters
    ----------
    path : path
        The file.
    interval_s : float, optional
        Sample interval to use whatever the headers say, seconds.
    geometry : GeometryTable, optional
        Positions to use whatever the headers say.

    Returns
    -------
    headers : list of ShotHeader
        In the order of the file; record numbers are those of the file and unique in it.
    findings : list of Finding
        What a person should know.

    Raises
    ------
    InputError
        If the file cannot be read or is in no format that is read here.
    """
    place = Path(path)
    if not place.exists():
        raise InputError("there is no such file", file=place, remedy="Check the path")
    if place.is_dir():
        raise InputError(
            "is a folder",
            file=place,
            expected="a file of shot records",
            found="a folder",
            remedy="Name the files in it",
        )
    try:
        with place.open("rb") as file:
            start = file.read(4)
    except OSError as error:
        raise InputError(
            f"cannot be read ({error.strerror or error})", file=place, remedy="Check who may read the file"
        ) from error
    if not start:
        raise InputError(
            "the file is empty",
            file=place,
            expected="shot records",
            found="0 bytes",
            remedy="Copy it again from the recorder",
        )
    if start[:2] in (b"\x55\x3a", b"\x3a\x55"):
        from picker.seg2 import scan_seg2

        return scan_seg2(place, interval_s, geometry)
    from picker.segy import scan_segy

    return scan_segy(place, interval_s, geometry)


def read_records_and_findings(
    paths: Iterable[str | os.PathLike[str]], interval_s: float | None = None
) -> tuple[list[ShotRecord], list[Finding]]:
    """Read all shots of some files with what a person should know of them; otherwise as `read_records`."""
    records: list[ShotRecord] = []
    findings: list[Finding] = []
    for path in paths:
        headers, found = scan_file(path, interval_s)
        records += [read_shot(header) for header in headers]
        findings += found
    return records, findings


def read_records(paths: Iterable[str | os.PathLike[str]], interval_s: float | None = None) -> list[ShotRecord]:
    """Read all shots of some files.

    Parameters
    ----------
    paths : iterable of path
        Files of shot records, in any format that is read here.
    interval_s : float, optional
        Sample interval to use whatever the headers say, seconds.

    Returns
    -------
    list of ShotRecord
        File by file, in the order of each. Record numbers are those of the files: they may repeat between files
        (a survey makes them unique).

    Raises
    ------
    InputError
        If a file cannot be used; nothing is returned then.
    """
    return read_records_and_findings(paths, interval_s)[0]
