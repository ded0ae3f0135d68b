"""What to compute for one line: from the names that rules need, backwards to what is logged, stated or assumed.

Origins rank logged, computed from logged, stated, computed from stated, assumed; a value's rank is that of its
weakest input, and the best rank wins, once per line and channel. Each quantity is computed once, at the grain of
its inputs, in three stages: pings, beams reduced to their ping, pings again with what was reduced.
"""

from __future__ import annotations

import graphlib
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from qa.engine import quantities
from qa.engine.assumed import assumed_values
from qa.engine.expressions import Expression, Reduction, Symbol, compile_expression
from qa.engine.quantities import RECIPES, Recipe
from qa.engine.sheets import Limit, Rule, RuleSheet
from qa.model.columns import COLUMNS, GRAINS, Grain
from qa.model.errors import SheetError
from qa.model.findings import ORIGINS, Origin
from qa.model.survey_file import Value
from qa.model.units import Unit

Way = Literal["logged", "stated", "assumed", "recipe", "limit", "reduction", "alias", "made"]

TIMED = frozenset(("ping_interval", "ping_span"))
"""A rule that rests on one of these is a timing rule: not assessed where a ping was stamped on arrival."""

MADE_FROM = ("near_range", "farthest_range")
"""Ranges of the two beams that are made for a side-scan ping, in this order."""

_RANK: dict[Origin, int] = {
    "logged": 0,
    "computed from logged": 1,
    "stated": 2,
    "computed from stated": 3,
    "assumed": 4,
    "computed from assumed": 4,
}
_COMPUTED: dict[int, Origin] = {
    0: "computed from logged",
    1: "computed from logged",
    2: "computed from stated",
    3: "computed from stated",
    4: "computed from assumed",
}


@dataclass(frozen=True, slots=True)
class Available:
    """What one line and channel offers: logged columns that hold a value, and what is stated."""

    kind: str
    ping_columns: frozenset[str]
    beam_columns: frozenset[str]
    stated: Mapping[str, Value]
    ping_log: bool
    assumed_kind: bool = False

    @property
    def makes_beams(self) -> bool:
        """Whether a ping's two beams are made, at the near and at the farthest range (side-scan)."""
        return self.kind == "side-scan"


@dataclass(frozen=True, slots=True)
class Node:
    """One value to be had: how, at which grain, from what."""

    key: str
    way: Way
    grain: Grain
    unit: Unit
    origin: Origin
    inputs: tuple[str, ...] = ()
    recipe: Recipe | None = None
    reduction: Reduction | None = None
    limit: Limit | None = None
    absent: frozenset[str] = frozenset()
    value: Value | None = None


@dataclass(frozen=True, slots=True)
class PlannedRule:
    """A rule with what its verdict rests on, or what is missing for it.

    ``by_ping``: its condition is decided ping by ping; where it is false the ping is exempt.
    ``absent``: required columns that the log does not hold at all.
    """

    rule: Rule
    beam: bool
    applies: bool
    missing: tuple[str, ...]
    timed: frozenset[str]
    reads: tuple[str, ...]
    by_ping: bool = False
    absent: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Plan:
    """Everything to compute, in order. Stage 1: ``first_pings``; 2: ``batch``; 3: ``last_pings``.

    ``batch`` holds beams' values, reductions, and such values of pings as rest on reductions and are wanted at
    the beams: a batch holds whole pings, so all of them are known in it.
    """

    available: Available
    nodes: Mapping[str, Node]
    constants: tuple[str, ...]
    first_pings: tuple[str, ...]
    batch: tuple[str, ...]
    last_pings: tuple[str, ...]
    rules: tuple[PlannedRule, ...]
    beam_columns: frozenset[str]


class _Missing(Exception):
    """A name cannot be had; the exception carries the inputs that would be needed.

    ``had`` counts the logged inputs on the way that were there: the more, the likelier this way was meant.
    """

    def __init__(self, names: Iterable[str], cyclic: bool = False, had: int = 0) -> None:
        self.names = tuple(dict.fromkeys(names))
        self.cyclic = cyclic
        self.had = had
        super().__init__(", ".join(self.names))

    def again(self) -> _Missing:
        """The same, to be kept or raised later: it does not hold on to the frames that this one passed through.

        Frames hold the line that is read. In a circle with an exception they would keep it in memory for long.
        """
        return _Missing(self.names, self.cyclic, self.had)


def grain_of(*grains: Grain) -> Grain:
    """The finest of some grains.

    Examples
    --------
    >>> grain_of("ping", "survey", "beam")
    'beam'
    """
    return max(grains, key=GRAINS.index, default="survey")


class Resolver:
    """Finds for each name the way of the best origin, for one line and channel."""

    def __init__(self, sheet: RuleSheet, available: Available) -> None:
        self.sheet, self.available = sheet, available
        self.nodes: dict[str, Node] = {}
        self.failed: dict[str, _Missing] = {}
        self.open: list[str] = []

    def resolve(self, key: str) -> Node:
        """The node of a name, a reduction's key, "logged(x)" or "computed(x)"; raises :class:`_Missing`."""
        if key in self.nodes:
            return self.nodes[key]
        if key in self.failed:
            raise self.failed[key].again()
        if key in self.open:
            raise _Missing((key,), cyclic=True)
        self.open.append(key)
        try:
            node = self._found(key)
        except _Missing as missing:
            if not missing.cyclic:
                self.failed[key] = missing.again()
            raise
        finally:
            self.open.pop()
        self.nodes[key] = node
        return node

    def found(self, key: str) -> Node | None:
        """As :meth:`resolve`, or None where the name cannot be had."""
        try:
            return self.resolve(key)
        except _Missing:
            return None

    def missing(self, key: str) -> tuple[str, ...]:
        """Inputs that a name would need and that are not there; none if it can be had."""
        try:
            self.resolve(key)
        except _Missing as missing:
            return missing.names
        return ()

    def _found(self, key: str) -> Node:
        if key in self.sheet.limits:
            return self._limit(self.sheet.limits[key])
        if "(" in key:
            return self._called(key)
        candidates: list[Node] = []
        missing: list[_Missing] = []
        for way in (self._logged, self._stated):
            node = way(key)
            if node is not None:
                candidates.append(node)
        if key not in ("kind", "depth_from"):
            for recipe in RECIPES.get(key, ()):
                if not self._usable(recipe):
                    continue
                try:
                    node = self._by_recipe(key, recipe)
                except _Missing as error:
                    missing.append(error.again())
                    continue
                if recipe.first and not any(c.way == "logged" for c in candidates):
                    return node
                candidates.append(node)
        if key == "slant_range" and self.available.makes_beams:
            return self._made()
        node = self._assumed(key)
        if node is not None:
            candidates.append(node)
        if not candidates:
            own = key in COLUMNS or quantities.is_stated_key(key)
            nearest = max(missing, key=lambda m: m.had, default=_Missing((key,)))
            names = (key,) if own and not nearest.had else nearest.names
            raise _Missing(names, cyclic=any(m.cyclic for m in missing), had=nearest.had)
        return min(candidates, key=lambda c: _RANK[c.origin])

    def _usable(self, recipe: Recipe) -> bool:
        if recipe.kinds and self.available.kind not in recipe.kinds:
            return False
        return all(self.resolve(name).value == choice for name, choice in recipe.only)

    def _logged(self, key: str) -> Node | None:
        if key == "pulse_form" or key in COLUMNS:
            unit = COLUMNS[key].unit
            if key in self.available.ping_columns:
                return Node(key, "logged", "ping", unit, "logged")
            if key in self.available.beam_columns and not (
                key == "slant_range" and self.available.makes_beams
            ):
                return Node(key, "logged", "beam", unit, "logged")
        return None

    def _stated(self, key: str) -> Node | None:
        if key in self.available.stated:
            origin: Origin = "stated"
            if key == "kind" and self.available.assumed_kind:
                origin = "assumed"
            elif key == "time_resolution":
                origin = "computed from logged"
            return Node(
                key,
                "stated",
                "survey",
                quantities.quantity_unit(key),
                origin,
                value=self.available.stated[key],
            )
        return None

    def _assumed(self, key: str) -> Node | None:
        found = assumed_values().get(key)
        if found is None or (found.ping_logs_only and not self.available.ping_log):
            return None
        return Node(
            key, "assumed", "survey", quantities.quantity_unit(key), "assumed", value=found.value
        )

    def _by_recipe(self, key: str, recipe: Recipe) -> Node:
        inputs: list[Node] = []
        absent: set[str] = set()
        missing: list[str] = []
        cyclic, had = False, 0
        for need in recipe.needs:
            try:
                inputs.append(self.resolve(need))
            except _Missing as error:
                if need in recipe.optional:
                    absent.add(need)
                else:
                    missing += error.names
                    cyclic, had = cyclic or error.cyclic, had + error.had
        if recipe.any_of and absent.issuperset(recipe.any_of):
            missing += [name.removeprefix("logged(").rstrip(")") for name in recipe.any_of]
        if missing:
            raise _Missing(missing, cyclic, had + sum(_RANK[n.origin] < 2 for n in inputs))
        grain = grain_of(*(n.grain for n in inputs))
        if recipe.whole_line:
            if grain == "beam":
                raise SheetError(
                    f"{key} needs whole pings, but an input is of beams; reduce it.",
                    where="quantities",
                )
            grain = "ping"
        conditions = [self.resolve(name) for name, _ in recipe.only]
        weakest = max((_RANK[n.origin] for n in [*inputs, *conditions]), default=2)
        if recipe.guess:
            weakest = _RANK["assumed"]
        return Node(
            key,
            "recipe",
            grain,
            recipe.unit,
            _COMPUTED[weakest],
            tuple(n.key for n in inputs),
            recipe,
            absent=frozenset(absent),
        )

    def _limit(self, limit: Limit) -> Node:
        if limit.expression is None:
            raise _Missing((limit.name,))
        inputs = self.all_of(limit.expression.names | frozenset(limit.expression.reductions))
        weakest = max((_RANK[n.origin] for n in inputs), default=2)
        origin: Origin = "stated" if not inputs else _COMPUTED[max(weakest, 2)]
        return Node(
            limit.name,
            "limit",
            grain_of(*(n.grain for n in inputs)),
            limit.unit,
            origin,
            tuple(n.key for n in inputs),
            limit=limit,
        )

    def all_of(self, names: Iterable[str]) -> list[Node]:
        """The nodes of some names; raises :class:`_Missing` with all that are lacking."""
        found: list[Node] = []
        missing: list[str] = []
        cyclic, had = False, 0
        for name in sorted(names):
            try:
                found.append(self.resolve(name))
            except _Missing as error:
                missing += error.names
                cyclic, had = cyclic or error.cyclic, had + error.had
        if missing:
            raise _Missing(missing, cyclic, had)
        return found

    def _called(self, key: str) -> Node:
        name = key.partition("(")[0]
        if name in ("logged", "computed"):
            inner = key.partition("(")[2].rstrip(")")
            return self._of_origin(key, name, inner)
        reduction = self._reduction(key)
        inner_nodes = self.all_of(reduction.inner.names)
        weakest = max((_RANK[n.origin] for n in inner_nodes), default=2)
        keys = [n.key for n in inner_nodes]
        if reduction.angle is not None:
            keys += [n.key for n in self.all_of(reduction.angle.names)]
        if name in ("nearest_vertical", "nearest_angle") and not self.available.makes_beams:
            keys.append(self.resolve("angle_from_vertical").key)
        if not self.available.makes_beams:
            keys.append(self.resolve("accepted").key)
        # A reduction hands values on, so what it reads from a log is still from the log.
        origin: Origin = next(o for o in ORIGINS if _RANK[o] == weakest)
        if weakest == 4 and all(n.origin != "assumed" for n in inner_nodes):
            origin = "computed from assumed"
        return Node(
            key,
            "reduction",
            "ping",
            reduction.inner.unit,
            origin,
            tuple(dict.fromkeys(keys)),
            reduction=reduction,
        )

    def _reduction(self, key: str) -> Reduction:
        compiled = compile_expression(key, self._symbol, quantities.names, "quantities")
        return next(iter(compiled.reductions.values()))

    def _symbol(self, name: str) -> Symbol | None:
        if name in self.sheet.limits:
            return Symbol(self.sheet.limits[name].unit)
        return quantities.symbol(name)

    def _of_origin(self, key: str, which: str, inner: str) -> Node:
        if which == "logged":
            node = self._logged(inner)
            if node is None:
                raise _Missing((inner,))
            self.nodes[inner] = node
            return Node(key, "alias", node.grain, node.unit, node.origin, (inner,))
        best: Node | None = None
        missing: _Missing | None = None
        for recipe in RECIPES.get(inner, ()):
            if self._usable(recipe):
                try:
                    node = self._by_recipe(key, recipe)
                except _Missing as error:
                    missing = missing or error.again()
                    continue
                if best is None or _RANK[node.origin] < _RANK[best.origin]:
                    best = node
        if best is None:
            raise _Missing((inner,)) if missing is None else missing.again()
        return best

    def _made(self) -> Node:
        inputs = self.all_of(MADE_FROM)
        weakest = max(_RANK[n.origin] for n in inputs)
        return Node(
            "slant_range",
            "made",
            "beam",
            COLUMNS["slant_range"].unit,
            _COMPUTED[weakest],
            MADE_FROM,
        )


def _reads(expressions: Iterable[Expression]) -> frozenset[str]:
    return frozenset(name for e in expressions for name in e.names)


def make_plan(sheet: RuleSheet, available: Available, extra: Iterable[str] = ()) -> Plan:
    """The plan for one line and channel.

    Parameters
    ----------
    sheet : RuleSheet
    available : Available
        What the line offers.
    extra : iterable of str
        Quantities that are wanted beside the rules', where they can be had: for figures and tables.

    Raises
    ------
    SheetError
        If the rules would need a second pass over the beams.
    """
    resolver = Resolver(sheet, available)
    planned = []
    roots: list[str] = []
    for rule in sheet.rules.values():
        planned.append(_planned(rule, resolver, roots))
    for name in (*extra, *(t for t in ("stamped_on_arrival",) if any(p.timed for p in planned))):
        try:
            roots.append(resolver.resolve(name).key)
        except _Missing:
            continue
    nodes = resolver.nodes
    reached: dict[str, Node] = {}
    stack = list(roots)
    while stack:
        key = stack.pop()
        if key not in reached:
            reached[key] = nodes[key]
            stack += nodes[key].inputs
            recipe = nodes[key].recipe
            if recipe is not None:
                stack += [name for name, _ in recipe.only]
    try:
        order = list(
            graphlib.TopologicalSorter({k: n.inputs for k, n in reached.items()}).static_order()
        )
    except graphlib.CycleError as error:
        raise SheetError(
            "Quantities that need each other.", where="quantities", found=" → ".join(error.args[1])
        ) from None
    after, late = _after_reduction(order, reached)
    beams = [k for k in order if reached[k].grain == "beam"]
    for key in beams:
        _refuse_second_pass(key, [i for i in reached[key].inputs if late[i]], "plan")
    wanted = set(beams)
    for rule_plan in planned:
        if rule_plan.beam:
            where = f"rule.{rule_plan.rule.id}: require"
            _refuse_second_pass("the requirement", [k for k in rule_plan.reads if late[k]], where)
            wanted |= set(rule_plan.reads)
    in_batch = {
        k
        for k in closure(wanted, reached)
        if reached[k].grain == "ping" and after[k] and reached[k].way != "reduction"
    }
    pings = [k for k in order if reached[k].grain == "ping" and reached[k].way != "reduction"]
    batch = [
        k
        for k in order
        if reached[k].grain == "beam" or reached[k].way == "reduction" or k in in_batch
    ]
    return Plan(
        available,
        reached,
        tuple(k for k in order if reached[k].grain in ("survey", "line")),
        tuple(k for k in pings if not after[k]),
        tuple(batch),
        tuple(k for k in pings if after[k] and k not in in_batch),
        tuple(planned),
        frozenset(k for k in beams if reached[k].way == "logged"),
    )


def _refuse_second_pass(what: str, late: list[str], where: str) -> None:
    if late:
        raise SheetError(
            f"It would need a second pass over the beams: {what} needs {', '.join(late)}, which is known only when "
            "a whole line of pings has passed.",
            where=where,
            advice="Reduce both sides to their ping.",
        )


def _after_reduction(
    order: list[str], nodes: Mapping[str, Node]
) -> tuple[dict[str, bool], dict[str, bool]]:
    """What rests on a reduction, and what on a whole line of reduced values."""
    after: dict[str, bool] = {}
    late: dict[str, bool] = {}
    for key in order:
        node = nodes[key]
        rests = any(after[i] for i in node.inputs)
        after[key] = node.way == "reduction" or rests
        whole = node.recipe is not None and node.recipe.whole_line
        late[key] = (whole and rests) or any(late[i] for i in node.inputs)
    return after, late


def _planned(rule: Rule, resolver: Resolver, roots: list[str]) -> PlannedRule:
    none: tuple[str, ...] = ()
    if rule.requirement is None and not rule.columns:
        return PlannedRule(rule, False, True, none, frozenset(), none)
    by_ping = False
    try:
        if rule.when is not None:
            if _never(rule.when, resolver):
                return PlannedRule(rule, False, False, none, frozenset(), none)
            conditions = resolver.all_of(rule.when.names)
            by_ping = any(n.value is None for n in conditions)
            if by_ping:
                roots += [n.key for n in conditions]
            elif rule.when.run({n.key: n.value for n in conditions}) != 1.0:
                return PlannedRule(rule, False, False, none, frozenset(), none)
        if rule.requirement is None:
            return _of_columns(rule, resolver, roots, by_ping)
        needed = resolver.all_of(rule.requirement.names)
    except _Missing as missing:
        return PlannedRule(rule, False, True, missing.names, frozenset(), none)
    roots += [n.key for n in needed]
    more = list(rule.text_expressions)
    if rule.keep_when is not None:
        more.append(rule.keep_when)
    for name in sorted(_reads(more)):
        try:
            node = resolver.resolve(name)
        except _Missing:
            continue
        # A beam's own value has no place in a ping's text.
        if node.grain != "beam":
            roots.append(node.key)
    rests_on = closure(rule.requirement.names, resolver.nodes)
    # The rule on the clock itself is assessed where the others cannot be.
    timed = frozenset(rests_on) & TIMED if "clock_fault" not in rests_on else frozenset()
    beam = grain_of(*(n.grain for n in needed)) == "beam"
    return PlannedRule(rule, beam, True, none, timed, tuple(n.key for n in needed), by_ping)


def _never(condition: Expression, resolver: Resolver) -> bool:
    """Whether a condition is false by what is stated alone, whatever its other quantities may be."""
    known: dict[str, Any] = {}
    for name in condition.names:
        try:
            node = resolver.resolve(name)
        except _Missing:
            node = None
        known[name] = math.nan if node is None or node.value is None else node.value
    return bool(np.all(np.asarray(condition.run(known)) == 0.0))


def _of_columns(rule: Rule, resolver: Resolver, roots: list[str], by_ping: bool) -> PlannedRule:
    """A rule that requires columns: what each ping has of them."""
    reads, absent = [], []
    for name in rule.columns:
        beam = name in resolver.available.beam_columns
        try:
            node = resolver.resolve(f"greatest(logged({name}))" if beam else f"logged({name})")
        except _Missing:
            absent.append(name)
            continue
        reads.append(node.key)
    roots += reads
    return PlannedRule(rule, False, True, (), frozenset(), tuple(reads), by_ping, tuple(absent))


def closure(names: Iterable[str], nodes: Mapping[str, Node]) -> list[str]:
    """All that some names rest on, themselves included, nearest first."""
    found: list[str] = []
    queue = sorted(names)
    while queue:
        key = queue.pop(0)
        if key in nodes and key not in found:
            found.append(key)
            queue += nodes[key].inputs
    return found
