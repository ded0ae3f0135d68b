"""How a text becomes a file of the report."""

from __future__ import annotations

from pathlib import Path


def write_text(path: Path, text: str) -> None:
    """Write a file, with line ends as they are.

    Names of files may hold bytes that are no text; what cannot be written is replaced, never lost with the file.
    """
    path.write_bytes(text.encode("utf-8", "replace"))
