"""Plain text for a terminal: headings, paragraphs and labelled lines, wrapped to its width."""

from __future__ import annotations

import textwrap

NARROWEST, WIDEST = 40, 110
STEP = 2


class Page:
    """Text that grows line by line; ``str(page)`` is all of it.

    Examples
    --------
    >>> page = Page(40)
    >>> page.heading("Limits")
    >>> page.labelled("target_size", "1 m, which the survey file states", label_width=12)
    >>> print(page)
    Limits
      target_size   1 m, which the survey file
                    states
    """

    def __init__(self, width: int) -> None:
        self.width = min(max(width, NARROWEST), WIDEST)
        self.lines: list[str] = []

    def heading(self, text: str, level: int = 0) -> None:
        """A heading, after an empty line unless it is the first."""
        if self.lines and self.lines[-1]:
            self.lines.append("")
        self.paragraph(text, level)

    def paragraph(self, text: str, level: int = 1) -> None:
        """One wrapped paragraph; nothing for an empty text."""
        if text.strip():
            self._wrapped(" ".join(text.split()), "" if not level else " " * STEP * level, "")

    def labelled(self, label: str, text: str, level: int = 1, label_width: int = 0) -> None:
        """A label, and a text that hangs beside it; below it where the label is long."""
        start = " " * STEP * level
        room = max(label_width, len(label)) + STEP
        if len(label) + STEP > room or room > self.width // 2:
            self._wrapped(label, start, "")
            self._wrapped(" ".join(text.split()), start + " " * STEP * 2, "")
            return
        self._wrapped(" ".join(text.split()), start + label.ljust(room), " " * (len(start) + room))

    def blank(self) -> None:
        """An empty line, never two."""
        if self.lines and self.lines[-1]:
            self.lines.append("")

    def _wrapped(self, text: str, first: str, rest: str) -> None:
        wrapper = textwrap.TextWrapper(
            self.width,
            initial_indent=first,
            subsequent_indent=rest or " " * (len(first) - len(first.lstrip()) or len(first)),
            break_long_words=False,
            break_on_hyphens=False,
        )
        self.lines += wrapper.wrap(text) or [first.rstrip()]

    def __str__(self) -> str:
        return "\n".join(self.lines).rstrip()
