"""Faults of the rules beyond the first ten."""

from __future__ import annotations

from typing import Any


def add(rng: Any, drawn: Any) -> None:
    return
