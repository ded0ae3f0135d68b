"""One survey in many formats gives one set of findings, and tables in any dialect are read back as they were written."""

from __future__ import annotations

import datetime as dt
import gzip
import random
from collections.abc import Callable
from decimal import Decimal
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import qa
from qa.ingest import open_line, plan_logs, read_log
from qa.model.survey_file import SurveyFile

PINGS, BEAMS = 90, 15
PING_COLUMNS = ("time", "ping", "pulse_length", "latitude", "longitude", "roll")
BEAM_COLUMNS = ("beam_angle", "depth", "accepted")
UNITS = {
    "pulse_length": "us",
    "latitude": "deg",
    "longitude": "deg",
    "roll": "deg",
    "beam_angle": "deg",
    "depth": "m",
}


def made_line(number: int) -> dict[str, list[Any]]:
    """One row per ping; beam columns hold a list each. Every value has the digits that a text log carries."""
    lottery = random.Random(number)
    angles = [round(-63 + 9.0 * i, 1) for i in range(BEAMS)]
    line: dict[str, list[Any]] = {name: [] for name in (*PING_COLUMNS, *BEAM_COLUMNS)}
    when = dt.datetime(2026, 5, 4, 8 + number, tzinfo=dt.UTC)
    for i in range(PINGS):
        line["time"].append(when)
        when += dt.timedelta(milliseconds=lottery.choice((199, 200, 201)))
        if number == 1 and 40 <= i < 52:
            when += dt.timedelta(milliseconds=900)
        line["ping"].append(1000 + i)
        line["pulse_length"].append(2500.0 if number == 2 and 20 <= i < 35 else 80.0)
        line["latitude"].append(round(38.7 + 4e-6 * i, 7))
        line["longitude"].append(round(-9.2 + 1e-6 * i, 7))
        line["roll"].append(round(lottery.uniform(-4, 4), 2))
        line["beam_angle"].append(angles)
        line["depth"].append([round(20 + lottery.uniform(0, 0.4), 2) for _ in range(BEAMS)])
        line["accepted"].append([not (i == 60 and b < 6) for b in range(BEAMS)])
    return line


def stamp(when: dt.datetime) -> str:
    return when.strftime("%Y-%m-%dT%H:%M:%S.") + f"{when.microsecond // 1000:03d}Z"


def cell(name: str, value: Any) -> str:
    if name == "time":
        return stamp(value)
    return str(int(value)) if isinstance(value, bool) else repr(value)


def header(name: str) -> str:
    return f"{name} ({UNITS[name]})" if name in UNITS else name


def long_rows(line: dict[str, list[Any]]) -> list[dict[str, Any]]:
    return [
        {
            **{name: line[name][i] for name in PING_COLUMNS},
            "beam": b + 1,
            **{name: line[name][i][b] for name in BEAM_COLUMNS},
        }
        for i in range(PINGS)
        for b in range(BEAMS)
    ]


def write_csv_long(path: Path, line: dict[str, list[Any]], order: random.Random | None) -> None:
    rows = long_rows(line)
    names = list(rows[0])
    if order is not None:
        order.shuffle(rows)
        order.shuffle(names)
    text = "".join(",".join(cell(n, row[n]) for n in names) + "\n" for row in rows)
    head = ",".join(map(header, names)) + "\n"
    path.with_suffix(".csv").write_text(head + text, encoding="utf-8", newline="")


def write_csv_wide(path: Path, line: dict[str, list[Any]], order: random.Random | None) -> None:
    cells: dict[str, list[str]] = {header(n): [cell(n, v) for v in line[n]] for n in PING_COLUMNS}
    for name in BEAM_COLUMNS:
        for b in range(BEAMS):
            unit = f" ({UNITS[name]})" if name in UNITS else ""
            cells[f"{name}_{b + 1:03d}{unit}"] = [cell(name, v[b]) for v in line[name]]
    names, rows = list(cells), list(range(PINGS))
    if order is not None:
        order.shuffle(names)
        order.shuffle(rows)
    text = ";".join(names) + "\n"
    text += "".join(";".join(cells[n][i] for n in names) + "\n" for i in rows)
    path.with_suffix(".csv").write_text(text, encoding="utf-8", newline="")


def field(name: str, kind: pa.DataType) -> pa.Field:
    return pa.field(name, kind, metadata={"units": UNITS[name]} if name in UNITS else None)


KINDS = {
    "time": pa.timestamp("us", "UTC"),
    "ping": pa.int64(),
    "beam": pa.int32(),
    "accepted": pa.bool_(),
}


def parquet_long(number_type: pa.DataType) -> Callable[..., None]:
    def write(path: Path, line: dict[str, list[Any]], order: random.Random | None) -> None:
        rows = long_rows(line)
        names = list(rows[0])
        if order is not None:
            order.shuffle(rows)
            order.shuffle(names)
        schema = pa.schema([field(n, KINDS.get(n, number_type)) for n in names])
        table = pa.Table.from_pylist(rows, schema)
        pq.write_table(table, path.with_suffix(".parquet"), row_group_size=200)

    return write


def parquet_lists(number_type: pa.DataType) -> Callable[..., None]:
    def write(path: Path, line: dict[str, list[Any]], order: random.Random | None) -> None:
        names, rows = [*PING_COLUMNS, *BEAM_COLUMNS], list(range(PINGS))
        if order is not None:
            order.shuffle(names)
            order.shuffle(rows)
        fields = [
            field(n, pa.list_(KINDS.get(n, number_type)) if n in BEAM_COLUMNS else KINDS.get(n, pa.float64()))
            for n in names
        ]  # fmt: skip
        columns = {n: [line[n][i] for i in rows] for n in names}
        pq.write_table(
            pa.table(columns, pa.schema(fields)), path.with_suffix(".parquet"), row_group_size=40
        )

    return write


FORMATS: dict[str, Callable[[Path, dict[str, list[Any]], random.Random | None], None]] = {
    "csv wide": write_csv_wide,
    "parquet long": parquet_long(pa.float64()),
    "parquet lists": parquet_lists(pa.float64()),
}
SURVEY = """
[survey]
name = "One survey"
[sonar]
kind = "multibeam"
frequency = "300 kHz"
beamwidth_along = "1.0 deg"
beamwidth_across = "1.0 deg"
transducer_depth = "0.8 m"
[water]
sound_speed = "1490 m/s"
[limits]
target_size = "1 m"
hits_required = 3
"""


def audited(
    folder: Path,
    write: Callable[[Path, dict[str, list[Any]], random.Random | None], None],
    order: random.Random | None = None,
) -> dict[str, Any]:
    logs = folder / "logs"
    logs.mkdir(parents=True)
    for number in (1, 2):
        write(logs / f"line_{number}", made_line(number), order)
    survey = folder / "survey.toml"
    survey.write_text(SURVEY, encoding="utf-8")
    return without_files(qa.audit([logs], survey=survey).to_dict())


def without_files(findings: dict[str, Any]) -> dict[str, Any]:
    """Findings without what is of the files and not of the survey."""
    for line in findings["lines"]:
        line["files"] = line["notes"] = None
        line.pop("recognised", None)
    return {k: findings[k] for k in ("verdict", "rules", "lines", "sections", "assumptions")}


@pytest.fixture(scope="module")
def plain(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """The findings of the survey as CSV of one row per beam, in order."""
    return audited(tmp_path_factory.mktemp("plain"), write_csv_long)


def test_the_survey_has_faults_of_several_kinds(plain: dict[str, Any]) -> None:
    assert {s["line"] for s in plain["sections"]} == {"line_1", "line_2"}
    assert len({s["rule"] for s in plain["sections"]}) >= 3


@pytest.mark.parametrize("form", FORMATS)
def test_every_format_gives_the_same_findings(
    form: str, plain: dict[str, Any], tmp_path: Path
) -> None:
    assert audited(tmp_path, FORMATS[form]) == plain


@pytest.mark.parametrize("form", ["csv long", *FORMATS])
def test_shuffled_rows_and_columns_give_the_same_findings(
    form: str, plain: dict[str, Any], tmp_path: Path
) -> None:
    write = write_csv_long if form == "csv long" else FORMATS[form]
    assert audited(tmp_path, write, random.Random(7)) == plain


@pytest.mark.parametrize("write", [parquet_long(pa.float32()), parquet_lists(pa.float32())])
def test_single_precision_gives_the_same_sections_and_numbers_to_its_digits(
    write: Callable[..., None], plain: dict[str, Any], tmp_path: Path
) -> None:
    # positions in single precision are no positions: they are not what is compared
    found = audited(tmp_path, write)
    rules = {"range-resolution", "ping-gap", "echo-in-time", "beam-loss"}
    for one, other in zip(
        [s for s in found["sections"] if s["rule"] in rules],
        [s for s in plain["sections"] if s["rule"] in rules],
        strict=True,
    ):
        for key in ("line", "channel", "rule", "first_ping", "last_ping", "start", "end", "pings"):
            assert one[key] == other[key]
        for key in ("worst", "limit"):
            assert one[key] == pytest.approx(other[key], rel=1e-6)


# Tables in any dialect

WORDS = {
    "depth": ("Depth", "water depth", "DEPTH", "waterDepth", "Bottom_Depth", "depth corrected"),
    "pulse_length": ("Pulse Length", "pulse duration", "PULSE_WIDTH", "pulseLength", "Tx Pulse Length"),
    "speed": ("Speed", "SOG", "speed over ground", "Ground_Speed", "vesselSpeed"),
    "frequency": ("Frequency", "freq", "Centre Frequency", "operating_frequency", "OperatingFreq"),
    "roll": ("Roll", "roll angle", "VESSEL_ROLL"),
    "temperature": ("Temperature", "water temp", "SST", "Water_Temperature"),
    "range_scale": ("Range Scale", "max range", "Range_Setting", "rangeScale"),
}  # fmt: skip
FACTORS: dict[str, dict[str, tuple[Decimal, Decimal]]] = {
    # SI = number · factor + offset: the foot, fathom and nautical mile by definition, the rest by prefix
    "depth": {
        "m": (Decimal(1), Decimal(0)),
        "ft": (Decimal("0.3048"), Decimal(0)),
        "fathom": (Decimal("1.8288"), Decimal(0)),
        "cm": (Decimal("0.01"), Decimal(0)),
    },
    "pulse_length": {
        "us": (Decimal("1e-6"), Decimal(0)),
        "µs": (Decimal("1e-6"), Decimal(0)),
        "ms": (Decimal("1e-3"), Decimal(0)),
        "s": (Decimal(1), Decimal(0)),
    },
    "speed": {
        "kt": (Decimal(1852) / Decimal(3600), Decimal(0)),
        "knots": (Decimal(1852) / Decimal(3600), Decimal(0)),
        "m/s": (Decimal(1), Decimal(0)),
        "km/h": (1 / Decimal("3.6"), Decimal(0)),
    },
    "frequency": {
        "kHz": (Decimal(1000), Decimal(0)),
        "Hz": (Decimal(1), Decimal(0)),
        "MHz": (Decimal(10) ** 6, Decimal(0)),
    },
    "roll": {
        "deg": (Decimal(1), Decimal(0)),
        "grad": (Decimal("0.9"), Decimal(0)),
        "rad": (Decimal("57.29577951308232087679815481410517"), Decimal(0)),
    },
    "temperature": {
        "degC": (Decimal(1), Decimal(0)),
        "°C": (Decimal(1), Decimal(0)),
        "K": (Decimal(1), Decimal("-273.15")),
        "degF": (Decimal(5) / 9, -Decimal(160) / 9),
    },
    "range_scale": {"m": (Decimal(1), Decimal(0)), "km": (Decimal(1000), Decimal(0))},
}
SI_RANGE = {
    "depth": ("2", "180"),
    "pulse_length": ("1e-5", "0.02"),
    "speed": ("0.5", "9"),
    "frequency": ("20e3", "700e3"),
    "roll": ("-20", "20"),
    "temperature": ("1", "28"),
    "range_scale": ("10", "500"),
}


def in_unit(role: str, unit: str, share: int, digits: int) -> tuple[str, float]:
    """A number as a log writes it, and what it is in SI, reckoned in decimals."""
    low, high = map(Decimal, SI_RANGE[role])
    factor, offset = FACTORS[role][unit]
    value = (low + (high - low) * share / 1000 - offset) / factor
    text = f"{value:.{digits + max(0, -value.adjusted())}f}"
    return text, float(Decimal(text) * factor + offset)


@st.composite
def tables(draw: st.DrawFn) -> dict[str, Any]:
    separator = draw(st.sampled_from([",", ";", "\t", "|", " "]))
    roles = ["depth", *draw(st.lists(st.sampled_from(sorted(set(WORDS) - {"depth"})), unique=True))]
    columns: list[tuple[str, str, list[str]]] = []
    wanted: dict[str, list[float]] = {}
    count = draw(st.integers(3, 12))
    encoding = draw(st.sampled_from(["utf-8", "utf-8-sig", "utf-16", "cp1252"]))
    for role in roles:
        unit = draw(st.sampled_from(sorted(FACTORS[role])))
        shares = draw(st.lists(st.integers(0, 1000), min_size=count, max_size=count))
        found = [in_unit(role, unit, share, draw(st.integers(1, 4))) for share in shares]
        columns.append((draw(st.sampled_from(WORDS[role])), unit, [text for text, _ in found]))
        wanted[role] = [value for _, value in found]
    start = draw(
        st.datetimes(dt.datetime(2001, 1, 1), dt.datetime(2029, 1, 1)).map(
            lambda t: t.replace(microsecond=0, tzinfo=dt.UTC)
        )
    )
    steps = draw(st.lists(st.integers(1, 5000), min_size=count, max_size=count))
    times = [start + dt.timedelta(milliseconds=int(ms)) for ms in np.cumsum(steps)]
    columns += draw(st.sampled_from([iso_times, offset_times, epoch_times, split_times]))(times)
    ping = draw(st.integers(0, 10**6))
    columns.append((draw(st.sampled_from(["Ping", "ping no", "Ping_Number", "PingCounter"])), "", [str(ping + i) for i in range(count)]))  # fmt: skip
    return {
        "separator": separator,
        "comma": separator in ";\t|" and draw(st.booleans()),
        "encoding": encoding,
        "line_end": draw(st.sampled_from(["\n", "\r\n"])),
        "packed": draw(st.booleans()),
        "quoted": separator != " " and draw(st.booleans()),
        "units": draw(st.sampled_from(["round", "square", "row", "after"])),
        "preamble": draw(st.sampled_from([(), ("# exported",), ("Survey of the outer roads", "")])),
        "columns": draw(st.permutations(columns)),
        "times": times,
        "pings": [ping + i for i in range(count)],
        "wanted": wanted,
    }


Columns = list[tuple[str, str, list[str]]]


def iso_times(times: list[dt.datetime]) -> Columns:
    return [("time", "", [stamp(t) for t in times])]


def offset_times(times: list[dt.datetime]) -> Columns:
    zone = dt.timezone(dt.timedelta(hours=-3, minutes=-30))
    return [("Date/Time", "", [t.astimezone(zone).isoformat(timespec="milliseconds") for t in times])]  # fmt: skip


def epoch_times(times: list[dt.datetime]) -> Columns:
    epoch = dt.datetime(1970, 1, 1, tzinfo=dt.UTC)
    return [("UnixTime", "ms", [str((t - epoch) // dt.timedelta(milliseconds=1)) for t in times])]


def split_times(times: list[dt.datetime]) -> Columns:
    return [
        ("Date", "", [t.strftime("%Y-%m-%d") for t in times]),
        ("Time", "", [stamp(t)[11:-1] for t in times]),
    ]


def written(table: dict[str, Any]) -> bytes:
    separator, columns = table["separator"], table["columns"]

    def name(word: str, unit: str) -> str:
        form = {"round": "{} ({})", "square": "{} [{}]", "row": "{}", "after": "{}_{}"}[
            table["units"]
        ]
        text = form.format(word, unit) if unit else word
        return text.replace(" ", "_") if separator == " " else text

    def row(cells: list[str], numbers: bool = False) -> str:
        if table["comma"] and numbers:
            cells = [c.replace(".", ",") if is_number(c) else c for c in cells]
        if table["quoted"]:
            cells = [f'"{c}"' for c in cells]
        return separator.join(cells)

    lines = [*table["preamble"], row([name(word, unit) for word, unit, _ in columns])]
    if table["units"] == "row":
        lines.append(row([unit or "-" for _, unit, _ in columns]))
    for i in range(len(table["pings"])):
        lines.append(row([texts[i] for _, _, texts in columns], numbers=True))
    data = (table["line_end"].join(lines) + table["line_end"]).encode(table["encoding"])
    return gzip.compress(data) if table["packed"] else data


def is_number(text: str) -> bool:
    return text.replace(".", "", 1).lstrip("-").isdigit()


@settings(
    max_examples=250, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(table=tables())
def test_a_table_in_any_dialect_is_read_back_equal(table: dict[str, Any], tmp_path: Path) -> None:
    path = tmp_path / ("log.csv.gz" if table["packed"] else "log.csv")
    path.write_bytes(written(table))
    found = read_log(path)
    assert found.column("ping").to_pylist() == table["pings"]
    nanoseconds = found.column("time").cast(pa.int64()).to_pylist()
    epoch = dt.datetime(1970, 1, 1, tzinfo=dt.UTC)
    assert nanoseconds == [
        (t - epoch) // dt.timedelta(microseconds=1) * 1000 for t in table["times"]
    ]
    for role, values in table["wanted"].items():
        np.testing.assert_allclose(
            found.column(role).to_numpy(), values, rtol=1e-12, atol=1e-12 if role != "temperature" else 1e-9
        )  # fmt: skip
    (task,) = plan_logs([path], SurveyFile()).lines
    (account,) = open_line(task, SurveyFile()).accounts()
    assert (account.rows_read, account.rows_used) == (len(table["pings"]), len(table["pings"]))
