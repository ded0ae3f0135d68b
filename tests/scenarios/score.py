"""Audits a folder of simulated lines and counts what was found, missed, false and misplaced.

    python tests/scenarios/score.py OUT [--verbose]

OUT is what generate.py wrote, or sample_logs/. The table has a row a rule: faults found, faults
missed, sections that are no fault, the worst error of a section's ends in pings, and, of the rules
that a line cannot show, those that do not read "not assessed". Exit status 1 if anything is amiss.
"""

from __future__ import annotations

import argparse
import json
import sys
from collections import Counter
from pathlib import Path
from typing import Any

from qa.audit import audit


def lines_of(out: Path) -> tuple[list[str], dict[Path, list[dict[str, Any]]]]:
    """The rules that the truth covers, and its lines by the folder of their survey file."""
    truth = json.loads((out / "truth.json").read_text(encoding="utf-8"))
    folders: dict[Path, list[dict[str, Any]]] = {}
    for line in truth["lines"]:
        if "batch" in line:
            folders.setdefault(out / line["batch"], []).append(line)
        else:
            line["faults"] = [f for f in truth["faults"] if f["line"] == line["line"]]
            line["not_assessed"] = []
            folders.setdefault(out, []).append(line)
    return truth["rules"], folders


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument("out", type=Path)
    parser.add_argument("--verbose", action="store_true")
    chosen = parser.parse_args()
    rules, folders = lines_of(chosen.out)
    found: Counter[str] = Counter()
    missed: Counter[str] = Counter()
    false: Counter[str] = Counter()
    silent: Counter[str] = Counter()
    edge: dict[str, int] = dict.fromkeys(rules, 0)
    misplaced: Counter[str] = Counter()
    unreadable = 0

    def say(*words: object) -> None:
        if chosen.verbose:
            print(*words)

    shipped: set[str] = set()
    for folder, lines in folders.items():
        logs = [folder / line["file"] for line in lines]
        findings = json.loads(
            json.dumps(audit(logs, survey=folder / "survey.toml").to_dict(), default=str)
        )
        shipped |= {rule["id"] for rule in findings["rules"]}
        for source in findings["inputs"]:
            if source["error"]:
                unreadable += 1
                say(folder.name, source["path"], "ERROR", source["error"])
        for line in lines:
            here = [s for s in findings["sections"] if s["line"] == line["line"]]
            free = list(range(len(here)))
            for fault in line["faults"]:
                rule = fault["rule"]
                match = [
                    j
                    for j in free
                    if here[j]["rule"] == rule
                    and (here[j]["channel"] or None) == fault["channel"]
                    and here[j]["first_index"] <= fault["last_index"]
                    and here[j]["last_index"] >= fault["first_index"]
                ]
                if not match:
                    missed[rule] += 1
                    say(folder.name, line["file"], line.get("decoy", ""), "MISSED", fault)
                    continue
                section = here[match[0]]
                free.remove(match[0])
                found[rule] += 1
                off = max(
                    abs(section[end] - fault[end])
                    for end in ("first_index", "last_index", "first_ping", "last_ping")
                )
                edge[rule] = max(edge.get(rule, 0), off)
                if off > 1:
                    misplaced[rule] += 1
                    say(
                        folder.name,
                        line["file"],
                        "ENDS",
                        off,
                        fault,
                        section["first_index"],
                        section["last_index"],
                    )
            for j in free:
                section = here[j]
                if section["rule"] in rules:
                    false[section["rule"]] += 1
                    say(
                        folder.name,
                        line["file"],
                        line.get("decoy", ""),
                        "FALSE",
                        section["rule"],
                        section["channel"],
                        section["first_index"],
                        section["last_index"],
                        section["worst"],
                        section["limit"],
                    )
            verdicts = {
                rule["id"]: rule["verdict"]
                for entry in findings["lines"]
                if entry["line"] == line["line"]
                for rule in entry["rules"]
            }
            for gone in {entry["rule"] for entry in line["not_assessed"]}:
                if verdicts.get(gone, "not assessed") != "not assessed":
                    silent[gone] += 1
                    say(
                        folder.name,
                        line["file"],
                        line.get("decoy", ""),
                        "VERDICT",
                        gone,
                        verdicts[gone],
                    )
    print(
        f"{'rule':24} {'found':>6} {'missed':>6} {'false':>6} {'ends off':>8} {'worst end':>9} {'assessed':>9}"
    )
    for rule in rules:
        note = "" if rule in shipped else "  (no such rule in the sheet)"
        print(
            f"{rule:24} {found[rule]:6d} {missed[rule]:6d} {false[rule]:6d} {misplaced[rule]:8d} "
            f"{edge.get(rule, 0):9d} {silent[rule]:9d}{note}"
        )
    print(f"logs that could not be used: {unreadable}")
    scored = [rule for rule in rules if rule in shipped]
    amiss = sum(missed[r] + false[r] + misplaced[r] + silent[r] for r in scored) + unreadable
    return 1 if amiss else 0


if __name__ == "__main__":
    sys.exit(main())
