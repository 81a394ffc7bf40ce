"""Samples of traces out of a file: from the bytes of any encoding that SEG-Y knows to float32.

An encoding is a byte order (`>` or `<`) and a kind: `ibm4` for System/360 hexadecimal floats, otherwise the
numpy name of the number (`f4`, `f8`, `i1`, `i2`, `i4`, `i8`, `u1`, `u2`, `u4`, `u8`).
"""

from __future__ import annotations

import functools
import mmap
from pathlib import Path

import numpy as np
import numpy.typing as npt

KINDS = ("ibm4", "f4", "f8", "i1", "i2", "i4", "i8", "u1", "u2", "u4", "u8")
# Words that a sign and a zero fraction leave are zero of either sign; the sign bit carries no information there.
_SIGN_OFF = 0x7FFFFFFF
_IBM_FIRST_DIGIT = 0x00F00000
# An IBM writer normalises: the first hexadecimal digit of the fraction is not zero. In IEEE floats these four bits
# are the last of the exponent and the first three of the fraction, all zero in about one word in twelve
# (0.5 log2(9/8) for amplitudes spread over a few octaves), so some hundred different words tell the two apart.
_DIFFERENT_WORDS_NEEDED = 500
_UNNORMALISED_SHARE_OF_IEEE = 0.02
# Whole numbers written with one fixed exponent are unnormalised IBM floats; IEEE floats of a seismic trace spread over
# more octaves than two first bytes (four octaves) hold.
_FIRST_BYTES_NEEDED = 3


def sample_bytes(encoding: str) -> int:
    """Bytes one sample takes in the encoding."""
    return int(encoding[-1])


@functools.cache
def _ibm_scale() -> npt.NDArray[np.float64]:
    """Value of fraction bit 0 for each first byte of an IBM word (sign and exponent), float64 (256,)."""
    byte = np.arange(256)
    sign = np.where(byte >= 128, -1.0, 1.0)
    return np.asarray(sign * 16.0 ** ((byte & 127) - 64.0) / 2.0**24)


def decode(raw: bytes, encoding: str) -> npt.NDArray[np.generic]:
    """Numbers from the bytes of a trace.

    Parameters
    ----------
    raw : bytes
        A whole number of samples.
    encoding : str
        Byte order and kind, as this module describes them.

    Returns
    -------
    array (samples,)
        The values as encoded, in the number type they are encoded in; IBM: (-1)^s 16^(e-64) f / 2^24, exact in
        float64, unnormalised fractions too.

    Raises
    ------
    ValueError
        If the encoding is unknown.
    """
    order, kind = encoding[:1], encoding[1:]
    if order not in (">", "<") or kind not in KINDS:
        raise ValueError(f"encoding: expected > or < and one of {KINDS}, found {encoding!r}")
    if kind == "ibm4":
        words = np.frombuffer(raw, dtype=f"{order}u4").astype(np.uint32)
        return np.asarray(_ibm_scale()[words >> 24] * (words & 0x00FFFFFF))
    return np.frombuffer(raw, dtype=f"{order}{kind}")


def read_samples(
    path: Path, encoding: str, sample_byte: npt.NDArray[np.int64], valid: npt.NDArray[np.int64]
) -> npt.NDArray[np.float32]:
    """Read the samples of some traces of a file, which is mapped and not read as a whole.

    Parameters
    ----------
    path : Path
        The file.
    encoding : str
        Byte order and kind of its samples.
    sample_byte : int (traces,)
        Byte offset, from 0, of each trace's first sample.
    valid : int (traces,)
        How many samples each trace has.

    Returns
    -------
    float32 (traces, samples)
        Zero behind the end of a trace that is shorter than the longest. A magnitude that float32 cannot hold
        becomes the largest that it can; not-a-number stays.
    """
    samples = np.zeros((valid.size, int(valid.max(initial=0))), dtype=np.float32)
    largest = float(np.finfo(np.float32).max)
    size = sample_bytes(encoding)
    with path.open("rb") as file, mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ) as mapped:
        for row, (first, count) in enumerate(zip(sample_byte.tolist(), valid.tolist(), strict=True)):
            values = decode(mapped[first : first + count * size], encoding)
            if values.dtype.itemsize == 8:
                with np.errstate(invalid="ignore"):  # signalling not-a-numbers stay not-a-numbers
                    values = np.clip(values, -largest, largest)
            samples[row, :count] = values
    return samples


def looks_like(words: npt.NDArray[np.uint32]) -> str | None:
    """Which of the two four-byte floats some sample words are.

    Parameters
    ----------
    words : uint32 (words,)
        Sample words in the machine's own byte order.

    Returns
    -------
    str or None
        `ibm4`, `f4`, or None where the words do not decide (too few different ones, or in between).
    """
    different = np.unique(words & _SIGN_OFF)
    different = different[different != 0]
    if different.size < _DIFFERENT_WORDS_NEEDED:
        return None
    unnormalised = np.mean((different & _IBM_FIRST_DIGIT) == 0)
    if unnormalised == 0:
        return "ibm4"
    finite = np.all(((different >> 23) & 0xFF) < 255)
    spread = np.unique(different >> 24).size >= _FIRST_BYTES_NEEDED
    if unnormalised > _UNNORMALISED_SHARE_OF_IEEE and finite and spread:
        return "f4"
    return None
