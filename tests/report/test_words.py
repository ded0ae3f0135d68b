"""The words are in one place, all of them used, none missing."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

import qa.report
from qa.model.shipped import shipped

SOURCES = [
    *sorted(Path(qa.report.__file__).parent.glob("*.py")),
    *sorted(shipped("reports").glob("*.jinja")),
]


def keys() -> set[str]:
    found = set()
    table = tomllib.loads((shipped("reports") / "words.toml").read_text(encoding="utf-8"))
    for group, texts in table.items():
        if isinstance(texts, str):
            found.add(group)
        else:
            found |= {f"{group}.{key}" for key in texts}
    return found


def used() -> set[str]:
    text = "\n".join(p.read_text(encoding="utf-8") for p in SOURCES)
    return set(
        re.findall(r"\b(?:w|word|marked)\(\s*['\"]([a-z_]+(?:\.[a-zA-Z_ -]+)?)['\"]\s*[,)]", text)
    )


def test_every_word_that_is_used_exists() -> None:
    assert len(used()) > 150
    assert used() <= keys()


def test_every_word_is_used() -> None:
    # Groups whose keys are put together when the report is written.
    made = ("verdict.", "nav.", "rule.", "quantity.", "map.", "clauses.", "compare.")
    unused = {k for k in keys() - used() if not k.startswith(made)}
    assert unused == set()


def test_templates_hold_no_words_of_their_own() -> None:
    for path in shipped("reports").glob("*.jinja"):
        text = path.read_text(encoding="utf-8")
        text = re.sub(r"\{#.*?#\}|\{%.*?%\}|\{\{.*?\}\}|<[^>]*>", "", text, flags=re.DOTALL)
        words = [w for w in re.findall(r"[A-Za-z]{2,}", text) if w != "UTC"]
        assert words == [], path.name
