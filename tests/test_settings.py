"""Which settings satisfy a sheet: held against the formulas, each on its own, and against what cannot be."""

from __future__ import annotations

import math
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

from qa.engine.sheets import load_sheet
from qa.model.errors import PingworthyError
from qa.model.survey_file import SurveyFile
from qa.settings import Answer, find_settings, text

C = 1490.0
MULTIBEAM = {
    "kind": "multibeam",
    "frequency": 300e3,
    "pulse_form": "CW",
    "beamwidth_along": 1.0,
    "beamwidth_across": 1.0,
    "transducer_depth": 1.0,
    "sound_speed": C,
}


def _asked(
    stated: dict[str, Any],
    limits: dict[str, Any],
    depths: tuple[float, float] | None,
    sheet: str = "physics",
    **held: float,
) -> Answer:
    survey = SurveyFile(stated=stated, limits=limits)
    return find_settings(survey, load_sheet(sheet, survey), depths, held)


@pytest.fixture(scope="module")
def swath() -> Answer:
    return _asked(MULTIBEAM, {"target_size": "1 m", "hits_required": 3}, (10.0, 25.0))


def _values(answer: Answer) -> dict[str, float]:
    return {span.setting.name: span.suggested for span in answer.spans}


def test_what_is_suggested_satisfies_the_formulas(swath: Answer) -> None:
    assert swath.satisfied
    found = _values(swath)
    half = math.radians(found["fan"] / 2)
    farthest = 24.0 / math.cos(half)
    assert farthest <= 0.98 * found["range_scale"] * (1 + 1e-9)
    # C-13 ch. 4 §2.3.6.3: the interval is no shorter than 2R/c and the pulse
    listening = 2 * found["range_scale"] / C + found["pulse_length"]
    assert 1 / found["ping_rate"] >= listening
    # C-13 §5.1.1.3
    assert C * found["pulse_length"] / 2 <= 1.0
    # C-13 eq. 4.2 at the narrowest footprint, of the beam straight down at the least depth
    spacing = found["speed"] / found["ping_rate"]
    narrowest = 2 * 9.0 * math.tan(math.radians(0.5))
    assert math.floor((1.0 + narrowest) / spacing + 1e-9) >= 3
    # C-13 eqs. 3.35 and 3.33, exact, at the edge of the fan at the greatest depth
    across = math.radians(1.0) / math.cos(half) / 2
    assert 24.0 * (math.tan(half + across) - math.tan(half - across)) <= 1.0


def test_each_span_ends_at_a_rule_or_at_what_a_sonar_can_do(swath: Answer) -> None:
    bounds = {span.setting.name: span for span in swath.spans}
    assert "range-window" in bounds["range_scale"].below
    assert "ping-interval" in bounds["ping_rate"].above
    assert bounds["pulse_length"].above == ("range-resolution",)
    # C-13 §5.1.1.3 by hand: 2·1 m/1490 m/s
    assert bounds["pulse_length"].greatest == pytest.approx(2 / C, rel=0.01)
    for span in swath.spans:
        assert span.least <= span.suggested * (1 + 1e-9)
        assert span.suggested <= span.greatest * (1 + 1e-9)


def test_two_requirements_that_conflict_are_named() -> None:
    # Twelve hits on half a metre at 8 kt need a ping every 5 cm: 80 a second, where the range allows some 50.
    answer = _asked(
        MULTIBEAM,
        {"target_size": "0.5 m", "hits_required": 12, "footprint_limit": "5 m"},
        (10.0, 12.0),
        speed=8 * 1852 / 3600,
    )
    assert not answer.satisfied
    conflict = next(c for c in answer.conflicts if c.rule == "pings-on-target")
    assert "ping-interval" in conflict.against["ping_rate"]
    assert "pings-on-target" in text(answer)


def test_a_footprint_that_no_setting_narrows_says_so() -> None:
    answer = _asked(MULTIBEAM, {"target_size": "0.5 m"}, (60.0, 60.0))
    growth = next(c for c in answer.conflicts if c.rule == "footprint-growth")
    assert growth.against == {}
    assert "another sonar, or other depths" in text(answer)


def test_what_is_held_stays_and_what_is_stated_is_kept_where_it_passes() -> None:
    answer = _asked(
        {**MULTIBEAM, "pulse_length": 60e-6}, {"target_size": "1 m"}, (10.0, 25.0), speed=2.5
    )
    assert _values(answer)["speed"] == 2.5
    assert _values(answer)["pulse_length"] == pytest.approx(60e-6)
    assert next(s for s in answer.spans if s.setting.name == "speed").held


def test_a_side_scan_sweep_has_its_own_settings() -> None:
    answer = _asked(
        {"kind": "side-scan", "frequency": 400e3, "beamwidth_along": 0.3, "sound_speed": C},
        {"target_size": "1 m"},
        None,
        "side-scan-sweep",
    )
    assert answer.satisfied, text(answer)
    found = _values(answer)
    # C-13 ch. 4: height of 10 % of the range, within 2 % of it; no more than 8 kt
    assert 0.08 <= found["altitude"] / found["range_scale"] <= 0.12
    assert found["speed"] <= 8 * 1852 / 3600 * (1 + 1e-9)
    # five pings by eq. 4.1 at 25 m: (L + R·φ)/(V·t) ≥ 4
    width = 25.0 * math.radians(0.3)
    assert (1.0 + width) / (found["speed"] / found["ping_rate"]) >= 4 - 1e-6


@pytest.mark.parametrize(
    ("stated", "depths", "held", "said"),
    [
        ({}, (10.0, 20.0), {}, "kind of sonar is not stated"),
        (MULTIBEAM, None, {}, "depths that the sonar works at"),
        (MULTIBEAM, (20.0, 10.0), {}, "Not a range of depths"),
        (MULTIBEAM, (10.0, 20.0), {"altitude": 5.0}, "not a setting of this sonar"),
    ],
)
def test_what_is_not_stated_is_asked_for(
    stated: dict[str, Any], depths: Any, held: dict[str, float], said: str
) -> None:
    with pytest.raises(PingworthyError, match=said):
        _asked(stated, {}, depths, **held)


def test_the_command(tmp_path: Path) -> None:
    survey = tmp_path / "survey.toml"
    survey.write_text(
        '[sonar]\nkind = "single-beam"\nfrequency = "200 kHz"\nbeamwidth_along = "7 deg"\n'
        'pulse_length = "100 us"\npulse_form = "CW"\n',
        encoding="utf-8",
    )
    command = [sys.executable, "-m", "qa.cli", "settings", "--survey", str(survey)]
    root = Path(__file__).resolve().parent.parent

    def run(*more: str) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [*command, *more], capture_output=True, text=True, encoding="utf-8", cwd=root
        )

    done = run("--depth", "5m..20m", "--hold", "speed=4kt")
    assert done.returncode == 0, done.stderr
    assert "single-beam at 5 m to 20 m" in done.stdout
    assert "4 kt" in done.stdout and "not assessed" in done.stdout.lower()
    wrong = run("--depth", "5 s")
    assert wrong.returncode == 2 and "--depth" in wrong.stderr
    wrong = run("--depth", "5m", "--hold", "sped=4kt")
    assert wrong.returncode == 2 and 'Did you mean "speed"' in wrong.stderr
