"""Small sound logs of every form, built here: what the campaign mutates."""

from __future__ import annotations

import gzip
import io
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

START = 1_715_673_600_000
"""2024-05-14T08:00:00Z in milliseconds."""

ORDER = '[columns]\norder = ["latitude", "longitude", "depth", "temperature", "time"]\n'


@dataclass(frozen=True, slots=True)
class Seed:
    """A sound file: its name, content, and the survey file that goes with it ("" for none).

    ``packed`` is how the content was packed, ``kind`` what reads it: "log", "cast" or "plan".
    """

    name: str
    content: bytes
    survey: str = ""
    packed: str = ""
    kind: str = "log"

    @property
    def binary(self) -> bool:
        """Whether it is Parquet or Arrow."""
        return self.name.endswith((".parquet", ".arrow"))


def iso(i: int, zone: str = "Z", seconds: float = 0.125) -> str:
    """The time of the i-th ping."""
    stamp = np.datetime64(START, "ms") + np.timedelta64(int(i * seconds * 1000), "ms")
    return f"{stamp}{zone}"


def _rows(header: str, row: Callable[[int], str], count: int = 24, end: str = "\n") -> str:
    return end.join([header, *(row(i) for i in range(count)), ""])


def single_beam() -> str:
    """One row a ping."""
    return _rows(
        "time,ping,latitude,longitude,depth (m),pulse length (us),Range Scale (m),SOG [kn]",
        lambda i: f"{iso(i)},{i},{47 + i * 1e-6:.7f},-9.1,{15 + i * 0.01:.2f},100,50,4.1",
    )


def side_scan() -> str:
    """Two channels a ping."""
    return _rows(
        "Ping No,Channel,Epoch (ms),Lat,Lon,Range Scale (m),Pulse Length (us),Altitude (m)",
        lambda i: f"{i // 2},{'PS'[i % 2]},{START + i // 2 * 100},47.3,-9.1,50,50,7.5",
    )


def european() -> str:
    """Semicolons, decimal commas, units in a row, a preamble, the date apart, quotes."""
    return "# Line 7\r\n# a comment; with; semicolons\r\n" + _rows(
        '"Date";"Time";"Line";"Depth";"Heave";"Remark"\r\n;;;ft;m;',
        lambda i: (
            f'14.05.2024;{iso(i)[11:23].replace(".", ",")};"L{i // 12}";{40 + i / 10:.1f};0,05;"a ""b"""'
        ).replace(".1;", ",1;"),
        end="\r\n",
    )


def spaces() -> str:
    """Columns between spaces, times in parts."""
    return _rows(
        "  year doy   sod    depth   roll",
        lambda i: f"  2024 135  {28800 + i * 0.5:8.2f}  {12 + i / 50:.2f}  -1.5",
    )


def beams() -> str:
    """One row a beam, messages and settings on change."""
    return _rows(
        "time\tping\tbeam\tbeam_angle\tdepth_m\taccepted\tpulse_length_ms",
        lambda i: (
            f"{iso(i // 6)}\t{i // 6}\t{i % 6}\t{-50 + 20 * (i % 6)}\t{20 + i % 6}\t{i % 5 > 0:d}\t{'0.06' if i % 12 == 0 else ''}"
        ),
        36,
    )


def wide() -> str:
    """Beams side by side."""
    names = ",".join(f"depth_{b:03d}" for b in range(6)) + ",".join(
        f",angle_{b:03d}" for b in range(6)
    ).replace(",,", ",")
    return _rows(
        f"time,ping,{names}",
        lambda i: ",".join([iso(i), str(i), *["21.5"] * 6, *[str(-50 + 20 * b) for b in range(6)]]),
        12,
    )


def bare() -> str:
    """No header."""
    return "".join(f"47.0,8.5,15.{i:02d},23.0,{START + 100 * i}\n" for i in range(24))


def cast() -> str:
    """A sound speed cast, down and up."""
    return _rows(
        "Time,Depth [m],Sound Velocity [m/s],Temp [degC],Sal",
        lambda i: f"{iso(i)},{min(i, 30 - i):.2f},{1490 - i / 10:.2f},12.5,35.0",
    )


def plan() -> str:
    """A line plan."""
    return _rows(
        "Line,Start Lat,Start Lon,End Lat,End Lon",
        lambda i: f"L{i},{47 + i / 1000},-9,{47 + i / 1000},-8.9",
        8,
    )


def _parquet(table: pa.Table, **options: Any) -> bytes:
    sink = io.BytesIO()
    pq.write_table(table, sink, **options)
    return sink.getvalue()


def beam_table(pings: int = 6, width: int = 5) -> pa.Table:
    """One row a beam, units in the metadata, settings in a record, texts in a dictionary, decimals."""
    n = pings * width
    at = np.repeat(np.arange(pings), width)
    fields = [
        pa.field("time", pa.timestamp("us", "UTC")),
        pa.field("ping", pa.int32()),
        pa.field("beam", pa.int16()),
        pa.field("angle", pa.float32(), metadata={"units": "degree"}),
        pa.field("depth", pa.float32(), metadata={"units": "ft"}),
        pa.field("settings", pa.struct([("frequency_khz", pa.float64())])),
        pa.field("line", pa.dictionary(pa.int8(), pa.string())),
        pa.field("tide", pa.decimal128(8, 3), metadata={"units": "m"}),
    ]
    columns = [
        pa.array((START + at * 125) * 1000, pa.int64()).cast(fields[0].type),
        pa.array(at, pa.int32()),
        pa.array(np.tile(np.arange(width), pings), pa.int16()),
        pa.array(np.tile(np.linspace(-60, 60, width), pings), pa.float32()),
        pa.array(70 + at + np.tile(np.arange(width), pings) * 0.1, pa.float32()),
        pa.array([{"frequency_khz": 300.0}] * n, fields[5].type),
        pa.array([f"L{i // 3}" for i in at], pa.string()).dictionary_encode().cast(fields[6].type),
        pa.array(np.full(n, 1.25)).cast(fields[7].type),
    ]
    return pa.table(columns, schema=pa.schema(fields))


def list_table(pings: int = 8) -> pa.Table:
    """One row a ping, its beams in lists."""
    return pa.table(
        {
            "time": pa.array([(START + i * 125) * 1000 for i in range(pings)], pa.int64()),
            "ping": pa.array(range(pings)),
            "beam_angle": pa.array([[-40.0, 0.0, 40.0]] * pings, pa.list_(pa.float64())),
            "depth": pa.array([[20.0, None, 21.0]] * pings, pa.list_(pa.float32())),
            "accepted": pa.array([[True, False, True]] * pings),
        }
    )


def _arrow(table: pa.Table, stream: bool) -> bytes:
    sink = io.BytesIO()
    make = pa.ipc.new_stream if stream else pa.ipc.new_file
    with make(sink, table.schema) as writer:
        writer.write_table(table, max_chunksize=16)
    return sink.getvalue()


def pack(content: bytes, how: str) -> bytes:
    """Content as .gz or .zst."""
    if how == "gz":
        return gzip.compress(content, 1, mtime=0)
    if how == "zst":
        packed: bytes = pa.Codec("zstd").compress(content, asbytes=True)
        return packed
    return content


COLUMN = '[lines]\nfrom = "column"\n'
GAP = '[lines]\nfrom = "gap"\ngap = "1 s"\n'
HOLD = '[columns]\nhold = ["pulse_length"]\n[sonar]\nkind = "multibeam"\n'


def seeds() -> list[Seed]:
    """Every seed, in a fixed order."""
    sound = single_beam()
    return [
        Seed("single.csv", sound.encode()),
        Seed("gap.csv", sound.encode(), GAP),
        Seed("side.csv", side_scan().encode()),
        Seed("european.csv", european().encode("cp1252"), COLUMN),
        Seed("spaces.txt", spaces().encode()),
        Seed("beams.tsv", beams().encode(), HOLD),
        Seed("wide.csv", wide().encode()),
        Seed("bare.csv", bare().encode(), ORDER),
        Seed("utf16.csv", side_scan().encode("utf-16")),
        Seed("single.csv.gz", pack(sound.encode(), "gz"), packed="gz"),
        Seed("beams.csv.zst", pack(beams().encode(), "zst"), HOLD, packed="zst"),
        Seed("beams.parquet", _parquet(beam_table(), row_group_size=16), COLUMN),
        Seed("plain.parquet", _parquet(beam_table(), compression="none", use_dictionary=False)),
        Seed("lists.parquet", _parquet(list_table())),
        Seed("beams.arrow", _arrow(beam_table(), stream=False)),
        Seed("lists.arrow", _arrow(list_table(), stream=True)),
        Seed("cast.csv", cast().encode(), kind="cast"),
        Seed("plan.csv", plan().encode(), kind="plan"),
    ]
