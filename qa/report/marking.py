"""Numbers in the page that carry where in ``findings.json`` they come from, so that a test can read both."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from markupsafe import Markup, escape

from qa.report import drawing, numbers
from qa.report.words import word

_KINDS: Mapping[str, Callable[[Any], str]] = {
    "count": lambda v: numbers.UNKNOWN if v is None else numbers.count(v),
    "share": numbers.share,
    "margin": numbers.margin,
    "length": numbers.length,
    "duration": numbers.duration,
    "moment": numbers.moment,
    "clock": numbers.clock,
    "plain": lambda v: numbers.UNKNOWN if v is None else str(v),
}
NAME_SHOWN = 80
TITLE_SHOWN = 300


class Marker:
    """Looks numbers up in the findings by their JSON pointer and shows them.

    Parameters
    ----------
    data : mapping
        The findings as they stand in ``findings.json``.
    """

    def __init__(self, data: Mapping[str, Any]) -> None:
        self.data = data

    def look_up(self, pointer: str) -> Any:
        """The value at a pointer (RFC 6901, without escapes)."""
        found: Any = self.data
        for part in pointer.split("/")[1:]:
            found = found[int(part)] if isinstance(found, list) else found[part]
        return found

    def number(self, pointer: str, kind: str = "count", unit: str = "") -> Markup:
        """One number, shown as its kind."""
        value = self.look_up(pointer)
        text = numbers.quantity(value, unit) if kind == "quantity" else _KINDS[kind](value)
        return _datum(pointer, value, text)

    def within(self, base: str, key: str, kind: str = "count", unit: str = "") -> Markup:
        """One number of a row that names the row's own pointer in ``data-base``: shorter, for long tables."""
        value = self.look_up(f"{base}/{key}")
        text = numbers.quantity(value, unit) if kind == "quantity" else _KINDS[kind](value)
        return _datum(key, value, text)

    def pair_within(self, base: str, unit: str) -> tuple[Markup, Markup]:
        """A section's worst value and its limit, in such a row."""
        worst, limit = self.look_up(f"{base}/worst"), self.look_up(f"{base}/limit")
        shown = numbers.against(worst, limit, unit)
        return _datum("worst", worst, shown[0]), _datum("limit", limit, shown[1])

    def local(self, pointer: str, zone: str) -> Markup:
        """A time, shown in a time zone."""
        value = self.look_up(pointer)
        return _datum(pointer, value, numbers.moment(value, zone))

    def pair(self, value: str, limit: str, unit: str) -> tuple[Markup, Markup]:
        """A value and its limit, with figures enough to tell them apart."""
        found = self.look_up(value), self.look_up(limit)
        shown = numbers.against(*found, unit)
        return _datum(value, found[0], shown[0]), _datum(limit, found[1], shown[1])


def derived(name: str, value: Any, text: str) -> Markup:
    """A number that was worked out from several of the findings."""
    return Markup('<data data-derived="{}" value="{}">{}</data>').format(name, _raw(value), text)


def _datum(pointer: str, value: Any, text: str) -> Markup:
    raw, at = _raw(value), escape(pointer)
    if raw == text:
        return Markup(f'<data data-at="{at}">{escape(text)}</data>')
    return Markup(f'<data data-at="{at}" value="{escape(raw)}">{escape(text)}</data>')


def _raw(value: Any) -> str:
    return "" if value is None else repr(value) if isinstance(value, float) else str(value)


def name(text: str, most: int = NAME_SHOWN) -> Markup:
    """A name from a log: isolated from the text around it, cut where it is very long."""
    shown = drawing.clean(text)
    if not shown.strip():
        return Markup("<bdi>“{}”</bdi>").format(shown)
    if len(shown) <= most:
        return Markup("<bdi>{}</bdi>").format(shown)
    return Markup('<bdi title="{}">{}…</bdi>').format(shown[:TITLE_SHOWN], shown[: most - 1])


_SHAPES = {
    "in spec": '<circle cx="6" cy="6" r="5"/>',
    "out of spec": '<path d="M6 .5 11.5 11H.5z"/>',
    "not assessed": '<path d="M6 1 11 6 6 11 1 6z" stroke-dasharray="2 1.4"/>',
    "advisory": '<path d="M1.5 1.5h9v9h-9z"/>',
}
_CLASSES = {"in spec": "in", "out of spec": "out", "not assessed": "none", "advisory": "advice"}


def verdict(kind: str, key: str = "") -> Markup:
    """A verdict by shape, colour and word; ``key`` chooses another word for it."""
    shown, text = _CLASSES[kind], escape(word(f"verdict.{key or kind}"))
    return Markup(
        f'<span class="verdict {shown}"><svg aria-hidden="true"><use href="#v-{shown}"/></svg>{text}</span>'
    )


def shapes() -> Markup:
    """The verdicts' shapes, once a page."""
    symbols = "".join(
        f'<symbol id="v-{_CLASSES[kind]}" viewBox="0 0 12 12">{shape}</symbol>'
        for kind, shape in _SHAPES.items()
    )
    return Markup(symbols)


def script_json(value: Any) -> Markup:
    """JSON that may stand inside a script element whatever texts it holds."""
    import json

    text = json.dumps(value, ensure_ascii=True, separators=(",", ":"), allow_nan=False)
    for character in "<>&":
        text = text.replace(character, f"\\u{ord(character):04x}")
    return Markup(text)


def escaped_text(text: str) -> Markup:
    """A text from a log or a sheet, escaped."""
    return escape(drawing.clean(text))
