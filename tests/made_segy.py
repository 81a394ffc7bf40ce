"""SEG-Y files written byte by byte at the positions that the standard gives, for tests of the reader.

Positions and widths are those of SEG-Y revision 1 (SEG, 2002), counted from 1 as there; the reader has a table of its
own, so a slip in either shows.
"""

from __future__ import annotations

import struct

import numpy as np

TRACE_POSITION = {
    "field_record": (9, "i"),
    "trace_in_record": (13, "i"),
    "source_point": (17, "i"),
    "trace_id": (29, "h"),
    "offset": (37, "i"),
    "receiver_elevation": (41, "i"),
    "source_elevation": (45, "i"),
    "source_depth": (49, "i"),
    "elevation_scalar": (69, "h"),
    "coordinate_scalar": (71, "h"),
    "source_x": (73, "i"),
    "source_y": (77, "i"),
    "group_x": (81, "i"),
    "group_y": (85, "i"),
    "coordinate_units": (89, "h"),
    "delay": (109, "h"),
    "sample_count": (115, "H"),
    "sample_interval_us": (117, "h"),
    "times_scalar": (215, "h"),
}
BINARY_POSITION = {
    "sample_interval_us": (3217, "h"),
    "sample_count": (3221, "H"),
    "format_code": (3225, "h"),
    "measurement_system": (3255, "h"),
    "revision": (3501, "h"),
    "fixed_length": (3503, "h"),
    "extended_text": (3505, "h"),
}
NUMPY_OF_CODE = {1: "u4", 2: "i4", 3: "i2", 5: "f4", 6: "f8", 8: "i1", 9: "i8", 10: "u4", 11: "u2", 12: "u8", 16: "u1"}


def file_header(order: str = ">", text: bytes = b"", **words: int) -> bytes:
    """3200 bytes of text and 400 of binary header; further textual headers where `extended_text` is positive."""
    header = bytearray(text[:3200].ljust(3200, b"\x40")) + bytearray(400)
    for name, value in words.items():
        first, width = BINARY_POSITION[name]
        struct.pack_into(order + width, header, first - 1, value)
    return bytes(header) + b"\x40" * (3200 * max(0, words.get("extended_text", 0)))


def trace(samples: np.ndarray, code: int = 5, order: str = ">", **words: int) -> bytes:
    """One trace: header words by name and samples, IBM floats as their words (uint32)."""
    header = bytearray(240)
    words.setdefault("sample_count", len(samples))
    for name, value in words.items():
        first, width = TRACE_POSITION[name]
        struct.pack_into(order + width, header, first - 1, value)
    return bytes(header) + np.asarray(samples).astype(order + NUMPY_OF_CODE[code]).tobytes()


def spread(
    record: int = 1,
    source_x: int = -5,
    geophones: int = 4,
    samples: int = 50,
    code: int = 5,
    order: str = ">",
    seed: int = 1,
    **words: int,
) -> list[bytes]:
    """Traces of one shot on geophones 2 units apart from 0, with noise as samples."""
    values = np.random.default_rng([seed, record]).normal(size=(geophones, samples))
    values *= np.exp(np.linspace(0, 6, samples))
    if code not in (5, 6):
        values = np.round(values * 50).clip(-100, 100)
    traces = []
    for number in range(geophones):
        common = {
            "field_record": record,
            "trace_in_record": number + 1,
            "trace_id": 1,
            "source_x": source_x,
            "group_x": 2 * number,
            "offset": abs(2 * number - source_x),
            "coordinate_units": 1,
            "sample_interval_us": 250,
            "group_y": 0,
        }
        traces.append(trace(values[number], code, order, **(common | words)))
    return traces


def segy(traces: list[bytes], order: str = ">", code: int = 5, samples: int = 50, **words: int) -> bytes:
    """A whole file of revision 1 in metres with an interval of 250 us, unless words say otherwise."""
    common = {
        "sample_interval_us": 250,
        "sample_count": samples,
        "format_code": code,
        "measurement_system": 1,
        "revision": 256,
    }
    return file_header(order, **(common | words)) + b"".join(traces)
