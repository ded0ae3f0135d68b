"""Text logs, read in blocks cut at line ends: each row keeps its number in the file and its own words."""

from __future__ import annotations

import codecs
import io
import itertools
import re
from collections.abc import Callable, Generator, Iterator, Mapping, Sequence
from contextlib import closing
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import IO, Any

import numpy as np
import pyarrow as pa
import pyarrow.csv as arrow_csv
from numpy.typing import NDArray

from qa.ingest.dialect import SAMPLE_BYTES, Dialect, find_dialect, find_encoding
from qa.model.errors import InputError
from qa.model.side_by_side import in_order

BLOCK = 1 << 22
LONGEST_ROW = 1 << 22
"""A longer row is no row of a log: a hole in the file, or a quote never closed."""
BOMB_BYTES, BOMB_RATIO = 1 << 25, 200
"""A file of which some part unpacks to this many bytes and more than so many times its packed size is refused."""

PACKED = {".gz": "gzip", ".zst": "zstd", ".bz2": "bz2"}
_NULLS = [
    "",
    "nan",
    "NaN",
    "NAN",
    "null",
    "NULL",
    "Null",
    "None",
    "N/A",
    "n/a",
    "NA",
    "-",
    "--",
    "---",
    "nil",
    "#N/A",
    "*",
]

Texts = Callable[[NDArray[np.int64]], list[str]]


@dataclass(slots=True)
class RawBatch:
    """Some rows as they stand in the file, in columns by the file's own names.

    ``rows`` are the rows' numbers in the file, from 1. ``broken`` are rows that could not be cut into cells:
    number, reason, text. ``texts`` gives rows, by position, word for word.
    """

    length: int
    columns: Mapping[str, pa.Array]
    rows: NDArray[np.int64]
    texts: Texts
    broken: list[tuple[int, str, str]] = field(default_factory=list)


class _Counted(io.RawIOBase):
    """A packed stream, watched: what unpacks beyond all measure is refused."""

    def __init__(self, packed: pa.NativeFile, kind: str, where: str) -> None:
        self._packed, self._where = packed, where
        self._stream = pa.CompressedInputStream(packed, kind)
        self._unpacked, self._from = 0, 0

    def readable(self) -> bool:
        return True

    def read(self, size: int = -1) -> bytes:
        try:
            data = bytes(self._stream.read(size))
        except (OSError, EOFError, pa.ArrowException, ValueError) as problem:
            raise InputError(
                "The packed file is damaged or cut short.",
                where=self._where,
                found=str(problem).splitlines()[0] if str(problem) else type(problem).__name__,
                advice="Copy it again from where it came.",
            ) from None
        self._unpacked += len(data)
        if self._unpacked >= BOMB_BYTES:
            consumed = self._packed.tell() - self._from
            if self._unpacked > BOMB_RATIO * consumed:
                raise InputError(
                    f"The file unpacks to more than {BOMB_RATIO} times its size: that is no log.",
                    where=self._where,
                    found=f"{self._unpacked >> 20} MB out of {consumed >> 10} kB",
                    advice="If it is a log all the same, unpack it first.",
                )
            self._unpacked, self._from = 0, self._packed.tell()
        return data

    def close(self) -> None:
        self._stream.close()
        super().close()


def _unreadable(where: str, problem: OSError) -> InputError:
    return InputError(
        "The file cannot be read.",
        where=where,
        found=problem.strerror or str(problem),
        advice="Check the path and who may read it.",
    )


def _packing(path: Path) -> str:
    """How a file is packed, by its first bytes; "" where it is not."""
    with path.open("rb") as file:
        magic = file.read(4)
    if magic[:2] == b"\x1f\x8b":
        return "gzip"
    if magic == b"\x28\xb5\x2f\xfd":
        return "zstd"
    return "bz2" if magic[:3] == b"BZh" and path.suffix.lower() == ".bz2" else ""


def open_bytes(path: Path, where: str) -> IO[bytes]:
    """The file's bytes, unpacked where it is packed."""
    try:
        kind = _packing(path)
        if not kind:
            return path.open("rb")
        return _Counted(pa.OSFile(str(path), "rb"), kind, where)  # type: ignore[return-value]  # has all that is used of IO
    except OSError as problem:
        raise _unreadable(where, problem) from None


class _Transcoded:
    """Bytes of another encoding, as UTF-8 with line feeds."""

    def __init__(self, stream: IO[bytes], encoding: str, mark: int, carriage: bool) -> None:
        self._stream, self._carriage = stream, carriage
        self._decoder = (
            None
            if encoding in ("utf-8", "cp1252")
            else codecs.getincrementaldecoder(encoding)(errors="replace")
        )
        self._skip = mark

    def read(self, size: int) -> bytes:
        data = self._stream.read(size)
        if self._skip:
            skipped = min(self._skip, len(data))
            data, self._skip = data[skipped:], self._skip - skipped
            if not data:
                data = self._stream.read(size)
        if self._decoder is not None:
            final = not data
            text = self._decoder.decode(data, final)
            while not text and not final:
                data = self._stream.read(size)
                final = not data
                text = self._decoder.decode(data, final)
            data = text.encode("utf-8", "replace")
        return data.replace(b"\r", b"\n") if self._carriage else data


@dataclass(frozen=True, slots=True)
class TextFormat:
    """All that is needed to read one text log. Small, so that it travels with a task."""

    dialect: Dialect
    mark: int
    carriage: bool


def probe_text(path: Path, where: str, order: Sequence[str]) -> TextFormat:
    """Find out how a text log is written, from its first bytes."""
    with open_bytes(path, where) as stream:
        head = b""
        while len(head) < SAMPLE_BYTES:
            more = stream.read(SAMPLE_BYTES - len(head))
            if not more:
                break
            head += more
    if not head:
        raise InputError("The file is empty.", where=where)
    encoding, mark = find_encoding(head, where)
    complete = len(head) < SAMPLE_BYTES
    text = codecs.getincrementaldecoder(encoding)(errors="replace").decode(head[mark:])
    carriage = "\n" not in text and "\r" in text
    if carriage:
        text = text.replace("\r", "\n")
    if not complete and "\n" not in text:
        raise InputError(
            "The first row is longer than any row of a log.",
            where=where,
            found=f"no end of line in {SAMPLE_BYTES >> 10} kB",
        )
    dialect = find_dialect(text.replace("\0", ""), encoding, order, where, complete)
    return TextFormat(dialect, mark, carriage)


@dataclass(slots=True)
class _Block:
    data: bytes
    first: int
    lines: int


def _blocks(
    path: Path,
    where: str,
    form: TextFormat,
    start: tuple[int, int] = (0, 0),
    starts: list[tuple[int, int]] | None = None,
) -> Generator[_Block]:
    """Blocks of whole lines, from the first row on. ``first`` is the 0-based number of the block's first line.

    ``start`` is a byte where a line begins and that line's number; ``starts`` takes these for each block.
    """
    skip, line = form.dialect.first_line, start[1]
    at = start[0]
    with open_bytes(path, where) as raw:
        if at:
            raw.seek(at)
            form = replace(form, mark=0)
        stream = _Transcoded(raw, form.dialect.encoding, form.mark, form.carriage)
        carried = b""
        while True:
            data = stream.read(BLOCK)
            if not data:
                break
            cut = data.rfind(b"\n") + 1
            if not cut:
                carried += data
                if len(carried) > LONGEST_ROW:
                    raise InputError(
                        f"Row {line + 1} is longer than {LONGEST_ROW >> 20} MB: the file is damaged there.",
                        where=where,
                        found="NUL bytes" if b"\0" in carried[-16:] else "no end of line",
                        advice="Cut the file off before that row, or copy it again.",
                    )
                continue
            block = (
                b"".join((carried, memoryview(data)[:cut])) if carried or cut < len(data) else data
            )
            carried = data[cut:]
            # Other threads go on while numpy counts, and it is faster.
            count = int(np.count_nonzero(np.frombuffer(block, dtype=np.uint8) == 10))
            if starts is not None:
                starts.append((at, line))
            at += len(block) + (form.mark if not line else 0)
            if line + count <= skip:
                line += count
                continue
            if line < skip:
                for _ in range(skip - line):
                    block = block[block.index(b"\n") + 1 :]
                count -= skip - line
                line = skip
            if block:
                yield _Block(block, line, count)
            line += count
        # the last line may lack its end; a control-Z or NULs alone are no row
        if carried.strip(b"\0\x1a \r\t") and line >= skip:
            yield _Block(carried + b"\n", line, 1)
        elif carried.strip(b"\x1a \r\t") and line >= skip:
            yield _Block(carried[:4096] + b"\n", line, 1)


class TextSource:
    """One text log, read in batches."""

    def __init__(self, path: Path, where: str, form: TextFormat) -> None:
        self.path, self.where, self.form = path, where, form
        self.dialect = form.dialect
        self.starts: list[tuple[int, int]] = []
        self._as_text: set[str] = set()

    def batches(
        self,
        kinds: Mapping[str, pa.DataType],
        threads: int | None = None,
        most: int | None = None,
        start: tuple[int, int] = (0, 0),
        last: int | None = None,
    ) -> Iterator[RawBatch]:
        """Read columns in batches, in file order.

        Parameters
        ----------
        kinds : mapping of str to pyarrow.DataType
            Columns wanted, by the file's own names, and the types to read them as. A column that holds anything
            else comes as text instead, in the batches from there on.
        threads : int, optional
            Blocks parsed at the same time; two, if this process may use as many.
        most : int, optional
            Stop after about so many bytes.
        start : tuple of int
            Where to begin, as :attr:`starts` gave it when the file was read before.
        last : int, optional
            Number of the last row that is wanted.
        """
        self.starts = []
        threads = min(2, pa.cpu_count()) if threads is None else threads
        with closing(_blocks(self.path, self.where, self.form, start, self.starts)) as every:
            blocks: Iterator[_Block] = every
            if last is not None:
                blocks = itertools.takewhile(lambda block: block.first < last, every)
            if most is not None:
                first = next(blocks, None)
                if first is not None:
                    if len(first.data) > most:
                        cut = first.data.rfind(b"\n", 0, most) + 1 or len(first.data)
                        data = first.data[:cut]
                        first = _Block(data, first.first, data.count(b"\n"))
                    yield self._parse(first, kinds)
            else:
                yield from in_order(blocks, lambda block: self._parse(block, kinds), threads)

    @property
    def seekable(self) -> bool:
        """Whether :meth:`window` can start anywhere: neither packed nor of another encoding."""
        plain = not self.form.carriage and self.dialect.encoding in ("utf-8", "cp1252")
        return plain and not _packing(self.path)

    def window(self, kinds: Mapping[str, pa.DataType], at: int, size: int) -> RawBatch:
        """The whole lines within some bytes of the file. Row numbers count from the first of them."""
        try:
            with self.path.open("rb") as file:
                file.seek(at)
                data = file.read(size)
                complete = len(data) < size
        except OSError as problem:
            raise _unreadable(self.where, problem) from None
        start = data.find(b"\n") + 1 if at else 0
        end = len(data) if complete else data.rfind(b"\n") + 1
        data = data[start : max(start, end)]
        data = data if not data or data.endswith(b"\n") else data + b"\n"
        return self._parse(_Block(data, 0, data.count(b"\n")), kinds)

    def rows(self, numbers: Sequence[int]) -> dict[int, str]:
        """Rows by their number in the file, word for word."""
        wanted = np.unique(np.asarray(numbers, dtype=np.int64))
        found: dict[int, str] = {}
        if not len(wanted):
            return found
        for block in _blocks(self.path, self.where, self.form):
            low, high = np.searchsorted(wanted, [block.first + 1, block.first + block.lines + 1])
            if low < high:
                starts, ends = _line_bounds(block.data)
                for number in wanted[low:high].tolist():
                    i = number - block.first - 1
                    found[number] = _readable(block.data[starts[i] : ends[i]])
            if high >= len(wanted):
                break
        return found

    def _parse(self, block: _Block, kinds: Mapping[str, pa.DataType]) -> RawBatch:
        dialect = self.dialect
        data = block.data
        starts, ends = _line_bounds(data)
        broken: list[tuple[int, str, str]] = []
        drop = self._odd_lines(data, starts, ends, block.first, broken)
        kept = np.arange(len(starts))
        if drop is not None:
            kept = np.flatnonzero(~drop)
            data = b"".join(data[starts[i] : ends[i]] + b"\n" for i in kept.tolist())
        if dialect.encoding == "cp1252" or not _is_utf8(data):
            data = _from_ansi(data, dialect.encoding)
        separator = dialect.separator
        if separator == " ":
            # In this order each step takes time in proportion, however long a run of spaces is.
            data = re.sub(rb"(?m)^ | $", b"", re.sub(rb"[ \t\r]+", b" ", data))
        invalid: list[tuple[int, str, int]] = []
        table = self._read(data, separator, kinds, len(kept), invalid)
        rows = kept + (block.first + 1)
        if invalid:
            gone = np.array([n - 1 for n, _, _ in invalid], dtype=np.int64)
            for n, _text, actual in invalid:
                i = int(kept[n - 1])
                broken.append(
                    (
                        block.first + i + 1,
                        "not as many cells as columns",
                        _readable(block.data[starts[i] : ends[i]]),
                    )
                )
                del actual
            rows = np.delete(rows, gone)
            kept = np.delete(kept, gone)
        columns = {}
        for name in kinds:  # where none is wanted the table holds them all
            column = table.column(name)
            columns[name] = column.chunk(0) if column.num_chunks == 1 else column.combine_chunks()

        def texts(positions: NDArray[np.int64]) -> list[str]:
            return [_readable(block.data[starts[i] : ends[i]]) for i in kept[positions].tolist()]

        broken.sort()
        return RawBatch(len(rows), columns, rows, texts, broken)

    def _odd_lines(
        self,
        data: bytes,
        starts: NDArray[np.int64],
        ends: NDArray[np.int64],
        first: int,
        broken: list[tuple[int, str, str]],
    ) -> NDArray[np.bool_] | None:
        """Lines that are no rows of cells: empty, comments, the header again, wrecked. None where there are none."""
        buffer = np.frombuffer(data, dtype=np.uint8)
        lengths = ends - starts
        drop: NDArray[np.bool_] | None = None

        def dropped() -> NDArray[np.bool_]:
            return np.zeros(len(starts), dtype=bool) if drop is None else drop

        def reject(lines: NDArray[np.int64], reason: str) -> None:
            nonlocal drop
            drop = dropped()
            for i in lines.tolist():
                if not drop[i]:
                    broken.append((first + i + 1, reason, _readable(data[starts[i] : ends[i]])))
            drop[lines] = True

        initial = buffer[np.minimum(starts, len(buffer) - 1)]
        # a line that starts with a space or separator may be all blank
        suspects = np.flatnonzero((lengths <= 1) | (initial <= 32))
        if len(suspects) and self.dialect.separator != " ":
            tab = self.dialect.separator == "\t"
            blank = [
                i
                for i in suspects.tolist()
                if not data[starts[i] : ends[i]].strip(b" \r" if tab else b" \t\r\x0c\x1a")
            ]
        elif len(suspects):
            blank = [i for i in suspects.tolist() if not data[starts[i] : ends[i]].strip()]
        else:
            blank = []
        if blank:
            drop = dropped()
            drop[blank] = True
        if self.dialect.comment:
            mark = self.dialect.comment.encode()
            near = np.flatnonzero((initial == mark[0]) | (initial <= 32))
            lines = [
                i for i in near.tolist() if data[starts[i] : ends[i]].lstrip().startswith(mark)
            ]
            if lines:
                drop = dropped()
                drop[lines] = True
        header = self.dialect.header_line
        if header:
            same = np.flatnonzero((np.abs(lengths - len(header)) <= 1) & (initial == header[0]))
            # a few bytes tell most rows from the header before any line is cut out
            for place in {1, len(header) // 4, len(header) // 2, len(header) - 2}:
                if 0 <= place < len(header):
                    same = same[buffer[starts[same] + place] == header[place]]
            again = [i for i in same.tolist() if data[starts[i] : ends[i]].rstrip(b"\r") == header]
            if again:
                reject(np.array(again), "the header again")
        if b"\0" in data:
            holes = (
                np.flatnonzero(np.add.reduceat(buffer == 0, starts) > 0)
                if len(starts)
                else np.array([])
            )
            reject(holes, "NUL bytes in the row")
        if b'"' in data:
            # bytes may overflow: only whether the count is odd matters
            quotes = np.add.reduceat((buffer == 34).view(np.uint8), starts, dtype=np.uint8)
            # a mark within a cell, as of seconds of arc, is no quote
            opening = re.compile(b"(?:^|" + re.escape(self.dialect.separator.encode()) + b') *"')
            odd = [
                i
                for i in np.flatnonzero(quotes % 2 == 1).tolist()
                if opening.search(data[starts[i] : ends[i]])
            ]
            if odd:
                reject(np.array(odd), "a quote that is not closed in its row")
        return drop

    def _read(
        self,
        data: bytes,
        separator: str,
        kinds: Mapping[str, pa.DataType],
        lines: int,
        invalid: list[tuple[int, str, int]],
    ) -> pa.Table:
        names = [f"{i}" for i in range(self.dialect.width)]
        places = {name: self.dialect.names.index(name) for name in kinds}
        if not lines:
            return pa.table({name: pa.array([], kind) for name, kind in kinds.items()})

        def skip(row: Any) -> str:
            invalid.append((row.number, row.text, row.actual_columns))
            return "skip"

        for _ in range(len(kinds) + 2):
            invalid.clear()
            types = {
                f"{places[name]}": (
                    pa.string() if name in self._as_text and pa.types.is_primitive(kind) else kind
                )
                for name, kind in kinds.items()
            }
            try:
                table = arrow_csv.read_csv(
                    pa.py_buffer(data),
                    read_options=arrow_csv.ReadOptions(
                        use_threads=False, block_size=len(data) + 1, column_names=names
                    ),
                    parse_options=arrow_csv.ParseOptions(
                        delimiter=separator,
                        ignore_empty_lines=False,
                        invalid_row_handler=skip,
                        quote_char='"' if b'"' in data else False,
                    ),
                    convert_options=arrow_csv.ConvertOptions(
                        column_types=types,
                        include_columns=list(types),
                        null_values=_NULLS,
                        strings_can_be_null=True,
                        quoted_strings_can_be_null=True,
                        decimal_point="," if self.dialect.decimal_comma else ".",
                        check_utf8=False,
                    ),
                )
            except pa.ArrowInvalid as problem:
                number = re.search(r"In CSV column #(\d+)", str(problem))
                if number is None or int(number[1]) >= len(names):
                    raise InputError(
                        "The rows cannot be cut into cells.",
                        where=self.where,
                        found=str(problem).splitlines()[0][:120],
                    ) from None
                name = self.dialect.names[int(number[1])]
                self._as_text.add(next((n for n in kinds if places[n] == int(number[1])), name))
                continue
            if table.num_rows + len(invalid) != lines:
                raise InputError(
                    "The rows cannot be counted: quotes and line ends do not match.",
                    where=self.where,
                    found=f"{table.num_rows + len(invalid)} rows in {lines} lines",
                )
            return table.rename_columns([self.dialect.names[int(n)] for n in table.column_names])
        raise InputError("The rows cannot be read.", where=self.where)


def _line_bounds(data: bytes) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    ends = np.flatnonzero(np.frombuffer(data, dtype=np.uint8) == 10)
    starts = np.concatenate([[0], ends[:-1] + 1])
    return starts.astype(np.int64), ends.astype(np.int64)


def _readable(line: bytes) -> str:
    line = line.rstrip(b"\r\n")[:10_000]
    try:
        return line.decode("utf-8")
    except UnicodeDecodeError:
        return line.decode("cp1252", "replace")


def _is_utf8(data: bytes) -> bool:
    if data.isascii():
        return True
    try:
        data.decode("utf-8")
    except UnicodeDecodeError:
        return False
    return True


def _from_ansi(data: bytes, encoding: str) -> bytes:
    if data.isascii():
        return data
    if encoding != "cp1252":
        # only the odd byte is wrong: keep the rest
        return data.decode("utf-8", "replace").encode("utf-8")
    return data.decode("cp1252", "replace").encode("utf-8")
