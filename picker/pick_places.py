"""Which shots and geophones of a survey imported picks belong to, where only their places say so."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import numpy.typing as npt

from picker.errors import InputError
from picker.picks import PickTable
from picker.records import ShotHeader

SAME_PLACE_M = 0.05  # coordinates come rounded to centimetres
PICKS_ONLY = "picks only"

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


def match_places(table: PickTable, known: Sequence[ShotHeader], *, has_record: bool, has_channel: bool) -> PickTable:
    """Number picks after the records of a survey that stand at the same places.

    Parameters
    ----------
    table : PickTable
        Picks whose record or channel numbers may be made up.
    known : sequence of ShotHeader
        Records of the survey.
    has_record, has_channel : bool
        True where the numbers are the file's own; those are left as they are.

    Returns
    -------
    PickTable
        Records that no known shot stands for get numbers above all known ones where they were made up.

    Raises
    ------
    InputError
        If several records of the survey were shot at a place.
    """
    record, channel = table.record.copy(), table.channel.copy()
    spare = max([header.record for header in known], default=0)
    by_number = {header.record: header for header in known}
    for number in np.unique(table.record).tolist():
        rows = table.record == number
        source_xyz = table.source_xyz[rows][0]
        if has_record:
            header = by_number.get(number)
        else:
            header = _shot_at(source_xyz, known)
            if header is not None:
                record[rows] = header.record
            elif known:
                spare += 1
                record[rows] = spare
        if header is not None and not has_channel:
            channel[rows] = _channels_at(table.receiver_xyz[rows], header)
    return dataclasses.replace(table, record=record, channel=channel)


def _shot_at(source_xyz: FloatArray, known: Sequence[ShotHeader]) -> ShotHeader | None:
    """Find the record that was shot at a place."""
    near = [h for h in known if np.all(np.abs(h.source_xyz[:2] - source_xyz[:2]) <= SAME_PLACE_M)]
    if len(near) > 1:
        raise InputError(
            f"several records of the survey were shot at ({source_xyz[0]:g}, {source_xyz[1]:g}) m: "
            + ", ".join(str(header.record) for header in near),
            expected="a column record in the picks",
            found="none",
            remedy="Add the column, so that every pick says which record it belongs to",
        )
    return near[0] if near else None


def _channels_at(receiver_xyz: FloatArray, header: ShotHeader) -> IntArray:
    """Channels of a record whose geophones stand at places; new ones above its own where none does."""
    spare = int(header.channel.max(initial=0))
    channels = []
    for place in receiver_xyz:
        near = np.flatnonzero(np.all(np.abs(header.receiver_xyz[:, :2] - place[:2]) <= SAME_PLACE_M, axis=1))
        if near.size:
            channels.append(int(header.channel[near[0]]))
        else:
            spare += 1
            channels.append(spare)
    return np.array(channels)


def records_of_picks(table: PickTable) -> list[ShotHeader]:
    """Records without samples that picks stand for, one for each record number, traces sorted by channel."""
    headers = []
    for number in np.unique(table.record).tolist():
        rows = np.flatnonzero(table.record == number)
        rows = rows[np.argsort(table.channel[rows])]
        headers.append(
            ShotHeader(
                record=number,
                original_record=number,
                interval_s=float("nan"),
                start_s=np.zeros(rows.size),
                channel=table.channel[rows],
                source_xyz=table.source_xyz[rows[0]],
                receiver_xyz=table.receiver_xyz[rows],
                source_depth_m=0.0,
                valid=np.zeros(rows.size, np.int64),
                state=np.full(rows.size, "live"),
                polarity=np.ones(rows.size, np.int64),
                file=Path(),
                format=PICKS_ONLY,
                encoding="",
                first_byte=0,
                sample_byte=np.full(rows.size, -1, np.int64),
            )
        )
    return headers
