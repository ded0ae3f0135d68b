"""Sections: runs of consecutive pings that miss a rule."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from qa.model.findings import MET, MISSED


def find_sections(
    status: NDArray[np.int8],
    join_pings: int,
    keep_pings: int,
    keep_alone: NDArray[np.bool_] | None = None,
) -> list[tuple[int, int]]:
    """First and last position of each section of one line and channel.

    Parameters
    ----------
    status : ndarray of int8, shape (n,)
        Outcome of each ping, as in :mod:`qa.model.findings`.
    join_pings : int
        Runs are joined over gaps of up to this many assessed pings; any other ping ends a run.
    keep_pings : int
        A section spans at least this many pings.
    keep_alone : ndarray of bool, optional
        Missed pings that make a section however short.

    Returns
    -------
    list of tuple of int

    Examples
    --------
    >>> find_sections(np.array([1, 2, 2, 1, 2, 1, 1, 1, 2], dtype=np.int8), 2, 3)
    [(1, 4)]
    """
    missed = np.flatnonzero(status == MISSED)
    if not len(missed):
        return []
    unassessed = np.cumsum((status != MET) & (status != MISSED))
    apart = np.diff(missed) - 1 > join_pings
    apart |= np.diff(unassessed[missed]) > 0
    firsts = missed[np.concatenate([[True], apart])]
    lasts = missed[np.concatenate([apart, [True]])]
    alone = np.zeros(len(firsts), dtype=bool)
    if keep_alone is not None:
        counted = np.concatenate([[0], np.cumsum(keep_alone & (status == MISSED))])
        alone = counted[lasts + 1] > counted[firsts]
    kept = (lasts - firsts + 1 >= keep_pings) | alone
    return [(int(a), int(b)) for a, b in zip(firsts[kept], lasts[kept], strict=True)]
