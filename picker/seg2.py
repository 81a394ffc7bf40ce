"""SEG-2 files of shot records turned into ShotHeaders: one file is one record.

What a file does not say is never made up: a file without a usable sample interval or without positions is refused,
and what contradicts itself becomes a Finding. Source: Pullan 1990, Geophysics 55, 1260-1271.
"""

from __future__ import annotations

import math
import mmap
import re
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import numpy.typing as npt

from picker.errors import InputError
from picker.findings import Finding
from picker.geometry import geometry_findings
from picker.geometry_csv import GeometryTable
from picker.records import ShotHeader
from picker.seg2_layout import KINDS, Layout, TraceBlock, read_layout, unpack_20_bits
from picker.units import METRES_PER_FOOT

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

ENCODING = "seg2"
_KIND_NAMES = {1: "16-bit integers", 2: "32-bit integers", 3: "20-bit floats", 4: "IEEE floats", 5: "IEEE doubles"}
_ORDER_NAMES = {">": "big-endian", "<": "little-endian"}
_SEISMIC = "SEISMIC_DATA"
_FEET, _METRES = ("FEET", "FOOT", "FT"), ("METERS", "METRES", "METER", "METRE", "M")
# Positions are written with two decimals: further apart than this they differ.
_SAME_PLACE_M = 0.005
# Refraction records last from some ten milliseconds to some ten seconds (common practice, no source).
_SHORTEST_S, _LONGEST_S = 0.005, 60.0


def scan_seg2(
    path: Path, interval_s: float | None = None, geometry: GeometryTable | None = None
) -> tuple[list[ShotHeader], list[Finding]]:
    """Find the shot of a SEG-2 file without reading its samples.

    Parameters
    ----------
    path : Path
        The file.
    interval_s : float, optional
        Sample interval to use whatever the file says, seconds.
    geometry : GeometryTable, optional
        Positions to use whatever the file says.

    Returns
    -------
    headers : list of ShotHeader
        One; traces sorted by channel.
    findings : list of Finding
        What a person should know.

    Raises
    ------
    InputError
        If the file is not as the standard says, is cut off, or has no sample interval, no traces of geophones, or no
        positions and no geometry is given.
    """
    with path.open("rb") as file, mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ) as mapped:
        layout = read_layout(mapped, path)
    name = str(path)
    findings = [Finding("look", text, "Copy the file again from the recorder.", name) for text in layout.oddities]
    traces = [trace for trace in layout.traces if trace.strings.get("TRACE_TYPE", _SEISMIC).upper() == _SEISMIC]
    if len(traces) < len(layout.traces):
        kinds = sorted({trace.strings["TRACE_TYPE"] for trace in layout.traces if trace not in traces})
        text = f"Traces that are no geophones left out: {len(layout.traces) - len(traces)} ({', '.join(kinds)})."
        findings.append(Finding("note", text, file=name))
    if not traces or not any(trace.samples for trace in traces):
        raise InputError(
            "has no traces of geophones with samples",
            file=path,
            expected=f"TRACE_TYPE {_SEISMIC}, or none, and a sample count above 0",
            found=f"{len(layout.traces)} other or empty traces",
            remedy="Write the file with the geophone traces in it",
        )
    record, found = _record_number(traces, path)
    findings += found
    channel, found = _channels(traces, path, record)
    findings += found
    order = np.argsort(channel, kind="stable")
    traces, channel = [traces[row] for row in order], channel[order]
    interval, found = _interval(traces, interval_s, path, record)
    findings += found
    start_s, found = _start(traces, path, record)
    findings += found
    source_xyz, receiver_xyz, found = _positions(layout, traces, path, record, geometry is not None)
    findings += found
    if geometry is not None:
        source_xyz, receiver_xyz = geometry.place(path, record, channel, source_xyz, receiver_xyz)
    valid = np.array([trace.samples for trace in traces], dtype=np.int64)
    state = np.where(valid == 0, "dead", "live")
    unset = np.zeros(valid.size)
    findings += geometry_findings(source_xyz, receiver_xyz, channel, state == "live", unset, unset, name, record)
    if np.all(receiver_xyz[:, 2] == 0) and source_xyz[2] == 0:
        text = "All elevations are zero: the ground is taken as flat."
        findings.append(
            Finding("note", text, "Where it is not, load again with a table of positions (--geometry).", name)
        )
    codes = ", ".join(_KIND_NAMES[code] for code in sorted({trace.code for trace in traces}))
    header = ShotHeader(
        record=record,
        original_record=record,
        interval_s=interval,
        start_s=start_s,
        channel=channel,
        source_xyz=source_xyz,
        receiver_xyz=receiver_xyz,
        source_depth_m=0.0,
        valid=valid,
        state=state,
        polarity=np.array([-1 if _number(trace, "POLARITY") == -1 else 1 for trace in traces], dtype=np.int64),
        file=path,
        format=f"SEG-2, {codes}, {_ORDER_NAMES[layout.order]}",
        encoding=ENCODING,
        first_byte=min(trace.first_byte for trace in traces),
        sample_byte=np.array([trace.sample_byte for trace in traces], dtype=np.int64),
    )
    return [header], findings


def read_seg2_samples(path: Path, sample_byte: IntArray, valid: IntArray) -> npt.NDArray[np.float32]:
    """Read the samples of some traces of a SEG-2 file.

    Parameters
    ----------
    path : Path
        The file.
    sample_byte : int (traces,)
        Byte offset, from 0, of each trace's first sample.
    valid : int (traces,)
        How many samples each trace has.

    Returns
    -------
    float32 (traces, samples)
        Times DESCALING_FACTOR, in millivolts where the recorder keeps to the standard; zero behind the end of a trace
        that is shorter than the longest. A magnitude that float32 cannot hold becomes the largest that it can.

    Raises
    ------
    InputError
        If the file is not the one that was scanned.
    """
    samples = np.zeros((valid.size, int(valid.max(initial=0))), dtype=np.float32)
    with path.open("rb") as file, mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ) as mapped:
        layout = read_layout(mapped, path)
        blocks = {(trace.sample_byte, trace.samples): trace for trace in layout.traces}
        for row, where in enumerate(zip(sample_byte.tolist(), valid.tolist(), strict=True)):
            if where not in blocks:
                raise InputError(
                    "is not the file that was loaded",
                    file=path,
                    expected=f"a trace of {where[1]} samples from byte {where[0] + 1}",
                    found="none there",
                    remedy="Put the original file back",
                )
            trace = blocks[where]
            raw = mapped[trace.sample_byte : trace.sample_byte + trace.data_bytes]
            samples[row, : trace.samples] = _clipped(_decoded(trace, raw, layout.order) * _descaling(trace))
    return samples


def _decoded(trace: TraceBlock, raw: bytes, order: str) -> FloatArray:
    """Samples as they are encoded; numbers that are none stay so: the trace is dead then."""
    if trace.code == 3:
        return unpack_20_bits(raw, order, trace.samples)
    with np.errstate(invalid="ignore"):
        return np.frombuffer(raw, dtype=f"{order}{KINDS[trace.code]}").astype(np.float64)


def _clipped(values: FloatArray) -> FloatArray:
    """Values within what float32 holds."""
    largest = float(np.finfo(np.float32).max)
    with np.errstate(invalid="ignore"):
        return np.asarray(np.clip(values, -largest, largest))


def _descaling(trace: TraceBlock) -> float:
    factor = _number(trace, "DESCALING_FACTOR")
    return 1.0 if factor is None or factor == 0 else factor


def _numbers(trace: TraceBlock, keyword: str) -> list[float]:
    """The finite numbers at the start of a value."""
    numbers: list[float] = []
    for word in re.split(r"[\s,;]+", trace.strings.get(keyword, "")):
        try:
            number = float(word)
        except ValueError:
            break
        if not math.isfinite(number):
            break
        numbers.append(number)
    return numbers


def _number(trace: TraceBlock, keyword: str) -> float | None:
    numbers = _numbers(trace, keyword)
    return numbers[0] if numbers else None


def _record_number(traces: Sequence[TraceBlock], path: Path) -> tuple[int, list[Finding]]:
    """Record number: the recorder's, else the number in the name of the file."""
    stated = _number(traces[0], "SHOT_SEQUENCE_NUMBER")
    if stated is not None and stated >= 1 and stated == int(stated) and stated < 2**31:
        return int(stated), []
    digits = re.findall(r"\d+", path.stem)
    record = int(digits[-1][-9:]) if digits else 0
    record = record if record >= 1 else 1
    text = f"No record number (SHOT_SEQUENCE_NUMBER) in the file: it is record {record} here"
    text += ", after its name." if digits else "."
    return record, [Finding("note", text, file=str(path), record=record)]


def _channels(traces: Sequence[TraceBlock], path: Path, record: int) -> tuple[IntArray, list[Finding]]:
    """Channel of each trace, or its place in the file where the numbers repeat or are not set."""
    stated = [_number(trace, "CHANNEL_NUMBER") for trace in traces]
    if all(number is not None and 1 <= number < 2**31 for number in stated) and len(set(stated)) == len(stated):
        return np.array(stated, dtype=np.float64).astype(np.int64), []
    text = "CHANNEL_NUMBER repeats or is not set; channels are counted in the order of the file."
    return np.arange(1, len(traces) + 1), [Finding("note", text, file=str(path), record=record)]


def _interval(
    traces: Sequence[TraceBlock], given_s: float | None, path: Path, record: int
) -> tuple[float, list[Finding]]:
    """Sample interval, seconds: the one given, else SAMPLE_INTERVAL of the traces."""
    if given_s is None:
        stated = [_number(trace, "SAMPLE_INTERVAL") for trace in traces]
        known = sorted({number for number in stated if number is not None and number > 0})
        if not known:
            raise InputError(
                "there is no sample interval in any trace",
                file=path,
                record=record,
                expected="SAMPLE_INTERVAL with more than 0 seconds",
                found=traces[0].strings.get("SAMPLE_INTERVAL", "none") or "nothing",
                remedy="Give it with --interval-us",
            )
        if len(known) > 1:
            raise InputError(
                "the sample interval changes within the record",
                file=path,
                record=record,
                trace=next(t.number for t, number in zip(traces, stated, strict=True) if number != known[0]),
                expected=f"{known[0] * 1e6:g} us as in others",
                found=f"{known[1] * 1e6:g} us",
                remedy="Give the right one for all with --interval-us",
            )
        given_s = known[0]
    length_s = given_s * max(trace.samples for trace in traces)
    if _SHORTEST_S <= length_s <= _LONGEST_S:
        return given_s, []
    text = f"At {given_s * 1e6:g} us a sample the record is {length_s:g} s long, which no refraction record is."
    return given_s, [Finding("look", text, "If the interval is wrong, give --interval-us.", str(path), record)]


def _start(traces: Sequence[TraceBlock], path: Path, record: int) -> tuple[FloatArray, list[Finding]]:
    """Time of the first sample after the time break, seconds: DELAY, negative with samples before it."""
    stated = [_number(trace, "DELAY") for trace in traces]
    findings = []
    missing = sum(number is None for number in stated)
    if missing:
        text = f"No DELAY on {missing} of {len(traces)} traces: their first sample is taken for the time break."
        findings.append(Finding("look", text, "Look at where the record's time zero lies.", str(path), record))
    skews = [abs(number) for number in (_number(trace, "SKEW") for trace in traces) if number is not None]
    if skews and max(skews) > 0:
        text = f"SKEW of up to {max(skews) * 1e3:.3g} ms is stated; it is not applied."
        findings.append(Finding("note", text, file=str(path), record=record))
    return np.array([0.0 if number is None else number for number in stated]), findings


def _positions(
    layout: Layout, traces: Sequence[TraceBlock], path: Path, record: int, replaced: bool
) -> tuple[FloatArray, FloatArray, list[Finding]]:
    """Source position (3,) and geophone positions (traces, 3), metres; zero where a table replaces them anyway."""
    unit_m, findings = _unit(layout, path, record)
    receivers = [_numbers(trace, "RECEIVER_LOCATION")[:3] for trace in traces]
    sources = [_numbers(trace, "SOURCE_LOCATION")[:3] for trace in traces]
    missing = [
        (trace.number, keyword)
        for keyword, places in (("RECEIVER_LOCATION", receivers), ("SOURCE_LOCATION", sources[:1]))
        for trace, place in zip(traces, places, strict=False)
        if not place
    ]
    if missing and not replaced:
        raise InputError(
            "has no position of a shot or geophone",
            file=path,
            record=record,
            trace=missing[0][0],
            expected=f"{missing[0][1]} with one to three numbers",
            found="none",
            remedy="Give the positions as a table with --geometry",
        )

    def xyz(places: Sequence[Sequence[float]]) -> FloatArray:
        return np.array([[*place, 0.0, 0.0, 0.0][:3] for place in places]) * unit_m

    source = xyz(sources)
    moved = np.abs(source - source[0]).max(axis=1) > _SAME_PLACE_M
    if moved.any() and not replaced:
        odd = traces[int(np.flatnonzero(moved)[0])].number
        text = f"SOURCE_LOCATION changes within the record, first on trace {odd}; that of the first channel is used."
        findings.append(Finding("look", text, "Give the positions with --geometry.", str(path), record))
    return source[0], xyz(receivers), findings


def _unit(layout: Layout, path: Path, record: int) -> tuple[float, list[Finding]]:
    """Metres in the unit of length of the file."""
    stated = layout.strings.get("UNITS", "").upper()
    if stated in _METRES:
        return 1.0, []
    if stated in _FEET:
        text = "Lengths in the file are in feet (UNITS); they are converted."
        return METRES_PER_FOOT, [Finding("note", text, file=str(path), record=record)]
    text = f"The unit of length (UNITS) is {stated or 'not set'}; metres are assumed."
    return 1.0, [Finding("look", text, "Check a distance that you know.", str(path), record)]
