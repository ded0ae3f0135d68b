"""The small language of rule sheets: names, numbers, units, comparisons, arithmetic and a short list of functions.

A text is parsed with :mod:`ast`; every node that is not on the list is refused, so nothing outside it is ever
evaluated. Units are checked on exponents when the text is compiled, before any log is read.

Truth inside an expression is 1, 0 or NaN (not known), so that a value that is not known never decides.
"""

from __future__ import annotations

import ast
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any, Literal

import numpy as np

from qa.model.columns import PULSE_FORMS
from qa.model.errors import SheetError, UnitError, nearest
from qa.model.units import DEGREE, ONE, Unit, conversion

Type = Literal["number", "truth", "text"]
Values = Mapping[str, Any]

TOLERANCE = 1e-9
"""Differences of less than this share of the limit are rounding, and pass."""

UNIT_NAMES = (
    *(
        "m",
        "km",
        "cm",
        "mm",
        "ft",
        "fathom",
        "nmi",
        "s",
        "ms",
        "us",
        "min",
        "h",
        "Hz",
        "kHz",
        "MHz",
    ),
    *("kt", "deg", "rad", "dB", "degC", "percent"),
)
REDUCERS = (
    *("greatest", "least", "mean", "spread", "share", "count"),
    *("nearest_vertical", "nearest_angle"),
)
MOST_CHARACTERS = 1000
MOST_NODES = 300
MOST_DEPTH = 40
GREATEST_EXPONENT = 8


@dataclass(frozen=True, slots=True)
class Symbol:
    """What a name means to the compiler: its unit and its type."""

    unit: Unit
    type: Type = "number"
    choices: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Reduction:
    """A beam expression brought to its ping by a named reducer."""

    key: str
    reducer: str
    inner: Expression
    angle: Expression | None = None


@dataclass(frozen=True, slots=True)
class Expression:
    """A compiled text.

    ``names`` are the quantities and limits that it reads directly; a reduction is read under its own key,
    and so is ``logged(x)`` or ``computed(x)``.
    """

    text: str
    unit: Unit
    type: Type
    names: frozenset[str]
    reductions: Mapping[str, Reduction]
    run: Callable[[Values], Any] = field(repr=False)
    literal: float | None = None
    comparisons: tuple[Comparison, ...] = ()
    joined_by: Literal["", "and", "or"] = ""


@dataclass(frozen=True, slots=True)
class Comparison:
    """One ``left operator right`` of a requirement."""

    left: Expression
    operator: str
    right: Expression


@dataclass(frozen=True, slots=True)
class Judgement:
    """A requirement's outcome, element by element: ``known``, ``met``, and the comparison that was nearest to failing."""

    known: Any
    met: Any
    value: Any
    limit: Any
    margin: Any


@dataclass(frozen=True, slots=True)
class Place:
    """Where a text stands, for errors."""

    where: str

    def refuse(self, message: str, **more: str) -> SheetError:
        """The error to raise."""
        return SheetError(message, where=self.where, **more)


def compile_expression(
    text: str,
    symbols: Callable[[str], Symbol | None],
    known_names: Callable[[], list[str]],
    where: str,
) -> Expression:
    """Parse, check and compile one text.

    Parameters
    ----------
    text : str
        Python syntax; only what this module lists is allowed.
    symbols : callable
        Gives what a name means, or None.
    known_names : callable
        All names, for advice on a wrong one.
    where : str
        File, rule and key, for errors.

    Raises
    ------
    SheetError
        If anything in the text is not allowed, not known, or of the wrong unit.
    """
    place = Place(where)
    if not isinstance(text, str) or not text.strip():
        raise place.refuse(
            "An expression is empty.", found=repr(text), expected='a text such as "a <= b"'
        )
    if len(text) > MOST_CHARACTERS:
        raise place.refuse(
            f"An expression is longer than {MOST_CHARACTERS} characters.", found=text[:60] + "…"
        )
    try:
        tree = ast.parse(text.strip(), mode="eval")
    except (SyntaxError, ValueError, RecursionError, MemoryError) as error:
        problem = getattr(error, "msg", str(error))
        raise place.refuse(f"Not an expression: {problem}.", found=text) from None
    if sum(1 for _ in ast.walk(tree)) > MOST_NODES:
        raise place.refuse("An expression has too many parts.", found=text[:60] + "…")
    return _Compiler(text, symbols, known_names, place).expression(tree.body, 0)


class _Compiler:
    def __init__(
        self,
        text: str,
        symbols: Callable[[str], Symbol | None],
        known_names: Callable[[], list[str]],
        place: Place,
    ) -> None:
        self.text, self.symbols, self.known_names, self.place = text, symbols, known_names, place

    def expression(self, node: ast.expr, depth: int) -> Expression:
        if depth > MOST_DEPTH:
            raise self.place.refuse("An expression is nested too deeply.", found=self.text[:60])
        visit = getattr(self, "_" + type(node).__name__.lower(), None)
        if visit is None:
            raise self.place.refuse(
                "Not allowed in an expression.",
                found=ast.unparse(node)[:80],
                expected="names, numbers, units, comparisons, arithmetic and the listed functions",
            )
        found: Expression = visit(node, depth + 1)
        return found

    def _made(
        self,
        node: ast.AST,
        unit: Unit,
        kind: Type,
        parts: list[Expression],
        run: Callable[[Values], Any],
        **more: Any,
    ) -> Expression:
        names: frozenset[str] = frozenset().union(*(p.names for p in parts))
        reductions: dict[str, Reduction] = {}
        for part in parts:
            reductions.update(part.reductions)
        return Expression(ast.unparse(node), unit, kind, names, reductions, run, **more)

    def _constant(self, node: ast.Constant, depth: int) -> Expression:
        value = node.value
        if isinstance(value, str):
            return self._made(node, ONE, "text", [], lambda values: value)
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise self.place.refuse("Not a number.", found=repr(value))
        try:
            number = float(value)
        except OverflowError:
            raise self.place.refuse("A number is too large.", found=repr(value)[:60]) from None
        if not np.isfinite(number):
            raise self.place.refuse("Not a finite number.", found=ast.unparse(node))
        return self._made(node, ONE, "number", [], lambda values: number, literal=number)

    def _name(self, node: ast.Name, depth: int) -> Expression:
        name = node.id
        symbol = self.symbols(name)
        if symbol is not None:
            return Expression(
                name, symbol.unit, symbol.type, frozenset((name,)), {}, lambda values: values[name]
            )
        if name in UNIT_NAMES:
            how = conversion(name)
            scale = float(how.to_si(1.0))
            return self._made(node, how.unit, "number", [], lambda values: scale, literal=scale)
        raise self.place.refuse(
            f'No quantity, limit or unit is called "{name}".',
            advice=nearest(name, [*self.known_names(), *UNIT_NAMES]) if len(name) < 80 else "",
        )

    def _unaryop(self, node: ast.UnaryOp, depth: int) -> Expression:
        operand = self.expression(node.operand, depth)
        if isinstance(node.op, ast.Not):
            self._must(operand, "truth")
            return self._made(
                node, ONE, "truth", [operand], lambda values: 1.0 - operand.run(values)
            )
        if not isinstance(node.op, ast.USub | ast.UAdd):
            raise self.place.refuse("Not allowed in an expression.", found=ast.unparse(node))
        self._must(operand, "number")
        sign = -1.0 if isinstance(node.op, ast.USub) else 1.0
        literal = None if operand.literal is None else sign * operand.literal
        return self._made(
            node,
            operand.unit,
            "number",
            [operand],
            lambda values: sign * operand.run(values),
            literal=literal,
        )

    def _binop(self, node: ast.BinOp, depth: int) -> Expression:
        left, right = self.expression(node.left, depth), self.expression(node.right, depth)
        self._must(left, "number")
        self._must(right, "number")
        a, b = left.run, right.run
        literal = None
        if isinstance(node.op, ast.Add | ast.Sub):
            unit = self._same_unit(node, left, right)
            sign = 1.0 if isinstance(node.op, ast.Add) else -1.0
            run: Callable[[Values], Any] = (
                (lambda values: a(values) + b(values))
                if sign > 0
                else (lambda values: a(values) - b(values))
            )
        elif isinstance(node.op, ast.Mult):
            unit, run = left.unit * right.unit, lambda values: a(values) * b(values)
            if left.literal is not None and right.literal is not None:
                literal = left.literal * right.literal
        elif isinstance(node.op, ast.Div):
            unit, run = left.unit / right.unit, lambda values: np.divide(a(values), b(values))
            if right.literal == 0.0:
                raise self.place.refuse("A division by zero.", found=ast.unparse(node))
        elif isinstance(node.op, ast.Pow):
            if right.literal is None or abs(right.literal) > GREATEST_EXPONENT:
                raise self.place.refuse(
                    f"An exponent is a constant of {GREATEST_EXPONENT} at most.",
                    found=ast.unparse(node)[:80],
                )
            exponent = right.literal
            unit = left.unit.power(Fraction(exponent).limit_denominator(12))
            run = lambda values: np.power(a(values), exponent)  # noqa: E731
        else:
            raise self.place.refuse("Not allowed in an expression.", found=ast.unparse(node)[:80])
        return self._made(node, unit, "number", [left, right], run, literal=literal)

    def _boolop(self, node: ast.BoolOp, depth: int) -> Expression:
        parts = [self.expression(value, depth) for value in node.values]
        for part in parts:
            self._must(part, "truth")
        both = isinstance(node.op, ast.And)
        runs = [part.run for part in parts]

        def run(values: Values) -> Any:
            found = [np.asarray(r(values), dtype=float) for r in runs]
            return _all_of(found) if both else 1.0 - _all_of([1.0 - f for f in found])

        comparisons: list[Comparison] = []
        plain = all(
            part.comparisons and part.joined_by in ("", "and" if both else "or") for part in parts
        )
        if plain:
            comparisons = [c for part in parts for c in part.comparisons]
        joined: Literal["and", "or"] = "and" if both else "or"
        return self._made(
            node,
            ONE,
            "truth",
            parts,
            run,
            comparisons=tuple(comparisons),
            joined_by=joined if comparisons else "",
        )

    def _compare(self, node: ast.Compare, depth: int) -> Expression:
        sides = [self.expression(side, depth) for side in (node.left, *node.comparators)]
        comparisons = []
        for left, operator, right in zip(sides, node.ops, sides[1:], strict=False):
            symbol = _OPERATORS.get(type(operator))
            if symbol is None:
                raise self.place.refuse(
                    "Not a comparison of this language.",
                    found=ast.unparse(node)[:80],
                    expected="<=, <, >=, >, == or !=",
                )
            comparisons.append(self._comparison(node, left, symbol, right))

        def run(values: Values) -> Any:
            truths = []
            for comparison in comparisons:
                judged = judge_comparison(comparison, values)
                truths.append(np.where(judged.known, np.where(judged.met, 1.0, 0.0), np.nan))
            return _all_of(truths)

        made = self._made(
            node,
            ONE,
            "truth",
            sides,
            run,
            comparisons=tuple(comparisons),
            joined_by="and" if len(comparisons) > 1 else "",
        )
        return made

    def _comparison(
        self, node: ast.AST, left: Expression, symbol: str, right: Expression
    ) -> Comparison:
        if "text" in (left.type, right.type):
            left, right = self._texts_compared(node, left, symbol, right)
            return Comparison(left, symbol, right)
        if left.type == "truth" or right.type == "truth":
            raise self.place.refuse(
                "A truth is not compared with a number.", found=ast.unparse(node)[:80]
            )
        self._same_unit(node, left, right)
        return Comparison(left, symbol, right)

    def _texts_compared(
        self, node: ast.AST, left: Expression, symbol: str, right: Expression
    ) -> tuple[Expression, Expression]:
        if left.type != "text" or right.type != "text" or symbol not in ("==", "!="):
            raise self.place.refuse(
                "A text is compared with a text, by == or !=.", found=ast.unparse(node)[:80]
            )
        for name_side, text_side in ((left, right), (right, left)):
            meant = self.symbols(name_side.text) if name_side.names else None
            if meant is not None and meant.choices and not text_side.names:
                text = text_side.run({})
                if text not in meant.choices:
                    raise self.place.refuse(
                        f'"{name_side.text}" is never that.',
                        found=repr(text),
                        advice=nearest(text, meant.choices),
                    )
                if meant.choices == PULSE_FORMS:
                    return name_side, _constant_number(text_side, float(PULSE_FORMS.index(text)))
        return left, right

    def _call(self, node: ast.Call, depth: int) -> Expression:
        if (
            not isinstance(node.func, ast.Name)
            or node.keywords
            or any(isinstance(a, ast.Starred) for a in node.args)
        ):
            raise self.place.refuse("Not allowed in an expression.", found=ast.unparse(node)[:80])
        name = node.func.id
        if name in ("logged", "computed"):
            return self._of_origin(node, name)
        args = [self.expression(arg, depth) for arg in node.args]
        if name in REDUCERS:
            return self._reduction(node, name, args)
        function = FUNCTIONS.get(name)
        if function is None:
            raise self.place.refuse(
                f'There is no function "{name[:60]}".',
                advice=nearest(name[:60], (*FUNCTIONS, *REDUCERS, "logged", "computed")),
            )
        if not function.least_args <= len(args) <= function.most_args:
            raise self.place.refuse(
                f'"{name}" takes {function.least_args} to {function.most_args} values.',
                found=ast.unparse(node)[:80],
            )
        for position, arg in enumerate(args):
            self._must(arg, "truth" if name == "where" and position == 0 else "number")
        try:
            unit = function.unit(args)
        except UnitError as error:
            raise self.place.refuse(f"{name}: {error.message}", found=error.found) from None
        runs = [arg.run for arg in args]
        compute = function.compute
        return self._made(
            node, unit, "number", args, lambda values: compute(*(r(values) for r in runs))
        )

    def _of_origin(self, node: ast.Call, name: str) -> Expression:
        if len(node.args) != 1 or not isinstance(node.args[0], ast.Name):
            raise self.place.refuse(
                f'"{name}" takes the name of one quantity.', found=ast.unparse(node)[:80]
            )
        inner = node.args[0].id
        symbol = self.symbols(inner)
        if symbol is None:
            raise self.place.refuse(
                f'No quantity is called "{inner[:60]}".',
                advice=nearest(inner[:60], self.known_names()),
            )
        key = f"{name}({inner})"
        return Expression(
            key, symbol.unit, symbol.type, frozenset((key,)), {}, lambda values: values[key]
        )

    def _reduction(self, node: ast.Call, name: str, args: list[Expression]) -> Expression:
        wanted = 2 if name == "nearest_angle" else 1
        if len(args) != wanted:
            raise self.place.refuse(
                f'"{name}" takes {wanted} value(s).', found=ast.unparse(node)[:80]
            )
        inner = args[0]
        if inner.reductions:
            raise self.place.refuse(
                "A reducer inside a reducer would need a second pass over the beams.",
                found=ast.unparse(node)[:80],
            )
        counting = name in ("share", "count")
        if counting and inner.type == "number" and inner.text == "accepted":
            pass
        else:
            self._must(inner, "truth" if counting else "number")
        angle = args[1] if wanted == 2 else None
        if angle is not None and angle.unit != DEGREE:
            raise self.place.refuse("An angle is wanted.", found=f"{angle.text} ({angle.unit})")
        key = ast.unparse(node)
        unit = ONE if counting else inner.unit
        return Expression(
            key,
            unit,
            "number",
            frozenset((key,)),
            {key: Reduction(key, name, inner, angle)},
            lambda values: values[key],
        )

    def _must(self, part: Expression, kind: Type) -> None:
        if part.type != kind:
            words = {"number": "a number", "truth": "a comparison", "text": "a text"}
            raise self.place.refuse(
                f"{words[kind].capitalize()} is wanted here.", found=part.text[:80]
            )

    def _same_unit(self, node: ast.AST, left: Expression, right: Expression) -> Unit:
        if left.unit == right.unit or right.literal == 0.0:
            return left.unit
        if left.literal == 0.0:
            return right.unit
        raise self.place.refuse(
            f"{left.text} is in {left.unit}, {right.text} in {right.unit}.",
            found=ast.unparse(node)[:120],
            expected="the same unit on both sides",
        )


def _constant_number(side: Expression, number: float) -> Expression:
    return Expression(side.text, ONE, "text", frozenset(), {}, lambda values: number)


def _all_of(truths: list[Any]) -> Any:
    """Truth of all: one that is false decides, one that is not known leaves the rest open."""
    result = truths[0]
    for other in truths[1:]:
        least = np.fmin(result, other)
        unknown = np.isnan(result) | np.isnan(other)
        result = np.where(unknown & (least != 0.0), np.nan, least)
    return result


_OPERATORS: dict[type[ast.cmpop], str] = {
    ast.LtE: "<=",
    ast.Lt: "<",
    ast.GtE: ">=",
    ast.Gt: ">",
    ast.Eq: "==",
    ast.NotEq: "!=",
}


@dataclass(frozen=True, slots=True)
class _Function:
    compute: Callable[..., Any]
    unit: Callable[[list[Expression]], Unit]
    least_args: int = 1
    most_args: int = 1


def _pure(args: list[Expression]) -> Unit:
    for arg in args:
        if arg.unit != ONE:
            raise UnitError("a pure number is wanted.", found=f"{arg.text} in {arg.unit}")
    return ONE


def _first(args: list[Expression]) -> Unit:
    return args[0].unit


def _alike(args: list[Expression]) -> Unit:
    wanted = next((a.unit for a in args if a.literal != 0.0), args[0].unit)
    for arg in args:
        if arg.unit != wanted and arg.literal != 0.0:
            raise UnitError(
                "the values differ in unit.", found=", ".join(f"{a.text} in {a.unit}" for a in args)
            )
    return wanted


def _degrees_to_pure(args: list[Expression]) -> Unit:
    if args[0].unit != DEGREE:
        raise UnitError("an angle is wanted.", found=f"{args[0].text} in {args[0].unit}")
    return ONE


def _folded(ufunc: Any) -> Callable[..., Any]:
    def compute(*values: Any) -> Any:
        result = values[0]
        for value in values[1:]:
            result = ufunc(result, value)
        return result

    return compute


def _where(condition: Any, if_true: Any, if_false: Any) -> Any:
    condition = np.asarray(condition, dtype=float)
    return np.where(np.isnan(condition), np.nan, np.where(condition == 1.0, if_true, if_false))


def _inverse(ufunc: Any) -> Callable[[Any], Any]:
    return lambda value: np.degrees(ufunc(value))


FUNCTIONS: dict[str, _Function] = {
    "min": _Function(_folded(np.minimum), _alike, 2, 8),
    "max": _Function(_folded(np.maximum), _alike, 2, 8),
    "abs": _Function(np.abs, _first),
    "sqrt": _Function(np.sqrt, lambda args: args[0].unit.root(2)),
    "hypot": _Function(_folded(np.hypot), _alike, 2, 8),
    "sin": _Function(lambda x: np.sin(np.radians(x)), _degrees_to_pure),
    "cos": _Function(lambda x: np.cos(np.radians(x)), _degrees_to_pure),
    "tan": _Function(lambda x: np.tan(np.radians(x)), _degrees_to_pure),
    "asin": _Function(_inverse(np.arcsin), lambda args: _pure(args) * DEGREE),
    "acos": _Function(_inverse(np.arccos), lambda args: _pure(args) * DEGREE),
    "atan": _Function(_inverse(np.arctan), lambda args: _pure(args) * DEGREE),
    "log10": _Function(np.log10, _pure),
    "exp": _Function(np.exp, _pure),
    "floor": _Function(np.floor, _pure),
    "ceil": _Function(np.ceil, _pure),
    "radians": _Function(np.radians, _degrees_to_pure),
    "decibels": _Function(
        lambda x: 10.0 * np.log10(x), lambda args: _pure(args) * conversion("dB").unit
    ),
    "where": _Function(_where, lambda args: _alike(args[1:]), 3, 3),
}
"""The functions of the language; ``min``, ``max`` and ``hypot`` take up to eight values."""


def _as_logged(text: Any) -> Any:
    """A stated pulse form as the number that stands for it in a log; any other text as it is."""
    return float(PULSE_FORMS.index(text)) if isinstance(text, str) and text in PULSE_FORMS else text


def judge_comparison(comparison: Comparison, values: Values) -> Judgement:
    """One comparison, element by element.

    The margin is how far the left side keeps from the right, as a share of the right: negative is a miss.
    """
    return judge_sides(
        comparison.operator, comparison.left.run(values), comparison.right.run(values)
    )


def holds(operator: str, ahead: Any, slack: Any) -> Any:
    """Whether one side keeps so far from the other as an ordering asks, but for a last digit of ``slack``."""
    return ahead >= -slack if operator in ("<=", ">=") else ahead > slack


def judge_sides(operator: str, left: Any, right: Any) -> Judgement:
    """As :func:`judge_comparison`, of sides that are computed."""
    if isinstance(left, str) or isinstance(right, str):
        same = _as_logged(left) == _as_logged(right)
        met = same if operator == "==" else not same
        return Judgement(True, met, np.nan, np.nan, 0.0 if met else -1.0)
    with np.errstate(all="ignore"):
        known = ~np.isnan(left) if np.ndim(right) == 0 and right == right else None
        if known is None:
            known = ~(np.isnan(left) | np.isnan(right))
        size = np.abs(np.asarray(right))
        if operator in ("==", "!="):
            same = np.abs(left - right) <= TOLERANCE * size
            met = same if operator == "==" else ~same
            return Judgement(
                known, met, left, right, np.where(known, np.where(met, 0.0, -1.0), np.nan)
            )
        ahead = right - left if operator in ("<=", "<") else left - right
        plain = not ((size == 0.0).any() or np.isinf(size).any() or np.isinf(left).any())
        if plain:
            # Finite values and limits that are not zero, as most are: the same in fewer passes.
            met = holds(operator, ahead, TOLERANCE * size)
            return Judgement(known, met, left, right, ahead / size)
        both_endless = np.isinf(left) & np.isinf(right) & (np.sign(left) == np.sign(right))
        ahead = np.where(both_endless, 0.0, ahead)
        met = holds(operator, ahead, np.where(np.isinf(size), 0.0, TOLERANCE * size))
        scale = np.where(
            size > 0, np.where(np.isinf(size), 1.0, size), np.maximum(np.abs(left), 1e-300)
        )
        margin = ahead / scale
    return Judgement(known, met, left, right, margin)


def judge(requirement: Expression, values: Values) -> Judgement:
    """A requirement, element by element; several comparisons give the one that decides.

    Where they are joined by "and" that is the one of the least margin; by "or" the one of the greatest.
    """
    if not requirement.comparisons:
        truth = np.asarray(requirement.run(values), dtype=float)
        known = ~np.isnan(truth)
        return Judgement(
            known, truth == 1.0, truth, np.ones_like(truth), np.where(known, truth - 1.0, np.nan)
        )
    if len(requirement.comparisons) == 1:
        return judge_comparison(requirement.comparisons[0], values)
    parts = [judge_comparison(c, values) for c in requirement.comparisons]
    shape = np.broadcast_shapes(*(np.shape(p.margin) for p in parts))
    margins = np.stack([np.broadcast_to(np.where(p.known, p.margin, np.nan), shape) for p in parts])
    known = np.stack([np.broadcast_to(p.known, shape) for p in parts])
    met = np.stack([np.broadcast_to(p.met, shape) for p in parts])
    if requirement.joined_by == "and":
        any_missed = (known & ~met).any(axis=0)
        all_known = known.all(axis=0)
        outcome_known, outcome_met = any_missed | all_known, ~any_missed
        chosen = np.argmin(np.where(np.isnan(margins), np.inf, margins), axis=0)
    else:
        any_met = (known & met).any(axis=0)
        outcome_known, outcome_met = any_met | known.all(axis=0), any_met
        chosen = np.argmax(np.where(np.isnan(margins), -np.inf, margins), axis=0)

    def picked(arrays: list[Any]) -> Any:
        stacked = np.stack([np.broadcast_to(a, shape) for a in arrays])
        return np.take_along_axis(stacked, chosen[None, ...], axis=0)[0]

    return Judgement(
        outcome_known,
        outcome_met,
        picked([p.value for p in parts]),
        picked([p.limit for p in parts]),
        np.take_along_axis(margins, chosen[None, ...], axis=0)[0],
    )
