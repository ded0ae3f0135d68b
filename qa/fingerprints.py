"""Short names for what a result depends on: the same on every run and machine, another as soon as anything differs."""

from __future__ import annotations

import dataclasses
import datetime as dt
import hashlib
import platform
import re
import struct
from collections.abc import Mapping
from fractions import Fraction
from functools import cache
from pathlib import Path, PurePath
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np

from qa.model.shipped import shipped

_READ = (".py", ".toml", ".json", ".jinja", ".css", ".js", ".html")


def fingerprint(*values: Any) -> str:
    """A name for values: numbers, texts, records and collections of such.

    Mappings and sets count without their order, sequences with it; 1, 1.0, True and "1" are four things.

    Raises
    ------
    TypeError
        If a value is of a kind that has no such name.

    Examples
    --------
    >>> fingerprint({"a": 1, "b": 2}) == fingerprint({"b": 2, "a": 1})
    True
    >>> fingerprint(1) == fingerprint(1.0)
    False
    """
    return hashlib.sha256(_bytes(values)).hexdigest()


def _bytes(value: Any) -> bytes:
    """Kind, length and content, so that no two values run into one another."""
    if value is None or isinstance(value, bool | int):
        return _tagged(type(value).__name__, repr(value).encode())
    if isinstance(value, float):
        return _tagged("float", struct.pack("<d", value))
    if isinstance(value, str):
        return _tagged("str", value.encode("utf-8", "surrogatepass"))
    if isinstance(value, bytes):
        return _tagged("bytes", value)
    if isinstance(value, PurePath):
        return _tagged("path", value.as_posix().encode("utf-8", "surrogateescape"))
    if isinstance(value, Fraction | re.Pattern | ZoneInfo):
        return _tagged(type(value).__name__, repr(value).encode())
    if isinstance(value, dt.date | dt.time | dt.timedelta):
        return _tagged(type(value).__name__, repr(value).encode())
    if isinstance(value, np.ndarray | np.generic) and value.dtype.kind in "biufcSUmM":
        array = np.asarray(value)
        head = f"{array.dtype.str}{array.shape}".encode()
        return _tagged("array", _tagged("shape", head) + array.tobytes())
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        kind = type(value)
        fields = [(f.name, getattr(value, f.name)) for f in dataclasses.fields(value)]
        return _tagged(f"{kind.__module__}.{kind.__qualname__}", _bytes(fields))
    if isinstance(value, Mapping):
        return _tagged("map", b"".join(sorted(_bytes(k) + _bytes(v) for k, v in value.items())))
    if isinstance(value, set | frozenset):
        return _tagged("set", b"".join(sorted(map(_bytes, value))))
    if isinstance(value, list | tuple):
        return _tagged("list", b"".join(map(_bytes, value)))
    raise TypeError(f"a {type(value).__name__} has no fingerprint")


def _tagged(kind: str, content: bytes) -> bytes:
    return f"{kind}:{len(content)}:".encode() + content


@cache
def of_program() -> str:
    """The program itself: its source, the data it ships, and what it computes with.

    The source and not only the version, so that a change made in a checkout counts at once.
    """
    import pyarrow as pa

    package = Path(__file__).resolve().parent
    places = {package, shipped("rules").resolve(), shipped("reports").resolve()}
    found = {}
    for place in places:
        for path in place.rglob("*"):
            if path.suffix in _READ and "sample_logs" not in path.parts:
                name = f"{place.name}/{path.relative_to(place).as_posix()}"
                found[name] = hashlib.sha256(path.read_bytes()).hexdigest()
    return fingerprint(found, np.__version__, pa.__version__, platform.python_version())
