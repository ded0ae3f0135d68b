"""Beams read from their files again when they are wanted, where putting them aside would fill a disk."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.ingest.probe import FileProbe
from qa.ingest.rows import Integers, Names, RowReader, Stretch
from qa.ingest.table_source import BATCH_ROWS
from qa.model.errors import InputError


@dataclass(frozen=True, slots=True)
class ReadBefore:
    """A file, the stretch of it that was read, and the rows that were kept: ``first`` and ``last`` numbers, rising."""

    probe: FileProbe
    stretch: Stretch | None
    first: Integers
    last: Integers

    def kept(self, numbers: Integers) -> NDArray[np.bool_] | None:
        """Which of some consecutive row numbers were kept; None where all were."""
        at = int(np.searchsorted(self.first, numbers[0], side="right")) - 1
        if at >= 0 and numbers[-1] <= self.last[at]:
            return None
        if not len(self.first):
            return np.zeros(len(numbers), dtype=bool)
        stretch = np.searchsorted(self.first, numbers, side="right") - 1
        return np.asarray((stretch >= 0) & (numbers <= self.last[np.maximum(stretch, 0)]))


class SecondReading:
    """The same rows as at the first reading, any number of times, only the columns that are asked for.

    Only for files of one row a beam that can be read by column.
    """

    def __init__(self, files: Sequence[ReadBefore]) -> None:
        self._files = tuple(files)

    def batches(
        self, names: Sequence[str], size: int = BATCH_ROWS
    ) -> Iterator[dict[str, NDArray[Any]]]:
        """The named beam columns, batch after batch of up to ``size`` rows; NaN, or accepted, where a file has none.

        Raises
        ------
        InputError
            If a file holds what its own statistics rule out.
        """
        for file in self._files:
            reader = RowReader(file.probe, Names(), frozenset(names), file.stretch)
            for numbers, columns, bad in reader.beams(size):
                kept = file.kept(numbers)
                if bad is not None and (bad if kept is None else bad & kept).any():
                    raise InputError(
                        "The file is damaged: it holds beams that its own statistics rule out.",
                        where=file.probe.shown,
                        found=f"rows {numbers[0]} to {numbers[-1]}",
                        advice="Copy or export it again.",
                    )
                count = len(numbers) if kept is None else int(kept.sum())
                if not count:
                    continue
                batch: dict[str, NDArray[Any]] = {}
                for name in names:
                    values = columns.get(name)
                    if values is None:
                        batch[name] = np.full(count, True if name == "accepted" else np.nan)
                        continue
                    kind: type = bool if name == "accepted" else np.float64
                    values = np.asarray(values, dtype=kind)
                    batch[name] = values if kept is None else values[kept]
                yield batch
