"""SEG-2 files written by hand from the standard (Pullan 1990, Geophysics 55, 1260-1271)."""

import struct

import numpy as np

FORMATS = {1: "i2", 2: "i4", 4: "f4", 5: "f8"}


def strings(entries, order, end=b"\0"):
    """A list of strings: each behind the two bytes that lead to the next, zero at the end."""
    text = b""
    for entry in entries:
        content = entry.encode("latin-1") + end
        text += struct.pack(f"{order}H", len(content) + 2) + content
    return text + struct.pack(f"{order}H", 0)


def packed_20_bits(values, order):
    """Data format code 3 of whole numbers: four to a group, exponents first, mantissas in ones' complement."""
    values = list(values) + [0] * (-len(values) % 4)
    out = b""
    for group in range(0, len(values), 4):
        exponents, mantissas = 0, []
        for place, value in enumerate(values[group : group + 4]):
            exponent, magnitude = 0, abs(int(value))
            while magnitude >= 1 << 15:
                magnitude, exponent = magnitude >> 1, exponent + 1
            exponents |= exponent << (4 * place)
            mantissas.append(magnitude if value >= 0 else 0xFFFF - magnitude)
        out += struct.pack(f"{order}5H", exponents, *mantissas)
    return out


def encoded(samples, code, order):
    if code == 3:
        return packed_20_bits(samples, order)
    return np.asarray(samples).astype(f"{order}{FORMATS[code]}").tobytes()


def trace_entries(channel=1, receiver="0.00", source="-2.00", interval="0.00025", delay="-0.010", **others):
    entries = {
        "CHANNEL_NUMBER": channel,
        "DELAY": delay,
        "RECEIVER_LOCATION": receiver,
        "SAMPLE_INTERVAL": interval,
        "SHOT_SEQUENCE_NUMBER": 7,
        "SOURCE_LOCATION": source,
        **others,
    }
    return [f"{key} {value}" for key, value in sorted(entries.items()) if value is not None]


def seg2(traces, *, code=4, order="<", file_entries=("UNITS METERS",), pointer_room=None):
    """A whole file; `traces` are pairs of samples and string entries."""
    count = len(traces)
    room = 4 * count if pointer_room is None else pointer_room
    head_strings = strings(file_entries, order)
    at = 32 + room + len(head_strings)
    pointers, body = [], b""
    for samples, entries in traces:
        text = strings(entries, order)
        block = 32 + len(text) + (-len(text) % 4)
        data = encoded(samples, code, order)
        pointers.append(at + len(body))
        descriptor = struct.pack(f"{order}HHIIB", 0x4422, block, len(data), len(samples), code)
        body += descriptor.ljust(32, b"\0") + text.ljust(block - 32, b"\0") + data
    head = struct.pack(f"{order}HHHH", 0x3A55, 1, room, count) + b"\x01\0\0\x01\n\0"
    return head.ljust(32, b"\0") + struct.pack(f"{order}{count}I", *pointers).ljust(room, b"\0") + head_strings + body


def spread(traces=4, samples=60, **others):
    """Traces of whole numbers that every format holds."""
    rng = np.random.default_rng(3)
    return [
        (rng.integers(-30000, 30000, samples), trace_entries(channel=n + 1, receiver=f"{2.0 * n:.2f}", **others))
        for n in range(traces)
    ]
