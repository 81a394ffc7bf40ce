"""PickTable: the picks of a survey with their errors, the hand-off from picking to interpretation.

Seconds and metres inside; its CSV form, in milliseconds, is the contract with everybody else's picks.
"""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
StrArray = npt.NDArray[np.str_]

PICK_STATES = ("kept", "dropped", "none")
PICK_ORIGINS = ("auto", "manual")


@dataclass(frozen=True, eq=False)
class PickTable:
    """One row per trace that was looked at; all arrays have shape (rows,) unless said otherwise.

    Parameters
    ----------
    record, channel : int
        The trace; the pair is unique.
    source_xyz, receiver_xyz : float (rows, 3)
        Positions, metres; z is elevation, up.
    offset_m : float
        Horizontal distance shot to geophone, metres.
    time_s : float
        Median of the onset on the record's own clock, seconds; NaN where `state` is `none`.
    sigma_s : float
        Standard error of reading the onset, sampling and remaining late bias included.
    early_s, late_s : float
        5 % and 95 % points of the onset, given that the pick is the first arrival.
    reading_sigma_s : float
        Standard error from the trace's own data alone.
    bias_removed_s : float
        Late bias that was taken off `time_s`.
    time_break_shift_s, time_break_sigma_s : float
        Estimated shift of the record's time break and its standard error, the same for all picks of a
        record; true arrival time = time_s - time_break_shift_s. The shift is not applied to `time_s`.
    geophone_sigma_s : float
        Standard error shared by all picks at one receiver position.
    confidence : float
        Probability that the onset is the first arrival and not something else.
    state : str
        `kept`, `dropped` or `none` (looked at, no onset to be had).
    origin : str
        `auto` or `manual`.
    note : str
        Why a person changed the pick, or what the program has to say about it.

    Raises
    ------
    ValueError
        If shapes differ, `record, channel` repeats, a state or origin is unknown, or a kept pick has no
        finite time or no positive sigma.
    """

    record: IntArray
    channel: IntArray
    source_xyz: FloatArray
    receiver_xyz: FloatArray
    offset_m: FloatArray
    time_s: FloatArray
    sigma_s: FloatArray
    early_s: FloatArray
    late_s: FloatArray
    reading_sigma_s: FloatArray
    bias_removed_s: FloatArray
    time_break_shift_s: FloatArray
    time_break_sigma_s: FloatArray
    geophone_sigma_s: FloatArray
    confidence: FloatArray
    state: StrArray
    origin: StrArray
    note: StrArray

    def __post_init__(self) -> None:
        rows = np.asarray(self.record).shape[0]
        for column in dataclasses.fields(self):
            value = getattr(self, column.name)
            kind: type = np.float64
            if column.name in ("record", "channel"):
                kind = np.int64
            elif column.name in ("state", "origin", "note"):
                kind = np.str_
            array: npt.NDArray[np.generic] = np.array(value, dtype=kind)
            shape = (rows, 3) if column.name.endswith("_xyz") else (rows,)
            if array.shape != shape:
                raise ValueError(f"{column.name}: expected shape {shape}, found {array.shape}")
            array.flags.writeable = False
            object.__setattr__(self, column.name, array)
        if len(set(zip(self.record.tolist(), self.channel.tolist(), strict=True))) != rows:
            raise ValueError("record, channel: expected every pair once, found repeats")
        for name, allowed in (("state", PICK_STATES), ("origin", PICK_ORIGINS)):
            unknown = sorted(set(getattr(self, name).tolist()) - set(allowed))
            if unknown:
                raise ValueError(f"{name}: expected one of {allowed}, found {unknown}")
        kept = self.kept
        if not np.all(np.isfinite(self.time_s[kept])):
            raise ValueError("time_s: expected a finite time for every kept pick")
        if not np.all(self.sigma_s[kept] > 0):
            raise ValueError("sigma_s: expected more than 0 s for every kept pick")

    def __len__(self) -> int:
        return int(self.record.shape[0])

    @property
    def kept(self) -> npt.NDArray[np.bool_]:
        """True where the pick is to be used; shape (rows,)."""
        return np.asarray(self.state == "kept")
