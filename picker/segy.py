"""SEG-Y files of shot records turned into ShotHeaders: which traces make a shot, when it starts, where it stands.

What a header does not say is never made up: a file without a usable sample interval is refused, and what
contradicts itself becomes a Finding. Sources: Barry, Cavers and Kneale (1975); SEG (2002).
"""

from __future__ import annotations

import mmap
from collections import defaultdict
from pathlib import Path

import numpy as np
import numpy.typing as npt

from picker.errors import InputError
from picker.findings import Finding
from picker.geometry import geometry_findings, scaled
from picker.geometry_csv import GeometryTable
from picker.records import ShotHeader
from picker.samples import looks_like
from picker.segy_layout import (
    TRACE_HEADER_BYTES,
    FileHeader,
    read_file_header,
    read_trace_words,
    trace_positions,
)
from picker.units import METRES_PER_FOOT

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

_KIND_NAMES = {"ibm4": "IBM floats", "f4": "IEEE floats", "f8": "IEEE doubles"}
_ORDER_NAMES = {">": "big-endian", "<": "little-endian"}
_DEAD = 2
_AUXILIARY = {3: "dummy", 4: "time break", 5: "uphole", 6: "sweep", 7: "timing", 8: "water break"}
_DEGREE_UNITS = {2: "seconds of arc", 3: "decimal degrees", 4: "degrees, minutes and seconds"}
_TIMES_SCALARS = (-10000, -1000, -100, -10, -1, 0, 1, 10, 100, 1000, 10000)
# Recorders sample at 1/16, 1/32 ... ms; a word of whole microseconds cuts the fraction off. Common practice, no source.
_CUT_INTERVALS_US = {62: 62.5, 31: 31.25, 15: 15.625}
# Refraction records last from some ten milliseconds to some ten seconds; far outside, the interval is in another unit
# than microseconds. Common practice, no source.
_SHORTEST_S, _LONGEST_S = 0.005, 60.0
_TRACES_LOOKED_AT = 8
_SAMPLES_LOOKED_AT = 4000


def scan_segy(
    path: Path, interval_s: float | None = None, geometry: GeometryTable | None = None
) -> tuple[list[ShotHeader], list[Finding]]:
    """Find the shots of a SEG-Y file without reading its samples.

    Parameters
    ----------
    path : Path
        The file.
    interval_s : float, optional
        Sample interval to use whatever the headers say, seconds.
    geometry : GeometryTable, optional
        Positions to use whatever the headers say.

    Returns
    -------
    headers : list of ShotHeader
        In the order in which they begin in the file, traces sorted by channel. Record numbers are unique in the file.
    findings : list of Finding
        What a person should know.

    Raises
    ------
    InputError
        If the file is no SEG-Y file, ends inside a trace, or has no usable sample interval, no traces of
        geophones, or positions in degrees that no geometry replaces.
    """
    with path.open("rb") as file, mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ) as mapped:
        header = read_file_header(mapped, path)
        position, count, findings = trace_positions(mapped, header, path)
        words = read_trace_words(mapped, header, position)
        kind, doubt = _kind_of_samples(mapped, header, position, count, path)
    findings += doubt
    seismic = ~np.isin(words["trace_id"], list(_AUXILIARY))
    if not seismic.all():
        names = sorted({_AUXILIARY[int(code)] for code in words["trace_id"][~seismic]})
        text = f"Auxiliary traces left out: {int((~seismic).sum())} ({', '.join(names)})."
        findings.append(Finding("note", text, file=str(path)))
    if not seismic.any():
        raise InputError(
            "has no traces of geophones",
            file=path,
            expected="trace identification code 1 in bytes 29-30 of the trace headers",
            found=", ".join(str(code) for code in sorted(set(words["trace_id"].tolist()))),
            remedy="Write the file with the geophone traces in it",
        )
    words, position, count = words[seismic], position[seismic], count[seismic]
    number = np.flatnonzero(seismic) + 1
    if not count.any():
        raise InputError(
            "has traces without samples",
            file=path,
            expected="a sample count of more than 0 in bytes 3221-3222 of the file or 115-116 of a trace header",
            found="0",
            remedy="Write the file again",
        )
    if geometry is None:
        _refuse_degrees(words, number, path)
    findings += _units_findings(header, words, path)
    major, minor = header.revision
    name = f"SEG-Y {major}.{minor}, {_KIND_NAMES.get(kind, kind)}, {_ORDER_NAMES[header.order]}"

    headers: list[ShotHeader] = []
    for rows, record, original in _shots(words):
        shot = words[rows]
        interval, found = _interval(shot, number[rows], int(count[rows].max()), header, interval_s, path, record)
        findings += found
        channel, found = _channels(shot, path, record)
        findings += found
        order = np.argsort(channel, kind="stable")
        rows, shot, channel = rows[order], shot[order], channel[order]
        source_xyz, source_depth_m, receiver_xyz = _positions(shot, header.feet)
        if geometry is not None:
            if np.isin(shot["coordinate_units"], list(_DEGREE_UNITS)).any():
                source_xyz[:2], receiver_xyz[:, :2] = 0.0, 0.0  # degrees must not stand in for a column left out
            source_xyz, receiver_xyz = geometry.place(path, record, channel, source_xyz, receiver_xyz)
        start_s, found = _start(shot, header, path, record)
        findings += found
        state = np.where((shot["trace_id"] == _DEAD) | (count[rows] == 0), "dead", "live")
        unit_m = METRES_PER_FOOT if header.feet else 1.0
        findings += geometry_findings(
            source_xyz,
            receiver_xyz,
            channel,
            state == "live",
            shot["offset"] * unit_m,
            scaled(shot["offset"], shot["coordinate_scalar"]) * unit_m,
            str(path),
            record,
        )
        headers.append(
            ShotHeader(
                record=record,
                original_record=original,
                interval_s=interval,
                start_s=start_s,
                channel=channel,
                source_xyz=source_xyz,
                receiver_xyz=receiver_xyz,
                source_depth_m=source_depth_m,
                valid=count[rows],
                state=state,
                polarity=np.ones(rows.size, np.int64),
                file=path,
                format=name,
                encoding=header.order + kind,
                first_byte=int(position[rows].min()),
                sample_byte=position[rows] + TRACE_HEADER_BYTES,
            )
        )
    return headers, findings + _file_findings(headers, path)


def _kind_of_samples(
    mapped: mmap.mmap, header: FileHeader, position: IntArray, count: IntArray, path: Path
) -> tuple[str, list[Finding]]:
    """Kind of the samples: as stated, unless a four-byte float is plainly the other one."""
    if header.kind not in ("ibm4", "f4"):
        return header.kind, []
    looked_at = np.unique(np.linspace(0, position.size - 1, _TRACES_LOOKED_AT).astype(int))
    words = [
        np.frombuffer(mapped[first : first + 4 * min(samples, _SAMPLES_LOOKED_AT)], dtype=header.order + "u4").astype(
            np.uint32
        )
        for first, samples in zip(
            (position[looked_at] + TRACE_HEADER_BYTES).tolist(), count[looked_at].tolist(), strict=True
        )
    ]
    seems = looks_like(np.concatenate(words))
    if seems is None or seems == header.kind:
        return header.kind, []
    text = (
        f"The format code says {_KIND_NAMES[header.kind]}, but the samples are {_KIND_NAMES[seems]}; they are read so."
    )
    return seems, [Finding("look", text, "Look at a gather before trusting it.", str(path))]


def _refuse_degrees(words: npt.NDArray[np.void], number: IntArray, path: Path) -> None:
    """Refuse positions on the globe: a spread is measured in lengths."""
    wrong = np.isin(words["coordinate_units"], list(_DEGREE_UNITS))
    if wrong.any():
        first = int(np.flatnonzero(wrong)[0])
        code = int(words["coordinate_units"][first])
        raise InputError(
            "has positions in degrees",
            file=path,
            trace=int(number[first]),
            expected="lengths (code 1 in bytes 89-90 of the trace header)",
            found=f"code {code}, {_DEGREE_UNITS[code]}",
            remedy="Give positions in metres with --geometry, or project the coordinates and write the file again",
        )


def _units_findings(header: FileHeader, words: npt.NDArray[np.void], path: Path) -> list[Finding]:
    """Say that lengths are in feet, where they are."""
    if not header.feet:
        return []
    return [
        Finding("note", "Lengths in the headers are in feet (bytes 3255-3256); they are converted.", file=str(path))
    ]


def _shots(words: npt.NDArray[np.void]) -> list[tuple[IntArray, int, int]]:
    """Rows of each shot with its record number, unique in the file, and the number the file gives.

    A shot is a field record number (energy source point where that is not set) at one source position. Where a
    trace of the same number at the same geophone comes again, it belongs to the next shot of a series that was
    written under one number.
    """
    stated = words["field_record"] if np.any(words["field_record"] != 0) else words["source_point"]
    place = list(zip(words["source_x"].tolist(), words["source_y"].tolist(), strict=True))
    dead = words["trace_id"] == _DEAD
    first_place: dict[int, tuple[int, int]] = {}
    for row in np.flatnonzero(~dead).tolist():
        first_place.setdefault(int(stated[row]), place[row])
    tells_traces_apart = len(set(_trace_keys(words))) > 1
    groups: dict[tuple[int, tuple[int, int], int], list[int]] = defaultdict(list)
    seen: dict[tuple[object, ...], int] = defaultdict(int)
    for row, key in enumerate(_trace_keys(words)):
        number, at = int(stated[row]), place[row]
        if dead[row] and at == (0, 0):
            # recorders leave the coordinates of dead traces empty
            at = first_place.get(number, at)
        repeat = 0
        if tells_traces_apart:
            repeat = seen[number, at, key]
            seen[number, at, key] += 1
        groups[number, at, repeat].append(row)
    shots: list[tuple[IntArray, int, int]] = []
    taken: set[int] = set()
    spare = max((number for number, _, _ in groups), default=0)
    for (number, _, _), rows in groups.items():
        record = number
        if record in taken or record < 1:
            spare = max(spare, 0) + 1
            record = spare
        taken.add(record)
        shots.append((np.array(rows), record, number))
    return shots


def _trace_keys(words: npt.NDArray[np.void]) -> list[tuple[int, int, int]]:
    """Tell the traces of a shot apart: their number in the record and where the geophone stands."""
    return list(
        zip(words["trace_in_record"].tolist(), words["receiver_x"].tolist(), words["receiver_y"].tolist(), strict=True)
    )


def _interval(
    shot: npt.NDArray[np.void],
    number: IntArray,
    longest: int,
    header: FileHeader,
    given_s: float | None,
    path: Path,
    record: int,
) -> tuple[float, list[Finding]]:
    """Sample interval of a shot, seconds: the one given, else that of its traces, else that of the file header.

    `number` are the traces' numbers in the file, `longest` the most samples that one has.
    """
    if given_s is not None:
        return given_s, []
    of_traces = sorted(set(shot["interval_us"][shot["interval_us"] > 0].tolist()))
    if len(of_traces) > 1:
        odd = int(np.flatnonzero((shot["interval_us"] > 0) & (shot["interval_us"] != of_traces[0]))[0])
        raise InputError(
            "the sample interval changes within the record",
            file=path,
            record=record,
            trace=int(number[odd]),
            expected=f"{of_traces[0]} us as in the others",
            found=f"{int(shot['interval_us'][odd])} us",
            remedy="Give the right one for all with --interval-us",
        )
    interval_us = float(of_traces[0]) if of_traces else header.interval_us
    if not interval_us > 0:
        raise InputError(
            "there is no sample interval in the file header or in any trace header",
            file=path,
            record=record,
            expected="more than 0 us in bytes 3217-3218 of the file or 117-118 of a trace header",
            found=f"{header.interval_us:g} and {int(shot['interval_us'][0])}",
            remedy="Give it with --interval-us",
        )
    findings = []
    if of_traces and header.interval_us != interval_us:
        text = (
            f"The file header says a sample interval of {header.interval_us:g} us, "
            f"the trace headers {interval_us:g} us; that of the traces is used."
        )
        severity = "look" if header.interval_us > 0 else "note"
        findings.append(Finding(severity, text, "Where it is wrong, give --interval-us.", str(path), record))
    length_s = interval_us * 1e-6 * longest
    if not _SHORTEST_S <= length_s <= _LONGEST_S:
        text = f"At {interval_us:g} us a sample the record is {length_s:g} s long, which no refraction record is."
        findings.append(Finding("look", text, "If the interval is wrong, give --interval-us.", str(path), record))
    if interval_us in _CUT_INTERVALS_US:
        whole = _CUT_INTERVALS_US[int(interval_us)]
        text = f"A sample interval of {interval_us:g} us is perhaps {whole:g} us with its fraction cut off."
        findings.append(Finding("look", text, f"If so, load with --interval-us {whole:g}.", str(path), record))
    return interval_us * 1e-6, findings


def _channels(shot: npt.NDArray[np.void], path: Path, record: int) -> tuple[IntArray, list[Finding]]:
    """Channel of each trace, from 1: its number in the record, or its place in the file where those repeat."""
    channel: IntArray = shot["trace_in_record"].astype(np.int64)
    if np.unique(channel).size == channel.size and np.all(channel >= 1):
        return channel, []
    text = "The trace numbers in bytes 13-16 repeat or are not set; channels are counted in the order of the file."
    return np.arange(1, channel.size + 1), [Finding("note", text, file=str(path), record=record)]


def _positions(shot: npt.NDArray[np.void], feet: bool) -> tuple[FloatArray, float, FloatArray]:
    """Source position, source depth and geophone positions, metres."""
    unit_m = METRES_PER_FOOT if feet else 1.0

    def column(name: str, scalar: str) -> FloatArray:
        return scaled(shot[name], shot[scalar]) * unit_m

    live = shot["trace_id"] != _DEAD
    first = int(np.flatnonzero(live)[0]) if live.any() else 0
    source_xyz = np.array(
        [
            column("source_x", "coordinate_scalar")[first],
            column("source_y", "coordinate_scalar")[first],
            column("source_z", "elevation_scalar")[first],
        ]
    )
    receiver_xyz = np.column_stack(
        [
            column("receiver_x", "coordinate_scalar"),
            column("receiver_y", "coordinate_scalar"),
            column("receiver_z", "elevation_scalar"),
        ]
    )
    return source_xyz, float(column("source_depth", "elevation_scalar")[first]), receiver_xyz


def _start(shot: npt.NDArray[np.void], header: FileHeader, path: Path, record: int) -> tuple[FloatArray, list[Finding]]:
    """Time of the first sample after the time break, seconds: the delay recording time of each trace."""
    scalar = shot["times_scalar"].astype(np.int64)
    legal = np.isin(scalar, _TIMES_SCALARS)
    findings = []
    if not legal.all() and np.any(shot["delay"] != 0):
        odd = int(scalar[~legal][0])
        text = f"The scalar of times in bytes 215-216 is {odd}, no power of ten; it is taken as 1."
        severity = "look" if header.revision[0] >= 1 else "note"
        findings.append(Finding(severity, text, "Look at where the record's time zero lies.", str(path), record))
    return scaled(shot["delay"], np.where(legal, scalar, 1)) * 1e-3, findings


def _file_findings(headers: list[ShotHeader], path: Path) -> list[Finding]:
    """Find what shows only in all the records of a file together."""
    findings = []
    if all(np.all(header.receiver_xyz[:, 2] == 0) and header.source_xyz[2] == 0 for header in headers):
        text = "All elevations are zero: the ground is taken as flat."
        findings.append(
            Finding("note", text, "Where it is not, load again with a table of positions (--geometry).", str(path))
        )
    sizes = [header.channel.size for header in headers]
    most = max(set(sizes), key=sizes.count)
    for header in headers:
        if header.channel.size < most:
            text = f"{header.channel.size} traces, though most records of the file have {most}."
            findings.append(Finding("look", text, "Look whether the file is complete.", str(path), header.record))
    renumbered = [header for header in headers if header.record != header.original_record]
    if renumbered:
        numbers = ", ".join(str(header.record) for header in renumbered)
        originals = sorted({header.original_record for header in renumbered})
        text = (
            f"Shots with a record number that was taken or not set ({', '.join(map(str, originals))}): "
            f"they are records {numbers} here."
        )
        findings.append(Finding("note", text, file=str(path)))
    return findings
