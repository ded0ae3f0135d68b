"""How the audit's cost compares with reading the log, and with the same checks in DuckDB, Polars and pandas.

python tests/bench/bench.py [--soundings 20000000] [--rounds 3] [--only parquet csv start]

Each contestant runs in a process of its own, in turn, round after round; its memory, with that of its children,
is measured from outside. Time is that of the work alone, imports left out, except under "start". All must agree on
the numbers for each ping: interval to the next, range resolution, and the greatest footprint along and across.
"""

from __future__ import annotations

import argparse
import json
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from importlib import import_module
from pathlib import Path
from typing import Any

import numpy as np
import psutil
import pyarrow as pa
import pyarrow.csv as pc
import pyarrow.parquet as pq

ROOT = Path(__file__).parents[2]
BEAMS = 400
GROUP = 1_000_000
CSV_SOUNDINGS = 2_000_000
SETTINGS = {
    "frequency": ("Hz", 300e3),
    "pulse_length": ("s", 60e-6),
    "range_scale": ("m", 150.0),
    "beamwidth_along": ("deg", 1.0),
    "beamwidth_across": ("deg", 1.0),
    "sound_speed": ("m/s", 1490.0),
}
READ = [
    "time",
    "ping",
    "beam",
    "beam_angle",
    "depth",
    "pulse_length",
    "range_scale",
    "beamwidth_along",
    "beamwidth_across",
    "sound_speed",
]
SURVEY = """
[survey]
depth_from = "transducer"
[sonar]
kind = "multibeam"
pulse_form = "CW"
[vessel]
speed = "4 kt"
[limits]
target_size = "2 m"
hits_required = 3
"""
SHEET = """
title = "Three checks"
[limits]
target_size = { unit = "m" }
hits_required = { unit = "1" }
[rule.ping-interval]
title = "Ping interval"
require = "ping_span >= listening_time"
[rule.range-resolution]
title = "Range resolution"
require = "range_resolution <= target_size"
[rule.along-resolution]
title = "Footprint along"
require = "footprint_along <= target_size"
[rule.across-resolution]
title = "Footprint across"
require = "footprint_across <= target_size"
"""


# The logs


def write_log(
    path: Path, soundings: int, jitter: float = 0.0, group: int = GROUP, start: int = 0
) -> None:
    """A line of pings of 400 beams over a gentle seabed, as Parquet; settings stand on each row.

    ``start`` counts days: lines of their own have times of their own.
    """
    random = np.random.default_rng(11)
    pings = soundings // BEAMS
    fan = np.linspace(-60.0, 60.0, BEAMS)
    steps = 0.25 + random.uniform(-0.03, 0.03, pings)
    stamps = 1_700_000_000_000_000 + start * 86_400_000_000
    stamps = stamps + np.cumsum((steps * 1e6).astype(np.int64))
    writer: Any = None
    gathered: list[pa.Table] = []
    for first in range(0, pings, 2500):
        n = min(2500, pings - first)
        height = 30.0 + 5.0 * np.sin((first + np.arange(n)) / 900.0)
        angle = np.tile(fan, (n, 1))
        if jitter:
            angle = angle + random.normal(0.0, jitter, angle.shape)
        depth = height[:, None] + random.normal(0.0, 0.05, angle.shape)
        columns = {
            "time": pa.array(
                np.repeat(stamps[first : first + n], BEAMS), pa.timestamp("us", "UTC")
            ),
            "ping": pa.array(np.repeat(np.arange(first, first + n), BEAMS)),
            "beam": pa.array(np.tile(np.arange(1, BEAMS + 1, dtype=np.int32), n)),
            "beam_angle": pa.array(angle.ravel()),
            "depth": pa.array(np.round(depth.ravel(), 3)),
        } | {name: pa.array(np.full(n * BEAMS, value)) for name, (_, value) in SETTINGS.items()}
        units = {"beam_angle": "deg", "depth": "m"} | {k: u for k, (u, _) in SETTINGS.items()}
        schema = pa.schema(
            pa.field(k, v.type, metadata={"units": units[k]} if k in units else None)
            for k, v in columns.items()
        )
        table = pa.table(columns, schema=schema)
        if path.suffix == ".csv":
            named = [f"{k} ({units[k]})" if k in units else k for k in table.column_names]
            with path.open("ab") as file:
                options = pc.WriteOptions(include_header=writer is None)
                pc.write_csv(table.rename_columns(named), file, options)
            writer = True
        else:
            writer = writer or pq.ParquetWriter(path, schema, compression="zstd")
            gathered.append(table)
            rows = sum(map(len, gathered))
            if rows >= group or first + n == pings:
                writer.write_table(pa.concat_tables(gathered), row_group_size=group)
                gathered = []
    if path.suffix != ".csv" and writer is not None:
        writer.close()


# The contestants: each returns four arrays, one value a ping, or nothing


def bare(path: Path) -> None:
    """The columns read and let go, batch after batch."""
    if path.suffix == ".csv":
        pc.read_csv(path)
        return
    for batch in pq.ParquetFile(path).iter_batches(131072, columns=READ):
        assert batch.num_rows


def whole_file(path: Path) -> None:
    """Every column at once, as one would without a thought for memory."""
    table = pc.read_csv(path) if path.suffix == ".csv" else pq.read_table(path)
    assert table.num_rows


SQL = """
with pings as (
  select ping, any_value(epoch_us(time)) as time,
    any_value({sound_speed}) as c, any_value({pulse_length}) as tau,
    max(2 * {depth} / cos(radians({beam_angle})) * tan(radians({beamwidth_along}) / 2)) as along,
    max({depth} * (tan(radians({beam_angle} + {beamwidth_across} / cos(radians({beam_angle})) / 2))
        - tan(radians({beam_angle} - {beamwidth_across} / cos(radians({beam_angle})) / 2)))) as across
  from {source} group by ping)
select (lead(time) over (order by ping) - time) / 1e6 as span, c * tau / 2 as resolution, along, across
from pings order by ping
"""


def _names(path: Path) -> dict[str, str]:
    units = {"beam_angle": "deg", "depth": "m"} | {k: u for k, (u, _) in SETTINGS.items()}
    return {n: f"{n} ({u})" if path.suffix == ".csv" else n for n, u in units.items()}


def in_duckdb(path: Path) -> list[np.ndarray]:
    import duckdb

    names = {k: f'"{v}"' for k, v in _names(path).items()}
    connection = duckdb.connect(config={"threads": 2})
    connection.execute("set timezone = 'UTC'")
    found = connection.execute(SQL.format(source=f"'{path}'", **names)).fetchnumpy()
    return [np.ma.filled(np.ma.asarray(found[k], dtype=float), np.nan) for k in found]


def in_polars(path: Path) -> list[np.ndarray]:
    import polars as pl

    c = {k: pl.col(v) for k, v in _names(path).items()}
    log = (
        pl.scan_csv(path, try_parse_dates=True) if path.suffix == ".csv" else pl.scan_parquet(path)
    )
    cosine = c["beam_angle"].radians().cos()
    half = c["beamwidth_across"] / cosine / 2
    outer, inner = (
        (c["beam_angle"] + half).radians().tan(),
        (c["beam_angle"] - half).radians().tan(),
    )
    along = 2 * c["depth"] / cosine * (c["beamwidth_along"].radians() / 2).tan()
    found = (
        log.group_by("ping")
        .agg(
            pl.col("time").first().dt.timestamp("us"),
            (c["sound_speed"].first() * c["pulse_length"].first() / 2).alias("resolution"),
            along.max().alias("along"),
            (c["depth"] * (outer - inner)).max().alias("across"),
        )
        .sort("ping")
        .with_columns(span=(pl.col("time").shift(-1) - pl.col("time")) / 1e6)
        .collect(engine="streaming")
    )
    return [found[k].cast(pl.Float64).fill_null(float("nan")).to_numpy() for k in ORDER]


def in_pandas(path: Path) -> list[np.ndarray]:
    import pandas as pd

    names = _names(path)
    if path.suffix == ".csv":
        log = pd.read_csv(path, parse_dates=["time"])
    else:
        log = pd.read_parquet(path, columns=READ)
    beta = np.radians(log[names["beam_angle"]])
    half = np.radians(log[names["beamwidth_across"]]) / np.cos(beta) / 2
    depth = log[names["depth"]]
    log["across"] = depth * (np.tan(beta + half) - np.tan(beta - half))
    log["along"] = 2 * depth / np.cos(beta) * np.tan(np.radians(log[names["beamwidth_along"]]) / 2)
    log["resolution"] = log[names["sound_speed"]] * log[names["pulse_length"]] / 2
    found = log.groupby("ping").agg(
        time=("time", "first"),
        resolution=("resolution", "first"),
        along=("along", "max"),
        across=("across", "max"),
    )
    found["span"] = -found["time"].diff(-1).dt.total_seconds()
    return [found[k].to_numpy() for k in ORDER]


ORDER = ("span", "resolution", "along", "across")


def reading(path: Path) -> None:
    """The log taken in and nothing computed: pings cut, every row accounted for, beams streamed once."""
    from qa.ingest.planning import open_line, plan_logs
    from qa.model.survey_file import load_survey_file

    survey = load_survey_file(path.with_name("survey.toml"))
    (task,) = plan_logs([path], survey).lines
    line = open_line(task, survey)
    assert len(line.ping_table())
    for batch in line.beam_batches(sorted(line.beam_columns)):
        assert len(batch.pings)


def three_checks(path: Path) -> list[np.ndarray]:
    from qa.engine.evaluate import evaluate_line
    from qa.engine.sheets import load_sheet
    from qa.ingest.planning import open_line, plan_logs
    from qa.model.survey_file import load_survey_file

    survey = load_survey_file(path.with_name("survey.toml"))
    sheet = load_sheet(str(path.with_name("three.toml")), survey)
    (task,) = plan_logs([path], survey).lines
    rules = evaluate_line(open_line(task, survey), survey, sheet, threads=2).rules
    names = ("ping-interval", "range-resolution", "along-resolution", "across-resolution")
    return [rules[n].value for n in names]


def whole_sheet(path: Path) -> None:
    from qa import audit

    findings = audit([path], survey=path.with_name("survey.toml"))
    assert findings.lines


def with_report(path: Path) -> None:
    from qa import audit

    with tempfile.TemporaryDirectory() as folder:
        audit([path], survey=path.with_name("survey.toml"), out=Path(folder) / "audit")
        assert (Path(folder) / "audit" / "report.html").stat().st_size


CONTESTANTS: dict[str, Callable[[Path], list[np.ndarray] | None]] = {
    "bare read": bare,
    "the whole file, pyarrow": whole_file,
    "the whole file, pingworthy": reading,
    "three checks, pingworthy": three_checks,
    "three checks, DuckDB": in_duckdb,
    "three checks, Polars": in_polars,
    "three checks, pandas": in_pandas,
    "physics sheet": whole_sheet,
    "physics sheet and report": with_report,
}

LIBRARIES = {
    "three checks, DuckDB": ("duckdb",),
    "three checks, Polars": ("polars",),
    "three checks, pandas": ("pandas",),
}


NOT_OURS = (*LIBRARIES, "bare read", "the whole file, pyarrow")


def child(name: str, path: Path, out: Path) -> None:
    """Run one contestant and write down its seconds and its numbers."""
    ours = [contestant for contestant in CONTESTANTS if contestant not in NOT_OURS]
    for module in ("qa.cli", "qa.job") if name in ours else LIBRARIES.get(name, ()):
        imported = import_module(module)
        assert not module.startswith("qa") or Path(imported.__file__ or "").is_relative_to(ROOT)
    began = time.perf_counter()
    found = CONTESTANTS[name](path)
    seconds = time.perf_counter() - began
    if found is not None:
        np.savez(out, *found)
    print(json.dumps(seconds))


def measured(command: list[str]) -> tuple[str, float, float]:
    """What a command prints, its seconds, and the most memory that it and its children held, in MB."""
    began = time.perf_counter()
    process = psutil.Popen(command, stdout=subprocess.PIPE, cwd=ROOT)
    most, family = 0, [process]
    while process.poll() is None:
        try:
            family = [process, *process.children(recursive=True)]
            most = max(most, sum(_held(p, len(family)) for p in family))
        except psutil.NoSuchProcess:
            pass
        time.sleep(0.02 * len(family))
    text = process.stdout.read().decode("utf-8")
    if process.returncode:
        raise SystemExit(f"{command} ended with {process.returncode}")
    return text, time.perf_counter() - began, most / 1e6


def _held(process: psutil.Process, of: int) -> int:
    """Memory of a process; what several share counts by their shares, where the system tells. To ask holds them up."""
    try:
        if of > 1 and sys.platform == "linux":
            return int(process.memory_full_info().pss)
        return int(process.memory_info().rss)
    except (psutil.NoSuchProcess, psutil.AccessDenied):
        return 0


def race(path: Path, soundings: int, rounds: int, names: list[str]) -> None:
    """All contestants in turn, several times; medians printed as a table, and whether all agree."""
    seconds: dict[str, list[float]] = {n: [] for n in names}
    memory: dict[str, float] = dict.fromkeys(names, 0.0)
    numbers: dict[str, list[np.ndarray]] = {}
    for at in range(rounds):
        # Who comes first has other conditions than who comes next: each has its turn at it.
        turn = at % len(names)
        for name in (*names[turn:], *names[:turn]):
            out = path.with_name("numbers.npz")
            out.unlink(missing_ok=True)
            command = [sys.executable, __file__, "--child", name, str(path), str(out)]
            text, _, most = measured(command)
            seconds[name].append(float(json.loads(text)))
            memory[name] = max(memory[name], most)
            if out.exists():
                with np.load(out) as found:
                    numbers[name] = [found[k] for k in found.files]
    base = seconds["bare read"]
    print(
        f"\n{path.name}: {soundings:,} soundings, {path.stat().st_size / 1e6:,.0f} MB, {rounds} rounds\n"
    )
    print("| | seconds | × bare read | million soundings/s | peak MB |\n|---|---|---|---|---|")
    for name in names:
        middle = statistics.median(seconds[name])
        ratio = statistics.median(a / b for a, b in zip(seconds[name], base, strict=True))
        pace = soundings / middle / 1e6
        print(f"| {name} | {middle:.2f} | {ratio:.1f} | {pace:.1f} | {memory[name]:.0f} |")
    if numbers:
        agree(numbers)


def agree(numbers: dict[str, list[np.ndarray]]) -> None:
    """Stop unless all contestants have the same numbers for each ping."""
    first, *others = numbers.items()
    for name, arrays in others:
        for what, ours, theirs in zip(ORDER, first[1], arrays, strict=True):
            if not np.allclose(ours, theirs, rtol=1e-9, atol=1e-9, equal_nan=True):
                worst = np.nanmax(np.abs(ours - theirs))
                raise SystemExit(f"{first[0]} and {name} differ on {what}, by up to {worst}")
    print(f"\n{len(numbers)} agree on {len(first[1][0]):,} pings.")


def start_up(folder: Path, rounds: int) -> None:
    """The help, and one small line with its report, imports included."""
    path = folder / "small.csv"
    write_log(path, 100 * BEAMS)
    run = [sys.executable, "-c", "from qa.cli import main; main()"]
    survey = str(folder / "survey.toml")
    helps, audits = [], []
    for at in range(rounds):
        helps.append(measured([*run, "--help"])[1])
        out = str(folder / f"small-{at}")
        # The exit status says what was found; nothing is out of reach of it here but faults of the log.
        began = time.perf_counter()
        found = subprocess.run(
            [*run, "audit", str(path), "--survey", survey, "--out", out, "--no-keep"],
            cwd=ROOT,
            capture_output=True,
        )
        audits.append(time.perf_counter() - began)
        if found.returncode not in (0, 1):
            raise SystemExit(found.stderr.decode("utf-8"))
    print(
        f"\n--help: {statistics.median(helps):.2f} s; one small line with report: {statistics.median(audits):.2f} s"
    )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--soundings", type=int, default=20_000_000)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument(
        "--only",
        nargs="+",
        choices=("parquet", "jittered", "one-group", "csv", "start"),
        default=["parquet", "csv", "start"],
    )
    parser.add_argument(
        "--contestants", nargs="+", choices=list(CONTESTANTS), default=list(CONTESTANTS)
    )
    parser.add_argument("--child", nargs=3, help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.child:
        name, path, out = options.child
        child(name, Path(path), Path(out))
        return
    names = ["bare read", *(n for n in options.contestants if n != "bare read")]
    with tempfile.TemporaryDirectory() as text:
        folder = Path(text)
        (folder / "survey.toml").write_text(SURVEY, encoding="utf-8")
        (folder / "three.toml").write_text(SHEET, encoding="utf-8")
        for what in options.only:
            if what == "start":
                start_up(folder, options.rounds)
                continue
            soundings = options.soundings
            path = folder / f"{what}.parquet"
            if what == "csv":
                soundings, path = min(soundings, CSV_SOUNDINGS), folder / "log.csv"
            jitter = 0.1 if what == "jittered" else 0.0
            write_log(path, soundings, jitter, soundings if what == "one-group" else GROUP)
            race(path, soundings, options.rounds, names)
            path.unlink()


if __name__ == "__main__":
    sys.path.insert(0, str(ROOT))
    main()
