"""Ways to ruin a file, each a function of the content and a random generator."""

from __future__ import annotations

import gzip
import math
import random
import struct
import zlib
from collections.abc import Callable

import pyarrow as pa
import pyarrow.parquet as pq

from tests.fuzz.seeds import Seed, pack

Mutation = Callable[[bytes, random.Random], bytes]

_ODD = (
    *("nan", "inf", "-inf", "1e308", "-1e309", "99999", "-999", "0", "-0", "1e-320", "0x10", "1_0"),
    *("9" * 30, "1970-01-01", "2024-13-45T25:61:61Z", "24-05-14 08:00", "2024-02-30", "23:59:60"),
    *("2024-05-14T08:00:00+25:00", "3000-01-01T00:00:00Z", "0001-01-01", "18446744073709551616"),
    *(
        "",
        " ",
        '"',
        "''",
        "\x1a",
        "\ufeff",
        "NULL",
        "-",
        "°",
        "１２",
        "true",
        "1,5",
        "1.2.3",
        "=1+1",
    ),
)
_NAMES = (
    *("time", "Depth", "depth (s)", "depth (ft)", "time (ms since 1970-01-01)", "Time (UTC+25)", "beam", "ping"),
    *("latitude", "longitude", "range", "channel", "line", "date", "hour", "day_of_year", "year", ""),
    *("depth_001", "depth_2", "depth_3", "accepted", "rejected", "pulse form", "time (fortnight)", "salinity"),
)  # fmt: skip


def flip_bytes(data: bytes, rng: random.Random) -> bytes:
    """Some bytes become others."""
    out = bytearray(data)
    for _ in range(rng.choice((1, 1, 2, 4, 16, 64))):
        out[rng.randrange(len(out))] = rng.randrange(256)
    return bytes(out)


def flip_bits(data: bytes, rng: random.Random) -> bytes:
    """Some bits turn."""
    out = bytearray(data)
    for _ in range(rng.choice((1, 1, 2, 8))):
        out[rng.randrange(len(out))] ^= 1 << rng.randrange(8)
    return bytes(out)


def truncate(data: bytes, rng: random.Random) -> bytes:
    """The end is missing, or the start."""
    at = rng.randrange(len(data))
    return data[:at] if rng.random() < 0.8 else data[at:]


def insert_nuls(data: bytes, rng: random.Random) -> bytes:
    """NUL bytes where none belong."""
    at = rng.randrange(len(data) + 1)
    return data[:at] + b"\0" * rng.choice((1, 2, 7, 300, 5000)) + data[at:]


def insert_noise(data: bytes, rng: random.Random) -> bytes:
    """Bytes of no meaning."""
    at = rng.randrange(len(data) + 1)
    return data[:at] + rng.randbytes(rng.choice((1, 3, 20, 400))) + data[at:]


def cut_out(data: bytes, rng: random.Random) -> bytes:
    """A piece is missing."""
    a, b = sorted((rng.randrange(len(data) + 1), rng.randrange(len(data) + 1)))
    return data[:a] + data[min(b, a + rng.choice((1, 8, 200))) :]


def repeat_piece(data: bytes, rng: random.Random) -> bytes:
    """A piece stands twice or often."""
    a = rng.randrange(len(data))
    piece = data[a : a + rng.choice((1, 10, 100, 1000))]
    return data[:a] + piece * rng.choice((2, 3, 50)) + data[a:]


def huge_field(data: bytes, rng: random.Random) -> bytes:
    """A field of enormous length."""
    at = rng.randrange(len(data) + 1)
    what = rng.choice((b"9", b"A", b" ", b"1.", b"\xff", b",", b";", b"-"))
    return data[:at] + what * rng.choice((1000, 70_000, 600_000)) + data[at:]


def quotes(data: bytes, rng: random.Random) -> bytes:
    """Quotes in quotes, never closed."""
    out = data
    for _ in range(rng.choice((1, 2, 5))):
        at = rng.randrange(len(out) + 1)
        out = out[:at] + b'"' * rng.choice((1, 2, 3, 40, 4001)) + out[at:]
    return out


def _lines(data: bytes) -> list[bytes]:
    return data.split(b"\n")


def swap_columns(data: bytes, rng: random.Random) -> bytes:
    """Two columns change places in all rows, or in some, or in the header alone."""
    separator = max((b",", b";", b"\t"), key=data.count)
    lines = _lines(data)
    width = max(line.count(separator) for line in lines) + 1
    a, b = rng.randrange(width), rng.randrange(width)
    share = rng.choice((1.0, 0.5, 0.0))
    for i, line in enumerate(lines):
        cells = line.split(separator)
        if max(a, b) < len(cells) and (i == 0 or rng.random() < share):
            cells[a], cells[b] = cells[b], cells[a]
        lines[i] = separator.join(cells)
    return b"\n".join(lines)


def lines_about(data: bytes, rng: random.Random) -> bytes:
    """Lines doubled, dropped, shuffled, turned round, or the file twice over."""
    lines = _lines(data)
    how = rng.randrange(6)
    if how == 0:
        lines = [line for line in lines for _ in range(rng.choice((1, 1, 2)))]
    elif how == 1:
        lines = [line for line in lines if rng.random() > 0.3]
    elif how == 2:
        rng.shuffle(lines)
    elif how == 3:
        lines = lines[:1] + lines[:0:-1]
    elif how == 4:
        lines = lines + lines
    else:
        at = rng.randrange(len(lines) + 1)
        lines[at:at] = [rng.choice((b"", b"#", b"Total;;;", lines[0], b",,,,,", b"\r"))] * 3
    return b"\n".join(lines)


def odd_values(data: bytes, rng: random.Random) -> bytes:
    """Cells become what cells should not be."""
    separator = max((b",", b";", b"\t", b" "), key=data.count)
    lines = _lines(data)
    for _ in range(rng.choice((1, 3, 20))):
        i = rng.randrange(len(lines))
        cells = lines[i].split(separator)
        cells[rng.randrange(len(cells))] = rng.choice(_ODD).encode()
        lines[i] = separator.join(cells)
    return b"\n".join(lines)


def odd_column(data: bytes, rng: random.Random) -> bytes:
    """A whole column becomes one odd value."""
    separator = max((b",", b";", b"\t"), key=data.count)
    lines = _lines(data)
    at, value = rng.randrange(max(1, lines[0].count(separator) + 1)), rng.choice(_ODD).encode()
    for i, line in enumerate(lines[1:], start=1):
        cells = line.split(separator)
        if at < len(cells):
            cells[at] = value
        lines[i] = separator.join(cells)
    return b"\n".join(lines)


def odd_names(data: bytes, rng: random.Random) -> bytes:
    """Columns get other names."""
    separator = max((b",", b";", b"\t"), key=data.count)
    lines = _lines(data)
    cells = lines[0].split(separator)
    for _ in range(rng.choice((1, 2, 4))):
        cells[rng.randrange(len(cells))] = rng.choice(_NAMES).encode()
    lines[0] = separator.join(cells)
    return b"\n".join(lines)


def encode(data: bytes, rng: random.Random) -> bytes:
    """Another encoding, or a part of the file in another."""
    text = data.decode("utf-8", "replace")
    how = rng.choice(("utf-16", "utf-16-le", "utf-16-be", "utf-32", "cp1252", "utf-8-sig", "half"))
    if how == "half":
        at = rng.randrange(len(text) + 1)
        return text[:at].encode() + text[at:].encode("utf-16-le")
    return text.encode(how, "replace")


def separators(data: bytes, rng: random.Random) -> bytes:
    """Other separators and line ends."""
    old, new = rng.choice(
        (
            (b",", b";"),
            (b",", b"\t"),
            (b";", b","),
            (b"\t", b" "),
            (b"\n", b"\r"),
            (b"\n", b"\r\n"),
            (b"\n", b"\n\n"),
            (b".", b","),
            (b",", b"|"),
            (b"\n", b"\x0b"),
            (b",", b"\x1f"),
        )
    )
    return data.replace(old, new, rng.choice((-1, -1, 3)))


def footer(data: bytes, rng: random.Random) -> bytes:
    """The end of a Parquet or Arrow file lies: its length, its bytes, its mark."""
    out = bytearray(data)
    how = rng.randrange(4)
    if how == 0 and len(out) > 8:
        length = rng.choice((0, 1, 7, len(out), len(out) * 2, 2**31 - 1, 2**32 - 1))
        out[-8:-4] = struct.pack("<I", length)
    elif how == 1:
        size = min(len(out), rng.choice((40, 400, 1200)))
        for _ in range(rng.choice((1, 2, 5))):
            out[-1 - rng.randrange(size)] = rng.randrange(256)
    elif how == 2 and len(out) > 40:
        out = out[:4] + out[-rng.randrange(9, len(out) - 4) :]
    else:
        out[-4:] = rng.choice((b"PAR1", b"PARE", b"RROW", b"\0\0\0\0"))
    return bytes(out)


def number_in(data: bytes, rng: random.Random) -> bytes:
    """A number somewhere in a binary file becomes an extreme one: counts, sizes, offsets."""
    out = bytearray(data)
    form = rng.choice(("<i", "<q", "<h"))
    size = struct.calcsize(form)
    if len(out) <= size:
        return data
    at = rng.randrange(len(out) - size)
    top = 2 ** (8 * size - 1) - 1
    value = rng.choice((0, 1, -1, top, -top - 1, top // 2, 65_536 % (top + 1)))
    struct.pack_into(form, out, at, value)
    return bytes(out)


def table_in(data: bytes) -> tuple[pa.Table, Callable[[pa.Table, random.Random], bytes]] | None:
    """The table in a Parquet or Arrow file, and how to write such a file again; None where it is none any more."""
    try:
        if data[:4] == b"PAR1":
            return pq.read_table(pa.BufferReader(data)), _as_parquet
        if data[:6] == b"ARROW1":
            return pa.ipc.open_file(pa.BufferReader(data)).read_all(), _as_file
        return pa.ipc.open_stream(pa.BufferReader(data)).read_all(), _as_stream
    except (pa.ArrowException, OSError, ValueError, KeyError, OverflowError, MemoryError):
        return None


def _as_parquet(table: pa.Table, rng: random.Random) -> bytes:
    sink = pa.BufferOutputStream()
    pq.write_table(
        table,
        sink,
        row_group_size=rng.choice((1, 3, 7, 1000)),
        compression=rng.choice(("none", "zstd", "snappy")),
        use_dictionary=rng.random() < 0.7,
        write_statistics=rng.random() < 0.8,
        data_page_version=rng.choice(("1.0", "2.0")),
    )
    return bytes(sink.getvalue().to_pybytes())


def _as_file(table: pa.Table, rng: random.Random) -> bytes:
    sink = pa.BufferOutputStream()
    with pa.ipc.new_file(sink, table.schema) as writer:
        writer.write_table(table, max_chunksize=rng.choice((1, 5, 1000)))
    return bytes(sink.getvalue().to_pybytes())


def _as_stream(table: pa.Table, rng: random.Random) -> bytes:
    sink = pa.BufferOutputStream()
    with pa.ipc.new_stream(sink, table.schema) as writer:
        writer.write_table(table, max_chunksize=rng.choice((1, 5, 1000)))
    return bytes(sink.getvalue().to_pybytes())


_NUMBERS = (0.0, -1.0, 1.0, -999.0, 99999.0, 1e308, 1e-320, math.nan, math.inf, -math.inf, None)
_KINDS = (
    *(pa.float32(), pa.float64(), pa.int8(), pa.int64(), pa.uint64(), pa.string(), pa.bool_()),
    *(pa.decimal128(20, 3), pa.timestamp("s"), pa.timestamp("ns", "UTC"), pa.date32(), pa.null()),
    *(pa.large_string(), pa.binary(), pa.dictionary(pa.int32(), pa.string()), pa.duration("us")),
)


def table_columns(data: bytes, rng: random.Random) -> bytes:
    """Columns of a table change places, names, kinds and values, stand twice or are gone; rows too."""
    found = table_in(data)
    if found is None:
        return data
    table, written = found
    for _ in range(rng.choice((1, 1, 2, 4))):
        if not table.num_columns or not table.num_rows:
            break
        at, other = rng.randrange(table.num_columns), rng.randrange(table.num_columns)
        field, column = table.schema.field(at), table.column(at)
        way = rng.randrange(9)
        try:
            if way == 0:
                names = list(table.schema.names)
                names[at], names[other] = names[other], names[at]
                table = table.rename_columns(names)
            elif way == 1:
                table = table.remove_column(at)
            elif way == 2:
                table = table.append_column(field, column)
            elif way == 3:
                names = list(table.schema.names)
                names[at] = rng.choice(_NAMES)
                table = table.rename_columns(names)
            elif way == 4:
                table = table.set_column(
                    at, field.name, column.cast(rng.choice(_KINDS), safe=False)
                )
            elif way in (5, 6):
                values = column.to_pylist()
                for _ in range(rng.choice((1, 2, len(values)))):
                    values[rng.randrange(len(values))] = rng.choice(_NUMBERS)
                table = table.set_column(
                    at, field.name, pa.array(values, field.type, from_pandas=False)
                )
            elif way == 7:
                order = list(range(table.num_rows))
                rng.shuffle(order)
                table = table.take(pa.array(order))
            else:
                rows = [rng.randrange(table.num_rows) for _ in range(rng.choice((1, 5, 40)))]
                table = pa.concat_tables([table, table.take(pa.array(rows))])
        except (pa.ArrowException, ValueError, TypeError, OverflowError, KeyError):
            continue
    try:
        return written(table, rng)
    except (pa.ArrowException, ValueError, OSError):
        return data


ANY: tuple[Mutation, ...] = (
    flip_bytes,
    flip_bits,
    truncate,
    insert_nuls,
    insert_noise,
    cut_out,
    repeat_piece,
)
TEXT: tuple[Mutation, ...] = (
    *ANY,
    huge_field,
    quotes,
    swap_columns,
    swap_columns,
    lines_about,
    lines_about,
    odd_values,
    odd_values,
    odd_column,
    odd_names,
    odd_names,
    encode,
    separators,
)
BINARY: tuple[Mutation, ...] = (
    *(*ANY, footer, footer, number_in, number_in, flip_bytes),
    *(table_columns, table_columns, table_columns, table_columns),
)


def unpack(data: bytes, how: str) -> bytes:
    """The content of a packed seed."""
    if how == "gz":
        return gzip.decompress(data)
    out: bytes = pa.CompressedInputStream(pa.BufferReader(data), "zstd").read()
    return out


def bomb(rng: random.Random) -> bytes:
    """A small file that unpacks to a large one."""
    packer = zlib.compressobj(9, zlib.DEFLATED, 31)
    row = b"2024-05-14T08:00:00Z,10.0\n" if rng.random() < 0.5 else b"0"
    block = (row * (1 << 20))[: 1 << 20]
    out = [packer.compress(b"time,depth\n")]
    out += [packer.compress(block) for _ in range(160)]
    return b"".join(out) + packer.flush()


def mutant(seed: Seed, rng: random.Random) -> bytes:
    """One ruined file."""
    if seed.packed == "gz" and rng.random() < 0.002:
        return bomb(rng)
    data = seed.content
    inside = seed.packed and rng.random() < 0.6
    if inside:
        data = unpack(data, seed.packed)
    ways = BINARY if seed.binary or (seed.packed and not inside) else TEXT
    sound = data
    for _ in range(rng.choice((1, 1, 1, 2, 3))):
        way = rng.choice(ways)
        # A table that is damaged already could end this process when it is written again.
        if data and (way is not table_columns or data == sound):
            data = way(data, rng)
    return pack(data, seed.packed) if inside else data
