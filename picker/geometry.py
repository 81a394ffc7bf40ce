"""Where shots and geophones stand: header integers to metres, and what contradicts itself in a record's geometry."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from picker.findings import Finding

FloatArray = npt.NDArray[np.float64]

# Offset words are whole units of length in most recorders, so they may differ from the coordinates by rounding.
_OFFSET_ROUNDING_M = 1.0
_OFFSET_SHARE = 0.02
_SAME_PLACE_M = 0.01


def scaled(raw: npt.ArrayLike, scalar: npt.ArrayLike) -> FloatArray:
    """Header integers with the scalar word that belongs to them applied.

    Parameters
    ----------
    raw : int (traces,)
        Words as they stand in the header.
    scalar : int (traces,)
        Scalar words: positive multiplies, negative divides, zero counts as one.

    Returns
    -------
    float (traces,)
        In the unit of the header (SEG-Y revision 1, trace header bytes 69-72; SEG, 2002).
    """
    values = np.asarray(raw, dtype=np.float64)
    by = np.asarray(scalar, dtype=np.float64)
    divisor = np.where(by < 0, -by, 1.0)
    return np.asarray(values * np.where(by > 0, by, 1.0) / divisor)


def geometry_findings(
    source_xyz: FloatArray,
    receiver_xyz: FloatArray,
    channel: npt.NDArray[np.int64],
    live: npt.NDArray[np.bool_],
    offset_word_m: FloatArray,
    offset_scaled_m: FloatArray,
    file: str,
    record: int,
) -> list[Finding]:
    """Find what contradicts itself or is missing in the geometry of one record.

    Parameters
    ----------
    source_xyz : float (3,)
        Source position, metres.
    receiver_xyz : float (traces, 3)
        Geophone positions, metres.
    channel : int (traces,)
        Recorder channels.
    live : bool (traces,)
        False where the trace is dead; those are not looked at.
    offset_word_m, offset_scaled_m : float (traces,)
        Offset words in metres, as they stand and with the coordinate scalar applied (recorders do either);
        0 where not set.
    file, record
        Put into the findings.

    Returns
    -------
    list of Finding
        Zero coordinates, offsets that contradict the coordinates, several geophones at one place.
    """
    plan = receiver_xyz[live, :2]
    if not plan.size:
        return []
    if np.all(plan == 0) and np.all(source_xyz[:2] == 0):
        offsets = np.abs(offset_word_m[live])
        has_offsets = bool(np.any(offsets != 0))
        text = "all coordinates are zero" + (
            f", though offsets from {offsets.min():g} to {offsets.max():g} m are given." if has_offsets else "."
        )
        return [Finding("look", text.capitalize(), "Load again with a table of positions (--geometry).", file, record)]
    return _offset_findings(
        np.hypot(plan[:, 0] - source_xyz[0], plan[:, 1] - source_xyz[1]),
        np.abs(offset_word_m[live]),
        np.abs(offset_scaled_m[live]),
        channel[live],
        file,
        record,
    ) + _same_place_findings(receiver_xyz[live], channel[live], file, record)


def _offset_findings(
    distance_m: FloatArray,
    word_m: FloatArray,
    scaled_m: FloatArray,
    channel: npt.NDArray[np.int64],
    file: str,
    record: int,
) -> list[Finding]:
    """One finding where offset words are set and neither reading of them fits the coordinates."""
    if not np.any(word_m != 0):
        return []
    tolerance = _OFFSET_ROUNDING_M + _OFFSET_SHARE * distance_m
    wrong = np.minimum(np.abs(word_m - distance_m), np.abs(scaled_m - distance_m)) > tolerance
    if not wrong.any():
        return []
    worst = int(np.argmax(np.where(wrong, np.abs(word_m - distance_m), 0.0)))
    return [
        Finding(
            "look",
            f"The offset words of {int(wrong.sum())} of {wrong.size} traces contradict the coordinates: "
            f"{word_m[worst]:g} m against {distance_m[worst]:g} m on channel {int(channel[worst])}.",
            "The coordinates are used; if those are wrong, load again with a table of positions (--geometry).",
            file,
            record,
        )
    ]


def _same_place_findings(
    receiver_xyz: FloatArray, channel: npt.NDArray[np.int64], file: str, record: int
) -> list[Finding]:
    """One finding where geophones of a record share a place."""
    order = np.lexsort(receiver_xyz.T[::-1])
    close = np.all(np.abs(np.diff(receiver_xyz[order], axis=0)) < _SAME_PLACE_M, axis=1)
    if not close.any():
        return []
    first = int(np.flatnonzero(close)[0])
    pair = sorted((int(channel[order[first]]), int(channel[order[first + 1]])))
    x_m = receiver_xyz[order[first], 0]
    return [
        Finding(
            "look",
            f"Geophones that stand where another one does: {int(close.sum())}, first channels {pair[0]} and {pair[1]} "
            f"at x = {x_m:g} m.",
            "Load again with a table of positions (--geometry), unless these are several components.",
            file,
            record,
        )
    ]
