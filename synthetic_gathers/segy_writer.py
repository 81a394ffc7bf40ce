"""Shot records to SEG-Y revision 1 files as a crew hands them over: every header a shot record carries.

Big-endian; IEEE or IBM floats. One file may hold one record or many.
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

IBM_FLOAT, IEEE_FLOAT = 1, 5
TRACE_LIVE, TRACE_DEAD = 1, 2
METRES = 1
UP_IS_NEGATIVE = 1
REVISION_1 = 0x0100
# Headers are integers over a power of ten: coordinates to the millimetre on lines, coarser where they would not fit.
POSITION_SCALARS = (1000, 100, 10, 1)
TIME_SCALARS = (1, 10, 100, 1000)
INT32_MAX, INT16_MAX = 2**31 - 1, 2**15 - 1


@dataclass(frozen=True, eq=False)
class FieldRecord:
    """One shot as a seismograph keeps it.

    Parameters
    ----------
    samples : float32 (traces, samples)
        Amplitudes.
    interval_s : float
        Sample interval, seconds; a whole number of microseconds.
    start_s : float
        Time of the first sample after the time break, seconds; negative with pre-trigger samples.
    record : int
        Field record number.
    channel : int (traces,)
        Recorder channel, from 1.
    source_xyz : float (3,)
        Source position, metres; z is the elevation of the ground.
    receiver_xyz : float (traces, 3)
        Geophone positions, metres; z is elevation.
    source_depth_m : float
        Depth of the source below ground, metres.
    dead : bool (traces,)
        True where the trace is marked dead.
    stack : int
        Number of blows summed.
    source_point : int
        Number of the energy source point.
    """

    samples: npt.NDArray[np.float32]
    interval_s: float
    start_s: float
    record: int
    channel: npt.NDArray[np.int64]
    source_xyz: FloatArray
    receiver_xyz: FloatArray
    source_depth_m: float
    dead: npt.NDArray[np.bool_]
    stack: int = 1
    source_point: int = 1

    @property
    def offset_m(self) -> FloatArray:
        """Horizontal distance from shot to each geophone, metres; shape (traces,)."""
        return np.asarray(
            np.hypot(self.receiver_xyz[:, 0] - self.source_xyz[0], self.receiver_xyz[:, 1] - self.source_xyz[1])
        )


def write_segy(
    path: str | os.PathLike[str],
    records: Sequence[FieldRecord],
    *,
    ibm_float: bool = False,
    description: Sequence[str] = (),
) -> None:
    """Write shot records into one SEG-Y file, revision 1, big-endian.

    Parameters
    ----------
    path : path
        The file; overwritten if it exists.
    records : sequence of FieldRecord
        In the order in which they shall stand; all with the same interval and number of samples.
    ibm_float : bool
        Write IBM floats (format 1) instead of IEEE floats (format 5).
    description : sequence of str
        Lines about the survey for the textual header, at most 20, at most 76 characters each.

    Raises
    ------
    ValueError
        If there is no record, records differ in interval or length, a description does not fit, or a number
        does not fit into its header word.
    """
    import segyio
    from segyio import BinField, TraceField

    if not records:
        raise ValueError("records: expected at least one")
    first = records[0]
    interval_us = _interval_us(first.interval_s)
    length = first.samples.shape[1]
    for record in records:
        if record.samples.shape[1] != length or record.interval_s != first.interval_s:
            raise ValueError(
                f"record {record.record}: expected {length} samples at {first.interval_s} s as in record "
                f"{first.record}, found {record.samples.shape[1]} at {record.interval_s} s"
            )
    if length > INT16_MAX:
        raise ValueError(f"samples: expected at most {INT16_MAX} a trace, found {length}")

    spec = segyio.spec()
    spec.format = IBM_FLOAT if ibm_float else IEEE_FLOAT
    spec.samples = np.arange(length) * interval_us / 1000.0
    spec.tracecount = sum(record.samples.shape[0] for record in records)
    text = _textual_header(records, interval_us, ibm_float, description)
    headers = [header for record in records for header in _trace_headers(record, interval_us)]
    with segyio.create(os.fspath(Path(path)), spec) as file:
        file.text[0] = text
        file.bin.update(
            {
                BinField.JobID: 1,
                BinField.LineNumber: 1,
                BinField.ReelNumber: 1,
                BinField.Traces: max(record.samples.shape[0] for record in records),
                BinField.Interval: interval_us,
                BinField.IntervalOriginal: interval_us,
                BinField.Samples: length,
                BinField.SamplesOriginal: length,
                BinField.Format: spec.format,
                BinField.EnsembleFold: 1,
                BinField.SortingCode: 1,
                BinField.MeasurementSystem: METRES,
                BinField.ImpulseSignalPolarity: UP_IS_NEGATIVE,
                BinField.SEGYRevision: REVISION_1 >> 8,
                BinField.SEGYRevisionMinor: REVISION_1 & 0xFF,
                BinField.TraceFlag: 1,
                BinField.ExtendedHeaders: 0,
            }
        )
        samples = np.concatenate([np.asarray(record.samples, dtype=np.float32) for record in records])
        for number, header in enumerate(headers):
            file.header[number] = {
                TraceField.TRACE_SEQUENCE_LINE: number + 1,
                TraceField.TRACE_SEQUENCE_FILE: number + 1,
                **header,
            }
            file.trace[number] = samples[number]


def _interval_us(interval_s: float) -> int:
    """The sample interval as the headers hold it, whole microseconds."""
    interval_us = round(interval_s * 1e6)
    if not 0 < interval_us <= INT16_MAX or abs(interval_us - interval_s * 1e6) > 1e-3:
        raise ValueError(f"interval_s: expected a whole number of microseconds up to {INT16_MAX}, found {interval_s!r}")
    return interval_us


def _scalar(values: npt.ArrayLike, largest: int, candidates: Sequence[int]) -> int:
    """The finest divisor with which all values fit into their header words."""
    size = float(np.max(np.abs(np.asarray(values, dtype=np.float64)), initial=0.0))
    for divisor in candidates:
        if size * divisor <= largest:
            return divisor
    raise ValueError(f"expected numbers up to {largest / candidates[-1]:g}, found {size:g}: it does not fit its header")


def _time_scalar(start_s: float) -> int:
    """The smallest divisor that holds the delay to the microsecond, or the finest that fits at all."""
    start_ms = start_s * 1000.0
    for divisor in TIME_SCALARS:
        if abs(start_ms * divisor - round(start_ms * divisor)) < 1e-6:
            break
    return min(divisor, _scalar(start_ms, INT16_MAX, TIME_SCALARS[::-1]))


def _as_word(divisor: int) -> int:
    """A divisor as SEG-Y writes it: negative divides, 1 leaves as it is."""
    return -divisor if divisor > 1 else 1


def _trace_headers(record: FieldRecord, interval_us: int) -> list[dict[int, int]]:
    """The trace headers of one record, sequence numbers aside."""
    from segyio import TraceField as Field

    source, receivers = np.asarray(record.source_xyz), np.asarray(record.receiver_xyz)
    across = _scalar(np.concatenate([source[None, :2], receivers[:, :2]]), INT32_MAX, POSITION_SCALARS)
    heights = np.append(receivers[:, 2], [source[2], record.source_depth_m])
    up = _scalar(heights, INT32_MAX, POSITION_SCALARS)
    times = _time_scalar(record.start_s)
    offset_m = record.offset_m
    return [
        {
            Field.FieldRecord: record.record,
            Field.TraceNumber: int(record.channel[trace]),
            Field.EnergySourcePoint: record.source_point,
            Field.TraceIdentificationCode: TRACE_DEAD if record.dead[trace] else TRACE_LIVE,
            Field.NSummedTraces: record.stack,
            Field.NStackedTraces: 1,
            Field.DataUse: 1,
            Field.offset: round(float(offset_m[trace])),
            Field.ReceiverGroupElevation: round(float(receivers[trace, 2]) * up),
            Field.SourceSurfaceElevation: round(float(source[2]) * up),
            Field.SourceDepth: round(record.source_depth_m * up),
            Field.ElevationScalar: _as_word(up),
            Field.SourceGroupScalar: _as_word(across),
            Field.SourceX: round(float(source[0]) * across),
            Field.SourceY: round(float(source[1]) * across),
            Field.GroupX: round(float(receivers[trace, 0]) * across),
            Field.GroupY: round(float(receivers[trace, 1]) * across),
            Field.CoordinateUnits: METRES,
            Field.DelayRecordingTime: round(record.start_s * 1000.0 * times),
            Field.TRACE_SAMPLE_COUNT: record.samples.shape[1],
            Field.TRACE_SAMPLE_INTERVAL: interval_us,
            Field.ScalarTraceHeader: _as_word(times),
        }
        for trace in range(record.samples.shape[0])
    ]


def _textual_header(
    records: Sequence[FieldRecord], interval_us: int, ibm_float: bool, description: Sequence[str]
) -> str:
    """Forty lines of eighty characters; segyio turns them into EBCDIC."""
    if len(description) > 20:
        raise ValueError(f"description: expected at most 20 lines, found {len(description)}")
    for line in description:
        if len(line) > 76 or not line.isascii():
            raise ValueError(f"description: expected lines of at most 76 ASCII characters, found {line!r}")
    first = records[0]
    traces = sum(record.samples.shape[0] for record in records)
    numbers = [record.record for record in records]
    starts = sorted({record.start_s for record in records})
    lines = dict(enumerate(description, start=1))
    lines |= {
        22: f"RECORDS {min(numbers)} TO {max(numbers)}   TRACES {traces}   CHANNELS {first.samples.shape[0]}",
        23: f"SAMPLE INTERVAL {interval_us} US   SAMPLES {first.samples.shape[1]}"
        f"   FORMAT {'1 IBM' if ibm_float else '5 IEEE'} FLOAT 4 BYTES",
        24: "FIRST SAMPLE " + ", ".join(f"{start * 1000:g}" for start in starts[:4]) + " MS AFTER THE TIME BREAK",
        25: "DELAY RECORDING TIME BYTES 109-110, SCALAR BYTES 215-216",
        26: "FIELD RECORD BYTES 9-12, CHANNEL BYTES 13-16, SOURCE POINT BYTES 17-20",
        27: "SOURCE X, Y BYTES 73-80, GEOPHONE X, Y BYTES 81-88, SCALAR BYTES 71-72",
        28: "GEOPHONE, SOURCE ELEVATION BYTES 41-48, SOURCE DEPTH BYTES 49-52, SCALAR 69-70",
        29: "LENGTHS IN METRES, ELEVATIONS UP. VERTICAL GEOPHONES, PARTICLE VELOCITY",
        39: "SEG Y REV1",
        40: "END TEXTUAL HEADER",
    }
    return "".join(f"C{number:2d} {lines.get(number, '')}".ljust(80)[:80] for number in range(1, 41))
