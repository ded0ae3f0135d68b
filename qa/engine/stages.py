"""The three stages over one line: pings, beams reduced to their pings, pings again; then every rule's outcome."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.engine.beam_rules import Misses, WorstBeams, judge_beams
from qa.engine.expressions import Judgement, judge
from qa.engine.plans import Node, Plan, PlannedRule, closure
from qa.engine.reducers import Groups, reduce_beams
from qa.model.findings import EXEMPT, MET, MISSED, NOT_ASSESSED, BeamMisses, RuleSeries
from qa.model.log import BeamBatch, ChannelSpan, Floats, LineLog, PingTable
from qa.model.side_by_side import in_order

BATCH_ROWS = 100_000
KEPT_BYTES = 1 << 24
MOST_EVIDENCE = 8


@dataclass(slots=True)
class Computed:
    """All that was computed for the pings of one group of channels that share a plan.

    ``rows`` are the group's positions in the line's ping table; every array in ``values`` has their shape.
    """

    plan: Plan
    rows: NDArray[np.int64]
    channels: tuple[ChannelSpan, ...]
    values: dict[str, Any]
    worst_beams: dict[str, WorstBeams]
    soundings: int = 0


class LineRun:
    """One group of channels on its way through the stages."""

    def __init__(
        self,
        plan: Plan,
        table: PingTable,
        rows: NDArray[np.int64],
        channels: tuple[ChannelSpan, ...],
    ) -> None:
        self.plan, self.table = plan, table
        self.computed = Computed(plan, rows, channels, {}, {})
        self.n = len(rows)
        self.position = np.full(len(table), -1, dtype=np.int64)
        self.position[rows] = np.arange(self.n)
        self.soundings = np.zeros(self.n, dtype=np.int64)
        self.whole = self.n == len(table)
        self.beam_rules = [p for p in plan.rules if p.beam and p.applies and not p.missing]
        values = self.computed.values
        for key in plan.constants:
            values[key] = self._constant(plan.nodes[key])
        for key in plan.first_pings:
            values[key] = self._ping(plan.nodes[key])
        for key in plan.batch:
            node = plan.nodes[key]
            if node.grain == "ping":
                counts = node.reduction is not None and node.reduction.reducer == "count"
                values[key] = np.full(self.n, 0.0 if counts else np.nan)
        for planned in self.beam_rules:
            self.computed.worst_beams[planned.rule.id] = self._no_beams(planned)

    def _no_beams(self, planned: PlannedRule) -> WorstBeams:
        nodes = self.plan.nodes
        wanted = [k for k in closure(planned.reads, nodes) if nodes[k].grain == "beam"][
            :MOST_EVIDENCE
        ]
        if "angle_from_vertical" in nodes and "angle_from_vertical" not in wanted:
            wanted.append("angle_from_vertical")

        return WorstBeams.none(self.n, wanted)

    def _constant(self, node: Node) -> Any:
        if node.value is not None:
            return node.value
        values = self.computed.values
        if node.limit is not None and node.limit.expression is not None:
            return node.limit.expression.run(values)
        return by_recipe(node, values)

    def _ping(self, node: Node) -> Any:
        values = self.computed.values
        if node.way == "logged":
            column = self.table.time if node.key == "time" else self._column(node.key)
            return column if self.whole else column[self.computed.rows]
        if node.way == "alias":
            return values[node.inputs[0]]
        with np.errstate(all="ignore"):
            if node.limit is not None and node.limit.expression is not None:
                found = node.limit.expression.run(values)
            elif node.recipe is not None and node.recipe.whole_line:
                return self._by_channel(node, values)
            else:
                found = by_recipe(node, values)
        return np.broadcast_to(np.asarray(found, dtype=float), (self.n,))

    def _column(self, key: str) -> Any:
        return self.table.ping.astype(float) if key == "ping" else self.table.columns[key]

    def _by_channel(self, node: Node, values: Mapping[str, Any]) -> Floats:
        found = np.full(self.n, np.nan)
        for channel in self.computed.channels:
            rows = channel.rows
            here = {k: v[rows] if np.ndim(v) else v for k, v in values.items() if k in node.inputs}
            found[rows] = by_recipe(node, here)
        return found

    def take(self, batch: BeamBatch) -> dict[str, Misses]:
        """Stage 2: one batch of beams, whole pings of any channel. Returns the beams that missed, by rule.

        Batches may be taken by several threads at once: each writes to its own pings.
        """
        pings = self.position[batch.pings]
        mine = pings >= 0
        if mine.all():
            return self._beams(pings, batch.counts, batch.columns)
        rows = np.repeat(mine, batch.counts)
        columns = {k: v[rows] for k, v in batch.columns.items()}
        return self._beams(pings[mine], batch.counts[mine], columns) if mine.any() else {}

    def add(self, misses: Mapping[str, Misses]) -> None:
        """The beams of the next batch that missed a rule."""
        for rule, found in misses.items():
            self.computed.worst_beams[rule].add(found)

    def make_beams(self, rows: int = BATCH_ROWS) -> None:
        """Stage 2 of a side-scan: two beams a ping, at the near and at the farthest range."""
        near, far = (self.computed.values[k] for k in self.plan.nodes["slant_range"].inputs)
        near, far = np.broadcast_to(near, (self.n,)), np.broadcast_to(far, (self.n,))
        for start in range(0, self.n, rows // 2):
            pings = np.arange(start, min(start + rows // 2, self.n))
            made = np.column_stack([near[pings], far[pings]]).ravel()
            self.add(self._beams(pings, np.full(len(pings), 2), {"slant_range": made}))

    def _beams(
        self, pings: NDArray[np.int64], counts: NDArray[np.int64], columns: Mapping[str, Any]
    ) -> dict[str, Misses]:
        groups = Groups.of(counts)
        self.soundings[pings] = counts
        values = _BeamValues(self.computed.values, pings, groups)
        nodes = self.plan.nodes
        accepted: NDArray[np.bool_] | None = None
        asked = False
        with np.errstate(all="ignore"):
            for key in self.plan.batch:
                node = nodes[key]
                if node.way == "reduction":
                    if not asked:
                        accepted, asked = self._accepted(values), True
                    self.computed.values[key][pings] = self._reduced(node, values, groups, accepted)
                elif node.grain == "ping":
                    self.computed.values[key][pings] = self._ping_in_batch(node, pings)
                elif node.way in ("logged", "made"):
                    values[key] = groups.folded(np.asarray(columns[key], dtype=float))
                elif node.way == "alias":
                    values[key] = values[node.inputs[0]]
                elif node.limit is not None and node.limit.expression is not None:
                    values[key] = node.limit.expression.run(values)
                else:
                    values[key] = by_recipe(node, values, groups)
            accepted = accepted if asked else self._accepted(values)
            found = (
                (planned.rule.id, self._judge_beams(planned, values, groups, pings, accepted))
                for planned in self.beam_rules
            )
            return {rule: misses for rule, misses in found if misses is not None}

    def _ping_in_batch(self, node: Node, pings: NDArray[np.int64]) -> Any:
        """A ping's value that rests on reductions, for the pings of a batch."""
        every = self.computed.values
        here = {k: every[k][pings] if np.ndim(every[k]) else every[k] for k in node.inputs}
        if node.limit is not None and node.limit.expression is not None:
            return node.limit.expression.run(here)
        return here[node.inputs[0]] if node.way == "alias" else by_recipe(node, here)

    def _accepted(self, values: Mapping[str, Any]) -> NDArray[np.bool_] | None:
        """Which beams were accepted; None where all were."""
        if "accepted" not in self.plan.nodes or self.plan.available.makes_beams:
            return None
        accepted = values["accepted"]
        if np.ndim(accepted) == 0:
            return None
        taken = np.asarray(accepted != 0.0)
        return None if taken.all() else taken

    def _reduced(
        self,
        node: Node,
        values: Mapping[str, Any],
        groups: Groups,
        accepted: NDArray[np.bool_] | None,
    ) -> Floats:
        reduction = node.reduction
        assert reduction is not None
        inner = reduction.inner.run(values)
        nearness: Any = None
        if reduction.reducer in ("nearest_vertical", "nearest_angle"):
            if self.plan.available.makes_beams:
                nearness = np.array([[0.0, 1.0]])
            else:
                angle = 0.0 if reduction.angle is None else reduction.angle.run(values)
                nearness = np.abs(np.abs(values["angle_from_vertical"]) - angle)
        counted = None if "accepted" in reduction.inner.names else accepted
        return reduce_beams(reduction.reducer, inner, groups, counted, nearness)

    def _judge_beams(
        self,
        planned: PlannedRule,
        values: _BeamValues,
        groups: Groups,
        pings: NDArray[np.int64],
        accepted: NDArray[np.bool_] | None,
    ) -> Misses | None:
        assert planned.rule.requirement is not None
        found = judge_beams(planned.rule.requirement, values, groups, accepted)
        self.computed.worst_beams[planned.rule.id].put(pings, found, values, groups)
        angle = self.plan.nodes.get("angle_from_vertical")
        if angle is None or angle.grain != "beam" or not len(found.missing):
            return None
        return Misses(found.missing, pings, groups, values["angle_from_vertical"])

    def finish(self) -> Computed:
        """Stage 3: what needs a whole line of pings, reduced values included."""
        values = self.computed.values
        self.computed.soundings = int(self.soundings.sum())
        for key in self.plan.last_pings:
            values[key] = self._ping(self.plan.nodes[key])
        return self.computed


class _BeamValues(dict[str, Any]):
    """Values at the beams of one batch; those of pings are spread over their beams when first asked for."""

    def __init__(
        self, of_pings: Mapping[str, Any], pings: NDArray[np.int64], groups: Groups
    ) -> None:
        super().__init__()
        self.of_pings, self.pings, self.groups = of_pings, pings, groups

    def __missing__(self, key: str) -> Any:
        value = self.of_pings[key]
        if np.ndim(value):
            value = self.groups.spread(value[self.pings])
        self[key] = value
        return value


def by_recipe(node: Node, values: Mapping[str, Any], groups: Groups | None = None) -> Any:
    """What a node's recipe makes of its inputs' values."""
    recipe = node.recipe
    assert recipe is not None
    if recipe.positional:
        return recipe.function(*(values[need] for need in recipe.needs))
    named = zip(recipe.parameters, recipe.needs, strict=True)
    given = {p: values[need] for p, need in named if need not in node.absent}
    if recipe.within_ping:
        assert groups is not None
        return recipe.function(**given, groups=groups)
    return recipe.function(**given)


def beam_misses(computed: Computed) -> Iterator[BeamMisses]:
    """The beams that missed a rule, thinned, at their pings' positions in the line's table."""
    for rule, kept in computed.worst_beams.items():
        if kept.misses:
            kept.thin()
            owner, angle = (np.concatenate(each) for each in zip(*kept.misses, strict=True))
            yield BeamMisses(rule, computed.rows[owner], angle, kept.total)


def run_stages(
    log: LineLog, runs: list[LineRun], rows: int = BATCH_ROWS, threads: int = 1
) -> list[Computed]:
    """Take a line through the stages.

    Parameters
    ----------
    log : LineLog
    runs : list of LineRun
        One for each group of channels that share a plan.
    rows : int
        Beams a batch holds, about.
    threads : int
        Threads that work on batches.
    """
    # Where memory is given back to the system as soon as it is free, each array of each batch is paged in anew, which
    # takes longer than to compute it. What a C library keeps grows with what was freed once; this array costs nothing.
    np.empty(KEPT_BYTES, dtype=np.uint8)
    columns = frozenset().union(*(r.plan.beam_columns for r in runs))
    reading = [r for r in runs if not r.plan.available.makes_beams]
    for run in runs:
        if run.plan.available.makes_beams and "slant_range" in run.plan.batch:
            run.make_beams(rows)
    if log.beam_columns and (reading or log.grain == "beam"):
        batches = log.beam_batches(sorted(columns), rows)
        for found in in_order(batches, lambda batch: [r.take(batch) for r in reading], threads):
            for run, misses in zip(reading, found, strict=True):
                run.add(misses)
    return [run.finish() for run in runs]


def outcomes(computed: Computed, planned: PlannedRule) -> RuleSeries | None:
    """What one rule comes to for each ping of a group; None where it was not planned."""
    rule, plan = planned.rule, computed.plan
    if (rule.requirement is None and not rule.columns) or planned.missing or not planned.applies:
        return None
    n = len(computed.rows)
    if rule.requirement is None:
        judged = _columns_outcome(computed, planned)
        met = judged.met
    elif planned.beam:
        judged, met = _beam_outcome(computed, planned)
    else:
        with np.errstate(all="ignore"):
            judged = judge(rule.requirement, computed.values)
        met = np.broadcast_to(judged.met, (n,))
    status = np.where(
        np.broadcast_to(judged.known, (n,)), np.where(met, MET, MISSED), NOT_ASSESSED
    ).astype(np.int8)
    if planned.by_ping and rule.when is not None:
        condition = np.broadcast_to(np.asarray(rule.when.run(computed.values), dtype=float), (n,))
        status[np.isnan(condition)] = NOT_ASSESSED
        status[condition == 0.0] = EXEMPT
    if planned.timed:
        _leave_out_stamps(computed, planned, status)
    silent = (status != MET) & (status != MISSED)

    def shown(values: Any) -> Floats:
        return np.where(silent, np.nan, np.broadcast_to(np.asarray(values, dtype=float), (n,)))

    unit = _unit_of(planned, plan)
    return RuleSeries(status, shown(judged.value), shown(judged.limit), shown(judged.margin), unit)


def _unit_of(planned: PlannedRule, plan: Plan) -> str:
    requirement = planned.rule.requirement
    if requirement is None or not requirement.comparisons:
        return "1"
    return str(requirement.comparisons[0].left.unit)


def _columns_outcome(computed: Computed, planned: PlannedRule) -> Judgement:
    """How many of the required columns have no value at each ping."""
    lacking = np.full(len(computed.rows), float(len(planned.absent)))
    for key in planned.reads:
        lacking += np.isnan(np.asarray(computed.values[key], dtype=float))
    known = np.ones(len(lacking), dtype=bool)
    return Judgement(known, lacking == 0.0, lacking, np.zeros(len(lacking)), -lacking)


def _beam_outcome(computed: Computed, planned: PlannedRule) -> tuple[Judgement, NDArray[np.bool_]]:
    kept = computed.worst_beams[planned.rule.id]
    known = kept.assessed > 0
    with np.errstate(invalid="ignore", divide="ignore"):
        share = kept.missed / kept.assessed
    met = ~(share > planned.rule.allow_beams)
    # A ping that its allowance saves is on the right side of the limit, however bad its worst beam.
    margin = np.where(met & (kept.margin < 0.0), 0.0, kept.margin)
    return Judgement(known, met, kept.value, kept.limit, margin), met


def _leave_out_stamps(computed: Computed, planned: PlannedRule, status: NDArray[np.int8]) -> None:
    """Pings that cannot have an interval are exempt; those stamped on arrival are not assessed."""
    stamped = computed.values.get("stamped_on_arrival")
    if stamped is not None:
        status[np.asarray(stamped) == 1.0] = NOT_ASSESSED
    ahead = 1
    if "ping_span" in planned.timed:
        ahead = int(computed.values["pings_in_water"])
    for channel in computed.channels:
        tail = status[max(channel.start, channel.stop - ahead) : channel.stop]
        tail[tail == NOT_ASSESSED] = EXEMPT
