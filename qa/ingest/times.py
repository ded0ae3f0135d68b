"""Times as logs write them, turned into nanoseconds since 1970-01-01 UTC."""

from __future__ import annotations

import re
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime, timedelta
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from qa.ingest.names import Binding, unit_of
from qa.model.errors import InputError
from qa.model.log import NO_TIME
from qa.model.units import SECOND

Integers = NDArray[np.int64]

NANOSECOND, SECOND_NS, DAY_NS = 1, 1_000_000_000, 86_400_000_000_000
EARLIEST = 631_152_000 * SECOND_NS
"""1990-01-01: an earlier time is a clock that was never set."""
LATEST = 4_102_444_800 * SECOND_NS
"""2100-01-01."""

_STEPS = {"s": SECOND_NS, "ms": 1_000_000, "us": 1_000, "ns": 1}
_MONTHS = ["jan", "feb", "mar", "apr", "may", "jun", "jul", "aug", "sep", "oct", "nov", "dec"]
_CLOCK = (
    r"(?P<H>\d{1,2}):?(?P<M>\d{2})(?::?(?P<S>\d{2})(?:[.,](?P<f>\d{1,12}))?)?"
    r"\s*(?P<p>[AaPp]\.?[Mm]\.?)?\s*(?P<z>[Zz]|UTC|utc|GMT|UT|[+-]\d{2}(?::?\d{2})?)?"
)
_PATTERNS = {
    "ymd": r"^(?P<y>\d{4})[-/.:](?P<m>\d{2})[-/.:](?P<d>\d{2})(?:(?:\s*[Tt_ ,;:-]\s*|\s+)"
    + _CLOCK
    + r")?$",
    "packed": r"^(?P<y>\d{4})(?P<m>\d{2})(?P<d>\d{2})(?:\s*[Tt_ ,;:-]?\s*" + _CLOCK + r")?$",
    "ymd1": r"^(?P<y>\d{4})[-/.:](?P<m>\d{1,2})[-/.:](?P<d>\d{1,2})(?:(?:\s*[Tt_ ,;:-]\s*|\s+)"
    + _CLOCK
    + r")?$",
    "dmy": r"^(?P<d>\d{1,2})[-/.](?P<m>\d{1,2})[-/.](?P<y>\d{4})(?:(?:\s*[Tt_ ,;:-]\s*|\s+)"
    + _CLOCK
    + r")?$",
    "mdy": r"^(?P<m>\d{1,2})[-/.](?P<d>\d{1,2})[-/.](?P<y>\d{4})(?:(?:\s*[Tt_ ,;:-]\s*|\s+)"
    + _CLOCK
    + r")?$",
    "month": r"^(?P<d>\d{1,2})[-/. ]?(?P<n>[A-Za-z]{3})[A-Za-z]*[-/. ,]*(?P<y>\d{4})(?:(?:\s*[Tt_ ,;:-]\s*|\s+)"
    + _CLOCK
    + r")?$",
    "doy": r"^(?P<y>\d{4})[-/:. ](?P<j>\d{3})(?:[-/:. Tt]" + _CLOCK + r")?$",
    "clock": r"^" + _CLOCK + r"$",
}
_TWO_DIGIT_YEAR = r"^\d{1,2}[-/.]\d{1,2}[-/.]\d{2}(?:\D|$)"


@dataclass(frozen=True, slots=True)
class TimePlan:
    """How one file's times are written. Small, so that it travels with a task.

    ``kind``: "instant" (a timestamp type), "number" (a count of ``step`` ns since ``origin``), "text", or "parts".
    ``text_form`` is the key of the pattern that dates match. ``offset`` is a fixed offset in ns of times that
    carry none, ``zone`` a time zone's name, for the rest. ``written`` is the step of the last digit written, in ns; 0
    where that is not known. ``zoned`` says that texts end in a time zone.
    """

    kind: str
    bindings: tuple[Binding, ...]
    zone: str = "UTC"
    step: float = 1.0
    origin: int = 0
    text_form: str = "ymd"
    decimal_comma: bool = False
    rolls_over: bool = False
    notes: tuple[str, ...] = ()
    written: int = 0
    zoned: bool = False

    @property
    def sources(self) -> tuple[str, ...]:
        """The file's own columns that are read for the time."""
        return tuple(b.source for b in self.bindings)


@dataclass(slots=True)
class TimeState:
    """What must be remembered from one batch to the next: days added where seconds of day start again."""

    last: float = -np.inf
    last_day: float = -np.inf
    added: int = 0
    leap_seconds: int = 0
    offsets: dict[int, int] = field(default_factory=dict)


def plan_times(
    bindings: tuple[Binding, ...],
    sample: dict[str, pa.Array],
    zone: str,
    where: str,
    stated: str = "",
    decimal_comma: bool = False,
) -> TimePlan:
    """Find out from a sample how times are written.

    Parameters
    ----------
    bindings : tuple of Binding
        The bindings of ``time`` and of its parts.
    sample : dict of str to pyarrow.Array
        The first values of these columns.
    zone : str
        Time zone of times that carry none.
    where : str
        The file, for messages.
    stated : str
        What [columns.units] says of time.

    Raises
    ------
    InputError
        If there is no time, or its form cannot be told.
    """
    plan = _plan(bindings, sample, zone, where, stated, decimal_comma)
    last = sample[plan.bindings[-1].source]
    if isinstance(last, pa.ChunkedArray):
        last = last.combine_chunks()
    if pa.types.is_dictionary(last.type):
        last = last.cast(last.type.value_type)
    if pa.types.is_timestamp(last.type) or pa.types.is_time(last.type):
        return replace(plan, written=_STEPS[last.type.unit])
    unit = plan.step if plan.kind == "number" else float(SECOND_NS)
    if pa.types.is_integer(last.type):
        return replace(plan, written=max(1, round(unit)))
    if not (pa.types.is_string(last.type) or pa.types.is_large_string(last.type)):
        return plan
    texts = _texts(last)
    if plan.kind == "text" and not any(t.count(":") > 1 or "." in t or "," in t for t in texts):
        # hours and minutes, or digits without marks: the digits do not tell
        return plan
    return replace(plan, written=written_step(texts, unit), zoned=_zoned(texts))


def _plan(
    bindings: tuple[Binding, ...],
    sample: dict[str, pa.Array],
    zone: str,
    where: str,
    stated: str = "",
    decimal_comma: bool = False,
) -> TimePlan:
    by_role = {b.role: b for b in bindings}
    time = by_role.get("time")
    if time is not None and time.unit and not stated:
        hint = time.unit.strip().upper()
        if hint in ("UTC", "GMT", "Z"):
            zone = "UTC"
        elif (
            fixed := re.fullmatch(r"(?:UTC|GMT)\s*([+-]\d{1,2})(?::?(\d{2}))?", hint)
        ) is not None:
            zone = f"{int(fixed[1]):+03d}:{fixed[2] or '00'}"
    plan = TimePlan("text", (), zone=zone, decimal_comma=decimal_comma)
    if time is None:
        return _plan_parts(by_role, sample, plan, where)
    values = sample[time.source]
    if pa.types.is_dictionary(values.type):
        values = values.cast(values.type.value_type)
    kind = values.type
    if pa.types.is_timestamp(kind):
        notes = () if kind.tz else (_zone_note(zone),)
        return replace(plan, kind="instant", bindings=(time,), notes=notes)
    if pa.types.is_date(kind) or pa.types.is_time(kind):
        if "date" in by_role:
            return replace(
                plan, kind="parts", bindings=(by_role["date"], time), notes=(_zone_note(zone),)
            )
        if pa.types.is_date(kind):
            raise InputError(
                f'Column "{time.source}" holds dates without a time of day.',
                where=where,
                advice="Add the column that holds the time of day, or a full time.",
            )
    unit_text = stated or time.unit
    numbers = _numbers(values, decimal_comma)
    if numbers is not None and len(numbers) and not ("date" in by_role and _clock_numbers(values)):
        if "date" in by_role and np.nanmax(np.abs(numbers)) <= 86_401 and not stated:
            seconds = replace(time, role="seconds_of_day")
            found = dict(by_role)
            del found["time"]
            found["seconds_of_day"] = seconds
            return _plan_parts(found, sample, plan, where)
        packed = values.cast(pa.string()) if pa.types.is_integer(kind) else values
        if pa.types.is_string(packed.type) and _compact(packed):
            return replace(plan, bindings=(time,), text_form="packed", notes=(_zone_note(zone),))
        return _plan_number(time, numbers, unit_text, plan, where)
    if not pa.types.is_string(kind) and not pa.types.is_large_string(kind):
        raise InputError(
            f'Column "{time.source}" is not a time.',
            where=where,
            found=f"values of type {kind}",
            expected="a time such as 2024-05-15T08:20:00Z, or a count since 1970",
        )
    texts = _texts(values)
    form = _text_form(texts, stated, where, time.source)
    if form == "clock":
        if "date" not in by_role:
            if {"year", "day_of_year"} <= by_role.keys() or {
                "year",
                "month",
                "day",
            } <= by_role.keys():
                found = dict(by_role)
                found["time_of_day"] = replace(found.pop("time"), role="time_of_day")
                return _plan_parts(found, sample, plan, where)
            raise InputError(
                f'Column "{time.source}" holds times of day without a date.',
                where=where,
                found=texts[0] if texts else "",
                advice="Export the date too, in a column of its own or before the time.",
            )
        dates = sample[by_role["date"].source]
        if pa.types.is_dictionary(dates.type):
            dates = dates.cast(dates.type.value_type)
        if pa.types.is_date(dates.type) or pa.types.is_timestamp(dates.type):
            form = "ymd"
        else:
            form = _text_form(_texts(dates), stated, where, by_role["date"].source)
        notes = () if _zoned(texts) else (_zone_note(zone),)
        return replace(plan, bindings=(by_role["date"], time), text_form=form, notes=notes)
    notes = () if _zoned(texts) else (_zone_note(zone),)
    return replace(plan, bindings=(time,), text_form=form, notes=notes)


def _zone_note(zone: str) -> str:
    return f"Times carry no time zone: taken as {zone}."


def _zoned(texts: list[str]) -> bool:
    return bool(texts) and bool(re.search(r"(?:[Zz]|UTC|GMT|[+-]\d{2}:?\d{2})$", texts[0].strip()))


def _compact(values: pa.Array) -> bool:
    texts = _texts(values)[:20]
    return bool(texts) and all(
        re.fullmatch(r"(?:19|20)\d{6}[T ]?\d{6}(?:[.,]\d+)?", t) is not None for t in texts
    )


def _clock_numbers(values: pa.Array) -> bool:
    """Whether numbers are really hhmmss, as in 082000.12."""
    if not (pa.types.is_string(values.type) or pa.types.is_large_string(values.type)):
        return False
    texts = _texts(values)[:50]
    return bool(texts) and all(re.fullmatch(r"[0-2]\d[0-5]\d[0-6]\d(?:[.,]\d+)?", t) for t in texts)


def _numbers(values: pa.Array, decimal_comma: bool) -> NDArray[np.float64] | None:
    if pa.types.is_boolean(values.type) or pa.types.is_temporal(values.type):
        return None
    if pa.types.is_string(values.type) or pa.types.is_large_string(values.type):
        texts = _texts(values)
        if not texts:
            return None
        if decimal_comma:
            texts = [t.replace(",", ".") for t in texts]
        found = []
        for text in texts:
            try:
                found.append(float(text))
            except ValueError:
                continue
        # a few wrecked cells do not turn a column of numbers into one of texts
        if len(found) < 0.6 * len(texts):
            return None
        numbers = np.array(found)
    else:
        try:
            numbers = np.asarray(
                values.cast(pa.float64(), safe=False).drop_null().to_numpy(zero_copy_only=False)
            )
        except (pa.ArrowInvalid, pa.ArrowNotImplementedError):
            return None
    numbers = numbers[np.isfinite(numbers)]
    return numbers if len(numbers) else None


def _texts(values: pa.Array) -> list[str]:
    return [t.strip() for t in values.drop_null().to_pylist() if t and t.strip()]


def _plan_number(
    time: Binding, numbers: NDArray[np.float64], unit_text: str, plan: TimePlan, where: str
) -> TimePlan:
    typical = float(np.median(np.abs(numbers)))
    head, since, origin_text = unit_text.partition("since")
    unit_name = head.strip().removesuffix("from").strip()
    step, origin = 0.0, 0
    notes: list[str] = []
    if unit_name and unit_name.upper() not in ("UTC", "GMT", "Z", "LOCAL"):
        found = unit_of(unit_name, SECOND)
        if found is not None:
            step = found.multiply / found.divide * SECOND_NS
    if since:
        origin = _origin(origin_text.strip(), plan.zone, where)
        if not step:
            raise InputError(
                f'The unit of column "{time.source}" is not a unit of time.',
                where=where,
                found=unit_text,
                expected='a text such as "ms since 1970-01-01"',
            )
        small = np.nanmax(np.abs(numbers)) * step <= 1.01 * DAY_NS
        return replace(
            plan, kind="number", bindings=(time,), step=step, origin=origin, rolls_over=bool(small)
        )
    if step:
        moment = typical * step
        if not EARLIEST <= moment <= LATEST:
            raise InputError(
                f'Column "{time.source}" holds no times since 1970 in {unit_name}.',
                where=where,
                found=f"{numbers[0]:.15g}",
                advice=f'Write time = "{unit_name} since 2024-05-15" (its true start), or the true unit, under '
                "[columns.units] in the survey file.",
            )
        return replace(plan, kind="number", bindings=(time,), step=step)
    fitting = [name for name, ns in _STEPS.items() if EARLIEST <= typical * ns <= LATEST]
    if len(fitting) != 1:
        raise InputError(
            f'Column "{time.source}" holds numbers that are no count of s, ms, µs or ns since 1970.',
            where=where,
            found=f"{numbers[0]:.15g}",
            advice=(
                'If these are a spreadsheet\'s days, write time = "days since 1899-12-30" under [columns.units] in the '
                "survey file."
                if 30_000 < typical < 60_000 and float(np.ptp(numbers)) < 400
                else 'Write, for example, time = "s since 2024-05-15" under [columns.units] in the survey file.'
            ),
        )
    names = {"s": "seconds", "ms": "milliseconds", "us": "microseconds", "ns": "nanoseconds"}
    notes.append(
        f"Times are whole numbers without a unit: by their size {names[fitting[0]]} since 1970-01-01 UTC."
    )
    return replace(
        plan,
        kind="number",
        bindings=(time,),
        step=float(_STEPS[fitting[0]]),
        notes=tuple(notes),
    )


def _origin(text: str, zone: str, where: str) -> int:
    cleaned = text.strip().strip("()").strip()
    if not cleaned or cleaned.lower() in ("epoch", "unix epoch", "midnight"):
        return 0
    values = pa.array([cleaned])
    for form in ("ymd", "ymd1"):
        when, bad = _from_texts(values, form, zone if "zone" in cleaned else "UTC", TimeState())
        if not bad.any():
            return int(when[0])
    raise InputError(
        "The start of a count of time is not a date.",
        where=where,
        found=text,
        expected='a date such as "1970-01-01" or "2024-05-15 00:00:00"',
    )


def _text_form(texts: list[str], stated: str, where: str, source: str) -> str:
    sample = texts[:400] + texts[-100:]
    if not sample:
        raise InputError(f'Column "{source}" is empty.', where=where, expected="times")
    values = pa.array(sample, pa.string())

    def share(pattern: str) -> float:
        return float(
            pc.sum(pc.match_substring_regex(values, _anonymous(_PATTERNS[pattern]))).as_py() or 0
        ) / len(sample)

    if "%" in stated:
        order = list(re.findall(r"%([dmyYjbB])", stated))
        if "y" in order:
            raise InputError(
                "Years of two digits are not accepted.", where=where, found=stated, expected="%Y"
            )
        form = "month" if set(order) & {"b", "B"} else "".join(order).lower()[:3]
        return {"dmy": "dmy", "mdy": "mdy", "ymd": "ymd1", "yj": "doy", "month": "month"}.get(
            form, "ymd"
        )
    shares = {form: share(form) for form in ("ymd", "ymd1", "packed", "clock", "doy", "month")}
    for form, part in shares.items():
        if part >= 0.5:
            return form
    if share("dmy") >= 0.5:
        matches = (re.match(r"(\d{1,2})([-/.])(\d{1,2})", t) for t in sample)
        pairs = [(int(m[1]), int(m[3]), m[2]) for m in matches if m is not None]
        firsts, seconds = {p[0] for p in pairs}, {p[1] for p in pairs}
        if max(firsts) > 12 and max(seconds) <= 12:
            return "dmy"
        if max(seconds) > 12 and max(firsts) <= 12:
            return "mdy"
        if pairs[0][2] == "." or all(a == b for a, b, _ in pairs):
            return "dmy"
        raise InputError(
            f'Column "{source}": it cannot be told whether the day or the month comes first.',
            where=where,
            found=sample[0],
            advice='Write time = "%d/%m/%Y" or time = "%m/%d/%Y" under [columns.units] in the survey file.',
        )
    if pc.any(pc.match_substring_regex(values, _TWO_DIGIT_YEAR)).as_py():
        raise InputError(
            f'Column "{source}": years of two digits are not accepted, since the century and the order of day, '
            "month and year cannot be told.",
            where=where,
            found=sample[0],
            advice="Export the year with four digits.",
        )
    likely = max(shares, key=lambda form: shares[form])
    if shares[likely] >= 0.1:
        # most cells are wrecked; the rest are times
        return likely
    raise InputError(
        f'Column "{source}" is not a time that is known.',
        where=where,
        found=sample[0],
        expected="a time such as 2024-05-15T08:20:00Z, or a count since 1970",
        advice="If another column holds the time, write its name as time under [columns] in the survey file.",
    )


def _plan_parts(
    by_role: dict[str, Binding], sample: dict[str, pa.Array], plan: TimePlan, where: str
) -> TimePlan:
    roles = by_role.keys()
    note = (_zone_note(plan.zone),)
    if "date" in roles:
        date = by_role["date"]
        values = sample[date.source]
        if pa.types.is_dictionary(values.type):
            values = values.cast(values.type.value_type)
        temporal = pa.types.is_date(values.type) or pa.types.is_timestamp(values.type)
        has_clock = False
        if not temporal:
            texts = _texts(values.cast(pa.string()))
            form = _text_form(texts, "", where, date.source)
            has_clock = any(":" in t for t in texts[:20])
        else:
            form = "ymd"
            has_clock = pa.types.is_timestamp(values.type) and bool(
                pc.any(pc.not_equal(pc.hour(values), 0)).as_py()
            )
        for role in ("time_of_day", "seconds_of_day", "hour"):
            if role in roles and not has_clock:
                wanted = ("hour", "minute", "second") if role == "hour" else (role,)
                bindings = (date, *(by_role[r] for r in wanted if r in by_role))
                kind = "text" if role == "time_of_day" and not temporal else "parts"
                return replace(
                    plan,
                    kind=kind,
                    bindings=bindings,
                    text_form=form,
                    notes=note,
                    rolls_over=role == "seconds_of_day",
                )
        if has_clock:
            if temporal:
                return replace(plan, kind="instant", bindings=(date,), notes=note)
            return replace(plan, bindings=(date,), text_form=form, notes=note)
    elif "year" in roles and ({"month", "day"} <= roles or "day_of_year" in roles):
        days = ("day_of_year",) if "day_of_year" in roles else ("month", "day")
        if "seconds_of_day" in roles or "hour" in roles or "time_of_day" in roles:
            clock = (
                ("seconds_of_day",)
                if "seconds_of_day" in roles
                else ("time_of_day",)
                if "time_of_day" in roles
                else ("hour", "minute", "second")
            )
            wanted = ("year", *days, *clock)
        else:
            wanted = ("year", *days)
        return replace(
            plan,
            kind="parts",
            bindings=tuple(by_role[r] for r in wanted if r in by_role),
            notes=note,
            rolls_over="seconds_of_day" in wanted,
        )
    raise NoTimeError("No column holds the time.", where=where)


class NoTimeError(InputError):
    """A log without times. The caller adds what its columns are."""


def convert_times(
    plan: TimePlan, columns: dict[str, pa.Array], state: TimeState
) -> tuple[Integers, NDArray[np.bool_]]:
    """Times of a batch.

    Returns
    -------
    times : ndarray of int64
        Nanoseconds since 1970-01-01 UTC, :data:`NO_TIME` where there is none.
    bad : ndarray of bool
        Where a cell stands that is no time.
    """
    arrays = [_decoded(columns[b.source]) for b in plan.bindings]
    if plan.kind == "instant":
        return _from_instants(arrays[0], plan.zone, state)
    if plan.kind == "number":
        return _from_numbers(arrays[0], plan, state)
    if plan.kind == "parts":
        return _from_parts(plan, arrays, state)
    if len(arrays) == 1 and pa.types.is_timestamp(arrays[0].type):
        return _from_instants(arrays[0], plan.zone, state)
    texts = [a if pa.types.is_string(a.type) else a.cast(pa.string()) for a in arrays]
    joined = texts[0] if len(texts) == 1 else pc.binary_join_element_wise(*texts, " ")
    return _from_texts(joined, plan.text_form, plan.zone, state)


def _decoded(array: pa.Array) -> pa.Array:
    if isinstance(array, pa.ChunkedArray):
        array = array.combine_chunks()
    if pa.types.is_dictionary(array.type) and not pa.types.is_string(array.type.value_type):
        array = array.cast(array.type.value_type)
    return array


def _from_instants(
    array: pa.Array, zone: str, state: TimeState
) -> tuple[Integers, NDArray[np.bool_]]:
    zoned = array.type.tz is not None
    scale = {"s": SECOND_NS, "ms": 1_000_000, "us": 1_000, "ns": 1}[array.type.unit]
    if not array.null_count and scale == 1:
        counts = array.view(pa.int64()).to_numpy()
        times = counts if zoned else _to_utc(counts, zone, state)
        return times, np.zeros(len(times), dtype=bool)
    counts = array.cast(pa.int64()).fill_null(NO_TIME).to_numpy(zero_copy_only=False)
    none = counts == NO_TIME
    limit = np.iinfo(np.int64).max // scale
    wild = ~none & (np.abs(counts) > limit)
    with np.errstate(over="ignore"):
        times = np.where(none | wild, NO_TIME, counts * scale)
    if not zoned:
        times = _to_utc(times, zone, state)
    return times, wild


def _from_numbers(
    array: pa.Array, plan: TimePlan, state: TimeState
) -> tuple[Integers, NDArray[np.bool_]]:
    bad = np.zeros(len(array), dtype=bool)
    whole: Integers | None = None
    if pa.types.is_dictionary(array.type):
        array = array.cast(array.type.value_type)
    if pa.types.is_string(array.type) or pa.types.is_large_string(array.type):
        try:
            array = array.cast(pa.int64())
        except pa.ArrowInvalid:
            array, bad = text_numbers(array, plan.decimal_comma)
    missing = np.asarray(array.is_null().to_numpy(zero_copy_only=False))
    if pa.types.is_integer(array.type) and not pa.types.is_uint64(array.type):
        whole = array.cast(pa.int64()).fill_null(0).to_numpy(zero_copy_only=False)
        step = round(plan.step)
        if float(step) == plan.step:
            most = int(np.iinfo(np.int64).max // max(step, 1)) - abs(plan.origin) // max(step, 1)
            wild = np.abs(whole) > most
            with np.errstate(over="ignore"):
                times = whole * step + plan.origin
            times[missing | wild] = NO_TIME
            return _rolled(times, plan, state), bad | (wild & ~missing)
    values = np.asarray(array.cast(pa.float64(), safe=False).to_numpy(zero_copy_only=False))
    missing = missing | ~np.isfinite(values)
    # a double holds today's epoch seconds to some 0.2 µs: rounding to 1 µs gives back what was written
    with np.errstate(invalid="ignore", over="ignore"):
        micros = np.round(np.where(missing, 0.0, values) * (plan.step / 1000.0))
        wild = np.abs(micros) > 9e15
        times = np.where(wild, 0.0, micros).astype(np.int64) * 1000 + plan.origin
    times[missing | wild] = NO_TIME
    return _rolled(times, plan, state), bad | (wild & ~missing)


def _rolled(times: Integers, plan: TimePlan, state: TimeState) -> Integers:
    """Add a day wherever a count within the day starts again at midnight."""
    if not plan.rolls_over:
        return times
    known = times != NO_TIME
    kept = times[known].astype(np.float64)
    if not len(kept):
        return times
    before = np.concatenate([[state.last if np.isfinite(state.last) else kept[0]], kept[:-1]])
    days = state.added + np.cumsum(kept - before < -0.5 * DAY_NS)
    state.last, state.added = float(kept[-1]), int(days[-1])
    out = times.copy()
    out[known] = times[known] + days.astype(np.int64) * DAY_NS
    return out


def text_numbers(
    array: pa.Array, decimal_comma: bool = False
) -> tuple[pa.Array, NDArray[np.bool_]]:
    """Numbers out of texts: float64 with nulls, and where a cell is no number. Empty cells are null."""
    trimmed = pc.utf8_trim_whitespace(array.cast(pa.string()))
    trimmed = pc.if_else(
        pc.is_in(pc.utf8_lower(trimmed), _NOTHING), pa.scalar(None, pa.string()), trimmed
    )
    if decimal_comma:
        trimmed = pc.replace_substring(trimmed, ",", ".")
    try:
        return trimmed.cast(pa.float64()), np.zeros(len(array), dtype=bool)
    except pa.ArrowInvalid:
        pass
    good = pc.match_substring_regex(trimmed, r"^[+-]?(\d+\.?\d*|\.\d+)([eEdD][+-]?\d{1,3})?$")
    bad = pc.fill_null(pc.invert(good), False).to_numpy(zero_copy_only=False)
    kept = pc.if_else(pc.fill_null(good, False), trimmed, pa.scalar(None, pa.string()))
    kept = pc.replace_substring_regex(kept, "[dD]", "e")
    kept = pc.replace_substring_regex(kept, r"^\+", "")
    try:
        return kept.cast(pa.float64()), np.asarray(bad)
    except pa.ArrowInvalid:
        values = [None if t is None else float(t) for t in kept.to_pylist()]
        return pa.array(values, pa.float64()), np.asarray(bad)


NOTHING = (
    "",
    "nan",
    "null",
    "none",
    "n/a",
    "na",
    "#n/a",
    "-",
    "--",
    "---",
    "*",
    "**",
    "***",
    "****",
    "nil",
    "inf",
    "-inf",
    "-nan",
    "missing",
    "no data",
    "nodata",
    "?",
    "-nan(ind)",
    "1.#qnan",
    "-1.#ind",
)
"""Texts that stand for no value, in lower case."""
_NOTHING = pa.array(NOTHING)


def _anonymous(pattern: str) -> str:
    return re.sub(r"\?P<\w+>", "", pattern)


def _from_texts(
    array: pa.Array, form: str, zone: str, state: TimeState
) -> tuple[Integers, NDArray[np.bool_]]:
    if pa.types.is_dictionary(array.type):
        codes = array.indices.fill_null(-1).to_numpy(zero_copy_only=False)
        times, bad = _from_texts(array.dictionary, form, zone, state)
        times = np.concatenate([times, [NO_TIME]])
        bad = np.concatenate([bad, [False]])
        return times[codes], bad[codes]
    if form in ("ymd", "ymd1"):
        for kind in (pa.timestamp("ns", "UTC"), pa.timestamp("ns")):
            try:
                return _from_instants(array.cast(kind), zone, state)
            except pa.ArrowInvalid:
                continue
    count = len(array)
    times = np.full(count, NO_TIME, dtype=np.int64)
    trimmed = pc.utf8_trim_whitespace(array.cast(pa.string()))
    empty = pc.or_(trimmed.is_null(), pc.is_in(pc.utf8_lower(trimmed), _NOTHING))
    left = ~empty.to_numpy(zero_copy_only=False)
    forms = [form, *(f for f in ("ymd", "ymd1", "packed", "month", "doy") if f != form)]
    for one in forms:
        if not left.any():
            break
        where = np.flatnonzero(left)
        some = trimmed.take(pa.array(where))
        found = pc.extract_regex(some, _PATTERNS[one])
        hit = np.asarray(pc.fill_null(found.is_valid(), False).to_numpy(zero_copy_only=False))
        if not hit.any():
            continue
        chosen = where[hit]
        values, right = _civil(found.filter(pa.array(hit)), zone, state)
        times[chosen[right]] = values[right]
        left[chosen[right]] = False
    return times, left


def _civil(
    groups: pa.StructArray, zone: str, state: TimeState
) -> tuple[Integers, NDArray[np.bool_]]:
    """Instants out of the named groups of a pattern, and where they are a date at all."""
    names = [groups.type.field(i).name for i in range(groups.type.num_fields)]
    count = len(groups)

    def number(name: str, default: int) -> Integers:
        if name not in names:
            return np.full(count, default, dtype=np.int64)
        texts = pc.if_else(pc.equal(groups.field(name), ""), str(default), groups.field(name))
        return np.asarray(texts.cast(pa.int64()).to_numpy(zero_copy_only=False)).astype(np.int64)

    year, day = number("y", 1970), number("d", 1)
    if "n" in names:
        month_of = {m: i + 1 for i, m in enumerate(_MONTHS)}
        month = np.array([month_of.get(t[:3].lower(), 0) for t in groups.field("n").to_pylist()])
    else:
        month = number("m", 1)
    hour, minute, second = number("H", 0), number("M", 0), number("S", 0)
    right = (year >= 1) & (month >= 1) & (month <= 12) & (day >= 1) & (day <= 31)
    right &= (hour <= 24) & (minute <= 59) & (second <= 60)
    safe_month = np.where(right, month, 1)
    months = (np.where(right, year, 1970) - 1970) * 12 + safe_month - 1
    first = months.astype("datetime64[M]").astype("datetime64[D]").astype(np.int64)
    length = (months + 1).astype("datetime64[M]").astype("datetime64[D]").astype(np.int64) - first
    right &= day <= length
    days = first + day - 1
    if "j" in names:
        of_year = number("j", 1)
        right &= (of_year >= 1) & (of_year <= 366)
        days = first + of_year - 1
    if "p" in names:
        half = np.array([(t or "").lower()[:1] for t in groups.field("p").to_pylist()])
        hour = np.where((half == "p") & (hour < 12), hour + 12, hour)
        hour = np.where((half == "a") & (hour == 12), 0, hour)
    fraction = np.zeros(count, dtype=np.int64)
    if "f" in names:
        digits = pc.utf8_slice_codeunits(pc.utf8_rpad(groups.field("f"), 9, "0"), 0, 9)
        fraction = np.asarray(digits.cast(pa.int64()).to_numpy(zero_copy_only=False))
    state.leap_seconds += int(np.sum(right & (second == 60)))
    with np.errstate(over="ignore"):
        right &= np.abs(days) < 100_000
        seconds = np.where(right, days, 0) * 86400 + hour * 3600 + minute * 60 + second
        local = seconds * SECOND_NS + fraction
    if "z" not in names:
        return _to_utc(local, zone, state), right
    zones = groups.field("z").to_pylist()
    naive = np.array([not z for z in zones])
    shifts = np.array([_shift(z) for z in zones], dtype=np.int64)
    utc = local - shifts
    if naive.any():
        utc[naive] = _to_utc(local[naive], zone, state)
    return utc, right


def _shift(zone: str) -> int:
    if not zone or zone[0] not in "+-":
        return 0
    digits = zone[1:].replace(":", "")
    seconds = int(digits[:2]) * 3600 + (int(digits[2:4]) * 60 if len(digits) >= 4 else 0)
    return (-seconds if zone[0] == "-" else seconds) * SECOND_NS


def _to_utc(local: Integers, zone: str, state: TimeState) -> Integers:
    """Local times to UTC. A time that occurs twice in autumn is taken as its first occurrence."""
    if zone == "UTC":
        return local
    if zone[0] in "+-":
        return np.where(local == NO_TIME, NO_TIME, local - _shift(zone))
    known = local != NO_TIME
    # offsets change on quarter hours at most
    quarter = 900 * SECOND_NS
    slots, places = np.unique(local[known] // quarter, return_inverse=True)
    place = ZoneInfo(zone)
    offsets = np.empty(len(slots), dtype=np.int64)
    for i, slot in enumerate(slots.tolist()):
        if slot not in state.offsets:
            try:
                moment = datetime(1970, 1, 1) + timedelta(seconds=slot * 900)
                shift = moment.replace(tzinfo=place).utcoffset() or timedelta(0)
                state.offsets[slot] = int(shift.total_seconds()) * SECOND_NS
            except OverflowError:
                state.offsets[slot] = 0
        offsets[i] = state.offsets[slot]
    out = local.copy()
    out[known] = local[known] - offsets[places]
    return out


def _from_parts(
    plan: TimePlan, arrays: list[pa.Array], state: TimeState
) -> tuple[Integers, NDArray[np.bool_]]:
    by_role = {b.role: a for b, a in zip(plan.bindings, arrays, strict=True)}
    count = len(arrays[0])
    bad = np.zeros(count, dtype=bool)
    missing = np.zeros(count, dtype=bool)

    def number(role: str, default: float) -> NDArray[np.float64]:
        nonlocal bad, missing
        if role not in by_role:
            return np.full(count, default)
        array = by_role[role]
        if pa.types.is_dictionary(array.type):
            array = array.cast(array.type.value_type)
        if pa.types.is_string(array.type) or pa.types.is_large_string(array.type):
            array, wrong = text_numbers(array, plan.decimal_comma)
            bad |= wrong
        values = np.asarray(array.cast(pa.float64(), safe=False).to_numpy(zero_copy_only=False))
        missing |= ~np.isfinite(values)
        return np.where(np.isfinite(values), values, default)

    if "date" in by_role:
        date = by_role["date"]
        if pa.types.is_date(date.type) or pa.types.is_timestamp(date.type):
            naive = date.cast(pa.timestamp("ns", getattr(date.type, "tz", None)))
            day_start, wrong = _from_instants(naive, "UTC", state)
        else:
            day_start, wrong = _from_texts(date.cast(pa.string()), plan.text_form, "UTC", state)
        bad |= wrong
        missing |= (day_start == NO_TIME) & ~wrong
        day_start = np.where(day_start == NO_TIME, 0, day_start // DAY_NS * DAY_NS)
    else:
        year = number("year", 1970.0)
        if "day_of_year" in by_role:
            month, day = np.ones(count), number("day_of_year", 1.0)
            right = (day >= 1) & (day < 367)
        else:
            month, day = number("month", 1.0), number("day", 1.0)
            right = (month >= 1) & (month <= 12) & (day >= 1) & (day < 32)
        right &= (year >= 1900) & (year < 2200)
        bad |= ~right & ~missing
        months = (np.where(right, year, 1970) - 1970) * 12 + np.where(right, month, 1) - 1
        first = (
            months.astype(np.int64).astype("datetime64[M]").astype("datetime64[D]").astype(np.int64)
        )
        day = np.where(right, day, 1.0)
        whole_day = np.floor(day)
        day_start = (first + whole_day.astype(np.int64) - 1) * DAY_NS
        if "day_of_year" in by_role and not set(by_role) & {
            "hour",
            "seconds_of_day",
            "time_of_day",
        }:
            day_start = day_start + np.round((day - whole_day) * 86400e6).astype(np.int64) * 1000
    clock_name = "time_of_day" if "time_of_day" in by_role else "time" if "time" in by_role else ""
    if clock_name:
        clock = by_role[clock_name]
        if pa.types.is_time(clock.type):
            within = np.asarray(
                clock.cast(pa.time64("ns"))
                .cast(pa.int64())
                .fill_null(-1)
                .to_numpy(zero_copy_only=False)
            )
            missing |= within < 0
        else:
            within, wrong = _from_texts(clock.cast(pa.string()), "clock", "UTC", state)
            bad |= wrong
            missing |= (within == NO_TIME) & ~wrong
            within = np.where(within == NO_TIME, 0, within)
    elif "seconds_of_day" in by_role:
        seconds = number("seconds_of_day", 0.0)
        unit = next((b.unit for b in plan.bindings if b.role == "seconds_of_day"), "")
        found = unit_of(unit, SECOND) if unit else None
        if found is not None:
            seconds = found.to_si(seconds)
        wrong = (seconds < 0) | (seconds > 2 * 86400)
        bad |= wrong
        within = np.round(np.where(wrong, 0.0, seconds) * 1e6).astype(np.int64) * 1000
        within = _rolled_in_day(within, day_start, ~(bad | missing), state)
    else:
        hour, minute, second = number("hour", 0.0), number("minute", 0.0), number("second", 0.0)
        wrong = (
            (hour < 0) | (hour > 24) | (minute < 0) | (minute >= 60) | (second < 0) | (second >= 61)
        )
        bad |= wrong
        total = np.where(wrong, 0.0, hour * 3600 + minute * 60 + second)
        within = np.round(total * 1e6).astype(np.int64) * 1000
    times = _to_utc(day_start + within, plan.zone, state)
    times[bad | missing] = NO_TIME
    return times, bad & ~missing


def _rolled_in_day(
    within: Integers, day_start: Integers, known: NDArray[np.bool_], state: TimeState
) -> Integers:
    """Add a day where seconds of day start again while the date stays: a date that is only the start's."""
    seconds, days = within[known].astype(np.float64), day_start[known].astype(np.float64)
    if not len(seconds):
        return within
    first = np.isfinite(state.last)
    before = np.concatenate([[state.last if first else seconds[0]], seconds[:-1]])
    before_day = np.concatenate([[state.last_day if first else days[0]], days[:-1]])
    fell = (seconds - before < -0.5 * DAY_NS) & (days == before_day)
    # a date that moves on by itself ends the counting
    moved = days != before_day
    added = np.empty(len(seconds), dtype=np.int64)
    running = state.added
    if not fell.any() and not moved.any():
        added[:] = running
    else:
        for i in range(len(seconds)):
            if moved[i]:
                running = 0
            elif fell[i]:
                running += 1
            added[i] = running
    state.last, state.last_day, state.added = float(seconds[-1]), float(days[-1]), int(added[-1])
    out = within.copy()
    out[known] = within[known] + added * DAY_NS
    return out


_DECADES = (60 * SECOND_NS, *(10**n for n in range(9, -1, -1)))
_MEASURED = 200_000
"""Times that the clock's step is measured on."""


def resolution(times: Integers, written: int = 0) -> int:
    """The clock's step: what the times of one channel are given to.

    Parameters
    ----------
    times : ndarray of int64
        Nanoseconds, in ping order.
    written : int
        The step of the last digit that is written, in ns; 0 where that is not known.

    Returns
    -------
    int
        The greatest of 1 min, 1 s, 0.1 s, ... that the usual intervals are multiples of, in ns. Pings at one steady
        interval tell nothing of the clock: then it is ``written``.

    Examples
    --------
    >>> resolution(np.array([0, 0, 0, 1, 1, 1, 2]) * 1_000_000_000)
    1000000000
    >>> resolution(np.arange(50) * 200_000_000, written=1_000_000)
    1000000
    """
    gaps = np.abs(np.diff(times[times != NO_TIME][:_MEASURED]))
    if not len(gaps):
        return written
    values, counts = np.unique(gaps, return_counts=True)
    usual = values[counts >= 0.01 * counts.max()]
    moving = usual[usual > 0]
    if not len(moving):
        return written
    step = int(np.gcd.reduce(moving))
    if len(moving) == len(usual) and not _ticks(gaps, moving, step):
        return written
    return max(written, next((decade for decade in _DECADES if step % decade == 0), 1))


def _ticks(gaps: Integers, moving: Integers, step: int) -> bool:
    """Whether intervals show the clock's own step, and not only a steady ping rate with pings left out."""
    if int(moving.min()) == step:
        return float((gaps == step).mean()) < 0.9
    if len(moving) > 2:
        return True
    # two intervals that take turns are a sonar's, two next to each other without order a clock's
    turns = float((gaps[2:] == gaps[:-2]).mean()) if len(gaps) > 4 else 1.0
    return int(moving.max() - moving.min()) == step and turns < 0.9


def written_step(texts: list[str], unit: float = SECOND_NS) -> int:
    """The step of the last digit that texts of times or numbers hold, in ns; 0 where there are none.

    Examples
    --------
    >>> written_step(["2026-05-04T10:00:00.25Z", "2026-05-04T10:00:01Z"])
    10000000
    """
    # A wrecked cell may be of any length; its end tells as much.
    found = [re.search(r"\d[.,](\d+)\s*\D*?(?:[+-]\d\d:?\d\d)?$", t[-60:]) for t in texts[:2000]]
    if not found:
        return 0
    digits = max(len(m[1]) if m else 0 for m in found)
    return max(1, round(unit / float(10**digits)))


def iso(time: int) -> str:
    """An instant as ISO 8601, UTC."""
    moment = datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=int(time) // 1000)
    return moment.strftime("%Y-%m-%dT%H:%M:%S.%f").rstrip("0").rstrip(".") + "Z"


__all__ = [
    "EARLIEST",
    "LATEST",
    "NOTHING",
    "Any",
    "NoTimeError",
    "TimePlan",
    "TimeState",
    "convert_times",
    "iso",
    "plan_times",
    "resolution",
    "text_numbers",
]
