"""Cells turned into canonical values: numbers to SI, flags, pulse forms, names; what is missing and what is impossible."""

from __future__ import annotations

import contextlib
import re
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from qa.ingest.names import Binding
from qa.ingest.times import NOTHING, text_numbers
from qa.model.columns import COLUMNS, Column
from qa.model.units import readable

Mask = NDArray[np.bool_]

ALWAYS_MISSING = (
    -999.0,
    -999.9,
    -999.99,
    -999.999,
    -9999.0,
    -9999.9,
    -9999.99,
    -99999.0,
    -99999.9,
    -999999.0,
    -9999999.0,
)
"""Numbers that stand for no value wherever they occur."""
MISSING_IF_IMPOSSIBLE = np.array(
    [
        *ALWAYS_MISSING,
        -99.0, -99.9, -99.99, -32768.0, -2147483648.0,
        99.0, 99.9, 99.99, 999.0, 999.9, 999.99, 9999.0, 9999.9, 9999.99,
        99999.0, 99999.9, 99999.99, 999999.0, 9999999.0, 32767.0, 65535.0, 2147483647.0, 4294967295.0,
    ]
)  # fmt: skip
"""Numbers that stand for no value where the quantity cannot have them."""
_ABSURD = 1e30
_TRUE = {
    "1",
    "true",
    "t",
    "yes",
    "y",
    "a",
    "accepted",
    "accept",
    "good",
    "ok",
    "valid",
    "1.0",
    "pass",
    "keep",
    "kept",
    "use",
    "used",
    "on",
    "x",
}
_FALSE = {
    "0",
    "false",
    "f",
    "no",
    "n",
    "r",
    "rejected",
    "reject",
    "bad",
    "invalid",
    "0.0",
    "fail",
    "deleted",
    "off",
}
_FORMS = {
    **dict.fromkeys(
        ("cw", "continuouswave", "tone", "pulse", "gatedcw", "0", "narrowband", "monochromatic"),
        0.0,
    ),
    **dict.fromkeys(
        (
            "fm",
            "chirp",
            "lfm",
            "hfm",
            "linearfm",
            "sweep",
            "swept",
            "broadband",
            "1",
            "fmchirp",
            "linearchirp",
            "upsweep",
            "downsweep",
            "frequencymodulated",
        ),
        1.0,
    ),
}


@dataclass(slots=True)
class Converted:
    """A column's values, and where its cells are bad: no number, or impossible."""

    values: NDArray[Any]
    bad: Mask | None = None
    reason: str = ""
    impossible: Mask | None = None
    impossible_reason: str = ""
    emptied: int = 0


def bounds_of(column: Column, depth_from: str) -> tuple[float, float]:
    """What is possible of a column. From a datum, a depth above it is negative."""
    if column.name == "depth" and depth_from == "datum":
        return -column.greatest, column.greatest
    return column.least, column.greatest


def number_of(array: pa.Array, decimal_comma: bool) -> tuple[NDArray[Any], Mask | None]:
    """Floats of an Arrow column, NaN where there is none, and where a cell is no number."""
    if isinstance(array, pa.ChunkedArray):
        array = array.combine_chunks()
    if pa.types.is_dictionary(array.type):
        array = array.cast(array.type.value_type)
    kind = array.type
    if pa.types.is_float32(kind) or pa.types.is_float64(kind):
        return np.asarray(array.to_numpy(zero_copy_only=False)), None
    if pa.types.is_string(kind) or pa.types.is_large_string(kind):
        numbers, bad = text_numbers(array, decimal_comma)
        return np.asarray(numbers.to_numpy(zero_copy_only=False)), bad if bad.any() else None
    if pa.types.is_null(kind):
        return np.full(len(array), np.nan), None
    if pa.types.is_duration(kind):
        scale = {"s": 1.0, "ms": 1e3, "us": 1e6, "ns": 1e9}[kind.unit]
        counts = array.cast(pa.int64()).cast(pa.float64(), safe=False)
        return np.asarray(counts.to_numpy(zero_copy_only=False)) / scale, None
    try:
        floats = array.cast(pa.float64(), safe=False)
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError):
        return np.full(len(array), np.nan), np.asarray(
            array.is_valid().to_numpy(zero_copy_only=False)
        )
    return np.asarray(floats.to_numpy(zero_copy_only=False)), None


_LONGEST_POSITION = 40
_POSITION = re.compile(
    r"""^\s*(?P<before>[NSEW])?\s*(?P<sign>[+-])?
    (?P<deg>\d{1,3}(?:[.,]\d+)?)\s*(?:[°ºd:\s]\s*
    (?:(?P<min>\d{1,2}(?:[.,]\d+)?)\s*(?:['′’m:\s]\s*
    (?:(?P<sec>\d{1,2}(?:[.,]\d+)?)\s*(?:"|″|”|''|s(?=\s*[NSEW]))?)?)?)?)?
    \s*(?P<after>[NSEW])?\s*$""",
    re.VERBOSE | re.IGNORECASE,
)


def degrees_of(text: str) -> float | None:
    """Degrees of a position in degrees, minutes and seconds, or with its side of the world; None where it is none.

    Examples
    --------
    >>> degrees_of("38°42.6'N")
    38.71
    >>> degrees_of("9 15 36 W")
    -9.26
    >>> degrees_of("38 42 36 S"), degrees_of("38d42m36sN")
    (-38.71, 38.71)
    """
    # A position is short, and long runs of spaces would be tried in all ways that they can be shared out.
    text = " ".join(text.split())
    found = _POSITION.match(text) if len(text) <= _LONGEST_POSITION else None
    if found is None or (found["before"] and found["after"]):
        return None
    side = (found["before"] or found["after"] or "").upper()
    if side and found["sign"]:
        return None
    parts = [float((found[k] or "0").replace(",", ".")) for k in ("deg", "min", "sec")]
    if parts[1] >= 60.0 or parts[2] >= 60.0:
        return None
    degrees = (parts[0] * 3600.0 + parts[1] * 60.0 + parts[2]) / 3600.0
    return -degrees if found["sign"] == "-" or side in ("S", "W") else degrees


def to_number(binding: Binding, array: pa.Array, depth_from: str, decimal_comma: bool) -> Converted:
    """A numeric column in SI."""
    column = COLUMNS[binding.role]
    raw, bad = number_of(array, decimal_comma)
    if bad is not None and binding.role in ("latitude", "longitude"):
        raw, bad = _mapped(array, lambda w: degrees_of(w.replace(",", ".") if decimal_comma else w))
    if not raw.flags.writeable:
        raw = raw.view()
    if binding.convert.trivial:
        values = raw
    else:
        values = binding.convert.to_si(raw.astype(np.float64))
    result = Converted(values, bad, f"{binding.role} is no number" if bad is not None else "")
    low, high = bounds_of(column, depth_from)
    if not len(values):
        return result
    least, greatest = np.fmin.reduce(values), np.fmax.reduce(values)
    unbounded = not np.isfinite(low)
    if unbounded or binding.role in ("depth", "heave", "transducer_depth"):
        # -999 is a possible source level or depth over a datum, but never a measured one
        if not (least > -99.0 and greatest < _ABSURD):
            emptied = np.isin(raw, ALWAYS_MISSING) | (np.abs(raw) >= _ABSURD)
            result = _emptied(result, emptied)
            values = result.values
            least, greatest = np.fmin.reduce(values), np.fmax.reduce(values)
        if unbounded:
            return result
    if least >= low and greatest <= high:
        return result
    with np.errstate(invalid="ignore"):
        outside = (values < low) | (values > high)
    if not outside.any():
        return result
    sentinel = outside & (np.isin(raw, MISSING_IF_IMPOSSIBLE) | ~(np.abs(raw) < _ABSURD))
    result = _emptied(result, sentinel)
    impossible = outside & ~sentinel
    if impossible.any():
        result.impossible = impossible
        unit = column.unit
        name = binding.role.replace("_", " ")
        result.impossible_reason = f"{name} outside {readable(low, unit)} to {readable(high, unit)}"
        if low == 0.0:
            below = bool((values[impossible] < 0).any())
            above = bool((values[impossible] > high).any())
            if below and not above:
                result.impossible_reason = f"{name} is negative"
    return result


def _emptied(result: Converted, mask: Mask) -> Converted:
    if mask.any():
        values = result.values.astype(result.values.dtype, copy=True)
        values[mask] = np.nan
        result.values = values
        result.emptied += int(mask.sum())
    return result


def _mapped(
    array: pa.Array, mapping: Callable[[str], float | None]
) -> tuple[NDArray[np.float64], Mask | None]:
    """Texts to numbers through their distinct values; None from ``mapping`` marks a bad cell."""
    if isinstance(array, pa.ChunkedArray):
        array = array.combine_chunks()
    if not pa.types.is_dictionary(array.type):
        array = array.cast(pa.string()).dictionary_encode()
    words = [str(w) if w is not None else "" for w in array.dictionary.to_pylist()]
    numbers = np.empty(len(words) + 1)
    wrong = np.zeros(len(words) + 1, dtype=bool)
    numbers[-1] = np.nan
    for i, word in enumerate(words):
        if word.strip().lower() in NOTHING:
            numbers[i] = np.nan
            continue
        found = mapping(word.strip())
        numbers[i] = np.nan if found is None else found
        wrong[i] = found is None
    codes = array.indices.cast(pa.int64()).fill_null(-1).to_numpy(zero_copy_only=False)
    bad = wrong[codes] if wrong.any() else None
    return numbers[codes], bad if bad is not None and bad.any() else None


def to_flag(binding: Binding, array: pa.Array) -> Converted:
    """``accepted`` as bool; an empty cell counts as accepted, since nobody rejected it."""
    if isinstance(array, pa.ChunkedArray):
        array = array.combine_chunks()
    bad = None
    kind = array.type
    if pa.types.is_boolean(kind):
        flags = np.asarray(
            array.fill_null(not binding.negated).to_numpy(zero_copy_only=False)
        ).astype(bool)
    elif pa.types.is_integer(kind) or pa.types.is_floating(kind):
        numbers = np.asarray(array.cast(pa.float64()).to_numpy(zero_copy_only=False))
        numbers = np.where(np.isnan(numbers), 0.0 if binding.negated else 1.0, numbers)
        wrong = (numbers != 0.0) & (numbers != 1.0)
        bad = wrong if wrong.any() else None
        flags = numbers != 0.0
    else:
        numbers, bad = _mapped(
            array, lambda w: 1.0 if w.lower() in _TRUE else 0.0 if w.lower() in _FALSE else None
        )
        flags = np.where(np.isnan(numbers), not binding.negated, numbers == 1.0).astype(bool)
    if binding.negated:
        flags = ~flags
    return Converted(flags, bad, "accepted is neither yes nor no" if bad is not None else "")


def to_form(array: pa.Array) -> Converted:
    """``pulse_form`` as its position in PULSE_FORMS."""
    if isinstance(array, pa.ChunkedArray):
        array = array.combine_chunks()
    values, bad = _mapped(
        array, lambda w: _FORMS.get("".join(c for c in w.lower().removesuffix(".0") if c.isalnum()))
    )
    return Converted(values, bad, "pulse form is neither CW nor FM" if bad is not None else "")


class NameCodes:
    """Names met so far, each with a number in order of first appearance."""

    def __init__(self) -> None:
        self.names: list[str] = []
        self._codes: dict[str, int] = {}

    def code(self, name: str) -> int:
        """The number of a name."""
        if name not in self._codes:
            self._codes[name] = len(self.names)
            self.names.append(name)
        return self._codes[name]

    def encode(self, array: pa.Array) -> NDArray[np.int64]:
        """The number of each cell's name; an empty cell has the name ""."""
        if isinstance(array, pa.ChunkedArray):
            array = array.combine_chunks()
        if not pa.types.is_dictionary(array.type):
            array = array.dictionary_encode()
        words = [_name(w) for w in array.dictionary.to_pylist()]
        indices = array.indices.cast(pa.int64())
        if indices.null_count:
            words.append("")
            indices = indices.fill_null(len(words) - 1)
        codes = np.array([self.code(w) for w in words], dtype=np.int64)
        if not len(codes):
            return np.zeros(len(array), dtype=np.int64)
        encoded: NDArray[np.int64] = codes[indices.to_numpy(zero_copy_only=False)]
        return encoded


def _name(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, float) and value.is_integer():
        return str(int(value))
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace")
    return str(value).strip()


def to_whole(
    array: pa.Array, decimal_comma: bool
) -> tuple[NDArray[np.int64], Mask | None, Mask | None]:
    """Whole numbers (ping, beam numbers), where they are missing, and where a cell is none; None for nowhere."""
    if isinstance(array, pa.ChunkedArray):
        array = array.combine_chunks()
    if pa.types.is_dictionary(array.type):
        array = array.cast(array.type.value_type)
    if pa.types.is_string(array.type) or pa.types.is_large_string(array.type):
        with contextlib.suppress(pa.ArrowInvalid):
            array = pc.utf8_trim_whitespace(array).cast(pa.int64())
    if pa.types.is_integer(array.type) and not pa.types.is_uint64(array.type):
        whole = array.cast(pa.int64())
        if not array.null_count:
            return np.asarray(whole.to_numpy()), None, None
        missing = np.asarray(array.is_null().to_numpy(zero_copy_only=False))
        return np.asarray(whole.fill_null(0).to_numpy(zero_copy_only=False)), missing, None
    numbers, bad = number_of(array, decimal_comma)
    numbers = numbers.astype(np.float64)
    wrong = np.zeros(len(numbers), dtype=bool) if bad is None else bad.copy()
    with np.errstate(invalid="ignore"):
        wrong |= np.isfinite(numbers) & ((numbers != np.floor(numbers)) | (np.abs(numbers) > 2**53))
        missing = ~np.isfinite(numbers)
        values = np.where(missing | wrong, 0.0, numbers).astype(np.int64)
    return values, missing & ~wrong, wrong if wrong.any() else None


def positions_of(array: pa.Array) -> pa.Array:
    """A list column's values, all after one another."""
    return pc.list_flatten(array)
