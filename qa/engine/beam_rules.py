"""Rules that are about beams: what each ping's beams come to, and which beam of a ping is nearest to failing."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.engine.expressions import TOLERANCE, Expression, Judgement, holds, judge, judge_sides
from qa.engine.reducers import Groups, nearest_beam
from qa.model.log import Floats

MOST_MISSES = 4000
_ORDERINGS = ("<=", "<", ">=", ">")

Integers = NDArray[np.int64]
Mask = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Misses:
    """Beams of a batch that missed a rule, counted after one another; the batch's pings and its beams' angles."""

    beams: Integers
    pings: Integers
    groups: Groups
    angles: Any

    def thinned(self, start: int, step: int) -> tuple[Integers, Floats]:
        """Pings and angles of one in ``step`` of the beams."""
        beams = self.beams[start::step]
        return self.pings[self.groups.owners(beams)], self.groups.at(self.angles, beams)


@dataclass(slots=True)
class WorstBeams:
    """For each ping, what one beam rule came to: counts, and the beam that is nearest to failing."""

    assessed: Integers
    missed: Integers
    margin: Floats
    value: Floats
    limit: Floats
    inputs: dict[str, Floats]
    misses: list[tuple[Integers, Floats]] = field(default_factory=list)
    step: int = 1
    total: int = 0

    @classmethod
    def none(cls, pings: int, inputs: list[str]) -> WorstBeams:
        """No beam met yet."""

        def blank() -> Floats:
            return np.full(pings, np.nan)

        count = np.zeros(pings, dtype=np.int64)
        return cls(count, count.copy(), blank(), blank(), blank(), {k: blank() for k in inputs})

    def put(
        self, pings: Integers, found: BatchOutcome, values: Mapping[str, Any], groups: Groups
    ) -> None:
        """What one batch's pings came to."""
        self.assessed[pings], self.missed[pings] = found.assessed, found.missed
        there = found.worst >= 0
        beams, into = found.worst[there], pings[there]
        self.margin[into] = found.margin[there]
        self.value[into] = found.value[there]
        self.limit[into] = found.limit[there]
        places = groups.places(beams)
        for key, into_values in self.inputs.items():
            into_values[into] = groups.full(values[key])[places]

    def add(self, found: Misses) -> None:
        """The next batch's misses: one in ``step`` is kept, whatever the batches are."""
        self.misses.append(found.thinned(-self.total % self.step, self.step))
        self.total += len(found.beams)
        self.thin(4)

    def thin(self, times: int = 1) -> None:
        """Keep no more than ``times`` as many as are shown."""
        while sum(len(pings) for pings, _ in self.misses) > times * MOST_MISSES:
            pings, angles = (np.concatenate(each) for each in zip(*self.misses, strict=True))
            self.misses = [(pings[::2], angles[::2])]
            self.step *= 2


@dataclass(frozen=True, slots=True)
class BatchOutcome:
    """A rule over the beams of a batch: for each ping its counts, and its beam that is nearest to failing.

    ``worst`` counts beams after one another, -1 where none was assessed; ``missing`` are the beams that missed.
    """

    assessed: Integers
    missed: Integers
    worst: Integers
    margin: Floats
    value: Floats
    limit: Floats
    missing: Integers


def judge_beams(
    requirement: Expression, values: Mapping[str, Any], groups: Groups, accepted: Mask | None
) -> BatchOutcome:
    """A requirement for each beam of a batch.

    Parameters
    ----------
    requirement : Expression
    values : mapping
        Values of its names, in the batch's shape or what broadcasts to it.
    groups : Groups
    accepted : ndarray of bool, optional
        Beams that count; all, if left out.
    """
    if len(requirement.comparisons) != 1:
        judged = judge(requirement, values)
        return _one_by_one(judged, judged.margin, groups, accepted)
    (comparison,) = requirement.comparisons
    operator = comparison.operator
    left, right = comparison.left.run(values), comparison.right.run(values)
    ordering = operator in _ORDERINGS and not isinstance(left, str) and not isinstance(right, str)
    one_limit = not np.ndim(right) or np.shape(right)[-1] == 1
    if ordering and groups.width:
        quick = _by_extremes if one_limit else _by_margins
        found = quick(operator, left, right, groups, accepted)
        if found is not None:
            return found
    judged = judge_sides(operator, left, right)
    nearness = judged.margin
    if ordering and one_limit:
        nearness = _nearness(operator, judged)
    return _one_by_one(judged, nearness, groups, accepted)


def _by_extremes(
    operator: str, left: Any, right: Any, groups: Groups, accepted: Mask | None
) -> BatchOutcome | None:
    """The outcome from each ping's greatest or least left side, where the right is one number in each ping.

    Only if every left side is known and finite, and every right finite and not zero; None else.
    """
    pings = np.arange(len(groups.counts))
    limit = np.broadcast_to(np.asarray(right, dtype=float).reshape(-1), pings.shape)
    size = np.abs(limit)
    if not ((size > 0.0) & (size < np.inf)).all():
        return None
    below = operator in ("<=", "<")
    sides = np.asarray(left, dtype=float)
    sides = sides if sides.ndim else sides.reshape(1, 1)
    counted = sides if accepted is None else np.where(accepted, sides, -np.inf if below else np.inf)
    column = counted.argmax(axis=1) if below else counted.argmin(axis=1)
    column = np.broadcast_to(column, pings.shape)
    value = groups.full(counted)[pings, column]
    if accepted is None:
        assessed = np.full(pings.shape, groups.width)
        known = np.ones(pings.shape, dtype=bool)
    else:
        assessed = groups.counted(accepted)
        known = assessed > 0
    if not np.isfinite(value[known]).all():
        return None
    with np.errstate(invalid="ignore"):
        ahead = limit - value if below else value - limit
    fails = known & ~holds(operator, ahead, TOLERANCE * size)
    missed = np.zeros(pings.shape, dtype=np.int64)
    missing = np.zeros(0, dtype=np.int64)
    if fails.any():
        rows = np.flatnonzero(fails)
        every = slice(None) if len(rows) == len(pings) else rows
        here, bound = groups.full(sides)[every], limit[every, None]
        beyond = bound - here if below else here - bound
        misses = ~holds(operator, beyond, TOLERANCE * size[every, None])
        if accepted is not None:
            misses &= groups.full(accepted)[every]
        missed[rows] = np.count_nonzero(misses, axis=1)
        missing = np.flatnonzero(misses)
        if len(rows) < len(pings):
            missing = rows[missing // groups.width] * groups.width + missing % groups.width
    worst = np.where(known, pings * groups.width + column, -1)
    return BatchOutcome(assessed, missed, worst, ahead / size, value, limit, missing)


def _by_margins(
    operator: str, left: Any, right: Any, groups: Groups, accepted: Mask | None
) -> BatchOutcome | None:
    """The outcome from each ping's least margin, where the right side changes from beam to beam.

    Only if every right side that is known is finite and not zero, and every margin finite; None else.
    """
    size = np.abs(np.asarray(right, dtype=float))
    if not (np.fmin.reduce(size, axis=None) > 0.0 and np.fmax.reduce(size, axis=None) < np.inf):
        return None
    below = operator in ("<=", "<")
    ahead = right - left if below else left - right
    margin = np.array(groups.full(ahead / size))
    unknown = np.isnan(margin)
    if accepted is not None:
        unknown |= ~groups.full(accepted)
    margin[unknown] = np.inf
    pings = np.arange(len(groups.counts))
    column = margin.argmin(axis=1)
    least = margin[pings, column]
    assessed = groups.width - groups.counted(unknown)
    known = assessed > 0
    if not np.isfinite(least[known]).all():
        return None
    places = pings, column
    value = np.where(known, groups.full(np.asarray(left, dtype=float))[places], np.nan)
    limit = np.where(known, groups.full(np.asarray(right, dtype=float))[places], np.nan)
    fails = known & ~holds(operator, groups.full(ahead)[places], TOLERANCE * np.abs(limit))
    missed = np.zeros(pings.shape, dtype=np.int64)
    missing = np.zeros(0, dtype=np.int64)
    if fails.any():
        misses = ~unknown & ~holds(operator, ahead, TOLERANCE * size)
        missed = groups.counted(misses)
        missing = np.flatnonzero(misses)
    worst = np.where(known, pings * groups.width + column, -1)
    return BatchOutcome(
        assessed, missed, worst, np.where(known, least, np.nan), value, limit, missing
    )


def _one_by_one(
    judged: Judgement, nearness: Any, groups: Groups, accepted: Mask | None
) -> BatchOutcome:
    known = np.asarray(judged.known)
    if accepted is not None:
        known = known & accepted
    missed = known & ~np.asarray(judged.met)
    worst = nearest_beam(np.where(known, 0.0, np.nan), groups, nearness)
    there = worst >= 0
    places = groups.places(worst[there])

    def at_worst(of: Any) -> Floats:
        found = np.full(len(worst), np.nan)
        found[there] = groups.full(of)[places]
        return found

    return BatchOutcome(
        groups.counted(known),
        groups.counted(missed),
        worst,
        at_worst(judged.margin),
        at_worst(judged.value),
        at_worst(judged.limit),
        np.flatnonzero(groups.full(missed)),
    )


def _nearness(operator: str, judged: Judgement) -> Any:
    """What tells the beam of a ping that is nearest to failing: its left side, where the right is an ordinary number.

    The same beam is then found by :func:`_by_extremes`, however margins are rounded.
    """
    size = np.abs(np.asarray(judged.limit, dtype=float))
    ordinary = (size > 0.0) & (size < np.inf)
    left = -judged.value if operator in ("<=", "<") else judged.value
    return np.where(ordinary, left, judged.margin)
