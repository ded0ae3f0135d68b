"""How the audit's cost grows with the log, and what a second worker brings.

python tests/bench/bench_scale.py [--up-to 1000000000] [--rounds 3]

Each audit is of the physics sheet without a report, in a process of its own; its memory, with that of its workers, is
measured from outside. Logs of more than 20 million soundings are several lines of 20 million, each with its own times.
"""

from __future__ import annotations

import argparse
import json
import statistics
import sys
import tempfile
import time
from pathlib import Path

import bench

LINE = 20_000_000
SIZES = (100_000, 1_000_000, 10_000_000, 20_000_000, 200_000_000, 1_000_000_000)
FILES, EACH = 8, 10_000_000


def child(folder: Path, survey: Path, workers: int) -> None:
    """One audit; prints its seconds, imports left out."""
    from qa import audit

    began = time.perf_counter()
    findings = audit([folder], survey=survey, workers=workers)
    seconds = time.perf_counter() - began
    print(json.dumps([seconds, sum(line.soundings for line in findings.lines)]))


def run(folder: Path, survey: Path, workers: int) -> tuple[float, int, float]:
    """Seconds, soundings and peak memory in MB of one audit."""
    command = [sys.executable, __file__, "--child", str(folder), str(survey), str(workers)]
    text, _, most = bench.measured(command)
    seconds, soundings = json.loads(text)
    return float(seconds), int(soundings), most


def growth(folder: Path, survey: Path, up_to: int) -> None:
    """One table: the audit of ever larger logs, with two threads in all."""
    print(
        "\n| soundings | lines | seconds | seconds per million | peak MB |\n|---|---|---|---|---|"
    )
    there: list[Path] = []
    for size in (s for s in SIZES if s <= up_to):
        if size < LINE:
            logs = folder / f"of-{size}"
            logs.mkdir()
            bench.write_log(logs / "line.parquet", size)
        else:
            logs = folder / "large"
            logs.mkdir(exist_ok=True)
            while len(there) < size // LINE:
                there.append(logs / f"line-{len(there):02d}.parquet")
                bench.write_log(there[-1], LINE, start=len(there))
        seconds, soundings, most = run(logs, survey, 2)
        assert soundings == size
        pace = seconds / soundings * 1e6
        lines = max(1, size // LINE)
        print(f"| {size:,} | {lines} | {seconds:.2f} | {pace:.3f} | {most:.0f} |", flush=True)


def workers(folder: Path, survey: Path, rounds: int) -> None:
    """How much faster two workers are than one, over lines of their own."""
    logs = folder / "eight"
    logs.mkdir()
    for at in range(FILES):
        bench.write_log(logs / f"line-{at}.parquet", EACH, start=at)
    found: dict[int, list[tuple[float, float]]] = {1: [], 2: []}
    for _ in range(rounds):
        for count, taken in found.items():
            seconds, _, most = run(logs, survey, count)
            taken.append((seconds, most))
    one, two = ([seconds for seconds, _ in found[n]] for n in (1, 2))
    ratio = statistics.median(a / b for a, b in zip(one, two, strict=True))
    print(f"\n{FILES} lines of {EACH:,} soundings, {rounds} rounds, medians\n")
    print("| workers | seconds | peak MB |\n|---|---|---|")
    for n, taken in found.items():
        seconds = statistics.median(s for s, _ in taken)
        print(f"| {n} | {seconds:.2f} | {max(m for _, m in taken):.0f} |")
    print(f"\nTwo workers are {ratio:.2f} times as fast as one.")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--up-to", type=int, default=200_000_000)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--child", nargs=3, help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.child:
        folder, survey, count = options.child
        child(Path(folder), Path(survey), int(count))
        return
    with tempfile.TemporaryDirectory() as text:
        folder = Path(text)
        survey = folder / "survey.toml"
        survey.write_text(bench.SURVEY, encoding="utf-8")
        workers(folder, survey, options.rounds)
        growth(folder, survey, options.up_to)


if __name__ == "__main__":
    sys.path.insert(0, str(bench.ROOT))
    main()
