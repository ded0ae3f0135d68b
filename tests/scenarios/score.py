"""Audits a folder of simulated lines and counts what was found, missed, false and misplaced.

    python tests/scenarios/score.py OUT [--verbose]

OUT is what generate.py wrote, or sample_logs/. The table has a row a rule: faults found; faults
missed; sections that are no fault; sections whose ends are off by more than one ping, and the worst
error; lines that read as assessed though an input is missing, and lines that read "not assessed" though
every input is there. Exit status 1 if anything is amiss.
"""

from __future__ import annotations

import argparse
import json
import sys
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from qa.job import audit

# as reckon.FIRST_RULES: rules whose "not assessed" the truth knows
RECKONED = (
    "ping-interval",
    "echo-in-time",
    "clock",
    "ping-gap",
    "range-resolution",
    "across-resolution",
    "along-resolution",
    "footprint-growth",
    "pings-on-target",
    "ping-spacing",
)

# What a fault brings with it: sections of the rule on the left that lie within a planted fault of a rule
# on the right are true, though the truth does not list them.
FOLLOWS = {
    "yaw-gap": ("ping-spacing", "pings-on-target", "ping-gap"),
    "range-window": ("along-resolution", "across-resolution", "footprint-growth"),
    "motion": ("motion-frozen",),
}
# Rules that judge a stretch by what lasts in it cannot place its ends to the ping: half their window.
WINDOWED = {"swath-wobble": 300}


@dataclass
class Row:
    found: int = 0
    missed: int = 0
    false: int = 0
    misplaced: int = 0
    worst_end: int = 0
    assessed_blindly: int = 0
    not_assessed: int = 0

    @property
    def amiss(self) -> int:
        return self.missed + self.false + self.misplaced + self.assessed_blindly + self.not_assessed


@dataclass
class Score:
    rows: dict[str, Row]
    shipped: set[str] = field(default_factory=set)
    complaints: list[str] = field(default_factory=list)
    unusable: int = 0

    @property
    def amiss(self) -> int:
        return self.unusable + sum(r.amiss for n, r in self.rows.items() if n in self.shipped)


def lines_of(out: Path) -> tuple[list[str], dict[Path, list[dict[str, Any]]]]:
    """The rules that the truth covers, and its lines by the folder of their survey file."""
    truth = json.loads((out / "truth.json").read_text(encoding="utf-8"))
    folders: dict[Path, list[dict[str, Any]]] = {}
    for line in truth["lines"]:
        if "batch" in line:
            folders.setdefault(out / line["batch"], []).append(line)
            continue
        line["faults"] = [f for f in truth["faults"] if f["line"] == line["line"]]
        line["not_assessed"] = []
        if line["kind"] == "side-scan":
            line["not_assessed"] = [{"rule": "footprint-growth"}]
        folders.setdefault(out, []).append(line)
    return truth["rules"], folders


def _follows(section: dict[str, Any], faults: list[dict[str, Any]]) -> bool:
    return any(
        fault["rule"] in FOLLOWS.get(section["rule"], ())
        and fault["first_index"] - 1 <= section["first_index"]
        and section["last_index"] <= fault["last_index"] + 1
        for fault in faults
    )


def _score_line(score: Score, where: str, line: dict[str, Any], findings: dict[str, Any]) -> None:
    here = [s for s in findings["sections"] if s["line"] == line["line"]]
    free = list(range(len(here)))
    # faults may share their pings: the closest pair first
    for fault in line["faults"]:
        row = score.rows[fault["rule"]]

        def off(j: int, fault: dict[str, Any] = fault) -> int:
            ends = ("first_index", "last_index", "first_ping", "last_ping")
            return max(abs(here[j][end] - fault[end]) for end in ends)

        match = [
            j
            for j in free
            if here[j]["rule"] == fault["rule"]
            and (here[j]["channel"] or None) == fault["channel"]
            and here[j]["first_index"] <= fault["last_index"]
            and here[j]["last_index"] >= fault["first_index"]
        ]
        if not match:
            row.missed += 1
            if fault["rule"] in score.shipped:
                score.complaints.append(f"{where} MISSED {fault}")
            continue
        best = min(match, key=off)
        free.remove(best)
        row.found += 1
        row.worst_end = max(row.worst_end, off(best))
        if off(best) > WINDOWED.get(fault["rule"], 1):
            row.misplaced += 1
            ends = here[best]["first_index"], here[best]["last_index"]
            score.complaints.append(f"{where} ENDS {ends} for {fault}")
    for j in free:
        section = here[j]
        if section["rule"] not in score.rows or _follows(section, line["faults"]):
            continue
        score.rows[section["rule"]].false += 1
        keys = ("rule", "channel", "first_index", "last_index", "worst", "limit", "reason")
        score.complaints.append(f"{where} FALSE {[section[key] for key in keys]}")
    verdicts = {
        rule["id"]: rule
        for entry in findings["lines"]
        if entry["line"] == line["line"]
        for rule in entry["rules"]
    }
    gone = {entry["rule"] for entry in line["not_assessed"]}
    for rule in RECKONED:
        if rule not in score.shipped:
            continue
        verdict = verdicts.get(rule, {"verdict": "not assessed", "reason": "no verdict at all"})
        if rule in gone and verdict["verdict"] != "not assessed":
            score.rows[rule].assessed_blindly += 1
            score.complaints.append(f"{where} BLIND {rule}: {verdict['verdict']}")
        if rule not in gone and verdict["verdict"] == "not assessed":
            score.rows[rule].not_assessed += 1
            score.complaints.append(f"{where} NOT ASSESSED {rule}: {verdict['reason']}")


def score(out: Path) -> Score:
    """Audit every folder under ``out`` and compare with its truth."""
    rules, folders = lines_of(out)
    result = Score({rule: Row() for rule in rules})
    for folder, lines in folders.items():
        logs = [folder / line["file"] for line in lines]
        findings = audit(logs, survey=folder / "survey.toml").to_dict()
        result.shipped |= {rule["id"] for rule in findings["rules"]}
        for source in findings["inputs"]:
            if source["error"]:
                result.unusable += 1
                result.complaints.append(f"{source['path']} UNUSABLE {source['error']}")
        for line in lines:
            where = f"{folder.name}/{line['file']} ({line.get('decoy', '')})"
            _score_line(result, where, line, findings)
    return result


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument("out", type=Path)
    parser.add_argument("--verbose", action="store_true")
    chosen = parser.parse_args()
    result = score(chosen.out)
    if chosen.verbose:
        print(*result.complaints, sep="\n")
    heads = ("found", "missed", "false", "ends off", "worst end", "blind", "unassessed")
    print(f"{'rule':22}" + "".join(f"{head:>11}" for head in heads))
    for rule, row in result.rows.items():
        numbers = (
            row.found,
            row.missed,
            row.false,
            row.misplaced,
            row.worst_end,
            row.assessed_blindly,
            row.not_assessed,
        )
        note = "" if rule in result.shipped else "  (not in the sheet: not counted)"
        print(f"{rule:22}" + "".join(f"{number:11d}" for number in numbers) + note)
    print(f"logs that could not be used: {result.unusable}; amiss in all: {result.amiss}")
    return 1 if result.amiss else 0


if __name__ == "__main__":
    sys.exit(main())
