"""Writes the logs of this folder that no editor writes: packed, UTF-16, Parquet and Arrow.

Run it in this folder's place, ``python tests/data/ingest/make.py``; the files are kept beside it, so that
a test reads the same bytes whatever version of Arrow is installed.
"""

from __future__ import annotations

import bz2
import datetime as dt
import gzip
from decimal import Decimal
from pathlib import Path

import pyarrow as pa
import pyarrow.feather as feather
import pyarrow.ipc as ipc
import pyarrow.parquet as pq

HERE = Path(__file__).parent
UTC = dt.UTC
START = dt.datetime(2026, 5, 4, 10, tzinfo=UTC)
TEXT = "time,ping,depth (m)\n2026-05-04T10:00:00Z,1,10.25\n2026-05-04T10:00:01Z,2,10.5\n2026-05-04T10:00:02Z,3,11\n"


def seconds(*offsets: float) -> list[dt.datetime]:
    """Instants after the start."""
    return [START + dt.timedelta(seconds=s) for s in offsets]


def stamps(*offsets: float, unit: str = "us", zone: str | None = "UTC") -> pa.Array:
    """Instants after the start, as Arrow keeps them."""
    times = seconds(*offsets)
    if zone is None:
        times = [t.replace(tzinfo=None) for t in times]
    return pa.array(times, pa.timestamp(unit, zone))


def with_units(table: pa.Table, **units: str) -> pa.Table:
    """The table with units in its fields' metadata."""
    fields = [
        field.with_metadata({"units": units[field.name]}) if field.name in units else field
        for field in table.schema
    ]
    return table.cast(pa.schema(fields))


def texts() -> None:
    """Packed and UTF-16 logs."""
    (HERE / "packed.csv.gz").write_bytes(gzip.compress(TEXT.encode(), mtime=0))
    (HERE / "members.csv.gz").write_bytes(
        gzip.compress(TEXT[:60].encode(), mtime=0) + gzip.compress(TEXT[60:].encode(), mtime=0)
    )
    (HERE / "packed.csv.bz2").write_bytes(bz2.compress(TEXT.encode()))
    (HERE / "packed.csv.zst").write_bytes(pa.compress(TEXT.encode(), "zstd", asbytes=True))
    marked = TEXT.replace("depth (m)", "depth (m),water temperature (°C)").replace(
        "10.25\n", "10.25,11.5\n"
    )
    marked = marked.replace("10.5\n", "10.5,12\n").replace(",11\n", ",11,12.5\n")
    (HERE / "utf16_marked.csv").write_bytes(marked.replace("\n", "\r\n").encode("utf-16"))
    (HERE / "utf16_big_endian.csv").write_bytes(TEXT.encode("utf-16-be"))


def parquet() -> None:
    """Parquet in its many ways."""
    table = pa.table(
        {
            "Time": stamps(0, 1, 2),
            "Ping": pa.array([1, 2, 3], pa.int32()),
            "Depth": pa.array([100.0, 200.0, 300.0], pa.float32()),
            "PulseLength": [60.0, 60.0, 120.0],
        }
    )
    pq.write_table(
        with_units(table, Depth="feet", PulseLength="microseconds"), HERE / "long.parquet"
    )
    pq.write_table(
        pa.table(
            {
                "time": stamps(0, 1, unit="ns"),
                "ping": pa.array([7, 8]),
                "beam_angle": pa.array([[-45.0, 0.0, 45.0], [-45.0, 0.0]]),
                "depth": pa.array([[10.0, 11.0, 12.0], [13.0, None]], pa.list_(pa.float32())),
            }
        ),
        HERE / "lists.parquet",
    )
    pq.write_table(
        pa.table(
            {
                "time": stamps(0, 1),
                "ping": pa.array([7, 8]),
                "slant_range": pa.array([[10.0, 11.0], [13.0, 14.0]], pa.list_(pa.float64(), 2)),
                "accepted": pa.array([[True, False], [True, True]], pa.list_(pa.bool_(), 2)),
            }
        ),
        HERE / "fixed_lists.parquet",
    )
    pq.write_table(
        pa.table(
            {
                "time": stamps(0, 1),
                "ping": [1, 2],
                "beam_angle": pa.array([[-45.0, 0.0], [-45.0, 0.0, 45.0]]),
                "depth": pa.array([[10.0, 11.0], [13.0, 14.0]]),
            }
        ),
        HERE / "uneven_lists.parquet",
    )
    pq.write_table(
        pa.table(
            {
                "time": stamps(0, 1, zone=None),
                "ping": [1, 2],
                "depth_m": pa.array([Decimal("10.25"), Decimal("10.50")], pa.decimal128(9, 2)),
                "channel": pa.array(["port", "port"]).dictionary_encode(),
                "pulse form": pa.array(["CW", "FM"]).dictionary_encode(),
            }
        ),
        HERE / "decimal_and_dictionary.parquet",
    )
    settings = pa.array(
        [
            {"pulse_length_us": 60.0, "frequency_kHz": 300, "range scale (m)": 75},
            {"pulse_length_us": 80.0, "frequency_kHz": 300, "range scale (m)": 100},
        ]
    )
    pq.write_table(
        pa.table(
            {"time": stamps(0, 1), "ping": [1, 2], "depth": [10.25, 10.5], "settings": settings}
        ),
        HERE / "nested.parquet",
    )
    pq.write_table(
        pa.table(
            {
                "date": pa.array([dt.date(2026, 5, 4)] * 2),
                "time": pa.array([dt.time(10, 0, 0), dt.time(10, 0, 0, 250_000)], pa.time64("us")),
                "depth (mm)": pa.array([10250, 10500], pa.int32()),
            }
        ),
        HERE / "date_and_time.parquet",
    )
    for line, first in (("7", 0), ("8", 100)):
        folder = HERE / "partitioned" / f"line={line}"
        folder.mkdir(parents=True, exist_ok=True)
        for part in (0, 1):
            pq.write_table(
                pa.table(
                    {
                        "time": stamps(first + 2 * part, first + 2 * part + 1),
                        "ping": [first + 2 * part, first + 2 * part + 1],
                        "depth": [10.0 + part, 10.5 + part],
                    }
                ),
                folder / f"part-{part}.parquet",
            )


def arrow() -> None:
    """Arrow files and streams."""
    table = pa.table({"time": stamps(0, 1, unit="ms"), "ping": [1, 2], "depth_ft": [100.0, 50.0]})
    with ipc.new_file(HERE / "file.arrow", table.schema) as writer:
        writer.write_table(table)
    with ipc.new_stream(HERE / "stream.arrow", table.schema) as writer:
        writer.write_table(table)
    feather.write_feather(table, HERE / "packed.feather", compression="lz4")


if __name__ == "__main__":
    texts()
    parquet()
    arrow()
