"""Times in any form come to the nanosecond that Python's datetime and zoneinfo give, and the clock's step is measured."""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.ingest import open_line, plan_logs
from qa.ingest.names import Binding
from qa.ingest.times import TimeState, convert_times, plan_times, resolution, written_step
from qa.model.errors import InputError
from qa.model.survey_file import SurveyFile

EPOCH = dt.datetime(1970, 1, 1, tzinfo=dt.UTC)
MS = 1_000_000
moments = st.lists(
    st.datetimes(dt.datetime(1991, 1, 1), dt.datetime(2099, 12, 30)).map(
        lambda t: t.replace(microsecond=t.microsecond // 1000 * 1000, tzinfo=dt.UTC)
    ),
    min_size=1,
    max_size=8,
)


def nanoseconds(when: dt.datetime) -> int:
    return (when - EPOCH) // dt.timedelta(microseconds=1) * 1000


def read(zone: str = "UTC", stated: str = "", **columns: pa.Array) -> list[int]:
    bindings = tuple(Binding(role, role, i) for i, role in enumerate(columns))
    plan = plan_times(bindings, columns, zone, "log.csv", stated)
    times, bad = convert_times(plan, columns, TimeState())
    assert not bad.any()
    found: list[int] = times.tolist()
    return found


def milliseconds(when: dt.datetime) -> str:
    return f"{when.microsecond // 1000:03d}"


FORMS: dict[str, Callable[[dt.datetime], str]] = {
    "ISO 8601, Z": lambda t: t.strftime("%Y-%m-%dT%H:%M:%S.") + milliseconds(t) + "Z",
    "ISO 8601, offset": lambda t: t.astimezone(
        dt.timezone(dt.timedelta(hours=5, minutes=45))
    ).isoformat(timespec="milliseconds"),
    "a space between": lambda t: t.strftime("%Y-%m-%d %H:%M:%S.") + milliseconds(t),
    "slashes": lambda t: t.strftime("%Y/%m/%d %H:%M:%S.") + milliseconds(t),
    "one digit": lambda t: f"{t.year}-{t.month}-{t.day} {t:%H:%M:%S}.{milliseconds(t)}",
    "a comma before the fraction": lambda t: t.strftime("%Y-%m-%d %H:%M:%S,") + milliseconds(t),
    "names of months": lambda t: (
        f"{t.day:02d}-{['Jan', 'Feb', 'Mar', 'Apr', 'May', 'Jun', 'Jul', 'Aug', 'Sep', 'Oct', 'Nov', 'Dec'][t.month - 1]}-{t.year} "
        f"{t:%H:%M:%S}.{milliseconds(t)}"
    ),
    "day of year": lambda t: t.strftime("%Y-%jT%H:%M:%S.") + milliseconds(t),
    "no marks": lambda t: t.strftime("%Y%m%dT%H%M%S.") + milliseconds(t),
    "dots, day first": lambda t: t.strftime("%d.%m.%Y %H:%M:%S.") + milliseconds(t),
}


@pytest.mark.parametrize("form", FORMS)
@settings(max_examples=80, deadline=None)
@given(times=moments)
def test_texts_are_read_as_datetime_wrote_them(form: str, times: list[dt.datetime]) -> None:
    found = read(time=pa.array([FORMS[form](t) for t in times]))
    assert found == [nanoseconds(t) for t in times]


@pytest.mark.parametrize(("unit", "per_second"), [("s", 1), ("ms", 10**3), ("us", 10**6), ("ns", 10**9)])  # fmt: skip
@settings(max_examples=40, deadline=None)
@given(seconds=st.lists(st.integers(700_000_000, 4_000_000_000), min_size=1, max_size=8))
def test_counts_since_1970_are_told_by_their_size(
    unit: str, per_second: int, seconds: list[int]
) -> None:
    found = read(time=pa.array([s * per_second for s in seconds]))
    assert found == [s * 10**9 for s in seconds]
    assert read(time=pa.array([str(s * per_second) for s in seconds])) == found


@settings(max_examples=60, deadline=None)
@given(times=moments)
def test_parts_of_a_time_come_together(times: list[dt.datetime]) -> None:
    wanted = [nanoseconds(t) for t in times]
    date = pa.array([t.strftime("%Y-%m-%d") for t in times])
    clock = pa.array([t.strftime("%H:%M:%S.") + milliseconds(t) for t in times])
    of_day = [
        (t - t.replace(hour=0, minute=0, second=0, microsecond=0)) / dt.timedelta(milliseconds=1)
        for t in times
    ]
    number = pa.array([float(t.second) + t.microsecond / 1e6 for t in times])
    year, day = pa.array([t.year for t in times]), pa.array([t.timetuple().tm_yday for t in times])
    assert read(date=date, time=clock) == wanted
    assert read(year=year, day_of_year=day, time=clock) == wanted
    assert (
        read(
            year=year,
            month=pa.array([t.month for t in times]),
            day=pa.array([t.day for t in times]),
            hour=pa.array([t.hour for t in times]),
            minute=pa.array([t.minute for t in times]),
            second=number,
        )
        == wanted
    )
    for ms, when in zip(of_day, times, strict=True):
        one = {"date": pa.array([when.strftime("%Y-%m-%d")]), "seconds_of_day": pa.array([ms / 1000])}  # fmt: skip
        assert read(**one) == [nanoseconds(when)]


@pytest.mark.parametrize("zone", ["Europe/Lisbon", "America/St_Johns", "Australia/Lord_Howe", "Asia/Tokyo"])  # fmt: skip
@settings(max_examples=60, deadline=None)
@given(local=st.lists(st.datetimes(dt.datetime(1991, 1, 1), dt.datetime(2037, 1, 1)), min_size=1, max_size=8))  # fmt: skip
def test_local_times_are_those_of_the_zone(zone: str, local: list[dt.datetime]) -> None:
    """The offsets are the time zone database's, by way of zoneinfo."""
    local = [t.replace(microsecond=0) for t in local]
    found = read(zone, time=pa.array([t.isoformat(" ") for t in local]))
    assert found == [nanoseconds(t.replace(tzinfo=ZoneInfo(zone)).astimezone(dt.UTC)) for t in local]  # fmt: skip


@pytest.mark.parametrize("text", ["26-05-04 10:00:00", "04/05/26 10:00", "4.5.26"])
def test_years_of_two_digits_are_refused_with_the_reason(text: str) -> None:
    with pytest.raises(InputError, match=r"two digits.*four digits"):
        read(time=pa.array([text]))


def test_seconds_of_day_go_over_midnight_twice() -> None:
    seconds = [86398.0, 86399.0, 1.0, 43200.0, 86399.5, 0.25]
    found = read(date=pa.array(["2026-05-04"] * 6), seconds_of_day=pa.array(seconds))
    start = nanoseconds(dt.datetime(2026, 5, 4, tzinfo=dt.UTC))
    days = [0, 0, 1, 1, 1, 2]
    assert found == [start + int((d * 86400 + s) * 1e9) for d, s in zip(days, seconds, strict=True)]


# The clock's step


@settings(max_examples=100, deadline=None)
@given(
    step=st.sampled_from([1000 * MS, 100 * MS, 10 * MS, MS, 1000]),
    seed=st.integers(0, 10**6),
    shift=st.integers(0, 10**9),
)
def test_a_clock_that_ticks_is_found_out_by_its_tick(step: int, seed: int, shift: int) -> None:
    """Pings at intervals of no order, stamped by a clock of one step."""
    lottery = np.random.default_rng(seed)
    true = np.cumsum(lottery.uniform(0.8, 7.0, 500) * step).astype(np.int64)
    assert resolution(true // step * step + shift) == step


@pytest.mark.parametrize("written", [0, MS])
def test_a_steady_ping_rate_tells_nothing_of_the_clock(written: int) -> None:
    steady = np.arange(300, dtype=np.int64) * 200 * MS
    assert resolution(steady, written) == written
    lost = np.delete(steady, [20, 50, 51, 200])
    assert resolution(lost, written) == written
    paired = np.cumsum(np.tile([200, 300], 100)).astype(np.int64) * MS
    assert resolution(paired, written) == written


def test_one_fine_stamp_among_coarse_ones_does_not_make_the_clock_fine() -> None:
    lottery = np.random.default_rng(3)
    times = np.cumsum(lottery.integers(0, 3, 1000)) * 1000 * MS
    times[500] += 123_457
    assert resolution(times, written=1) == 1000 * MS


def test_the_last_digit_bounds_what_can_be_measured() -> None:
    assert written_step(["10:00:00", "10:00:01"]) == 1000 * MS
    assert written_step(["2026-05-04T10:00:00.123456+02:00"]) == 1000
    assert written_step(["1777888800.5"], 1e9) == 100 * MS
    assert written_step(["1777888800500"], 1e6) == MS


def table_resolution(path: Path) -> tuple[float, list[str]]:
    (task,) = plan_logs([path], SurveyFile()).lines
    line = open_line(task, SurveyFile())
    return line.ping_table().time_resolution, line.accounts()[0].notes


def test_the_line_carries_the_step_of_its_clock_and_its_file_a_note(tmp_path: Path) -> None:
    path = tmp_path / "log.csv"
    head = "time,ping,depth (m)\n"
    times = [f"2026-05-04T10:00:{i * 3 // 10:02d}.000Z" for i in range(100)]
    path.write_text(head + "".join(f"{t},{i},10\n" for i, t in enumerate(times)), encoding="utf-8")
    step, notes = table_resolution(path)
    assert step == pytest.approx(1.0)
    assert "Times are given to 1 s." in notes
    fine = [f"2026-05-04T10:00:{i * 0.1999:09.6f}Z" for i in range(100)]
    path.write_text(head + "".join(f"{t},{i},10\n" for i, t in enumerate(fine)), encoding="utf-8")
    step, notes = table_resolution(path)
    assert step == pytest.approx(1e-6)
    assert not any("given to" in note for note in notes)


def test_a_clock_that_nothing_tells_of_has_no_step(tmp_path: Path) -> None:
    import pyarrow.parquet as pq

    path = tmp_path / "log.parquet"
    times = [1777888800.0 + 0.2 * i for i in range(50)]
    pq.write_table(pa.table({"time": times, "depth": [10.0] * 50}), path)
    step, notes = table_resolution(path)
    assert np.isnan(step)
    assert not any("given to" in note for note in notes)
