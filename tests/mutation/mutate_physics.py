"""Plant one mistake at a time in the physics and see whether the tests notice.

``python tests/mutation/mutate_physics.py`` changes every number in ``qa/physics`` (docstrings
apart) by one part in a hundred, zeros to a hundredth and whole numbers used as such by one, in a
temporary copy, runs the tests of that module with the published values, and prints the changes
that no test noticed. ``--operators`` turns signs and products round as well, ``--sample N`` tries
N changes drawn at random, ``--module NAME`` one module only.

Changes that cannot alter a result are listed in `NO_EFFECT`, each with its reason; they are tried
all the same, and counted apart.
"""

from __future__ import annotations

import argparse
import ast
import contextlib
import io
import multiprocessing
import os
import random
import shutil
import sys
import tempfile
import time
from dataclasses import dataclass
from multiprocessing.connection import Connection, wait
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
PHYSICS = ROOT / "qa" / "physics"
PATIENCE = 90.0

# (module, part of the line, number as written) -> why no result can change.
NO_EFFECT: dict[tuple[str, str, str], str] = {
    ("beams", "np.any(~(edges > 1e-12))", "1e-12"): "only spares ordinary batches a check",
    ("echoes", "np.linspace(0.0, 1.0, 241)", "241"): "number of brackets",
    ("echoes", "reshape((-1,)", "1"): "numpy takes any negative number there",
    ("echoes", "np.minimum(last, 239)", "239"): "differs only where the result is infinite",
    ("echoes", "np.minimum(last + 1, 240)", "1"): "a wider bracket of the same fall",
    ("echoes", "for _ in range(32)", "32"): "one halving more",
    ("ground", "np.where(known, a, 0.0)", "0.0"): "stands in for positions that come out NaN",
    ("hits", "else 5e-7", "5e-7"): "no float32 lies between",
    ("hits", "needed <= 0.0", "0.0"): "counts are whole",
    ("rays", "_MOST_STEPS = ", "100_000"): "where to give up",
    ("rays", "np.any(speeds <= 0.0)", "0.0"): "no water is that slow",
    ("rays", "water.speed_at_top[..., 0]", "0"): "the layer above carries the same speed",
    ("rays", ".reshape(-1, layers)", "1"): "numpy takes any negative number there",
    ("rays", "np.where(down[:, np.newaxis] > 0.0", "0.0"): "a direction is 1 or -1",
    ("rays", "goal = np.where(d > 0.0", "0.0"): "a direction is 1 or -1",
    ("rays", "heading_down = d[cross] > 0.0", "0.0"): "a direction is 1 or -1",
    ("rays", "side = np.clip(", "0"): "the outermost layers have no outer edge to start from",
    ("rays", "side = np.clip(", "1"): "the outermost layers have no outer edge to start from",
    ("rays", "start = np.where(d > 0.0", "0.0"): "a direction is 1 or -1",
    ("rays", "stays = (k < 1e-6)", "1e-6"): "where level begins",
    ("rays", "stays = (k < 1e-6)", "0.0"): "stays level in even water either way",
    ("rays", "2.0 * c * t + 1.0", "2.0"): "any way too long for the time",
    ("rays", "2.0 * c * t + 1.0", "1.0"): "any way too long for the time",
    ("rays", "np.minimum(sine_at_edge[cross], 1.0)", "1.0"): "guards against rounding",
    ("rays", "np.minimum(last_sine, 1.0)", "1.0"): "guards against rounding",
    ("rays", "np.where(water.gradient == 0.0, 0.0", "0.0"): "multiplied by a gradient of zero",
    ("uncertainty", "feature_share: float = 0.0", "0.0"): "used by no order without a depth",
    ("water", "pressure = 1.01 * depth", "1.01"): "where the iteration begins",
    ("water", "for _ in range(12)", "12"): "one pass more",
    ("water", "pressure + 1.02 *", "1.02"): "pace of the iteration",
}

# Sums that only carry NaN along, and products with 1 or -1: an operator turned round in them
# cannot show. (part of the line) -> reason.
CARRIES_NAN = "only carries NaN along"
OPERATOR_NO_EFFECT: dict[str, str] = {
    "footprint + 0.0 * beamwidth_across": CARRIES_NAN,
    "pulse_limited_nadir(height, range_resolution) + 0.0 * one_side": CARRIES_NAN,
    "sharp) + 0.0 * limit": CARRIES_NAN,
    "near_normal) + 0.0 * (normal + oblique)": CARRIES_NAN,
    "_decibels(ratio + 0.0 * (detection + false_alarm))": CARRIES_NAN,
    "known = np.isfinite(": CARRIES_NAN,
    "usable = np.isfinite(": CARRIES_NAN,
    "np.isnan(hits + needed + chance)": CARRIES_NAN,
    "unknown = np.isnan(depth)": CARRIES_NAN,
    "unknown = ~np.isfinite(": CARRIES_NAN,
    "unknown |= np.isnan(": CARRIES_NAN,
    "known = ~np.isnan(t + s + d + latitude)": CARRIES_NAN,
    "size + 0.0 * depth": CARRIES_NAN,
    "np.arctan2(sine, cosine * down)) * side": "times 1 or -1",
    "across=(across * side)": "times 1 or -1",
    "behind = -d * gradients": "times 1 or -1",
    "g = d * gradients[place]": "times 1 or -1",
    "way = d * (goal - z)": "times 1 or -1",
    "across=np.where(possible, side * across": "times 1 or -1",
    "angle=np.where(possible, side * final": "times 1 or -1",
}

SWAPPED = {ast.Add: "-", ast.Sub: "+", ast.Mult: "/", ast.Div: "*"}
WRITTEN = {ast.Add: "+", ast.Sub: "-", ast.Mult: "*", ast.Div: "/"}


@dataclass(frozen=True)
class Change:
    """One planted mistake: bytes `start` to `end` of a module's source become `after`."""

    module: str
    line: int
    start: int
    end: int
    before: str
    after: str
    text: str

    def why_no_effect(self) -> str | None:
        for (module, part, number), reason in NO_EFFECT.items():
            if module == self.module and part in self.text and number == self.before:
                return reason
        if self.before.strip(" ()") in ("+", "-", "*", "/"):
            for part, reason in OPERATOR_NO_EFFECT.items():
                if part in self.text:
                    return reason
        return None


def _changed(value: float) -> str:
    if isinstance(value, int):
        return repr(value + 1)
    return repr(value * 1.01 if value else 0.01)


def changes_of(module: Path, operators: bool) -> list[Change]:
    """Every change to be planted in a module."""
    source = module.read_bytes()
    starts = [0]
    for row in source.split(b"\n"):
        starts.append(starts[-1] + len(row) + 1)
    lines = source.decode("utf-8").split("\n")
    found = []

    def add(start: int, end: int, after: str, line: int) -> None:
        before = source[start:end].decode("utf-8")
        text = lines[line - 1].strip()
        found.append(Change(module.stem, line, start, end, before, after, text))

    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Constant) and type(node.value) in (int, float):
            start = starts[node.lineno - 1] + node.col_offset
            end = starts[node.end_lineno - 1] + node.end_col_offset
            add(start, end, _changed(node.value), node.lineno)
        if operators and isinstance(node, ast.BinOp) and type(node.op) in SWAPPED:
            start = starts[node.left.end_lineno - 1] + node.left.end_col_offset
            end = starts[node.right.lineno - 1] + node.right.col_offset
            between = source[start:end].decode("utf-8")
            after = between.replace(WRITTEN[type(node.op)], SWAPPED[type(node.op)], 1)
            add(start, end, after, node.left.end_lineno)
    return sorted(found, key=lambda change: change.start)


def _forget(folder: Path) -> None:
    """Drop loaded copies of the package and of its tests, so that the changed source is read."""
    for name, module in list(sys.modules.items()):
        origin = getattr(module, "__file__", None) or ""
        if name == "qa" or name.startswith("qa.") or origin.startswith(str(folder)):
            del sys.modules[name]


def _tests_of(module: str) -> list[str]:
    chosen = [f"tests/physics/test_{module}.py", "tests/published"]
    if module == "rays":
        chosen.append("tests/physics/test_uncertainty.py")
    return [*chosen, f"qa/physics/{module}.py", "tests/physics/test_contract.py"]


def _work(folder_name: str, pipe: Connection) -> None:
    """Take changes from the pipe, plant each, run the tests, say whether one failed."""
    import pytest
    from hypothesis import settings

    folder = Path(folder_name)
    os.chdir(folder)
    sys.path.insert(0, folder_name)
    sys.dont_write_bytecode = True
    settings.register_profile(
        "mutation", max_examples=25, deadline=None, derandomize=True, database=None
    )
    while (task := pipe.recv()) is not None:
        module, change = task
        target = folder / "qa" / "physics" / f"{module}.py"
        original = target.read_bytes()
        if change is not None:
            after = change.after.encode("utf-8")
            target.write_bytes(original[: change.start] + after + original[change.end :])
        _forget(folder)
        output = io.StringIO()
        arguments = [
            "-x", "-q", "-p", "no:cacheprovider", "--import-mode=importlib", "--doctest-modules",
            "--hypothesis-profile=mutation", f"--rootdir={folder}",
            "--deselect", "tests/physics/test_contract.py::"
            "test_physics_loads_neither_scipy_nor_pyproj_nor_the_model",
            *_tests_of(module),
        ]  # fmt: skip
        with contextlib.redirect_stdout(output), contextlib.redirect_stderr(output):
            code = int(pytest.main(arguments))
        target.write_bytes(original)
        pipe.send((code, output.getvalue()[-2000:]))


class Worker:
    """A process with its own copy of the package, started again if a change hangs it."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.change: Change | None = None
        self.began = 0.0
        self._start()

    def _start(self) -> None:
        shutil.rmtree(self.folder, ignore_errors=True)
        leave = shutil.ignore_patterns("__pycache__", ".hypothesis")
        shutil.copytree(PHYSICS, self.folder / "qa" / "physics", ignore=leave)
        (self.folder / "qa" / "__init__.py").write_text("", encoding="utf-8")
        for name in ("physics", "published"):
            shutil.copytree(ROOT / "tests" / name, self.folder / "tests" / name, ignore=leave)
        context = multiprocessing.get_context("spawn")
        self.pipe, theirs = context.Pipe()
        self.process: Any = context.Process(
            target=_work, args=(str(self.folder), theirs), daemon=True
        )
        self.process.start()

    def send(self, module: str, change: Change | None) -> None:
        self.change, self.began = change, time.monotonic()
        self.pipe.send((module, change))

    def hangs(self) -> bool:
        return self.change is not None and time.monotonic() - self.began > PATIENCE

    def restart(self) -> None:
        self.process.kill()
        self.process.join()
        self.change = None
        self._start()


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--module", action="append", help="module of qa/physics; all by default")
    parser.add_argument("--sample", type=int, help="try that many, drawn at random")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--operators", action="store_true", help="turn + - * / round as well")
    parser.add_argument("--workers", type=int, default=2)
    options = parser.parse_args()

    modules = options.module or sorted(p.stem for p in PHYSICS.glob("*.py") if p.stem[0] != "_")
    todo = [c for name in modules for c in changes_of(PHYSICS / f"{name}.py", options.operators)]
    if options.sample is not None and options.sample < len(todo):
        todo = random.Random(options.seed).sample(todo, options.sample)
    print(f"{len(todo)} changes in {len(modules)} modules", flush=True)

    noticed: list[Change] = []
    survived: list[Change] = []
    without_effect: list[Change] = []
    hung: list[Change] = []
    began = time.monotonic()
    with tempfile.TemporaryDirectory(ignore_cleanup_errors=True) as folder:
        workers = [Worker(Path(folder) / f"copy{n}") for n in range(options.workers)]
        for name in modules:
            workers[0].send(name, None)
            code, output = workers[0].pipe.recv()
            if code != 0:
                print(f"the tests of {name} fail without any change:\n{output}")
                return 2
        waiting = list(reversed(todo))
        for worker in workers:
            if waiting:
                change = waiting.pop()
                worker.send(change.module, change)
        while any(worker.change for worker in workers):
            ready = wait([w.pipe for w in workers if w.change], timeout=1.0)
            for worker in workers:
                change = worker.change
                if change is None:
                    continue
                if worker.pipe in ready:
                    try:
                        code, _ = worker.pipe.recv()
                    except EOFError:
                        code = 3
                        worker.restart()
                    if code != 0:
                        noticed.append(change)
                    elif change.why_no_effect():
                        without_effect.append(change)
                    else:
                        survived.append(change)
                        print(
                            f"survived: {change.module}.py:{change.line}: {change.before!r} -> "
                            f"{change.after!r} in: {change.text}",
                            flush=True,
                        )
                elif worker.hangs():
                    hung.append(change)
                    worker.restart()
                else:
                    continue
                worker.change = None
                if waiting:
                    following = waiting.pop()
                    worker.send(following.module, following)
        for worker in workers:
            worker.pipe.send(None)
            worker.process.join(timeout=10.0)
    minutes = (time.monotonic() - began) / 60.0
    print(
        f"{len(todo)} changes in {minutes:.1f} min: {len(noticed)} noticed, {len(hung)} hung the "
        f"tests (noticed too), {len(without_effect)} without effect, {len(survived)} survived"
    )
    return 1 if survived else 0


if __name__ == "__main__":
    sys.exit(main())
