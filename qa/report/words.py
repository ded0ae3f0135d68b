"""The report's words, all in one file, so that they can be translated."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from functools import cache
from typing import Any

from markupsafe import Markup

from qa.model.shipped import shipped
from qa.report import numbers


@cache
def _table() -> Mapping[str, Any]:
    return tomllib.loads((shipped("reports") / "words.toml").read_text(encoding="utf-8"))


def _entry(key: str) -> Any:
    found: Any = _table()
    for part in key.split("."):
        found = found[part]
    return found


def word(key: str, /, **values: Any) -> str:
    """A text by its key, fields filled in; the plural is chosen by ``n``.

    Examples
    --------
    >>> word("counted.lines", n=1), word("counted.lines", n=1200)
    ('1 line', '1\u202f200 lines')
    """
    return _chosen(key, values).format(**_shown(values)) if values else _chosen(key, values)


def marked(key: str, /, **values: Any) -> Markup:
    """The same for a page: values are escaped unless they are markup already."""
    return Markup(_chosen(key, values)).format(**_shown(values))


def known(key: str) -> bool:
    """Whether there is such a text."""
    try:
        _entry(key)
    except KeyError:
        return False
    return True


def _chosen(key: str, values: Mapping[str, Any]) -> str:
    entry = _entry(key)
    if isinstance(entry, Mapping):
        entry = entry["one" if values.get("n") == 1 else "many"]
    if not isinstance(entry, str):
        raise KeyError(key)
    return entry


def _shown(values: Mapping[str, Any]) -> dict[str, Any]:
    return {
        k: numbers.count(v) if isinstance(v, int) and not isinstance(v, bool) else v
        for k, v in values.items()
    }
