"""Records as plain values, and these as JSON that is quick to write and can be read and compared line by line."""

from __future__ import annotations

import dataclasses
import json
import math
from collections.abc import Mapping
from functools import cache
from typing import Any


def plain(value: Any) -> Any:
    """Lists, dicts, texts and numbers of records that hold such; None where a number is not known."""
    kind = type(value)
    if kind is float:
        return value if math.isfinite(value) else None
    if kind in (str, int, bool) or value is None:
        return value
    if dataclasses.is_dataclass(kind):
        return {name: plain(getattr(value, name)) for name in _fields(kind)}
    if isinstance(value, Mapping):
        return {str(k): plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [plain(v) for v in value]
    if isinstance(value, float):
        return plain(float(value))
    return value


@cache
def _fields(kind: Any) -> tuple[str, ...]:
    return tuple(f.name for f in dataclasses.fields(kind))


def json_text(data: Mapping[str, Any]) -> str:
    """JSON text of an object, ending with a line feed: each entry of its lists and objects on a line of its own.

    Examples
    --------
    >>> print(json_text({"a": 1, "b": [{"c": 2}, {"c": 3}], "d": [], "e": {"f": [4, 5]}}), end="")
    {
    "a": 1,
    "b": [
     {"c": 2},
     {"c": 3}
    ],
    "d": [],
    "e": {
     "f": [4, 5]
    }
    }
    """
    return (
        "{\n"
        + ",\n".join(f"{_one(key)}: {_entries(value)}" for key, value in data.items())
        + "\n}\n"
    )


def _entries(value: Any) -> str:
    if isinstance(value, Mapping) and value:
        return "{\n " + ",\n ".join(f"{_one(str(k))}: {_one(v)}" for k, v in value.items()) + "\n}"
    if isinstance(value, list) and value:
        return "[\n " + ",\n ".join(map(_one, value)) + "\n]"
    return _one(value)


def _one(value: Any) -> str:
    return json.dumps(value, ensure_ascii=False, allow_nan=False)
