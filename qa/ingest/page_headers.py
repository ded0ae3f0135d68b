"""How many distinct values a column of a part of a Parquet file has, as the header of its dictionary says."""

from __future__ import annotations

from typing import BinaryIO

_LONGEST = 96
_DICTIONARY_PAGE = 2
_TRUE, _FALSE, _BYTE, _I16, _I32, _I64, _STRUCT = 1, 2, 3, 4, 5, 6, 12


def dictionary_size(file: BinaryIO, offset: int) -> int | None:
    """Values in the dictionary whose page begins at a byte of a file; None if there is none that can be understood.

    References
    ----------
    .. [1] Apache Parquet format, "Page header" and "Dictionary page header" (parquet.thrift).
    .. [2] Apache Thrift, compact protocol.
    """
    file.seek(offset)
    try:
        header, _ = _fields(file.read(_LONGEST), 0)
    except (IndexError, ValueError):
        return None
    kind, about = header.get(1), header.get(7)
    if kind != _DICTIONARY_PAGE or not isinstance(about, dict):
        return None
    size = about.get(1)
    return size if isinstance(size, int) and size >= 0 else None


Fields = dict[int, "int | Fields"]


def _fields(data: bytes, at: int) -> tuple[Fields, int]:
    """The fields of a struct by number: whole numbers and structs, which are all that such a header holds."""
    found: Fields = {}
    number = 0
    while data[at]:
        step, kind = data[at] >> 4, data[at] & 15
        at += 1
        if step:
            number += step
        else:
            number, at = _whole(data, at)
        if kind in (_TRUE, _FALSE):
            found[number] = int(kind == _TRUE)
        elif kind == _BYTE:
            found[number], at = data[at], at + 1
        elif kind in (_I16, _I32, _I64):
            found[number], at = _whole(data, at)
        elif kind == _STRUCT:
            found[number], at = _fields(data, at)
        else:
            raise ValueError(kind)
    return found, at + 1


def _whole(data: bytes, at: int) -> tuple[int, int]:
    """A number of seven bits a byte, the lowest first, its sign in the lowest bit."""
    value = shift = 0
    while True:
        byte = data[at]
        value |= (byte & 127) << shift
        at, shift = at + 1, shift + 7
        if byte < 128:
            return (value >> 1) ^ -(value & 1), at
