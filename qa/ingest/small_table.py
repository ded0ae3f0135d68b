"""Tables that are read whole: casts and line plans, by the same machinery as logs."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from qa.ingest.names import TIME_PARTS, Binding, Header
from qa.ingest.probe import is_table
from qa.ingest.table_source import TableSource
from qa.ingest.text_source import RawBatch, TextSource, probe_text
from qa.ingest.times import TimePlan, TimeState, convert_times, plan_times
from qa.ingest.values import Converted, to_number
from qa.model.columns import COLUMNS
from qa.model.errors import InputError
from qa.model.log import KEPT_REJECTS, NO_TIME, FileAccount, RejectedRow

Integers = NDArray[np.int64]
Mask = NDArray[np.bool_]

MOST_ROWS = 2_000_000
"""A longer file is no cast and no plan."""

Choose = Callable[[Sequence[Header]], Sequence[Binding]]


@dataclass(slots=True)
class SmallTable:
    """A table's wanted columns, whole.

    ``numbers`` holds the rows' numbers in the file, ``values`` the numeric columns in SI (NaN where missing),
    ``texts`` the others, ``time`` nanoseconds or :data:`qa.model.log.NO_TIME`. Rows whose cells are no number or
    are impossible were rejected, and stand in the account.
    """

    where: str
    numbers: Integers
    values: dict[str, NDArray[np.float64]]
    texts: dict[str, list[str]]
    time: Integers
    account: FileAccount
    words: Callable[[int], str]
    notes: list[str] = field(default_factory=list)

    def __len__(self) -> int:
        return len(self.numbers)

    def reject(self, mask: Mask, reason: str) -> None:
        """Take rows out, counted and kept word for word."""
        for at in np.flatnonzero(mask).tolist():
            _reject(self.account, int(self.numbers[at]), reason, self.words(int(self.numbers[at])))
        self.take(~mask)

    def leave_out(self, mask: Mask) -> None:
        """Take rows out that are sound but not wanted."""
        self.account.rows_out_of_scope += int(mask.sum())
        self.take(~mask)

    def take(self, kept: Mask | Integers) -> None:
        """Some of the rows, or all in another order; the account is the caller's."""
        rows = np.flatnonzero(kept) if kept.dtype == bool else kept
        self.numbers, self.time = self.numbers[rows], self.time[rows]
        self.values = {k: v[rows] for k, v in self.values.items()}
        self.texts = {k: [v[i] for i in rows.tolist()] for k, v in self.texts.items()}

    def finish(self) -> None:
        """What is left is used; the account is complete."""
        self.account.rows_used = len(self)
        self.account.rejected_rows.sort(key=lambda row: row.row)

    def rejected_note(self) -> tuple[str, ...]:
        """One note on what was rejected, or none."""
        count = self.account.rows_rejected
        if not count:
            return ()
        return (f"{count} row{'s' if count > 1 else ''} rejected: {self.reasons()}.",)

    def reasons(self) -> str:
        """Why rows were rejected, the commonest first, for a message."""
        found = sorted(self.account.reasons.items(), key=lambda item: -item[1])
        return "; ".join(
            f"{reason} ({count} row{'s' if count > 1 else ''})" for reason, count in found[:4]
        )


def read_small_table(
    path: Path,
    where: str,
    choose: Choose,
    order: Sequence[str] = (),
    time_zone: str = "UTC",
    time_unit: str = "",
) -> SmallTable:
    """Read a table whole.

    Parameters
    ----------
    path : Path
    where : str
        Its name as the user wrote it.
    choose : callable
        Given the headers, the bindings to read; a binding's ``role`` is the name that its values get. A role that
        is no canonical column is text.
    order : sequence of str
        Names of the columns of a file without a header.
    time_zone, time_unit : str
        Of times, where the file does not say.

    Raises
    ------
    InputError
        If the file cannot be read as a table.
    """
    if not path.is_file():
        raise InputError("There is no such file.", where=where, advice="Check the path.")
    if path.stat().st_size == 0:
        raise InputError("The file is empty.", where=where)
    headers, batches, words, decimal_comma, notes = _opened(path, where, order)
    bindings = tuple(choose(headers))
    account = FileAccount(where)
    timed = tuple(b for b in bindings if b.role == "time" or b.role in TIME_PARTS)
    others = tuple(b for b in bindings if b not in timed)
    plan: TimePlan | None = None
    state = TimeState()
    parts: list[tuple[Integers, dict[str, Any], dict[str, list[str]], Integers]] = []
    for raw in batches(others, timed):
        account.rows_read += raw.length + len(raw.broken)
        if account.rows_read > MOST_ROWS:
            raise InputError(
                "The file is longer than any cast or line plan.",
                where=where,
                found=f"more than {MOST_ROWS} rows",
                advice="Is it a log? Logs are named on the command line.",
            )
        for number, reason, text in raw.broken:
            _reject(account, number, reason, text)
        if timed and not parts:
            try:
                sample = {b.source: raw.columns[b.source] for b in timed}
                plan = plan_times(timed, sample, time_zone, where, time_unit, decimal_comma)
            except InputError as error:
                # A cast or plan is of use without its time.
                notes.append(f"The time was not used: {error.message}")
        parts.append(_converted(raw, others, plan, state, decimal_comma, account))
    if plan is not None:
        notes += plan.notes
    if not parts:
        raise InputError("The file has a header but no rows.", where=where)
    values = {role: np.concatenate([p[1][role] for p in parts]) for role in parts[0][1]}
    texts = {role: [t for p in parts for t in p[2][role]] for role in parts[0][2]}
    numbers = np.concatenate([p[0] for p in parts])
    time = np.concatenate([p[3] for p in parts])
    return SmallTable(where, numbers, values, texts, time, account, words, notes)


def _reject(account: FileAccount, number: int, reason: str, text: str) -> None:
    account.rows_rejected += 1
    account.reasons[reason] = account.reasons.get(reason, 0) + 1
    if len(account.rejected_rows) < KEPT_REJECTS:
        account.rejected_rows.append(RejectedRow(account.path, number, reason, text))


Batches = Callable[[Sequence[Binding], Sequence[Binding]], Iterator[RawBatch]]


def _opened(
    path: Path, where: str, order: Sequence[str]
) -> tuple[list[Header], Batches, Callable[[int], str], bool, list[str]]:
    """Headers, a reader, a finder of rows word for word, whether decimals have commas, notes."""
    if is_table(path, where):
        table = TableSource(path, where)
        lists = set(table.list_columns())
        headers = [h if h.name not in lists else Header("") for h in table.headers]

        def from_table(bindings: Sequence[Binding], timed: Sequence[Binding]) -> Iterator[RawBatch]:
            try:
                names = list(dict.fromkeys(b.source for b in (*bindings, *timed)))
                for _, raw in table.batches(names):
                    yield raw
            finally:
                table.close()

        return headers, from_table, lambda n: table.rows([n])[n], False, []
    form = probe_text(path, where, order)
    dialect = form.dialect
    source = TextSource(path, where, form)
    units = dialect.units or ("",) * dialect.width

    def from_text(bindings: Sequence[Binding], timed: Sequence[Binding]) -> Iterator[RawBatch]:
        kinds = {b.source: _kind(b) for b in bindings} | {b.source: pa.string() for b in timed}
        yield from source.batches(kinds, threads=1)

    return (
        [Header(n, units_row=u) for n, u in zip(dialect.names, units, strict=False)],
        from_text,
        lambda n: source.rows([n])[n],
        dialect.decimal_comma,
        list(dialect.notes),
    )


def _is_number(role: str) -> bool:
    return role in COLUMNS and COLUMNS[role].kind == "number"


def _kind(binding: Binding) -> pa.DataType:
    return pa.float64() if _is_number(binding.role.rpartition(" ")[2]) else pa.string()


@np.errstate(over="ignore", invalid="ignore")
def _converted(
    raw: RawBatch,
    bindings: Sequence[Binding],
    plan: TimePlan | None,
    state: TimeState,
    decimal_comma: bool,
    account: FileAccount,
) -> tuple[Integers, dict[str, Any], dict[str, list[str]], Integers]:
    n = raw.length
    rejected = np.zeros(n, dtype=bool)
    values: dict[str, NDArray[np.float64]] = {}
    texts: dict[str, list[str]] = {}
    for binding in bindings:
        array = raw.columns[binding.source]
        plain_role = binding.role.rpartition(" ")[2]
        if not _is_number(plain_role):
            texts[binding.role] = [_text(v) for v in array.to_pylist()]
            continue
        found: Converted = to_number(
            _of_role(binding, plain_role), array, "waterline", decimal_comma
        )
        values[binding.role] = np.array(found.values, dtype=np.float64)
        if found.emptied:
            account.missing[plain_role] = account.missing.get(plain_role, 0) + found.emptied
        for mask, reason in (
            (found.bad, found.reason),
            (found.impossible, found.impossible_reason),
        ):
            if mask is None:
                continue
            positions = np.flatnonzero(mask & ~rejected)
            for position, text in zip(
                positions.tolist(), raw.texts(positions) if len(positions) else [], strict=True
            ):
                _reject(account, int(raw.rows[position]), reason, text)
            rejected |= mask
    time = np.full(n, NO_TIME, dtype=np.int64)
    if plan is not None:
        stamps, bad = convert_times(plan, dict(raw.columns), state)
        time = np.where(bad, NO_TIME, stamps)
    kept = np.flatnonzero(~rejected)
    return (
        raw.rows[kept],
        {k: v[kept] for k, v in values.items()},
        {k: [v[i] for i in kept.tolist()] for k, v in texts.items()},
        time[kept],
    )


def _of_role(binding: Binding, role: str) -> Binding:
    return binding if binding.role == role else replace(binding, role=role)


def _text(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, float) and value.is_integer():
        return str(int(value))
    return str(value).strip()


__all__ = ["MOST_ROWS", "SmallTable", "read_small_table"]
