"""Writing simulated lines as the logs that surveys export, and reading them back.

What belongs here: Parquet (a row a beam, or a row a ping with list columns) and CSV in several
dialects. Reading back is told the dialect, so that a check sees exactly what was written.
"""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from simulate import Array, Channel, Simulated

SI_PER_UNIT = {
    "": 1.0,
    "m": 1.0,
    "dm": 0.1,
    "cm": 0.01,
    "ft": 0.3048,
    "s": 1.0,
    "ms": 1e-3,
    "us": 1e-6,
    "Hz": 1.0,
    "kHz": 1e3,
    "m/s": 1.0,
    "kn": 1852.0 / 3600.0,
    "deg": 1.0,
}
UDUNITS = {
    "pulse_length": "s",
    "beamwidth_along": "degree",
    "beamwidth_across": "degree",
    "range_scale": "m",
    "bandwidth": "Hz",
    "frequency": "Hz",
    "transducer_depth": "m",
    "latitude": "degrees_north",
    "longitude": "degrees_east",
    "easting": "m",
    "northing": "m",
    "speed": "m s-1",
    "course": "degree",
    "heading": "degree",
    "roll": "degree",
    "pitch": "degree",
    "heave": "m",
    "tide": "m",
    "altitude": "m",
    "beam_angle": "degree",
    "depth": "m",
    "slant_range": "m",
    "two_way_time": "s",
    "sound_speed": "m s-1",
    "temperature": "degree_C",
    "salinity": "1",
    "gain": "dB",
    "source_level": "dB",
    "ping_rate": "Hz",
}
BEAM_COLUMNS = ("beam_angle", "depth", "slant_range", "two_way_time")
EPOCH_UNITS = {"epoch ns": 1, "epoch us": 1000, "epoch ms": 1_000_000, "epoch s": 1_000_000_000}


@dataclass(frozen=True)
class Column:
    """A column of a CSV: its heading, the quantity, its unit and the digits after the point."""

    heading: str
    name: str
    unit: str = ""
    digits: int = 3


@dataclass(frozen=True)
class Dialect:
    columns: tuple[Column, ...]
    separator: str = ","
    decimal: str = "."
    header: bool = True
    labels: tuple[tuple[str, str], ...] = ()  # channel name here, and in the file


def _iso(nanoseconds: int, unit: str) -> str:
    """ "iso" or "iso +02:00" (an offset), "date", "clock"; to the microsecond."""
    offset = ""
    if unit.startswith("iso "):
        offset = unit[4:]
        if offset != "Z":
            sign = -1 if offset[0] == "-" else 1
            minutes = sign * (60 * int(offset[1:3]) + int(offset[4:6]))
            nanoseconds += minutes * 60 * 1_000_000_000
    text = str(np.datetime64(nanoseconds // 1000, "us"))
    if unit == "date":
        return text[:10]
    if unit == "clock":
        return text[11:23]
    return text + offset


def _from_iso(text: str, unit: str) -> int:
    shift = 0
    if unit.startswith("iso "):
        offset = unit[4:]
        text = text[: -len(offset)]
        if offset != "Z":
            sign = -1 if offset[0] == "-" else 1
            shift = sign * (60 * int(offset[1:3]) + int(offset[4:6])) * 60 * 1_000_000_000
    return int(np.datetime64(text, "ns").astype(np.int64)) - shift


def write_csv(path: Path, run: Simulated, dialect: Dialect) -> None:
    """One row per ping and channel, or per beam where a column of beams is asked for."""
    path.parent.mkdir(parents=True, exist_ok=True)
    labels = dict(dialect.labels)
    by_beam = any(c.name in ("beam", "beam_angle") for c in dialect.columns)

    def number(value: float, column: Column) -> str:
        if isinstance(value, float) and math.isnan(value):
            return ""
        scaled = float(value) / SI_PER_UNIT[column.unit]
        return f"{scaled:.{column.digits}f}".replace(".", dialect.decimal)

    def cell(channel: Channel, column: Column, i: int, j: int) -> str:
        name = column.name
        if name == "channel":
            return labels.get(channel.name, channel.name)
        if name == "line":
            return run.line.name
        if name == "time":
            stamp = int(channel.ping["time"][i])
            if column.unit in EPOCH_UNITS:
                if column.digits:
                    return f"{stamp / EPOCH_UNITS[column.unit]:.{column.digits}f}".replace(
                        ".", dialect.decimal
                    )
                return str(round(stamp / EPOCH_UNITS[column.unit]))
            return _iso(stamp, column.unit)
        if name == "ping":
            return str(int(channel.ping["ping"][i]))
        if name == "beam":
            return str(j + 1)
        if name == "pulse_form":
            return run.sonar.pulse_form
        if by_beam and channel.beam is not None and name in channel.beam:
            if name == "accepted":
                return str(int(channel.beam[name][i, j]))
            return number(float(channel.beam[name][i, j]), column)
        return number(float(channel.ping[name][i]), column)

    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, delimiter=dialect.separator, lineterminator="\n")
        if dialect.header:
            writer.writerow([c.heading for c in dialect.columns])
        first = run.channels[0]
        beams = range(first.beam["beam_angle"].shape[1]) if by_beam and first.beam else range(1)
        for i in range(first.ping["time"].size):
            for channel in run.channels:
                for j in beams:
                    writer.writerow([cell(channel, c, i, j) for c in dialect.columns])


def read_csv(path: Path, dialect: Dialect) -> list[Channel]:
    """What write_csv wrote, in SI."""
    back = {there: here for here, there in dialect.labels}
    with path.open(encoding="utf-8", newline="") as file:
        rows = list(csv.reader(file, delimiter=dialect.separator))
    if dialect.header:
        rows = rows[1:]
    at = {
        c.name + ("/" + c.unit if c.name == "time" else ""): k
        for k, c in enumerate(dialect.columns)
    }
    groups: dict[str, list[list[str]]] = {}
    for row in rows:
        label = row[at["channel"]] if "channel" in at else ""
        groups.setdefault(back.get(label, label), []).append(row)
    channels = []
    for name, group in groups.items():
        ping: dict[str, Array] = {}
        clock = at.get("time/clock")
        for k, column in enumerate(dialect.columns):
            cells = [row[k].replace(dialect.decimal, ".") for row in group]
            if column.name == "time":
                if column.unit == "date":
                    assert clock is not None
                    cells = [f"{row[k]}T{row[clock]}" for row in group]
                    values = [_from_iso(cell, "iso") for cell in cells]
                elif column.unit == "clock":
                    continue
                elif column.unit in EPOCH_UNITS:
                    values = [round(float(cell) * EPOCH_UNITS[column.unit]) for cell in cells]
                else:
                    values = [_from_iso(cell, column.unit) for cell in cells]
                ping["time"] = np.array(values, dtype=np.int64)
            elif column.name in ("channel", "line", "pulse_form"):
                continue
            elif column.name in ("ping", "beam"):
                ping[column.name] = np.array([int(cell) for cell in cells])
            else:
                ping[column.name] = np.array(
                    [float(cell) * SI_PER_UNIT[column.unit] if cell else math.nan for cell in cells]
                )
        beam = None
        if "beam" in ping:
            count = int(ping["beam"].max())
            beam = {
                key: ping.pop(key).reshape(-1, count)
                for key in (*BEAM_COLUMNS, "accepted")
                if key in ping
            }
            ping = {key: values[::count] for key, values in ping.items() if key != "beam"}
        if "ping" not in ping:
            ping["ping"] = np.arange(ping["time"].size)
        channels.append(Channel(name, ping, beam))
    return channels


def _parquet_columns(run: Simulated, ping_columns: tuple[str, ...]) -> list[str]:
    return [
        c
        for c in ping_columns
        if c in ("time", "ping") or not np.all(np.isnan(run.channels[0].ping[c].astype(float)))
    ]


def write_parquet(
    path: Path,
    run: Simulated,
    ping_columns: tuple[str, ...],
    headings: dict[str, str] | None = None,
    layout: str = "long",
) -> None:
    """A row a beam ("long"), or a row a ping with lists of beams ("lists"); several channels follow
    each other ping by ping."""
    path.parent.mkdir(parents=True, exist_ok=True)
    headings = headings or {}
    first = run.channels[0]
    n = first.ping["time"].size
    count = 1
    if first.beam is not None and layout == "long":
        count = first.beam["beam_angle"].shape[1]
    fields: list[pa.Field] = []
    arrays: list[pa.Array] = []

    def put(name: str, array: pa.Array) -> None:
        unit = UDUNITS.get(name)
        metadata = {"units": unit} if unit else None
        fields.append(pa.field(headings.get(name, name), array.type, metadata=metadata))
        arrays.append(array)

    def woven(name: str) -> Array:
        stacked = np.stack([channel.ping[name] for channel in run.channels], axis=1).reshape(-1)
        return np.repeat(stacked, count)

    for name in _parquet_columns(run, ping_columns):
        values = woven(name)
        if name == "time":
            put(name, pa.array(values // 1000, pa.timestamp("us", tz="UTC")))
        elif name == "ping":
            put(name, pa.array(values.astype(np.int32)))
        elif name in ("latitude", "longitude", "easting", "northing", "pulse_length"):
            put(name, pa.array(values))
        else:
            put(name, pa.array(values.astype(np.float32)))
    if len(run.channels) > 1:
        names = np.repeat(np.tile([channel.name for channel in run.channels], n), count)
        put("channel", pa.array(names.tolist()))
    if first.beam is not None:
        size = first.beam["beam_angle"].shape[1]
        for name in ("beam", "beam_angle", "depth", "slant_range", "two_way_time", "accepted"):
            if name == "beam":
                block = np.tile(np.arange(1, size + 1, dtype=np.int16), (n, 1))
                blocks = [block] * len(run.channels)
            elif name in first.beam:
                kind = np.int8 if name == "accepted" else np.float32
                if name == "two_way_time":
                    kind = np.float64
                blocks = [c.beam[name].astype(kind) for c in run.channels if c.beam is not None]
            else:
                continue
            flat = np.stack(blocks, axis=1).reshape(-1)
            if layout == "long":
                put(name, pa.array(flat))
            else:
                offsets = np.arange(0, flat.size + 1, size, dtype=np.int32)
                put(name, pa.ListArray.from_arrays(pa.array(offsets), pa.array(flat)))
    table = pa.Table.from_arrays(arrays, schema=pa.schema(fields))
    pq.write_table(table, path, compression="zstd", compression_level=15, use_dictionary=True)


def read_parquet(path: Path, headings: dict[str, str] | None = None) -> list[Channel]:
    """What write_parquet wrote."""
    back = {there: here for here, there in (headings or {}).items()}
    table = pq.read_table(path)
    columns = {
        back.get(name, name): table.column(name).combine_chunks() for name in table.column_names
    }
    labels = columns.pop("channel", None)
    lists = any(pa.types.is_list(c.type) for c in columns.values())
    has_beams = "beam" in columns
    if has_beams and lists:
        size = len(columns["beam"][0])
    elif has_beams:
        size = int(np.max(columns["beam"].to_numpy()))
    else:
        size = 1
    stride = size if has_beams and not lists else 1
    ping: dict[str, Array] = {}
    beam: dict[str, Array] = {}
    for name, column in columns.items():
        if name == "beam":
            continue
        if name in ("accepted", *BEAM_COLUMNS) and has_beams:
            flat = column.flatten() if lists else column
            beam[name] = flat.to_numpy(zero_copy_only=False).astype(float).reshape(-1, size)
        elif name == "time":
            stamps = column.cast(pa.timestamp("ns", tz="UTC")).cast(pa.int64())
            ping["time"] = stamps.to_numpy()[::stride]
        else:
            ping[name] = column.to_numpy(zero_copy_only=False)[::stride].astype(float)
    if "accepted" not in beam and has_beams:
        beam["accepted"] = np.ones_like(beam["beam_angle"])
    names = [""] if labels is None else list(dict.fromkeys(labels.to_pylist()))
    count = len(names)
    return [
        Channel(
            name,
            {key: values[c::count] for key, values in ping.items()},
            {key: values[c::count] for key, values in beam.items()} if has_beams else None,
        )
        for c, name in enumerate(names)
    ]


def write_wide_csv(path: Path, run: Simulated, columns: tuple[Column, ...]) -> None:
    """One row a ping; the beams stand side by side: beam_angle_001 …, depth_001 …, accepted_001 …"""
    path.parent.mkdir(parents=True, exist_ok=True)
    channel = run.channels[0]
    assert channel.beam is not None
    size = channel.beam["beam_angle"].shape[1]
    names = [name for name in ("beam_angle", "depth", "accepted") if name in channel.beam]
    heads = [f"{name}_{j:03d}" for name in names for j in range(1, size + 1)]
    narrow = Dialect(columns)
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow([c.heading for c in narrow.columns] + heads)
        for i in range(channel.ping["time"].size):
            row: list[str] = []
            for c in columns:
                if c.name == "time":
                    row.append(_iso(int(channel.ping["time"][i]), c.unit))
                elif c.name == "ping":
                    row.append(str(int(channel.ping["ping"][i])))
                else:
                    value = float(channel.ping[c.name][i]) / SI_PER_UNIT[c.unit]
                    row.append(f"{value:.{c.digits}f}")
            for name in names:
                digits = 0 if name == "accepted" else 3
                row.extend(f"{float(v):.{digits}f}" for v in channel.beam[name][i])
            writer.writerow(row)


def read_wide_csv(path: Path, columns: tuple[Column, ...]) -> list[Channel]:
    """What write_wide_csv wrote."""
    with path.open(encoding="utf-8", newline="") as file:
        rows = list(csv.reader(file))
    head, body = rows[0], rows[1:]
    ping: dict[str, Array] = {}
    for k, c in enumerate(columns):
        if c.name == "time":
            ping["time"] = np.array([_from_iso(r[k], c.unit) for r in body], dtype=np.int64)
        else:
            ping[c.name] = np.array([float(r[k]) * SI_PER_UNIT[c.unit] for r in body])
    beam: dict[str, Array] = {}
    for name in ("beam_angle", "depth", "accepted"):
        where = [k for k, h in enumerate(head) if h.startswith(name + "_")]
        if where:
            beam[name] = np.array([[float(r[k]) for k in where] for r in body])
    return [Channel("", ping, beam)]
