"""The one exception family of the product: errors that the user can mend."""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class PingworthyError(Exception):
    """Something that the user gave could not be used.

    Parameters
    ----------
    message : str
        What is wrong, in one sentence.
    where : str
        File, and row or key, if known.
    found, expected, advice : str
        What stood there, what would have been right, what to do.

    Examples
    --------
    >>> print(PingworthyError("Not a length.", where="survey.toml: limits.target_size", found="3 s"))
    survey.toml: limits.target_size: Not a length. Found: 3 s.
    """

    def __init__(
        self,
        message: str,
        *,
        where: str = "",
        found: str = "",
        expected: str = "",
        advice: str = "",
    ) -> None:
        self.message, self.where = message, where
        self.found, self.expected, self.advice = found, expected, advice
        parts = [f"{where}: {message}" if where else message]
        parts += [
            f"{label}: {_shortened(text)}."
            for label, text in (("Found", found), ("Expected", expected))
            if text
        ]
        if advice:
            parts.append(advice)
        super().__init__(" ".join(parts))

    def __reduce__(self) -> tuple[object, ...]:
        """Survive the way between processes: keyword arguments are kept."""
        return (
            _rebuilt,
            (type(self), self.message, self.where, self.found, self.expected, self.advice),
        )


class InputError(PingworthyError):
    """A log could not be read or holds nothing usable."""


class SurveyFileError(PingworthyError):
    """A survey file could not be used."""


class SheetError(PingworthyError):
    """A rule sheet could not be used."""


class UnitError(PingworthyError):
    """A unit is unknown, or is not the kind that was wanted."""


class OutputError(PingworthyError):
    """The results could not be written where they were wanted."""


def _rebuilt(
    kind: type[PingworthyError], message: str, where: str, found: str, expected: str, advice: str
) -> PingworthyError:
    return kind(message, where=where, found=found, expected=expected, advice=advice)


def _shortened(text: str, most: int = 300) -> str:
    text = text.rstrip(".")
    return text if len(text) <= most else text[: most - 1] + "…"


def nearest(name: str, known: Iterable[str]) -> str:
    """Advice that names the valid word nearest to a wrong one, else lists them.

    Examples
    --------
    >>> nearest("target_sise", ["target_size", "hits_required"])
    'Did you mean "target_size"?'
    """
    known = sorted(known)
    close = difflib.get_close_matches(name, known, n=1)
    if close:
        return f'Did you mean "{close[0]}"?'
    return "Valid: " + ", ".join(known) + "." if known else ""
