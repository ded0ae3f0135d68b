"""Texts with computed numbers in them: what to set for the re-run.

A field such as ``{at_most(longest_pulse):us}`` is an expression of the rule sheets' language and a unit to show
it in. ``at_most`` and ``at_least`` say on which side the number is safe: it is taken over all pings of the
section and rounded to three figures towards that side, so that the advice holds for each of them.
``{value}`` and ``{limit}`` are the worst ping's.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from qa.engine.expressions import Expression
from qa.model.errors import SheetError, UnitError
from qa.model.units import Conversion, Unit, conversion, readable

Direction = Literal["at_most", "at_least", "worst", "value", "limit"]
FIGURES = 3
NOT_KNOWN = "(not known)"


@dataclass(frozen=True, slots=True)
class Field:
    """One field of a template."""

    direction: Direction
    expression: Expression | None
    unit: str
    how: Conversion | None


@dataclass(frozen=True, slots=True)
class Template:
    """A text in pieces: plain texts and fields."""

    text: str = ""
    pieces: tuple[str | Field, ...] = ()

    @property
    def expressions(self) -> tuple[Expression, ...]:
        """Every expression that a field holds."""
        return tuple(
            p.expression for p in self.pieces if isinstance(p, Field) and p.expression is not None
        )


_FIELD = re.compile(r"\{([^{}]*)\}")
_DIRECTED = re.compile(r"\s*(at_most|at_least)\s*\((.*)\)\s*\Z", re.DOTALL)


def compile_template(text: str, compiled: Callable[[str, str], Expression], where: str) -> Template:
    """Check a text and compile its fields.

    Raises
    ------
    SheetError
        If a field holds anything but the language of rule sheets and a unit that fits.
    """
    pieces: list[str | Field] = []
    position = 0
    for match in _FIELD.finditer(text):
        pieces.append(text[position : match.start()])
        pieces.append(_field(match[1], compiled, where))
        position = match.end()
    rest = text[position:]
    if "{" in "".join(p for p in pieces if isinstance(p, str)) + rest or "}" in rest:
        raise SheetError("A brace without its partner.", where=where, found=text)
    pieces.append(rest)
    return Template(text, tuple(p for p in pieces if p != ""))


def _field(content: str, compiled: Callable[[str, str], Expression], where: str) -> Field:
    inner, colon, unit = content.rpartition(":")
    if not colon:
        inner, unit = content, ""
    if inner.strip() in ("value", "limit"):
        return Field(
            "value" if inner.strip() == "value" else "limit", None, unit, _how(unit, None, where)
        )
    directed = _DIRECTED.match(inner)
    direction: Direction = "worst"
    if directed:
        direction = "at_most" if directed[1] == "at_most" else "at_least"
        inner = directed[2]
    expression = compiled(inner, where)
    if expression.type != "number":
        raise SheetError("A number is wanted in a field.", where=where, found=content)
    return Field(direction, expression, unit, _how(unit, expression.unit, where))


def _how(unit: str, expected: Unit | None, where: str) -> Conversion | None:
    if not unit:
        return None
    try:
        how = conversion(unit)
    except UnitError as error:
        raise SheetError(error.message, where=where, found=unit, expected=error.expected) from None
    if expected is not None and how.unit != expected:
        raise SheetError(
            "A field's unit is of the wrong kind.",
            where=where,
            found=f"{unit} for a value in {expected}",
        )
    return how


def filled(
    template: Template,
    values: Mapping[str, Any],
    worst: int,
    value: float,
    limit: float,
    unit: Unit,
) -> str:
    """The text with its numbers.

    Parameters
    ----------
    template : Template
    values : mapping of str to ndarray or number
        What the fields' names are, over the pings of a section.
    worst : int
        Position of the worst ping in those arrays.
    value, limit : float
        The worst ping's, for {value} and {limit}; ``unit`` is theirs.
    """
    shown = []
    for piece in template.pieces:
        if isinstance(piece, str):
            shown.append(piece)
        elif piece.expression is None:
            shown.append(_number(value if piece.direction == "value" else limit, piece, unit, 0))
        else:
            shown.append(_field_text(piece, values, worst))
    return "".join(shown)


def _field_text(piece: Field, values: Mapping[str, Any], worst: int) -> str:
    assert piece.expression is not None
    if not all(name in values for name in piece.expression.names):
        return NOT_KNOWN
    with np.errstate(all="ignore"):
        found = np.atleast_1d(np.asarray(piece.expression.run(values), dtype=float))
    if piece.direction == "worst":
        number = found[worst] if len(found) > worst else found[0]
        return _number(float(number), piece, piece.expression.unit, 0)
    known = found[~np.isnan(found)]
    if not len(known):
        return NOT_KNOWN
    if piece.direction == "at_most":
        return _number(float(known.min()), piece, piece.expression.unit, -1)
    return _number(float(known.max()), piece, piece.expression.unit, 1)


def _number(value: float, piece: Field, unit: Unit, towards: int) -> str:
    if not math.isfinite(value):
        return NOT_KNOWN if math.isnan(value) else readable(value, unit)
    if piece.how is None:
        return readable(value, unit)
    converted = float(piece.how.from_si(value))
    shown = f"{rounded(converted, towards):.6g}".replace("-", "−")
    if piece.unit in ("", "1"):
        return shown
    return f"{shown} {piece.unit.replace('us', 'µs') if piece.unit == 'us' else piece.unit}"


def rounded(value: float, towards: int, figures: int = FIGURES) -> float:
    """A value to some significant figures, down (-1), up (1) or to the nearest (0).

    Examples
    --------
    >>> rounded(133.37, -1), rounded(133.31, 1), rounded(133.35, 0)
    (133.0, 134.0, 133.0)
    """
    if value == 0.0 or not math.isfinite(value):
        return value
    step = 10.0 ** (math.floor(math.log10(abs(value))) - figures + 1)
    scaled = value / step
    if abs(scaled - round(scaled)) < 1e-7:
        whole: float = round(scaled)
    else:
        whole = (
            math.floor(scaled)
            if towards < 0
            else math.ceil(scaled)
            if towards > 0
            else round(scaled)
        )
    return float(f"{whole * step:.12g}")
