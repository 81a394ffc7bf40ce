"""Where everything lies in a SEG-2 file: descriptor blocks, their strings, and the bytes of the samples.

Source: Pullan 1990, Recommended standard for seismic (/radar) data files in the personal computer environment,
Geophysics 55, 1260-1271.
"""

from __future__ import annotations

import mmap
import struct
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from picker.errors import InputError

FILE_MARK, TRACE_MARK = 0x3A55, 0x4422
BLOCK_BYTES = 32  # of both descriptor blocks before their pointers or strings
# Trace data format codes: 1 and 2 are integers, 3 is 20 bits with a common exponent, 4 and 5 are IEEE floats.
KINDS = {1: "i2", 2: "i4", 3: "20 bit", 4: "f4", 5: "f8"}
_PACKED_WORDS, _PACKED_SAMPLES = 5, 4
_MOST_STRING_BYTES = 65535


@dataclass(frozen=True)
class TraceBlock:
    """One trace of a file.

    Parameters
    ----------
    number : int
        Its place in the file, from 1.
    first_byte, sample_byte : int
        Byte offsets, from 0, of its descriptor block and of its first sample.
    samples : int
        How many it has.
    code : int
        Data format code, a key of KINDS.
    strings : dict of str to str
        Its keywords, in capitals, with their values.
    """

    number: int
    first_byte: int
    sample_byte: int
    samples: int
    code: int
    strings: dict[str, str]

    @property
    def data_bytes(self) -> int:
        """Bytes that its samples take."""
        if self.code == 3:
            return 2 * _PACKED_WORDS * -(-self.samples // _PACKED_SAMPLES)
        return self.samples * int(KINDS[self.code][1])


@dataclass(frozen=True)
class Layout:
    """A file: byte order (`<` or `>`), keywords of its file descriptor block, its traces, and what was odd in it."""

    order: str
    strings: dict[str, str]
    traces: tuple[TraceBlock, ...]
    oddities: tuple[str, ...]


def read_layout(mapped: mmap.mmap, path: Path) -> Layout:
    """Read the descriptor blocks of a SEG-2 file.

    Parameters
    ----------
    mapped : mmap
        The file.
    path : Path
        Its name, for messages.

    Returns
    -------
    Layout

    Raises
    ------
    InputError
        If the marks, counts or pointers are not those of the standard, or the file ends before they do.
    """
    if len(mapped) < BLOCK_BYTES:
        raise _cut_off(path, f"{BLOCK_BYTES} bytes of the file descriptor block", len(mapped))
    order = "<" if mapped[:2] == struct.pack("<H", FILE_MARK) else ">"
    pointer_bytes, count = struct.unpack(f"{order}HH", mapped[4:8])
    if count == 0 or pointer_bytes < 4 * count:
        raise InputError(
            "the file descriptor block gives no room for its traces",
            file=path,
            expected="at least one trace, and four bytes of pointer for each",
            found=f"{count} traces and {pointer_bytes} bytes",
            remedy="Copy the file again from the recorder",
        )
    strings_at = BLOCK_BYTES + pointer_bytes
    if strings_at > len(mapped):
        raise _cut_off(path, f"{strings_at} bytes of trace pointers", len(mapped))
    pointers = struct.unpack(f"{order}{count}I", mapped[BLOCK_BYTES : BLOCK_BYTES + 4 * count])
    oddities: list[str] = []
    strings, whole = _strings(mapped, order, strings_at, min(pointers))
    if not whole:
        oddities.append("The strings of the file descriptor block break off.")
    traces = [_trace(mapped, order, path, number, first, oddities) for number, first in enumerate(pointers, start=1)]
    return Layout(order, strings, tuple(traces), tuple(oddities))


def _trace(mapped: mmap.mmap, order: str, path: Path, number: int, first: int, oddities: list[str]) -> TraceBlock:
    """Descriptor block of one trace."""
    if first + BLOCK_BYTES > len(mapped):
        raise _cut_off(path, f"the descriptor block of the trace at byte {first}", len(mapped), number)
    mark, block_bytes, _, samples = struct.unpack(f"{order}HHII", mapped[first : first + 12])
    if mark != TRACE_MARK:
        raise InputError(
            "the trace pointer does not lead to a trace",
            file=path,
            trace=number,
            expected=f"the mark {TRACE_MARK:04X} at byte {first}",
            found=f"{mark:04X}",
            remedy="Copy the file again from the recorder",
        )
    code = mapped[first + 12]
    if code not in KINDS:
        raise InputError(
            "has an unknown format of samples",
            file=path,
            trace=number,
            expected=f"a data format code from {min(KINDS)} to {max(KINDS)}",
            found=str(code),
            remedy="Write the file again, as 32-bit floats",
        )
    strings, whole = _strings(mapped, order, first + BLOCK_BYTES, first + block_bytes)
    if not whole:
        oddities.append(f"The strings of trace {number} break off.")
    block = TraceBlock(number, first, first + block_bytes, samples, code, strings)
    if block.sample_byte + block.data_bytes > len(mapped):
        raise _cut_off(
            path, f"{block.data_bytes} bytes of samples from byte {block.sample_byte + 1}", len(mapped), number
        )
    return block


def _strings(mapped: mmap.mmap, order: str, first: int, end: int) -> tuple[dict[str, str], bool]:
    """Keywords and values of a list of strings, and whether it ends as it should.

    Each string follows the two bytes that say how far it is to the next; zero ends the list. The value is what stands
    behind the first white space. A keyword that comes again (NOTE) keeps all its values, line by line.
    """
    found: dict[str, str] = {}
    at, end = first, min(end, len(mapped), first + _MOST_STRING_BYTES)
    while at + 2 <= end:
        step = struct.unpack(f"{order}H", mapped[at : at + 2])[0]
        if step == 0:
            return found, True
        if step < 3 or at + step > end:
            return found, False
        text = mapped[at + 2 : at + step].decode("latin-1").split("\0", 1)[0].strip()
        keyword, _, value = text.partition(" ") if " " in text else text.partition("\t")
        keyword, value = keyword.strip().upper(), value.strip()
        if keyword:
            found[keyword] = f"{found[keyword]}\n{value}" if keyword in found else value
        at += step
    return found, at >= end


def unpack_20_bits(raw: bytes, order: str, samples: int) -> npt.NDArray[np.float64]:
    """Samples of data format code 3.

    Parameters
    ----------
    raw : bytes
        Whole groups of five 16-bit words: four exponents of four bits, the lowest first, then four mantissas in ones'
        complement.
    order : str
        `<` or `>`.
    samples : int
        How many there are; the last group may be longer.

    Returns
    -------
    float64 (samples,)
        Mantissa times two to the exponent.
    """
    words = np.frombuffer(raw, dtype=f"{order}u2").reshape(-1, _PACKED_WORDS).astype(np.int64)
    exponent = (words[:, :1] >> np.array([0, 4, 8, 12])) & 15
    mantissa = words[:, 1:]
    # ones' complement: the negative of m is every bit of m turned over
    mantissa = np.where(mantissa >= 1 << 15, mantissa - 0xFFFF, mantissa)
    return np.asarray((mantissa * 2.0**exponent).reshape(-1)[:samples])


def _cut_off(path: Path, expected: str, size: int, trace: int | None = None) -> InputError:
    return InputError(
        "the file is cut off",
        file=path,
        trace=trace,
        expected=expected,
        found=f"a file of {size} bytes",
        remedy="Copy the file again from the recorder",
    )
