"""Line plans, read by the same machinery as logs: a line's name, and where it starts and ends."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Literal

import numpy as np

from qa.ingest.names import Binding, Header, recognise
from qa.ingest.small_table import SmallTable, read_small_table
from qa.model.errors import InputError
from qa.model.line_plan import LinePlan, PlannedLine
from qa.model.survey_file import ColumnChoices

_PAIRS: tuple[tuple[str, str], ...] = (("latitude", "longitude"), ("easting", "northing"))
_STARTS = frozenset(["start", "begin", "beginning", "from", "first", "sol", "bol", "origin"])
_ENDS = frozenset(["end", "stop", "finish", "to", "last", "eol"])
_EXPECTED = (
    'columns such as "line", "start latitude", "start longitude", "end latitude", "end longitude", or the same with '
    "easting and northing"
)
_NAMES = frozenset(("name", "line", "id"))


@np.errstate(over="ignore", invalid="ignore")
def read_line_plan(path: str | Path, shown: str = "") -> LinePlan:
    """Read a line plan from CSV, Parquet or Arrow.

    A line is one row with its start and its end, or two rows that follow one another, each with the line's name and a
    position. Positions are decimal degrees, or grid coordinates with their unit (metres where none is given).

    Parameters
    ----------
    path : path
        The file.
    shown : str
        Its name for messages; the path itself if left out.

    Returns
    -------
    LinePlan

    Raises
    ------
    InputError
        If the file cannot be read, has no names or no positions, or no row could be used.
    """
    path = Path(path)
    where = shown or path.as_posix()
    chooser = _Chooser(where)
    table = read_small_table(path, where, chooser)
    pair = chooser.pair
    table.reject(np.array([not name for name in table.texts["line"]], dtype=bool), "no line name")
    lines = _of_rows(table, pair) if chooser.both_ends else _of_two_rows(table, pair, where)
    if not lines:
        raise InputError(
            "No row of the line plan could be used.",
            where=where,
            found=table.reasons() or "no rows",
            expected=_EXPECTED,
        )
    notes = list(table.notes)
    notes += table.rejected_note()
    table.finish()
    table.account.notes.extend(notes)
    position: Literal["latitude and longitude", "easting and northing"] = (
        "latitude and longitude" if pair[0] == "latitude" else "easting and northing"
    )
    return LinePlan(where, tuple(lines), position, table.account, tuple(notes))


@dataclass(slots=True)
class _Chooser:
    """Picks a plan's columns out of a header; ``pair`` says which coordinates, ``both_ends`` whether a row has both."""

    where: str
    pair: tuple[str, str] = _PAIRS[0]
    both_ends: bool = True

    def __call__(self, headers: Sequence[Header]) -> Sequence[Binding]:
        line = self._line(headers)
        ends = [b for i, h in enumerate(headers) if (b := self._end(i, h)) is not None]
        roles = [b.role for b in ends]
        twice = next((r for r in roles if roles.count(r) > 1), None)
        if twice is not None:
            names = " and ".join(f'"{b.source}"' for b in ends if b.role == twice)
            raise InputError(
                f"Columns {names} both fit the {twice} of the lines.",
                where=self.where,
                advice="Take one out of the file, or rename it.",
            )
        for pair in _PAIRS:
            wanted = {f"{which} {name}" for which in ("start", "end") for name in pair}
            if wanted <= set(roles):
                self.pair, self.both_ends = pair, True
                return [line, *(b for b in ends if b.role in wanted)]
        plain_found = recognise(headers, ColumnChoices(), self.where)
        for pair in _PAIRS:
            found = [b for b in plain_found.bindings if b.role in pair and b.source != line.source]
            if len(found) == 2 and not roles:
                self.pair, self.both_ends = pair, False
                return [line, *found]
        lacking = [
            f"{which} {name}"
            for pair in _PAIRS
            for which in ("start", "end")
            for name in pair
            if roles and any(r.endswith(pair) for r in roles) and f"{which} {name}" not in roles
        ]
        raise InputError(
            "The line plan has no "
            + (", ".join(lacking) if lacking else "start and end positions")
            + " among the columns that are recognised.",
            where=self.where,
            found="columns " + ", ".join(f'"{h.name}"' for h in headers if h.name)[:300],
            expected=_EXPECTED,
            advice="Rename the columns so.",
        )

    def _line(self, headers: Sequence[Header]) -> Binding:
        found = recognise(headers, ColumnChoices(), self.where).role("line")
        if found is not None:
            return found
        for index, header in enumerate(headers):
            if re.sub(r"[\W_]+", "", header.name.lower()) in _NAMES:
                return Binding("line", header.name, index)
        raise InputError(
            "The line plan has no line names that are recognised.",
            where=self.where,
            found="columns " + ", ".join(f'"{h.name}"' for h in headers if h.name)[:300],
            expected=_EXPECTED,
            advice="Rename the columns so.",
        )

    def _end(self, index: int, header: Header) -> Binding | None:
        """The column as the start or end of a coordinate, if its name says so."""
        which, rest = _which_end(header.name)
        if not which:
            return None
        # "E1" and "N2" can only be of a grid; a lone x or y may be degrees or metres.
        rest = re.sub(r"^[Ee]\b", "easting", re.sub(r"^[Nn]\b", "northing", rest))
        found = recognise([replace(header, name=rest)], ColumnChoices(), self.where).bindings
        if len(found) != 1 or not any(found[0].role in pair for pair in _PAIRS):
            return None
        return replace(
            found[0], role=f"{which} {found[0].role}", source=header.name, index=index, number=-1
        )


def _which_end(name: str) -> tuple[str, str]:
    """Which end a header speaks of, and the header without that word.

    Examples
    --------
    >>> _which_end("Start Lat (deg)"), _which_end("easting_2"), _which_end("latStart"), _which_end("EOL_X")
    (('start', 'Lat (deg)'), ('end', 'easting'), ('start', 'lat'), ('end', 'X'))
    """
    spaced = re.sub(r"(?<=[a-z])(?=[A-Z])", " ", name)
    spaced = re.sub(r"(?<=[A-Za-z])(?=[12](?:\D|$))", " ", spaced).replace("_", " ")
    words = [w for w in re.split(r"[\s.\-]+", spaced) if w]
    for marks, which in ((_STARTS, "start"), (_ENDS, "end")):
        for at, word in enumerate(words):
            if word.lower() in marks:
                rest = words[:at] + words[at + 1 :]
                rest = [w for w in rest if w.lower() not in ("of", "line", "point", "position")]
                return which, " ".join(rest)
    for at, word in enumerate(words):
        if word in ("1", "2", "P1", "P2", "A", "B") and len(words) > 1:
            rest = words[:at] + words[at + 1 :]
            return ("start" if word[-1] in "1A" else "end"), " ".join(rest)
    return "", name


def _of_rows(table: SmallTable, pair: tuple[str, str]) -> list[PlannedLine]:
    """Lines of rows that hold both ends."""
    columns = [f"{which} {name}" for which in ("start", "end") for name in pair]
    for name in columns:
        table.reject(np.isnan(table.values[name]), f"no {name}")
    a, b, c, d = (table.values[name] for name in columns)
    table.reject((a == c) & (b == d), "the line starts where it ends")
    seen: set[str] = set()
    again = []
    for name in table.texts["line"]:
        again.append(name in seen)
        seen.add(name)
    table.reject(np.array(again, dtype=bool), "a line of that name stands before")
    a, b, c, d = (table.values[name] for name in columns)
    return [
        PlannedLine(name, (float(a[i]), float(b[i])), (float(c[i]), float(d[i])))
        for i, name in enumerate(table.texts["line"])
    ]


def _of_two_rows(table: SmallTable, pair: tuple[str, str], where: str) -> list[PlannedLine]:
    """Lines of two rows each, start before end."""
    for name in pair:
        table.reject(np.isnan(table.values[name]), f"no {name}")
    names = table.texts["line"]
    places: dict[str, list[int]] = {}
    for i, name in enumerate(names):
        places.setdefault(name, []).append(i)
    many = next((name for name, rows in places.items() if len(rows) > 2), None)
    if many is not None:
        raise InputError(
            "A planned line has two positions, its start and its end.",
            where=where,
            found=f'{len(places[many])} rows of line "{many}"',
            expected=_EXPECTED,
        )
    lone = np.array([len(places[name]) < 2 for name in names], dtype=bool)
    table.reject(lone, "the line has one position only")
    first, second = (table.values[name] for name in pair)
    found: dict[str, list[int]] = {}
    for i, name in enumerate(table.texts["line"]):
        found.setdefault(name, []).append(i)
    same = np.zeros(len(table), dtype=bool)
    for rows in found.values():
        same[rows] = first[rows[0]] == first[rows[1]] and second[rows[0]] == second[rows[1]]
    table.reject(same, "the line starts where it ends")
    first, second = (table.values[name] for name in pair)
    found = {}
    for i, name in enumerate(table.texts["line"]):
        found.setdefault(name, []).append(i)
    return [
        PlannedLine(
            name,
            (float(first[rows[0]]), float(second[rows[0]])),
            (float(first[rows[1]]), float(second[rows[1]])),
        )
        for name, rows in found.items()
    ]
