"""Quantities of a user's own, from the Python file that a survey file names.

Such a file is a program: it is run only where the user allows it, and never because a survey file says so.
"""

from __future__ import annotations

import functools
import hashlib
import inspect
import re
import threading
import traceback
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from qa.engine import quantities
from qa.engine.quantities import RECIPES, Recipe
from qa.engine.sheets import RuleSheet
from qa.model.columns import COLUMNS
from qa.model.errors import InputError, PingworthyError, SurveyFileError, nearest
from qa.model.survey_file import SurveyFile


@dataclass(frozen=True, slots=True)
class UserPython:
    """A file whose quantities are in use; small, so that it travels to a worker."""

    path: Path
    sha256: str


_lock = threading.RLock()
_in_use: UserPython | None = None
_added: list[tuple[str, Recipe]] = []


def allowed_python(survey: SurveyFile, allow: bool) -> UserPython | None:
    """The Python file of a survey, if it has one and the user allows it.

    Raises
    ------
    SurveyFileError
        If the survey file names one and it is not allowed, or it cannot be read.
    """
    if survey.python is None:
        return None
    where = f"{survey.path}: survey.python"
    if not allow:
        raise SurveyFileError(
            "The survey file names a Python file, and such a file is run only where that is allowed.",
            where=where,
            found=str(survey.python),
            advice="Read it, and if you trust it give --allow-python (from Python: allow_python=True).",
        )
    return UserPython(survey.python, hashlib.sha256(_content(survey.python, where)).hexdigest())


def use_python(python: UserPython | None) -> None:
    """Have a file's quantities registered, and those of any other file not. Nothing is run twice.

    Raises
    ------
    InputError
        If the file cannot be run or registers what is not possible; with the file and the line.
    """
    global _in_use
    with _lock:
        if python == _in_use:
            return
        _forget()
        if python is not None:
            _run(python)
        _in_use = python


def check_inputs(sheet: RuleSheet) -> None:
    """Every input of the quantities in use is known; a limit of the sheet may be one.

    Raises
    ------
    InputError
        With the quantity, the input and the nearest known name.
    """
    known = {*quantities.names(), *COLUMNS, *sheet.limits, "cast"}
    for name, recipe in _added:
        for need in recipe.needs:
            for word in _NAME.findall(need):
                if word not in known:
                    raise InputError(
                        f'"{name}" needs "{word}", and no quantity or limit is called that.',
                        where=_place(recipe.function),
                        advice=nearest(word, known),
                    )


_NAME = re.compile(r"[A-Za-z_]\w*(?![\w(])")


def _content(path: Path, where: str) -> bytes:
    try:
        return path.read_bytes()
    except OSError as error:
        raise SurveyFileError(
            "The Python file cannot be read.",
            where=where,
            found=f"{path}: {error.strerror or 'no such file'}",
            advice="A path is relative to the survey file.",
        ) from None


def _forget() -> None:
    global _in_use
    for name, recipe in _added:
        RECIPES[name].remove(recipe)
        if not RECIPES[name]:
            del RECIPES[name]
    _added.clear()
    _in_use = None


def _run(python: UserPython) -> None:
    path = python.path
    content = _content(path, str(path))
    if hashlib.sha256(content).hexdigest() != python.sha256:
        raise InputError("The Python file changed during the audit.", where=str(path))
    before = {name: len(recipes) for name, recipes in RECIPES.items()}
    try:
        # Running it is what the user allowed; see allowed_python.
        exec(
            compile(content, str(path), "exec"),
            {"__name__": "user_quantities", "__file__": str(path)},
        )
    except BaseException as error:
        for name in list(RECIPES):
            del RECIPES[name][before.get(name, 0) :]
            if not RECIPES[name]:
                del RECIPES[name]
        if isinstance(error, KeyboardInterrupt):
            raise
        raise _told(error, path, "The Python file cannot be used.") from None
    for name, recipes in RECIPES.items():
        for at in range(before.get(name, 0), len(recipes)):
            recipes[at] = replace(
                recipes[at],
                function=_guarded(name, recipes[at].function, path),
                source=recipes[at].source or path.name,
            )
            _added.append((name, recipes[at]))
    if not _added:
        raise InputError(
            "The Python file registers no quantity.",
            where=str(path),
            expected='from qa import quantity, and quantity("name", function, unit="m")',
        )


def _guarded(name: str, function: Callable[..., Any], path: Path) -> Callable[..., Any]:
    """The function, with its errors told as the user's and its result's shape checked."""

    @functools.wraps(function)
    def guarded(*args: Any, **named: Any) -> Any:
        try:
            found = np.asarray(function(*args, **named), dtype=float)
        except Exception as error:
            told = _told(error, path, f'The quantity "{name}" could not be computed.')
            if told.where == str(path):
                # What was given back was at fault, not a line of the function.
                told = _told(error, path, told.message, _place(function))
            raise told from None
        inputs = [np.shape(v) for k, v in (*enumerate(args), *named.items()) if k != "groups"]
        wanted = max(inputs, key=len, default=())
        if found.ndim and found.shape != wanted:
            raise InputError(
                f'The quantity "{name}" gives values of the wrong shape.',
                where=_place(function),
                found=f"{found.shape}",
                expected=f"{wanted}, one value for each of its inputs'",
            )
        return found

    return guarded


def _place(function: Callable[..., Any]) -> str:
    code = inspect.unwrap(function).__code__
    return f"{code.co_filename}, line {code.co_firstlineno}"


def _told(error: BaseException, path: Path, message: str, where: str = "") -> PingworthyError:
    """An error of the user's file, with its last line in that file."""
    line: int | None = None
    if isinstance(error, SyntaxError) and error.filename == str(path):
        line = error.lineno
    else:
        frames = traceback.extract_tb(error.__traceback__)
        line = next((f.lineno for f in reversed(frames) if f.filename == str(path)), None)
    text = error.msg if isinstance(error, SyntaxError) else str(error)
    return InputError(
        message,
        where=where or (f"{path}, line {line}" if line else str(path)),
        found=f"{type(error).__name__}: {text}" if text else type(error).__name__,
    )
