"""How long a classic netCDF file must be, by what its own header declares.

The netCDF library reads beyond the end of a truncated classic file without complaint and delivers
zeros, which pass for measurements. The header says how long the file has to be.

Format: NetCDF Classic Format Specification (CDF-1, CDF-2), extended by CDF-5 with 64-bit counts.
"""

from __future__ import annotations

from typing import BinaryIO

__all__ = ["declared_length"]

#: Bytes per value by type code: byte, char, short, int, float, double; CDF-5: ubyte, ushort,
#: uint, int64, uint64.
_TYPE_BYTES = {1: 1, 2: 1, 3: 2, 4: 4, 5: 4, 6: 8, 7: 1, 8: 2, 9: 4, 10: 8, 11: 8}

#: Most entries of a header list that are looked at.
_MAX_ENTRIES = 100_000


class _Header:
    """Big-endian reader over the header."""

    def __init__(self, stream: BinaryIO, version: int):
        self.stream = stream
        self.count_bytes = 8 if version == 5 else 4
        self.offset_bytes = 4 if version == 1 else 8

    def bytes(self, length: int) -> bytes:
        if length > 1 << 24:
            raise ValueError("header entry too long")
        data = self.stream.read(length)
        if len(data) != length:
            raise ValueError("the header itself is cut short")
        return data

    def number(self, length: int) -> int:
        return int.from_bytes(self.bytes(length), "big")

    def count(self) -> int:
        return self.number(self.count_bytes)

    def padded(self, length: int) -> None:
        self.bytes(length + -length % 4)

    def entries(self, tag: int) -> range:
        found, count = self.number(4), self.count()
        if found not in (0, tag) or (found == 0 and count) or count > _MAX_ENTRIES:
            raise ValueError("header list not understood")
        return range(count)

    def skip_attributes(self) -> None:
        for _ in self.entries(12):
            self.padded(self.count())
            kind = self.number(4)
            self.padded(self.count() * _type_bytes(kind))


def _type_bytes(kind: int) -> int:
    if kind not in _TYPE_BYTES:
        raise ValueError("type not understood")
    return _TYPE_BYTES[kind]


def declared_length(stream: BinaryIO) -> int:
    """Least length of a classic netCDF file that holds all it declares.

    Parameters
    ----------
    stream : binary file
        At its start.

    Returns
    -------
    int
        Bytes; the padding after the last value is not counted.

    Raises
    ------
    ValueError
        If the header is cut short or does not follow the format.
    """
    magic = stream.read(4)
    if magic[:3] != b"CDF" or magic[3:] not in (b"\x01", b"\x02", b"\x05"):
        raise ValueError("no classic netCDF file")
    header = _Header(stream, magic[3])
    records = header.count()
    if records == (1 << 8 * header.count_bytes) - 1:
        records = 0  # a stream whose length was not known when the header was written
    sizes = []
    for _ in header.entries(10):
        header.padded(header.count())
        sizes.append(header.count())
    header.skip_attributes()

    fixed_end = 0
    record_parts: list[tuple[int, int]] = []
    for _ in header.entries(11):
        header.padded(header.count())
        rank = header.count()
        if rank > 1024:
            raise ValueError("variable with too many dimensions")
        dims = [header.count() for _ in range(rank)]
        header.skip_attributes()
        length = _type_bytes(header.number(4))
        header.count()
        begin = header.number(header.offset_bytes)
        if any(dim >= len(sizes) for dim in dims):
            raise ValueError("dimension not declared")
        is_record = bool(dims) and sizes[dims[0]] == 0
        for dim in dims[1:] if is_record else dims:
            length *= sizes[dim]
        if is_record:
            record_parts.append((begin, length))
        elif length:
            fixed_end = max(fixed_end, begin + length)

    end = max(fixed_end, stream.tell())
    if records and record_parts:
        # Parts are padded to four bytes, except where a lone record variable fills the record.
        lone = len(record_parts) == 1
        stride = sum(n if lone else n + -n % 4 for _, n in record_parts)
        end = max(end, *(begin + (records - 1) * stride + n for begin, n in record_parts))
    return end
