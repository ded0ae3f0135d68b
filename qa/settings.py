"""Which settings satisfy a sheet: a made-up line for each trial, judged by the same rules as a log.

What belongs here: the trials and their order. No rule is known by name; a sheet's own rules are met or missed
here as they would be in an audit.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from qa.engine.assumed import assumed_values
from qa.engine.evaluate import evaluate_line
from qa.engine.remedies import rounded
from qa.engine.sheets import RuleSheet, load_sheet
from qa.engine.user_quantities import allowed_python, use_python
from qa.job import cast_of
from qa.model.cast import Cast
from qa.model.errors import PingworthyError, nearest
from qa.model.findings import MET, MISSED, LineResult
from qa.model.log import BeamBatch, ChannelSpan, FileAccount, PingTable
from qa.model.survey_file import SurveyFile, load_survey_file
from qa.model.units import METRE, conversion, measure
from qa.physics import pulse

Floats = NDArray[np.float64]
Trial = Mapping[str, float]

PINGS = 12
"""Pings of each trial: enough for intervals, spans and what is typical."""
BEAMS = 161
GRID = 25
ROUNDS = 4
FINE = 12
"""Halvings of the gap between a value that passes and its neighbour that does not."""
PACE = 0.97
"""Share of the fastest ping rate that a trial pings at where the rate is not held or tried itself."""


@dataclass(frozen=True, slots=True)
class Setting:
    """One thing that can be set: where to look, how to show it, and which end of what passes is preferred."""

    name: str
    unit: str
    least: float
    greatest: float
    prefers: Literal["least", "greatest"]

    def shown(self, value: float, towards: int = 0) -> str:
        """A value in the setting's own unit, to three figures."""
        if not math.isfinite(value):
            return "not known"
        number = float(conversion(self.unit).from_si(value))
        return f"{rounded(number, towards):.6g} {self.unit.replace('us', 'µs')}"


SETTINGS = {
    s.name: s
    for s in (
        Setting("fan", "deg", 10.0, 150.0, "greatest"),
        Setting("range_scale", "m", 1.0, 12000.0, "least"),
        Setting("altitude", "m", 0.1, 1000.0, "greatest"),
        Setting("pulse_length", "us", 5e-6, 0.1, "greatest"),
        Setting("bandwidth", "kHz", 100.0, 1e6, "least"),
        Setting("ping_rate", "Hz", 0.02, 1000.0, "greatest"),
        Setting("speed", "kt", 0.25, 10.0, "greatest"),
    )
}
OF_KIND = {
    "multibeam": ("fan", "range_scale", "pulse_length", "ping_rate", "speed"),
    "single-beam": ("range_scale", "pulse_length", "ping_rate", "speed"),
    "side-scan": ("range_scale", "altitude", "pulse_length", "ping_rate", "speed"),
}


@dataclass(frozen=True, slots=True)
class Span:
    """Values of one setting that satisfy everything while the others stay as suggested, and what bounds them."""

    setting: Setting
    suggested: float
    least: float
    greatest: float
    below: tuple[str, ...]
    above: tuple[str, ...]
    held: bool


@dataclass(frozen=True, slots=True)
class Conflict:
    """A rule that the best trial still misses, and the rules that stand against mending it, by setting."""

    rule: str
    reason: str
    remedy: str
    against: Mapping[str, tuple[str, ...]]


@dataclass(frozen=True, slots=True)
class Answer:
    """What came out: the spans where everything is satisfied, else the conflicts at the best trial."""

    kind: str
    depths: tuple[float, ...]
    sheet: RuleSheet
    spans: tuple[Span, ...]
    conflicts: tuple[Conflict, ...]
    advice: tuple[str, ...]
    not_assessed: Mapping[str, str]
    assumed: Mapping[str, str] = field(default_factory=dict)

    @property
    def satisfied(self) -> bool:
        """Whether some settings satisfy every rule that could be assessed."""
        return not self.conflicts


class _TrialLog:
    """A line of made-up pings, a channel for each trial at each depth. A ``LineLog``."""

    name = "trial"

    def __init__(self, kind: str, trials: Sequence[Trial], depths: Sequence[float], head: float):
        self.kind = kind
        self.cases = [(trial, depth) for trial in trials for depth in depths]
        self.head = head

    @property
    def grain(self) -> Literal["ping", "beam"]:
        return "beam" if self.kind == "multibeam" else "ping"

    @property
    def beam_columns(self) -> frozenset[str]:
        return {
            "multibeam": frozenset(("depth", "beam_angle")),
            "single-beam": frozenset(("depth",)),
            "side-scan": frozenset[str](),
        }[self.kind]

    def _each(self, values: Sequence[float]) -> Floats:
        return np.repeat(np.asarray(values, dtype=float), PINGS)

    def ping_table(self) -> PingTable:
        columns = {
            name: self._each([trial[name] for trial, _ in self.cases])
            for name in ("range_scale", "pulse_length", "bandwidth", "speed", "altitude")
            if name in self.cases[0][0]
        }
        n = PINGS * len(self.cases)
        columns["heading"] = np.zeros(n)
        columns["tide"] = columns["heave"] = np.zeros(n)
        step = self._each([1e9 / trial["ping_rate"] for trial, _ in self.cases])
        time = (np.tile(np.arange(PINGS), len(self.cases)) * step).round().astype(np.int64)
        spans = tuple(
            ChannelSpan(str(i), i * PINGS, (i + 1) * PINGS) for i in range(len(self.cases))
        )
        return PingTable(time, np.tile(np.arange(PINGS), len(self.cases)), True, spans, columns)

    def beam_batches(self, columns: Collection[str], rows: int = 100_000) -> Iterator[BeamBatch]:
        if not self.beam_columns:
            return
        count = BEAMS if self.kind == "multibeam" else 1
        each = max(1, rows // count // PINGS)
        for first in range(0, len(self.cases), each):
            cases = self.cases[first : first + each]
            pings = np.arange(first * PINGS, (first + len(cases)) * PINGS)
            depth = np.repeat([depth - self.head for _, depth in cases], PINGS * count)
            values: dict[str, Floats] = {"depth": depth}
            if count > 1:
                across = np.linspace(-0.5, 0.5, BEAMS)
                fans = np.array([trial["fan"] for trial, _ in cases])
                values["beam_angle"] = np.repeat(
                    fans[:, None, None] * across, PINGS, axis=1
                ).ravel()
            counts = np.full(len(pings), count)
            yield BeamBatch(pings, counts, {name: values[name] for name in columns})

    def accounts(self) -> tuple[FileAccount, ...]:
        return ()


def find_settings(
    survey: SurveyFile,
    sheet: RuleSheet,
    depths: tuple[float, float] | None = None,
    held: Mapping[str, float] | None = None,
    cast: Cast | None = None,
) -> Answer:
    """Look for settings that satisfy every rule of a sheet that they decide.

    Parameters
    ----------
    survey : SurveyFile
        Its [sonar] says the sonar; at least ``kind``.
    sheet : RuleSheet
    depths : tuple of float, optional
        Least and greatest depth below the waterline; not for a side-scan. [m]
    held : mapping of str to float, optional
        Settings that may not be changed, by their name in :data:`SETTINGS`, SI. What the survey file states is
        changed only where that mends something.
    cast : Cast, optional

    Raises
    ------
    PingworthyError
        If the kind of sonar, or the depths that it works at, are not stated.
    """
    return _Search(survey, sheet, depths, dict(held or {}), cast).answer()


class _Search:
    def __init__(
        self,
        survey: SurveyFile,
        sheet: RuleSheet,
        depths: tuple[float, float] | None,
        held: dict[str, float],
        cast: Cast | None,
    ) -> None:
        stated = dict(survey.stated)
        kind = stated.get("kind")
        if not isinstance(kind, str):
            raise PingworthyError(
                "The kind of sonar is not stated.",
                where=str(survey.path or "settings"),
                expected='kind = "multibeam", "single-beam" or "side-scan" under [sonar]',
            )
        self.kind, self.sheet, self.cast = kind, sheet, cast
        self.depths = self._depths(depths)
        modulated = stated.get("pulse_form") == "FM"
        self.names = [
            "bandwidth" if name == "pulse_length" and modulated else name for name in OF_KIND[kind]
        ]
        for name in held:
            if name not in self.names:
                raise PingworthyError(
                    f'"{name}" is not a setting of this sonar.',
                    where="settings held",
                    expected=", ".join(self.names),
                    advice=nearest(name, self.names),
                )
        self.held = held
        self.wished = {name for name in self.names if name in stated and name not in held}
        self.stated = stated
        self.head = self._number(stated, "transducer_depth")
        self.sound_speed = self._number(stated, "sound_speed")
        self.pings_in_water = self._number(stated, "pings_in_water")
        # A trial's own values stand in the log, so what is stated of them may not stand beside it.
        changed = {**stated, "pulse_form": stated.get("pulse_form", "CW")}
        for name in ("range_scale", "speed", "altitude", "ping_rate"):
            changed.pop(name, None)
        self.fixed_pulse = self._number(stated, "pulse_length") if modulated else math.nan
        self.survey = SurveyFile(
            path=survey.path,
            depth_from="transducer",
            stated=changed,
            limits=survey.limits,
            given=frozenset({"survey.depth_from"}),
        )
        self.assumed = {
            name: assumed_values()[name].text
            for name in ("sound_speed", "transducer_depth", "pings_in_water")
            if name not in stated
        }
        if "pulse_form" not in stated:
            self.assumed["pulse_form"] = "CW"

    def _depths(self, depths: tuple[float, float] | None) -> tuple[float, ...]:
        if self.kind == "side-scan":
            return (math.nan,)
        if depths is None:
            raise PingworthyError(
                "The depths that the sonar works at are not stated.",
                where="--depth",
                expected="a depth such as 20m, or a range such as 10m..40m",
            )
        least, greatest = depths
        if not 0 < least <= greatest:
            raise PingworthyError(
                "Not a range of depths.",
                where="--depth",
                found=f"{least:g} m to {greatest:g} m",
                expected="the lesser depth first, both positive",
            )
        if least == greatest:
            return (least,)
        return (least, math.sqrt(least * greatest), greatest)

    def _number(self, stated: Mapping[str, float | str], name: str) -> float:
        value = stated.get(name)
        if value is None and name in assumed_values():
            value = assumed_values()[name].value
        return float(value) if isinstance(value, int | float) else math.nan

    # Trials

    def _first(self) -> dict[str, float]:
        stated = self.stated
        trial: dict[str, float] = {}
        if self.kind == "multibeam":
            trial["fan"] = 120.0
        trial["range_scale"] = self._reach(trial) if self.kind != "side-scan" else 75.0
        if self.kind == "side-scan":
            trial["altitude"] = 0.1 * trial["range_scale"]
        if "bandwidth" in self.names:
            trial["pulse_length"] = self.fixed_pulse
            trial["bandwidth"] = self._number(stated, "bandwidth")
            if math.isnan(trial["bandwidth"]):
                trial["bandwidth"] = 30e3
        else:
            trial["pulse_length"] = self._number(stated, "pulse_length")
            if math.isnan(trial["pulse_length"]):
                trial["pulse_length"] = 100e-6
        trial["speed"] = 2.0
        trial.update({name: self._number(stated, name) for name in self.wished})
        trial.update(self.held)
        return self._paced(trial, "ping_rate" if "ping_rate" in self.wished else "")

    def _reach(self, trial: Trial) -> float:
        """Slant range to the outermost beam at the greatest depth, and a little over."""
        half = math.radians(0.5 * trial.get("fan", 0.0))
        return 1.03 * (self.depths[-1] - self.head) / math.cos(half)

    def _paced(self, trial: dict[str, float], tried: str = "") -> dict[str, float]:
        """The trial with what follows from the setting just tried: its reach, its height, its pace."""
        if tried == "fan" and "range_scale" not in self.held:
            trial["range_scale"] = self._reach(trial)
        if self.kind == "side-scan" and tried == "range_scale" and "altitude" not in self.held:
            trial["altitude"] = 0.1 * trial["range_scale"]
        if tried != "ping_rate" and "ping_rate" not in self.held:
            travel = pulse.two_way_travel_time(trial["range_scale"], self.sound_speed)
            listening = pulse.listening_time(travel, trial["pulse_length"])
            fastest = pulse.fastest_ping_rate(listening, self.pings_in_water)
            trial["ping_rate"] = PACE * float(fastest)
        return trial

    def _judged(
        self, trials: Sequence[Trial], sections: bool = False
    ) -> tuple[LineResult, list[set[str]]]:
        """The trials as one line, and for each the rules that it misses at any depth."""
        log = _TrialLog(self.kind, trials, self.depths, self.head)
        result = evaluate_line(log, self.survey, self.sheet, cast=self.cast, sections=sections)
        missed: list[set[str]] = [set() for _ in trials]
        each = PINGS * len(self.depths)
        for rule in result.finding.rules:
            series = result.rules.get(rule.id)
            if series is None or rule.severity != "out of spec":
                continue
            bad = (series.status == MISSED).reshape(-1, each).sum(axis=1)
            known = bad + (series.status == MET).reshape(-1, each).sum(axis=1)
            allow = self.sheet.rules[rule.id].allow
            for i in np.flatnonzero(bad > allow * known):
                missed[int(i)].add(rule.id)
        return result, missed

    def _scan(self, trial: Trial, name: str, values: Floats) -> list[set[str]]:
        trials = [self._paced({**trial, name: float(value)}, name) for value in values]
        return self._judged(trials)[1]

    def _grid(self, name: str, trial: Trial) -> Floats:
        setting = SETTINGS[name]
        least, greatest = setting.least, setting.greatest
        if name == "range_scale" and self.kind != "side-scan":
            least, greatest = self._reach(trial) / 4.0, 4.0 * self._reach(trial)
        if name == "ping_rate":
            greatest = min(greatest, 4.0 * trial["ping_rate"])
            least = max(least, trial["ping_rate"] / 50.0)
        if name == "fan":
            return np.linspace(least, greatest, GRID)
        return np.geomspace(least, greatest, GRID)

    def answer(self) -> Answer:
        trial = self._first()
        _, (missed,) = self._judged([trial])
        for _ in range(ROUNDS):
            before = dict(trial)
            for name in self.names:
                if name not in self.held:
                    trial, missed = self._improved(trial, name, missed)
            if all(math.isclose(trial[n], before[n], rel_tol=1e-3) for n in self.names):
                break
        trial = self._in_round_figures(trial, missed)
        result, (missed,) = self._judged([trial], sections=True)
        not_assessed = {
            rule.id: rule.reason
            for rule in result.finding.rules
            if rule.verdict == "not assessed" and "not stated" in rule.reason
        }
        advisories = {
            s.rule: s.reason for s in reversed(result.sections) if s.severity == "advisory"
        }
        advice = tuple(f"{rule}: {reason}" for rule, reason in sorted(advisories.items()))
        spans = tuple(self._span(trial, name) for name in self.names) if not missed else ()
        conflicts = tuple(self._conflict(trial, rule, missed, result) for rule in sorted(missed))
        return Answer(
            self.kind,
            () if self.kind == "side-scan" else (self.depths[0], self.depths[-1]),
            self.sheet,
            spans,
            conflicts,
            advice,
            not_assessed,
            self.assumed,
        )

    def _improved(
        self, trial: dict[str, float], name: str, missed: set[str]
    ) -> tuple[dict[str, float], set[str]]:
        """The trial with the best value of one setting: fewest rules missed, then the preferred end of those."""
        values = np.unique(np.append(self._grid(name, trial), trial[name]))
        found = self._scan(trial, name, values)
        fewest = min(len(m) for m in found)
        if fewest > len(missed):
            return trial, missed
        if name in self.wished and fewest == len(missed):
            return trial, missed
        good = [i for i, m in enumerate(found) if len(m) == fewest]
        # An echo sounder reaches the seabed and no farther; a side-scan covers what it can.
        first = SETTINGS[name].prefers == "least" and (
            name != "range_scale" or self.kind != "side-scan"
        )
        best = good[0] if first else good[-1]
        if fewest:
            # While something is still missed, its own setting may mend it later: the nearest value leaves it most room.
            best = min(good, key=lambda i: abs(math.log(values[i] / trial[name])))
            first = bool(values[best] >= trial[name])
        beside = best - 1 if first else best + 1
        value = float(values[best])
        if 0 <= beside < len(values) and fewest < len(found[beside]):
            value = self._edge(trial, name, value, float(values[beside]), fewest)
        chosen = self._paced({**trial, name: value}, name)
        _, (now,) = self._judged([chosen])
        return (chosen, now) if len(now) <= fewest else (trial, missed)

    def _edge(self, trial: Trial, name: str, inside: float, outside: float, fewest: int) -> float:
        """The last value on the way from one that passes to one that does not, as finely as is worth while."""
        for _ in range(2):
            steps = np.geomspace(inside, outside, FINE)
            found = self._scan(trial, name, steps)
            last = 0
            while last + 1 < FINE and len(found[last + 1]) <= fewest:
                last += 1
            inside, outside = float(steps[last]), float(steps[min(last + 1, FINE - 1)])
        return inside

    def _in_round_figures(self, trial: dict[str, float], missed: set[str]) -> dict[str, float]:
        """The trial to three figures, each setting rounded to the side that still passes."""
        for name in self.names:
            if name in self.held:
                continue
            unit = conversion(SETTINGS[name].unit)
            number = float(unit.from_si(trial[name]))
            for towards in (0, -1, 1):
                value = float(unit.to_si(rounded(number, towards)))
                tidy = {**trial, name: value}
                if len(self._judged([tidy])[1][0]) <= len(missed):
                    trial = tidy
                    break
        return trial

    def _span(self, trial: Trial, name: str) -> Span:
        setting, value = SETTINGS[name], trial[name]
        if name in self.held:
            return Span(setting, value, value, value, (), (), True)
        fixed = {**trial}
        ends: list[float] = []
        bounds: list[tuple[str, ...]] = []
        for limit in (setting.least, setting.greatest):
            steps = np.geomspace(value, limit, 2 * GRID)
            found = self._judged([{**fixed, name: float(v)} for v in steps])[1]
            bad = next((i for i, m in enumerate(found) if m), None)
            if bad is None:
                ends.append(limit)
                bounds.append(())
                continue
            inside, outside, why = float(steps[max(bad - 1, 0)]), float(steps[bad]), found[bad]
            fine = np.geomspace(inside, outside, 4 * FINE)
            closer = self._judged([{**fixed, name: float(v)} for v in fine])[1]
            turn = next((i for i, m in enumerate(closer) if m), len(fine) - 1)
            ends.append(float(fine[max(turn - 1, 0)]))
            bounds.append(tuple(sorted(closer[turn] or why)))
        return Span(setting, value, ends[0], ends[1], bounds[0], bounds[1], False)

    def _conflict(self, trial: Trial, rule: str, missed: set[str], result: LineResult) -> Conflict:
        section = next(s for s in result.sections if s.rule == rule)
        against: dict[str, tuple[str, ...]] = {}
        for name in self.names:
            if name in self.held:
                continue
            found = self._scan(trial, name, self._grid(name, trial))
            mended = [m for m in found if rule not in m]
            if mended:
                least = min(mended, key=len)
                against[name] = tuple(sorted(least - (missed - {rule})))
        return Conflict(rule, section.reason, section.remedy, against)


def text(answer: Answer) -> str:
    """The answer for a terminal."""
    where = ""
    if answer.depths:
        where = " at " + " to ".join(f"{depth:g} m" for depth in dict.fromkeys(answer.depths))
    lines = [f"{answer.kind}{where}, sheet {answer.sheet.name} ({answer.sheet.title})", ""]
    if answer.satisfied:
        lines += ["Every rule that settings decide is satisfied by:", ""]
        rows = [("setting", "suggested", "from", "to", "bounded below by", "above by")]
        for span in answer.spans:
            show = span.setting.shown
            ends = ("held", "held") if span.held else (show(span.least, 1), show(span.greatest, -1))
            rows.append(
                (
                    span.setting.name,
                    show(span.suggested),
                    *ends,
                    ", ".join(span.below) or "–",
                    ", ".join(span.above) or "–",
                )
            )
        widths = [max(len(row[i]) for row in rows) for i in range(5)]
        lines += ["  " + _row(row, widths) for row in rows]
        lines += ["", "From and to hold while the other settings stay as suggested."]
    else:
        lines += ["No settings satisfy everything. At the best found:", ""]
        for conflict in answer.conflicts:
            lines.append(f"  {conflict.rule}: {conflict.reason}")
            lines.append(f"      {conflict.remedy}")
            if not conflict.against:
                lines.append(
                    "      No value of any setting mends it: another sonar, or other depths."
                )
            for name, others in conflict.against.items():
                if others:
                    lines.append(
                        f"      {name} could mend it, but then misses {', '.join(others)}."
                    )
                else:
                    lines.append(f"      {name} alone mends it where the rest stays missed.")
    for title, texts in (
        ("Advice", answer.advice),
        ("Not assessed", [f"{rule}: {why}" for rule, why in answer.not_assessed.items()]),
        ("Assumed", [f"{name} = {value}" for name, value in answer.assumed.items()]),
    ):
        if texts:
            lines += ["", title, *(f"  {t}" for t in texts)]
    lines += [
        "",
        "Reckoned over a flat seabed, level and steady. Longer pulses put more sound into the water: mind divers and",
        "marine life, and the permits for the area. Acceptance is for the surveyor in charge and the authority.",
    ]
    return "\n".join(lines)


def _row(cells: Sequence[str], widths: Sequence[int]) -> str:
    return "  ".join(
        [*(cell.ljust(width) for cell, width in zip(cells, widths, strict=False)), cells[-1]]
    ).rstrip()


def asked_for(
    survey: Path | None,
    sheet: str | None,
    depth: str | None,
    held: Mapping[str, str],
    limits: Mapping[str, str],
    allow_python: bool = False,
) -> Answer:
    """The answer to what a person asks: files by path, values as texts with units.

    Parameters
    ----------
    survey : Path or None
        Survey file.
    sheet : str or None
        Name or path; the survey file's if left out, else "physics".
    depth : str or None
        One depth or two with ".." between, as in "10m..40m".
    held, limits : mapping of str to str
        Settings that stay, and limits that override.
    allow_python : bool
        Whether the Python file that the survey file names, if any, may be run.

    Raises
    ------
    PingworthyError
        If a file, a name or a value cannot be used.
    """
    facts = load_survey_file(survey) if survey else SurveyFile()
    use_python(allowed_python(facts, allow_python))
    base = None if sheet else facts.folder
    loaded = load_sheet(sheet or facts.sheet or "physics", facts, limits, base)
    depths = None
    if depth is not None:
        least, _, greatest = depth.partition("..")
        first = measure(least, METRE, "--depth")[0]
        depths = (first, measure(greatest, METRE, "--depth")[0] if greatest else first)
    return find_settings(facts, loaded, depths, held_settings(held), cast_of(facts))


def held_settings(texts: Mapping[str, str]) -> dict[str, float]:
    """Settings by name from texts with units, such as ``{"speed": "4 kt"}``."""
    found = {}
    for name, value in texts.items():
        if name not in SETTINGS:
            raise PingworthyError(
                f'There is no setting "{name}".',
                where="--hold",
                expected=", ".join(SETTINGS),
                advice=nearest(name, SETTINGS),
            )
        unit = conversion(SETTINGS[name].unit).unit
        found[name] = measure(value, unit, f"--hold {name}")[0]
    return found
