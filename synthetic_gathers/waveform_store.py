"""Waveforms in little room: sixteen bits a sample, fine where the trace is weak, in a compressed numpy file.

The samples of a hammer gather span four decades. A companding law (inverse hyperbolic sine) keeps a relative error
of about 3e-4 where they are large and an absolute one of 3e-8 of the largest where they are small.
"""

from __future__ import annotations

import os
from typing import Any

import numpy as np
import numpy.typing as npt

LARGEST_COUNT = 32767
LINEAR_BELOW = 1e-4


def pack(waveforms: npt.NDArray[np.floating]) -> tuple[npt.NDArray[np.int16], npt.NDArray[np.float32]]:
    """Compress waveforms to counts.

    Parameters
    ----------
    waveforms : float (..., samples)

    Returns
    -------
    counts : int16 (..., samples)
    largest : float32 (...)
        Largest amplitude of each trace; 0 for a trace of zeros.
    """
    values = np.asarray(waveforms, dtype=np.float64)
    largest = np.max(np.abs(values), axis=-1).astype(np.float32)
    scale = np.where(largest > 0, largest, 1.0).astype(np.float64)[..., None] * LINEAR_BELOW
    counts = LARGEST_COUNT * np.arcsinh(values / scale) / np.arcsinh(1.0 / LINEAR_BELOW)
    return np.clip(np.rint(counts), -LARGEST_COUNT, LARGEST_COUNT).astype(np.int16), largest


def unpack(counts: npt.NDArray[np.int16], largest: npt.NDArray[np.float32]) -> npt.NDArray[np.float32]:
    """Waveforms from counts: the inverse of `pack`, float32 (..., samples)."""
    scale = largest.astype(np.float64)[..., None] * LINEAR_BELOW
    values = scale * np.sinh(counts.astype(np.float64) / LARGEST_COUNT * np.arcsinh(1.0 / LINEAR_BELOW))
    return np.asarray(values.astype(np.float32))


def save(path: str | os.PathLike[str], waveforms: npt.NDArray[np.floating], **arrays: npt.ArrayLike) -> None:
    """Write waveforms and further arrays; the same input gives the same bytes.

    Differences in time, bytes of equal weight together, are what a general compressor can make small.
    """
    counts, largest = pack(waveforms)
    steps = np.diff(counts, axis=-1, prepend=np.int16(0))
    halves = np.ascontiguousarray(steps.astype("<i2")).view(np.uint8).reshape(*steps.shape, 2)
    everything: dict[str, Any] = {"low": halves[..., 0], "high": halves[..., 1], "largest": largest, **arrays}
    with open(path, "wb") as file:
        np.savez_compressed(file, **everything)


def load(path: str | os.PathLike[str]) -> tuple[npt.NDArray[np.float32], dict[str, npt.NDArray[np.generic]]]:
    """Read what `save` wrote.

    Returns
    -------
    waveforms : float32 (..., samples)
    arrays : dict
        The further arrays by name.
    """
    with np.load(path, allow_pickle=False) as stored:
        arrays = {name: stored[name] for name in stored.files}
    halves = np.stack([arrays.pop("low"), arrays.pop("high")], axis=-1)
    steps = np.ascontiguousarray(halves).view("<i2")[..., 0]
    counts = np.cumsum(steps, axis=-1, dtype=np.int16)
    return unpack(counts, arrays.pop("largest")), arrays
