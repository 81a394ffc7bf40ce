"""The layout of a SEG-Y file: its byte order, what its file header says, and where each trace begins.

Sources: Barry, Cavers and Kneale (1975) for revision 0, SEG (2002) for revision 1; words that came with revision 2
are heeded only in files that say they are of revision 2. Bytes are counted from 1 in words to people, as in the
standard, and from 0 in the code.
"""

from __future__ import annotations

import math
import mmap
import struct
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from picker.errors import InputError
from picker.findings import Finding
from picker.samples import sample_bytes

TEXT_BYTES = 3200
FILE_HEADER_BYTES = 3600
TRACE_HEADER_BYTES = 240
KIND_OF_CODE = {
    1: "ibm4",
    2: "i4",
    3: "i2",
    5: "f4",
    6: "f8",
    8: "i1",
    9: "i8",
    10: "u4",
    11: "u2",
    12: "u8",
    16: "u1",
}
_CODES_NOT_READ = {4: "fixed point with gain", 7: "3-byte integers", 15: "3-byte unsigned integers"}
_BYTE_ORDER_WORD = {0x01020304: ">", 0x04030201: "<"}
_FEET = 2
_END_OF_TEXT = "((SEG: EndText))"

# First byte (from 0) and width of the trace header words that are used.
TRACE_WORDS: dict[str, tuple[int, str]] = {
    "field_record": (8, "i4"),
    "trace_in_record": (12, "i4"),
    "source_point": (16, "i4"),
    "trace_id": (28, "i2"),
    "offset": (36, "i4"),
    "receiver_z": (40, "i4"),
    "source_z": (44, "i4"),
    "source_depth": (48, "i4"),
    "elevation_scalar": (68, "i2"),
    "coordinate_scalar": (70, "i2"),
    "source_x": (72, "i4"),
    "source_y": (76, "i4"),
    "receiver_x": (80, "i4"),
    "receiver_y": (84, "i4"),
    "coordinate_units": (88, "i2"),
    "delay": (108, "i2"),
    "samples": (114, "u2"),
    "interval_us": (116, "i2"),
    "times_scalar": (214, "i2"),
}


@dataclass(frozen=True)
class FileHeader:
    """What the file header says.

    Parameters
    ----------
    order : str
        Byte order, `>` or `<`.
    kind : str
        Kind of the samples after the format code, as in `picker.samples`.
    revision : (int, int)
        Major and minor revision of the standard.
    interval_us : float
        Sample interval, microseconds, as it stands (it may be 0 or less).
    samples : int
        Samples a trace, as it stands.
    feet : bool
        True where lengths are in feet.
    first_trace, end : int
        Byte offset of the first trace and behind the last one, from 0.
    """

    order: str
    kind: str
    revision: tuple[int, int]
    interval_us: float
    samples: int
    feet: bool
    first_trace: int
    end: int

    @property
    def encoding(self) -> str:
        """Byte order and kind together."""
        return self.order + self.kind


def read_file_header(mapped: mmap.mmap, path: Path) -> FileHeader:
    """Read the file header, finding out the byte order.

    Parameters
    ----------
    mapped : mmap
        The file.
    path : Path
        Its name, for messages.

    Returns
    -------
    FileHeader

    Raises
    ------
    InputError
        If the file is too short, is no SEG-Y file, or has a sample format that is not read here.
    """
    if len(mapped) < FILE_HEADER_BYTES:
        what = "text" if _is_text(mapped[:]) else f"{len(mapped)} bytes"
        raise InputError(
            "is no SEG-Y file",
            file=path,
            expected=f"a file header of {FILE_HEADER_BYTES} bytes",
            found=what,
            remedy="Name files of shot records in SEG-Y (picks go in as .csv)",
        )
    binary = mapped[TEXT_BYTES:FILE_HEADER_BYTES]
    order, code = _order_and_code(binary, path)
    major, minor = binary[300], binary[301]
    if major == 0 and minor == 1 and order == "<":
        # some writers store revision 1.0 as one little-endian word
        major, minor = 1, 0

    def word(first_byte: int, width: str) -> float:
        return float(struct.unpack_from(order + width, binary, first_byte - TEXT_BYTES - 1)[0])

    interval_us, samples, first_trace, end = word(3217, "h"), word(3221, "H"), float(FILE_HEADER_BYTES), len(mapped)
    if major >= 1:
        first_trace += _extended_text_bytes(mapped, int(word(3505, "h")), path)
    if major >= 2:
        extended_us, stated_first = word(3273, "d"), word(3521, "Q")
        interval_us = extended_us if extended_us > 0 and math.isfinite(extended_us) else interval_us
        samples = word(3269, "i") if word(3269, "i") > 0 else samples
        first_trace = stated_first if stated_first >= FILE_HEADER_BYTES else first_trace
        end -= TEXT_BYTES * max(0, int(word(3529, "i")))
        if word(3507, "h") != 0:
            raise InputError(
                "has trace header extensions, which are not read",
                file=path,
                expected="trace headers of 240 bytes",
                found=f"up to {word(3507, 'h'):g} extensions of 240 bytes more",
                remedy="Write the file as revision 1",
            )
    header = FileHeader(
        order,
        KIND_OF_CODE[code],
        (major, minor),
        interval_us,
        int(samples),
        word(3255, "h") == _FEET,
        int(first_trace),
        end,
    )
    if header.end <= header.first_trace:
        raise InputError(
            "has no traces",
            file=path,
            expected=f"traces from byte {header.first_trace + 1}",
            found=f"the end of the file at byte {header.end}",
            remedy="Write the file again",
        )
    return header


def _is_text(start: bytes) -> bool:
    """Whether bytes are plain text: nothing but printable ASCII, line ends and UTF-8 letters."""
    return bool(start) and all(byte >= 32 or byte in b"\t\r\n\f" for byte in start) and 127 not in start


def _order_and_code(binary: bytes, path: Path) -> tuple[str, int]:
    """Byte order and format code: the code is valid in one order only."""
    for order in (">", "<"):
        (code,) = struct.unpack_from(f"{order}h", binary, 24)
        if code in KIND_OF_CODE:
            return order, code
        if code in _CODES_NOT_READ:
            raise InputError(
                f"has samples in a format that is not read, {_CODES_NOT_READ[code]}",
                file=path,
                expected=f"one of the format codes {', '.join(map(str, KIND_OF_CODE))} in bytes 3225-3226",
                found=f"{code}",
                remedy="Write the file with 4-byte floats (code 1 or 5)",
            )
    (found,) = struct.unpack_from(">h", binary, 24)
    (stated,) = struct.unpack_from(">I", binary, 96)
    if stated in _BYTE_ORDER_WORD:
        (found,) = struct.unpack_from(f"{_BYTE_ORDER_WORD[stated]}h", binary, 24)
    raise InputError(
        "is no SEG-Y file" if _is_text(binary) or found != 0 else "does not say how its samples are written",
        file=path,
        expected=f"one of the format codes {', '.join(map(str, KIND_OF_CODE))} in bytes 3225-3226",
        found="text" if _is_text(binary) else f"{found}",
        remedy="Name files of shot records in SEG-Y (picks go in as .csv)"
        if _is_text(binary)
        else "Write the file again with its format code set",
    )


def _extended_text_bytes(mapped: mmap.mmap, blocks: int, path: Path) -> int:
    """Bytes of the extended textual headers; -1 blocks means as many as come before an end stanza."""
    if blocks >= 0:
        return blocks * TEXT_BYTES
    marks = (_END_OF_TEXT.encode("cp037"), _END_OF_TEXT.encode("ascii"))
    position = FILE_HEADER_BYTES
    while position + TEXT_BYTES <= len(mapped):
        block = mapped[position : position + TEXT_BYTES]
        position += TEXT_BYTES
        if any(mark in block for mark in marks):
            return position - FILE_HEADER_BYTES
    raise InputError(
        "its extended textual headers never end",
        file=path,
        expected=f"a block with {_END_OF_TEXT}",
        found="none before the end of the file",
        remedy="Write the file with the number of those headers in bytes 3505-3506",
    )


def trace_positions(
    mapped: mmap.mmap, header: FileHeader, path: Path
) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64], list[Finding]]:
    """Where every trace begins and how many samples it has.

    Parameters
    ----------
    mapped : mmap
        The file.
    header : FileHeader
        Its file header.
    path : Path
        Its name, for messages.

    Returns
    -------
    position : int (traces,)
        Byte offset of each trace header, from 0.
    count : int (traces,)
        Samples of each trace; traces of unequal length are in order.
    findings : list of Finding
        Where the counts in file and trace headers disagree.

    Raises
    ------
    InputError
        If the file ends inside a trace.
    """
    size = sample_bytes(header.encoding)
    walked, counts, rest = _walk(mapped, header, size)
    if rest == 0:
        position, count = np.array(walked), np.array(counts)
        stated = sorted(set(counts))
        if stated == [header.samples]:
            return position, count, []
        text = f"The file header says {header.samples} samples a trace, the trace headers "
        text += f"{stated[0]}" if len(stated) == 1 else f"{stated[0]} to {stated[-1]}"
        return position, count, [Finding("note", f"{text}, which fits the file.", file=str(path))]
    stride = TRACE_HEADER_BYTES + header.samples * size
    if header.samples > 0 and (header.end - header.first_trace) % stride == 0:
        position = np.arange(header.first_trace, header.end, stride)
        own = np.array([_own_count(mapped, int(first), header) for first in position])
        count = np.where(own < header.samples, own, header.samples)
        wrong = int((own != header.samples).sum())
        text = (
            f"The sample counts in {wrong} of {own.size} trace headers do not fit the file; "
            f"the {header.samples} of the file header do."
        )
        return position, count, [Finding("look", text, "Look whether the traces are complete.", str(path))]
    stopped = walked[-1] if walked else header.first_trace
    need = TRACE_HEADER_BYTES + (counts[-1] if counts else 0) * size
    raise InputError(
        "the file is cut off",
        file=path,
        trace=len(walked),
        expected=f"{need} bytes from byte {stopped + 1}",
        found=f"{header.end - stopped}",
        remedy="Copy the file again from the recorder; "
        + (f"only the {len(walked) - 1} traces before are whole" if len(walked) > 1 else "no trace is whole"),
    )


def _own_count(mapped: mmap.mmap, position: int, header: FileHeader) -> int:
    """Count the samples of the trace at a byte after its own header, or after the file header where that has none."""
    first, width = TRACE_WORDS["samples"]
    (count,) = struct.unpack_from(header.order + width.replace("u2", "H"), mapped, position + first)
    # 65535 is the most that the trace header can hold; longer traces have their count in the file header only
    return int(count) if count and header.samples <= 0xFFFF else header.samples


def _walk(mapped: mmap.mmap, header: FileHeader, size: int) -> tuple[list[int], list[int], int]:
    """Trace by trace by their own counts: positions, counts and, of a trace that is not whole, the bytes there are.

    That trace is the last of the lists. 0 bytes where the last trace ends with the file.
    """
    positions: list[int] = []
    counts: list[int] = []
    position = header.first_trace
    while position < header.end:
        positions.append(position)
        if position + TRACE_HEADER_BYTES > header.end:
            counts.append(header.samples)
            return positions, counts, header.end - position
        counts.append(_own_count(mapped, position, header))
        after = position + TRACE_HEADER_BYTES + counts[-1] * size
        if after > header.end:
            return positions, counts, header.end - position
        position = after
    return positions, counts, 0


def read_trace_words(mapped: mmap.mmap, header: FileHeader, position: npt.NDArray[np.int64]) -> npt.NDArray[np.void]:
    """Trace headers as a structured array (traces,) with the fields of TRACE_WORDS."""
    words = np.dtype(
        {
            "names": list(TRACE_WORDS),
            "formats": [header.order + width for _, width in TRACE_WORDS.values()],
            "offsets": [first for first, _ in TRACE_WORDS.values()],
            "itemsize": TRACE_HEADER_BYTES,
        }
    )
    together = b"".join(mapped[first : first + TRACE_HEADER_BYTES] for first in position.tolist())
    return np.frombuffer(together, dtype=words)
