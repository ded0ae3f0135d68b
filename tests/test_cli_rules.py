"""The commands that show and check rules: rules, explain, check."""

from __future__ import annotations

import random
import re
from pathlib import Path

import pytest
from typer.testing import CliRunner, Result

from qa.checking import check_file
from qa.cli import app
from qa.engine.sheets import load_sheet, shipped_sheets
from qa.model.errors import PingworthyError
from qa.model.shipped import shipped

ROOT = Path(__file__).resolve().parent.parent


def pingworthy(*arguments: str | Path) -> Result:
    return CliRunner().invoke(app, [str(a) for a in arguments], env={"COLUMNS": "100"})


def written(folder: Path, text: str, name: str = "own.toml") -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


def test_rules_lists_the_rules_of_a_sheet() -> None:
    done = pingworthy("rules")
    assert done.exit_code == 0
    for rule in load_sheet("physics").rules:
        assert f"{rule}: " in done.stdout


def test_rules_takes_the_sheet_and_limits_of_the_survey_file(tmp_path: Path) -> None:
    written(tmp_path, 'title = "Our harbour"\nextends = ["physics"]\n', "harbour.toml")
    survey = written(
        tmp_path,
        '[survey]\nsheet = "harbour.toml"\n[limits]\ntarget_size = "2 m"\n',
        "survey.toml",
    )
    done = pingworthy("rules", "--survey", survey)
    assert "Our harbour (sheet harbour)" in done.stdout
    assert "target_size: 2 m (from survey file survey.toml)" in done.stdout
    assert "target_size: 3 m (from --set)" in pingworthy("rules", "--set", "target_size=3m").stdout


def test_explain_works_a_limit_out_for_a_depth() -> None:
    done = pingworthy("explain", "sounding-distance", "--depth", "120ft")
    assert done.exit_code == 0
    assert "= 109.7 m at reduced_depth 36.58 m" in done.stdout


def test_explain_takes_any_quantity_or_limit_as_a_setting() -> None:
    done = pingworthy("explain", "range-resolution", "target_size=0.05m", "pulse_length=100us")
    assert "0.075 m against 0.05 m: missed." in done.stdout


def test_explain_takes_the_part_of_the_survey_file_that_a_log_is_of() -> None:
    sample = ROOT / "sample_logs"
    done = pingworthy(
        "explain",
        *("range_resolution", "--survey", sample / "survey.toml"),
        *("--log", sample / "multibeam" / "VH101_approach.parquet"),
    )
    assert "0.0447 m" in done.stdout  # 1490 m/s × 60 µs / 2


def test_explain_reckons_with_the_surveys_cast(tmp_path: Path) -> None:
    written(tmp_path, "depth (m),sound speed (m/s)\n0,1500\n10,1500\n40,1500\n", "cast.csv")
    survey = written(
        tmp_path, '[sonar]\nkind = "multibeam"\n[water]\nprofile = "cast.csv"\n', "survey.toml"
    )
    assert pingworthy("check", survey).exit_code == 0
    done = pingworthy("explain", "mean_sound_speed", "--survey", survey, "--depth", "30m")
    assert "With these values\n  1500 m/s\n" in done.stdout
    assert "sound_speed                 1500 m/s, assumed" not in done.stdout


def test_explain_refuses_an_unknown_name_with_the_nearest() -> None:
    done = pingworthy("explain", "range-resolushun")
    assert isinstance(done.exception, PingworthyError)
    assert 'Did you mean "range-resolution"?' in str(done.exception)


def test_explain_refuses_a_depth_that_is_none() -> None:
    done = pingworthy("explain", "sounding-distance", "--depth", "37s")
    assert isinstance(done.exception, PingworthyError)
    assert "--depth" in str(done.exception)


# check


@pytest.mark.parametrize("name", shipped_sheets())
def test_every_shipped_sheet_is_valid(name: str) -> None:
    done = pingworthy("check", name)
    assert done.exit_code == 0
    assert "a valid rule sheet" in done.stdout


def test_the_shipped_survey_file_is_valid() -> None:
    done = pingworthy("check", ROOT / "sample_logs" / "survey.toml")
    assert done.exit_code == 0
    assert "a valid survey file" in done.stdout


WRONG_SHEET = """
titel   = "Ours"
extends = ["physics"]
drop    = ["ping-pase"]
[limits]
a           = "3 flurbs"
b           = { value = "2*a", unit = "m" }
target_size = "3 s"
[rule.one]
require = "range_resolushun <= a"
when    = "kind == 'multbeam'"
allow   = "200 %"
[rule.two]
require = "depth <= 3*s"
remedy  = "x {depth:s}"
foo     = 3
[rule.three]
title = "t"
[rule.four]
require = "ping_span >= 1*s"
"""


def test_a_sheet_is_told_every_mistake_once() -> None:
    found = check_file_text(WRONG_SHEET)
    assert found == [
        "titel",
        "drop",
        "rule.two: foo",
        "limits.target_size",
        "limits.a",
        "rule.one: when",
        "rule.one: allow",
        "rule.two: require",
        "rule.two: remedy",
        "rule.three",
    ]


WRONG_SURVEY = """
[survey]
nam        = "x"
depth_from = "water"
[sonar]
frequency = "3 m"
kind      = "multi"
[water]
profile = "nope.csv"
[limits]
target_sise   = "3 m"
hits_required = "3 m"
[columns]
foo = "x"
[columns.units]
depth = "fathmo"
[[part]]
logs      = ["a.csv"]
time_zone = "Mars"
[[part]]
logs = ["b.csv"]
[part.limits]
target_size = "2 s"
"""


def test_a_survey_file_is_told_every_mistake_once() -> None:
    assert check_file_text(WRONG_SURVEY) == [
        "survey.nam",
        "depth_from",
        "sonar.frequency",
        "sonar.kind",
        "columns.foo",
        "columns.units.depth",
        "part 1.time_zone",
        "limits.target_sise",
        "limits.hits_required",
        "part 2.limits.target_size",
        "water.profile",
    ]


def test_limits_are_not_judged_by_a_sheet_that_cannot_be_used() -> None:
    assert check_file_text('[survey]\nsheet = "s45"\n[limits]\nour_own = "3 m"\n') == [
        "survey.sheet"
    ]


def check_file_text(text: str) -> list[str]:
    """The places of a text's mistakes, in order."""
    import tempfile

    with tempfile.TemporaryDirectory() as folder:
        path = written(Path(folder), text)
        found = check_file(path)
        assert str(found).startswith(str(path))
        return [m.where.removeprefix(f"{path}: ") for m in found.mistakes]


@pytest.mark.parametrize(
    "text",
    ["", "a = 1\n", "not toml", "rule = 3\n", "[rule]\nr = 3\n", "part = 3\n", "limits = 1\n"],
)
def test_what_is_no_sheet_and_no_survey_file_is_refused_with_a_message(
    tmp_path: Path, text: str
) -> None:
    done = pingworthy("check", written(tmp_path, text))
    assert done.exit_code == 2
    assert "mistake" in done.stderr


def test_one_bad_file_among_good_ones_is_status_two_and_all_are_told(tmp_path: Path) -> None:
    bad = written(tmp_path, "titel = 'x'\ntitle = 'y'\n")
    done = pingworthy("check", "physics", bad, tmp_path / "none.toml")
    assert done.exit_code == 2
    assert "physics.toml: a valid rule sheet" in done.stdout
    assert "titel" in done.stderr
    assert "none.toml" in done.stderr


def test_a_mistake_in_an_extended_sheet_is_told_with_that_file(tmp_path: Path) -> None:
    written(tmp_path, "[rule.r]\nrequire = 'depht <= 3*m'\n", "base.toml")
    found = check_file(written(tmp_path, "extends = ['base.toml']\n"))
    assert [Path(m.where.partition(": ")[0]).name for m in found.mistakes] == ["base.toml"]


def test_a_valid_sheet_says_what_it_holds(tmp_path: Path) -> None:
    path = written(
        tmp_path,
        "extends = ['physics']\n[rule.ping-gap]\nallow = '1 %'\n[rule.own]\nrequire = 'depth <= 9*m'\n",
    )
    text = str(check_file(path))
    assert "1 of them its own and 1 changed; it extends physics" in text


def test_check_tells_where_the_schemas_for_editors_lie() -> None:
    done = pingworthy("check", "--schemas")
    assert done.exit_code == 0
    paths = [Path(line) for line in done.stdout.split("\n") if line]
    assert [p.name for p in paths] == ["sheet.schema.json", "survey.schema.json"]
    assert all(p.is_file() for p in paths)


def test_check_of_no_file_is_refused() -> None:
    assert isinstance(pingworthy("check").exception, PingworthyError)


ODD_VALUES = (
    *('""', "3", "true", "[]", "{}", '"x"', "[1, 2]", '"3 m"', '"1e400 m"', "{ a = 1 }", "-1"),
    *("1979-05-27", '[["a"]]', "nan", '"("', '"{"', '"{depth:s}"', '"depth"', '"1 / 0"'),
)
ODD_LINES = ("foo = 1", "[rule]", "[limits]", "[rule.x]", "[[part]]", "limits = 3", "part = [3]")


@pytest.mark.parametrize("seed", range(8))
def test_whatever_stands_in_a_file_is_valid_or_told(tmp_path: Path, seed: int) -> None:
    rng = random.Random(seed)
    sources = [*shipped("rules").glob("*.toml"), ROOT / "sample_logs" / "survey.toml"]
    texts = [p.read_text(encoding="utf-8") for p in sorted(sources)] + [WRONG_SHEET, WRONG_SURVEY]
    told = 0
    for _ in range(12):
        lines = rng.choice(texts).splitlines()
        for _ in range(rng.randint(1, 4)):
            at = rng.randrange(len(lines))
            stated = re.match(r"(\s*[\w.-]+\s*=\s*)", lines[at])
            if stated and rng.random() < 0.7:
                lines[at] = stated[1] + rng.choice(ODD_VALUES)
            elif rng.random() < 0.5:
                lines[at] = lines[at].replace("e", "ee", 1)
            else:
                lines.insert(at, rng.choice(ODD_LINES))
        found = check_file(written(tmp_path, "\n".join(lines)))
        assert ("a valid" in str(found)) == (not found.mistakes)
        assert all(m.message for m in found.mistakes)
        told += bool(found.mistakes)
    assert told
