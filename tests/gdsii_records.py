"""A minimal writer of GDSII stream records, for elements that no library writes.

The stream format is open: *GDSII Stream Format Manual*, release 6.0 (1987).  Record numbers
and data types below are from its table of records.
"""

from __future__ import annotations

import struct

DATE = struct.pack(">12h", *(2020, 1, 1, 0, 0, 0) * 2)


def record(kind: int, data: bytes = b"") -> bytes:
    """One record: length, record number and data type, data."""
    return struct.pack(">HH", len(data) + 4, kind) + data


def shorts(*values: int) -> bytes:
    return struct.pack(f">{len(values)}h", *values)


def longs(*values: int) -> bytes:
    return struct.pack(f">{len(values)}i", *values)


def text(value: str | bytes) -> bytes:
    data = value if isinstance(value, bytes) else value.encode("ascii")
    return data + b"\0" * (len(data) % 2)


def real(value: float) -> bytes:
    """Eight-byte real: sign, excess-64 exponent of 16, 56-bit mantissa."""
    if value == 0:
        return bytes(8)
    exponent, size = 64, abs(value)
    while size >= 1:
        size, exponent = size / 16, exponent + 1
    while size < 1 / 16:
        size, exponent = size * 16, exponent - 1
    sign = 0x80 if value < 0 else 0
    return struct.pack(">Q", (sign | exponent) << 56 | round(size * 2**56))


def element(kind: int, layer: int, type_record: int, datatype: int, *rest: bytes) -> bytes:
    """An element on a layer: its records in the manual's order."""
    head = record(kind) + record(0x0D02, shorts(layer)) + record(type_record, shorts(datatype))
    return head + b"".join(rest) + record(0x1100)


def boundary(layer: int, datatype: int, *xy: int) -> bytes:
    return element(0x0800, layer, 0x0E02, datatype, record(0x1003, longs(*xy)))


def box(layer: int, boxtype: int, *xy: int) -> bytes:
    return element(0x2D00, layer, 0x2E02, boxtype, record(0x1003, longs(*xy)))


def path(
    layer: int,
    datatype: int,
    pathtype: int,
    width: int,
    xy: tuple[int, ...],
    extensions: tuple[int, int] | None = None,
) -> bytes:
    rest = [record(0x2102, shorts(pathtype)), record(0x0F03, longs(width))]
    if extensions is not None:
        rest += [record(0x3003, longs(extensions[0])), record(0x3103, longs(extensions[1]))]
    return element(0x0900, layer, 0x0E02, datatype, *rest, record(0x1003, longs(*xy)))


def reference(name: str, x: int, y: int, *, magnification: float = 1.0) -> bytes:
    transform = record(0x1A01, bytes(2)) + record(0x1B05, real(magnification))
    place = record(0x1003, longs(x, y))
    return record(0x0A00) + record(0x1206, text(name)) + transform + place + record(0x1100)


def array(name: str, columns: int, rows: int, xy: tuple[int, ...]) -> bytes:
    """An array from its origin, its column corner and its row corner."""
    counts = record(0x1302, shorts(columns, rows))
    place = record(0x1003, longs(*xy))
    return record(0x0B00) + record(0x1206, text(name)) + counts + place + record(0x1100)


def cell(name: str | bytes, *elements: bytes) -> bytes:
    head = record(0x0502, DATE) + record(0x0606, text(name))
    return head + b"".join(elements) + record(0x0700)


def library(*cells: bytes, database_unit_um: float = 0.001) -> bytes:
    units = real(database_unit_um) + real(database_unit_um * 1e-6)
    head = record(0x0002, shorts(600)) + record(0x0102, DATE) + record(0x0206, text("library"))
    return head + record(0x0305, units) + b"".join(cells) + record(0x0400)
