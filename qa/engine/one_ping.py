"""What limits and quantities come to for one ping with stated values, without any log.

The ways are chosen by the same resolver as in an audit, so an answer here is the answer there.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

import numpy as np

from qa.engine import quantities
from qa.engine.assumed import assumed_values
from qa.engine.expressions import Judgement, judge
from qa.engine.plans import Available, Node, Resolver, closure
from qa.engine.quantities import Recipe
from qa.engine.sheets import Rule, RuleSheet
from qa.engine.stages import by_recipe
from qa.model.columns import COLUMNS, SONAR_KINDS
from qa.model.errors import PingworthyError, UnitError, nearest
from qa.model.survey_file import SurveyFile
from qa.model.units import measure


def given_value(name: str, text: str, where: str = "") -> float | str:
    """One stated value in SI, or a word where the quantity is one.

    Raises
    ------
    PingworthyError
        If there is no such quantity, or the value does not fit it.

    Examples
    --------
    >>> given_value("depth", "120 ft"), given_value("pulse_form", "CW")
    (36.576, 'CW')
    """
    where = where or name
    symbol = quantities.symbol(name)
    if symbol is None:
        raise PingworthyError(
            f'There is no quantity or limit "{name[:80]}".',
            where=where,
            advice=nearest(name[:80], quantities.names()),
        )
    if symbol.type == "text":
        if text not in symbol.choices:
            raise PingworthyError(
                "Not one of the choices.",
                where=where,
                found=text,
                expected=", ".join(symbol.choices),
                advice=nearest(text, symbol.choices),
            )
        return text
    try:
        value = measure(text, symbol.unit, where)[0]
    except UnitError as error:
        raise PingworthyError(
            error.message,
            where=where,
            found=error.found,
            expected=error.expected,
            advice=error.advice,
        ) from None
    column = COLUMNS.get(name)
    if column is not None and not column.least <= value <= column.greatest:
        raise PingworthyError(
            "The value is not possible.",
            where=where,
            found=text,
            expected=f"{column.least:g} to {column.greatest:g} {column.unit}",
        )
    return value


class _OnePingResolver(Resolver):
    """Chooses ways as for a log, but none that needs neighbouring pings or the beams of a fan."""

    def __init__(
        self, sheet: RuleSheet, available: Available, given: Mapping[str, float | str]
    ) -> None:
        super().__init__(sheet, available)
        self.given = given
        for name in given:
            self.nodes[name] = self._given(name)

    def _given(self, name: str) -> Node:
        unit = quantities.quantity_unit(name)
        return Node(name, "stated", "survey", unit, "stated", value=self.given[name])

    def _logged(self, key: str) -> Node | None:
        # What is given stands for what a log would hold.
        return self._given(key) if key in self.given else None

    def _usable(self, recipe: Recipe) -> bool:
        return not (recipe.whole_line or recipe.within_ping) and super()._usable(recipe)


class OnePing:
    """Values at one ping.

    Parameters
    ----------
    sheet : RuleSheet
    given : mapping of str to float or str
        Quantities' values, SI; they stand for what a log would hold.
    survey : SurveyFile, optional
        What is stated beside them.
    cast : object, optional
        The survey's sound speed cast.
    """

    def __init__(
        self,
        sheet: RuleSheet,
        given: Mapping[str, float | str] | None = None,
        survey: SurveyFile | None = None,
        cast: Any = None,
    ) -> None:
        survey = survey or SurveyFile()
        given = dict(given or {})
        stated: dict[str, Any] = dict(survey.stated)
        if cast is not None:
            stated["cast"] = cast
        if survey.says_depth_from:
            stated["depth_from"] = survey.depth_from
        kind = given.pop("kind", None) or stated.get("kind")
        self.kind_assumed = kind is None
        self.kind = str(kind or SONAR_KINDS[0])
        stated["kind"] = self.kind
        available = Available(
            self.kind, frozenset(), frozenset(), stated, True, assumed_kind=self.kind_assumed
        )
        self.anything_stated = bool(given or survey.stated or cast is not None)
        self.sheet = sheet
        self.given = given
        self.resolver = _OnePingResolver(sheet, available, given)
        self.values: dict[str, Any] = {}

    def value(self, key: str) -> Any:
        """A number, a word, or a side-scan's two values at its near and farthest range; None where it cannot be had."""
        node = self.resolver.found(key)
        return None if node is None else self._value(node)

    def missing(self, key: str) -> tuple[str, ...]:
        """What would have to be given for a name to be had; none if it can be."""
        return self.resolver.missing(key)

    def node(self, key: str) -> Node | None:
        """How a name is had, if it can be."""
        return self.resolver.found(key)

    def rests_on(self, key: str) -> dict[str, Node]:
        """What a value rests on, itself included, nearest first; nothing where it cannot be had."""
        if self.node(key) is None:
            return {}
        nodes = self.resolver.nodes
        return {k: nodes[k] for k in closure((key,), nodes)}

    def assumed(self, keys: Iterable[str]) -> list[str]:
        """What was assumed for some values, in words."""
        found = {k: n for key in sorted(keys) for k, n in self.rests_on(key).items()}
        texts = [
            f"Assumed: {k} {assumed_values()[k].text}."
            for k, n in found.items()
            if n.way == "assumed"
        ]
        ways = [n.recipe.assumes for n in found.values() if n.recipe is not None]
        return [*texts, *(f"Assumed: {text}." for text in dict.fromkeys(ways) if text)]

    def judged(self, rule: Rule) -> Judgement | None:
        """What a rule says of this ping; None where it cannot be assessed or does not apply."""
        if rule.requirement is None:
            return None
        names = rule.requirement.names | (rule.when.names if rule.when else frozenset())
        if any(self.value(name) is None for name in names):
            return None
        if rule.when is not None and not np.all(np.asarray(rule.when.run(self.values)) == 1.0):
            return None
        with np.errstate(all="ignore"):
            return judge(rule.requirement, self.values)

    def _value(self, node: Node) -> Any:
        if node.key in self.values:
            return self.values[node.key]
        for key in node.inputs:
            self._value(self.resolver.resolve(key))
        with np.errstate(all="ignore"):
            self.values[node.key] = found = self._computed(node)
        return found

    def _computed(self, node: Node) -> Any:
        if node.way == "alias":
            return self.values[node.inputs[0]]
        if node.way == "made":
            return np.array([float(self.values[key]) for key in node.inputs])
        if node.limit is not None and node.limit.expression is not None:
            return node.limit.expression.run(self.values)
        if node.reduction is not None:
            return _reduced(node.reduction.reducer, node.reduction.inner.run(self.values))
        if node.recipe is not None:
            return by_recipe(node, self.values)
        return node.value


def _reduced(reducer: str, values: Any) -> float:
    """One value of one beam, or of a side-scan's two, the first of which is nearest the vertical."""
    beams = np.atleast_1d(np.asarray(values, dtype=float))
    if reducer == "greatest":
        return float(beams.max())
    if reducer == "least":
        return float(beams.min())
    if reducer == "spread":
        return float(beams.max() - beams.min())
    if reducer == "count":
        return float(np.count_nonzero(beams))
    if reducer == "share":
        return float(np.mean(beams != 0.0))
    if reducer == "mean":
        return float(beams.mean())
    return float(beams[0])
