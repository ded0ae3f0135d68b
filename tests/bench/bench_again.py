"""What an audit costs when it is done again: nothing changed, and one new line among a hundred.

python tests/bench/bench_again.py [--soundings 1000000] [--lines 100] [--rounds 3]

Each audit is the whole command with its report, from start to end, in a process of its own.
"""

from __future__ import annotations

import argparse
import os
import resource
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import bench


def command(logs: Path, survey: Path, out: Path, kept: Path) -> tuple[float, float]:
    """Wall and processor seconds of one audit."""
    run = [sys.executable, "-c", "from qa.cli import main; main()", "audit", str(logs)]
    more = ["--survey", str(survey), "--out", str(out), "--keep-in", str(kept)]
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    began = time.perf_counter()
    done = subprocess.run([*run, *more], cwd=bench.ROOT, capture_output=True)
    wall = time.perf_counter() - began
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    if done.returncode not in (0, 1):
        raise SystemExit(done.stderr.decode("utf-8"))
    return wall, after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime


def settled(path: Path) -> None:
    """A time of change that lies a while ago, so that it tells one content from another."""
    os.utime(path, (time.time() - 100, time.time() - 100))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--soundings", type=int, default=1_000_000)
    parser.add_argument("--lines", type=int, default=100)
    parser.add_argument("--rounds", type=int, default=3)
    options = parser.parse_args()
    found: dict[str, list[tuple[float, float]]] = {}
    with tempfile.TemporaryDirectory() as text:
        folder = Path(text)
        survey, logs = folder / "survey.toml", folder / "logs"
        survey.write_text(bench.SURVEY, encoding="utf-8")
        logs.mkdir()
        paths = [logs / f"line-{n:03d}.parquet" for n in range(options.lines + 1)]
        for n, path in enumerate(paths):
            bench.write_log(path, options.soundings, start=n)
            settled(path)
        last, aside = paths[-1], folder / "last.parquet"
        for at in range(options.rounds):
            kept = folder / f"kept-{at}"
            last.replace(aside)
            for name in ("first", "nothing new"):
                taken = command(logs, survey, folder / "out", kept)
                found.setdefault(name, []).append(taken)
            aside.replace(last)
            settled(last)
            name = f"one new line in {options.lines}"
            found.setdefault(name, []).append(command(logs, survey, folder / "out", kept))
    print(
        f"\n{options.lines} lines of {options.soundings:,} soundings, {options.rounds} rounds, medians\n"
    )
    print(
        "| | seconds | share of the first | processor seconds | share of the first |\n|---|---|---|---|---|"
    )
    for name, taken in found.items():
        cells = []
        for which in (0, 1):
            middle = statistics.median(t[which] for t in taken)
            firsts = [t[which] for t in found["first"]]
            share = statistics.median(t[which] / f for t, f in zip(taken, firsts, strict=True))
            cells += [f"{middle:.2f}", f"{100 * share:.1f} %"]
        print(f"| {name} | {' | '.join(cells)} |")


if __name__ == "__main__":
    main()
