"""How a text log is written: encoding, separator, decimal mark, preamble, header and units row."""

from __future__ import annotations

import codecs
import csv
import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from qa.ingest.names import ROLES, plain, unit_of
from qa.model.errors import InputError

SAMPLE_BYTES = 1 << 18
SEPARATORS = ("\t", ";", ",", "|", " ")
COMMENTS = ("#", "%", "//", "!", "$", "*")
_NUMBER = re.compile(r"^[+-]?(\d+(\.\d*)?|\.\d+)([eEdD][+-]?\d+)?$")
_COMMA_NUMBER = re.compile(r"^[+-]?(\d+,\d+|,\d+)([eE][+-]?\d+)?$")
_TIMELIKE = re.compile(
    r"^(\d{4}[-/.]\d{1,2}[-/.]\d{1,2}|\d{1,2}[-/.]\d{1,2}[-/.]\d{2,4}|\d{1,2}:\d{2}(:\d{2})?|\d{4}-\d{3}\D)"
)


_BETWEEN_RULES = re.compile(r"[\s|+]+")


@dataclass(frozen=True, slots=True)
class Dialect:
    """What must be known to cut a text log into cells.

    ``first_line`` is the 0-based line that the data start at; ``header`` the names, as written;
    ``header_line`` the header's own bytes, so that a repeated one is recognised.
    """

    encoding: str
    separator: str
    decimal_comma: bool
    quoted: bool
    comment: str
    first_line: int
    names: tuple[str, ...]
    units: tuple[str, ...]
    header_line: bytes
    headed: bool
    notes: tuple[str, ...] = ()

    @property
    def width(self) -> int:
        """Number of columns."""
        return len(self.names)


def find_encoding(head: bytes, where: str) -> tuple[str, int]:
    """Encoding of a text and the length of its byte order mark.

    Raises
    ------
    InputError
        If the bytes are no text.
    """
    for mark, name in (
        (codecs.BOM_UTF8, "utf-8"),
        (codecs.BOM_UTF16_LE, "utf-16-le"),
        (codecs.BOM_UTF16_BE, "utf-16-be"),
    ):
        if head.startswith(mark):
            return name, len(mark)
    if b"\0" in head:
        even, odd = head[0:4096:2].count(0), head[1:4096:2].count(0)
        half = max(1, min(len(head), 4096) // 2)
        if odd > 0.7 * half and even < 0.1 * half:
            return "utf-16-le", 0
        if even > 0.7 * half and odd < 0.1 * half:
            return "utf-16-be", 0
        first = head.index(0)
        # a log cut short by a crash may end in NULs; one that starts with them is no text
        if first < 16 or head[:first].count(b"\n") < 2:
            raise InputError(
                "The file is neither text nor Parquet.",
                where=where,
                found=f"NUL bytes from byte {first + 1}",
                expected="a CSV, Parquet or Arrow file",
            )
    control = sum(1 for b in head[:4096] if b < 32 and b not in (9, 10, 13, 12, 0, 26))
    if control > 0.02 * min(len(head), 4096) + 2:
        raise InputError(
            "The file is neither text nor Parquet.",
            where=where,
            found="bytes that are no text",
            expected="a CSV, Parquet or Arrow file",
        )
    try:
        codecs.getincrementaldecoder("utf-8")().decode(head)
    except UnicodeDecodeError:
        return "cp1252", 0
    return "utf-8", 0


def _is_rule(line: str) -> bool:
    """Whether a line is one that is drawn under a header: strokes of three and more."""
    strokes = [stroke for stroke in _BETWEEN_RULES.split(line) if stroke]
    return bool(strokes) and all(len(s) >= 3 and not s.strip("-=_") for s in strokes)


def split_line(line: str, separator: str) -> list[str]:
    """The cells of a line. Between spaces, a unit in brackets belongs to the name before it."""
    if separator == " ":
        return re.sub(r"(?<=\w)\s+(?=[(\[])", "_", line).split()
    if '"' in line:
        try:
            return next(csv.reader([line], delimiter=separator), [])
        except csv.Error:
            return line.split(separator)
    return line.split(separator)


def _is_value(cell: str) -> bool:
    cell = cell.strip().strip('"')
    return bool(_NUMBER.match(cell) or _COMMA_NUMBER.match(cell) or _TIMELIKE.match(cell))


def _share_of_values(cells: Sequence[str]) -> float:
    filled = [c for c in cells if c.strip()]
    return sum(map(_is_value, filled)) / len(filled) if filled else 0.0


def find_dialect(
    text: str, encoding: str, order: Sequence[str], where: str, complete: bool
) -> Dialect:
    """Work out the dialect from the start of a log.

    Parameters
    ----------
    text : str
        The first characters.
    encoding : str
        As found by :func:`find_encoding`.
    order : sequence of str
        Column names that the survey file gives for files without a header.
    where : str
        The file, for messages.
    complete : bool
        Whether ``text`` is the whole file; otherwise its last line may be cut.
    """
    lines = text.split("\n")
    if not complete and len(lines) > 1:
        lines.pop()
    lines = [line.rstrip("\r") for line in lines]
    comment = _comment_mark(lines)
    data = [
        (n, line)
        for n, line in enumerate(lines[:4000])
        if line.strip()
        and not (comment and line.lstrip().startswith(comment))
        and not _is_rule(line)
    ]
    if not data:
        raise InputError("The file holds no rows.", where=where, expected="a header and rows")
    separator = _separator([line for _, line in data], len(order))
    if separator is None:
        raise InputError(
            "The file is no table that is known.",
            where=where,
            found=data[0][1][:80],
            expected="rows of values between commas, semicolons, tabs or spaces",
        )
    counts = Counter(len(split_line(line, separator)) for _, line in data[-min(len(data), 200) :])
    width = max(counts, key=lambda n: (counts[n], n))
    if counts[width] < 0.9 * counts.total():
        heads = (split_line(line, separator) for _, line in data[:30])
        named = next((len(cells) for cells in heads if _known_names(cells) >= 2), width)
        # the header alone proves nothing: rows may end in one separator more
        width = named if counts[named] > 1 else width
    wide = [(n, line) for n, line in data if len(split_line(line, separator)) == width]
    notes: list[str] = []
    header_at, names, first = _header(
        data, wide, separator, order, width, notes, where, comment, lines
    )
    units: tuple[str, ...] = ()
    header_bytes = lines[header_at].encode() if header_at is not None else b""
    if header_at is not None:
        following = [n for n, _ in data if n > header_at]
        first = following[0] if following else header_at + 1
        cells = split_line(lines[first], separator) if following else []
        if cells and _is_units_row(cells):
            beside = [c.strip() for c in cells[: len(names)]]
            units = (*beside, *[""] * (len(names) - len(beside)))
            later = [n for n in following if n > first]
            first = later[0] if later else first + 1
    body = [split_line(line, separator) for n, line in data if n >= first][:400]
    # between commas, a cell that holds one stood in quotes
    decimal_comma = _decimal_comma(body)
    return Dialect(
        encoding,
        separator,
        decimal_comma,
        any('"' in line for line in lines),
        comment,
        first,
        names,
        units,
        header_bytes,
        header_at is not None,
        tuple(notes),
    )


def _comment_mark(lines: Sequence[str]) -> str:
    for mark in COMMENTS:
        if any(line.lstrip().startswith(mark) for line in lines[:200]):
            return mark
    return ""


def _separator(lines: Sequence[str], wanted: int) -> str | None:
    """The separator that cuts most lines into the same number of cells."""
    best: tuple[float, str | None] = (0.0, None)
    tail = lines[-min(len(lines), 300) :]
    for rank, separator in enumerate(SEPARATORS):
        counts = Counter(len(split_line(line, separator)) for line in tail)
        width, hits = max(counts.items(), key=lambda kv: (kv[1], kv[0]))
        if width < 2:
            several = {n: c for n, c in counts.items() if n >= 2}
            if not several:
                continue
            width, hits = max(several.items(), key=lambda kv: kv[1])
        share = hits / len(tail)
        # names that are known tell more than rows, of which most may be wrecked
        named = any(_known_names(split_line(line, separator)) >= 2 for line in lines[:30])
        if share < 0.5 and len(tail) > 3 and not named:
            continue
        score = share - 0.02 * rank + 0.3 * named
        if wanted and width == wanted:
            score += 0.5
        if separator == ",":
            # with a decimal comma every number holds one: semicolons and tabs go first, at equal share
            score += 0.01
        if separator == " " and best[1] is not None:
            score -= 0.5
        if score > best[0]:
            best = (score, separator)
    if best[1] is None and lines and all(plain(lines[0]) in ROLES for _ in (0,)):
        return ","
    return best[1]


def _known_names(cells: Sequence[str]) -> int:
    known = 0
    for cell in cells:
        base = re.sub(r"[(\[{].*", "", cell)
        key = plain(base)
        tokens = [t for t in re.split(r"[\s_.\-]+", base) if t]
        known += key in ROLES or (len(tokens) > 1 and plain("".join(tokens[:-1])) in ROLES)
    return known


def _header(
    data: Sequence[tuple[int, str]],
    wide: Sequence[tuple[int, str]],
    separator: str,
    order: Sequence[str],
    width: int,
    notes: list[str],
    where: str,
    comment: str,
    lines: Sequence[str],
) -> tuple[int | None, tuple[str, ...], int]:
    """Line of the header, the columns' names, and the line of the first row."""

    def names_of(cells: Sequence[str]) -> tuple[str, ...]:
        names = [c.strip().strip('"').strip() for c in cells]
        names += [""] * (width - len(names))
        return tuple(names[:width]) if not any(names[width:]) else tuple(names)

    first_value = next(
        (
            i
            for i, (_, line) in enumerate(wide)
            if _share_of_values(split_line(line, separator)) >= 0.5
        ),
        None,
    )
    if first_value is None:
        first_value = len(wide)
    before = wide[:first_value]
    limit = wide[first_value][0] if first_value < len(wide) else len(lines)
    # the header may have a cell more or less than the rows: a separator at the end of either
    near = [
        (n, line)
        for n, line in data
        if n < limit and 0 <= abs(len(split_line(line, separator)) - width) <= 1
    ]
    candidates = [
        (n, line)
        for n, line in (near or before)
        if _share_of_values(split_line(line, separator)) < 0.5
        and len(split_line(line, separator)) >= min(2, width)
    ]
    headers = [
        (n, line)
        for n, line in candidates
        if not _is_units_row(split_line(line, separator))
        or _known_names(split_line(line, separator)) >= 2
    ]
    chosen = None
    if headers:
        scored = [(_known_names(split_line(line, separator)), -n, n, line) for n, line in headers]
        top = max(scored)
        chosen = (top[2], top[3])
    elif comment:
        # some exports put the names into the last comment line above the data
        for n in range(limit - 1, -1, -1):
            line = lines[n].strip()
            if line.startswith(comment):
                bare = line.lstrip("".join(set(comment))).strip()
                cells = split_line(bare, separator)
                if abs(len(cells) - width) <= 1 and _known_names(cells) >= 2:
                    return n, names_of(cells), limit
    if chosen is not None:
        cells = split_line(chosen[1], separator)
        if order:
            notes.append("The file has a header: [columns] order was not needed.")
        names = names_of(cells)
        if len(names) > width:
            # one name too many: only an empty last one can be dropped
            names = names[:width] if not names[-1] else names
        return chosen[0], names[: max(width, 1)] if len(names) >= width else names, limit
    if order:
        if len(order) != width:
            raise InputError(
                "[columns] order does not fit the file.",
                where=where,
                found=f"{width} columns",
                expected=f"{len(order)} columns, as the survey file says",
            )
        return None, tuple(order), data[0][0]
    raise InputError(
        "The file has no header.",
        where=where,
        found=data[0][1][:80],
        advice='Write the columns\' names in their order under [columns] in the survey file, for example order = ["time", "depth"].',
    )


def _is_units_row(cells: Sequence[str]) -> bool:
    filled = [c.strip().strip('"') for c in cells if c.strip()]
    if not filled or any(_is_value(c) for c in filled):
        return False
    known = 0
    for cell in filled:
        bare = cell.strip("()[]{}").strip()
        if (
            unit_of(bare, None) is not None
            or "since" in bare.lower()
            or bare.lower()
            in (
                "-",
                "utc",
                "#",
                "none",
                "text",
                "iso8601",
                "iso",
                "no",
                "n/a",
                "hh:mm:ss",
                "yyyy-mm-dd",
                "bool",
                "0/1",
                "dd",
                "string",
                "id",
            )
            or re.fullmatch(r"[\(\[{].*[\)\]}]", cell)
        ):
            known += 1
    return known >= max(1, 0.7 * len(filled))


def _decimal_comma(rows: Sequence[Sequence[str]]) -> bool:
    commas = points = 0
    for cells in rows:
        for cell in cells:
            cell = cell.strip().strip('"')
            if _COMMA_NUMBER.match(cell):
                commas += 1
            elif "." in cell and _NUMBER.match(cell):
                points += 1
    return commas > points
