"""Rule sheets: what they say is what is done, later wins, and every mistake is refused with one clear message."""

from __future__ import annotations

from pathlib import Path

import pytest

from qa.engine.sheets import load_sheet, shipped_sheets
from qa.model.errors import SheetError
from qa.model.survey_file import SurveyFile

RULE = '[rule.r]\nrequire = "range_resolution <= target_size"\n'
LIMIT = '[limits]\ntarget_size = "1 m"\n'


def sheet(tmp_path: Path, text: str, name: str = "own.toml") -> Path:
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    return path


@pytest.mark.parametrize("name", shipped_sheets())
def test_every_shipped_sheet_loads_and_says_where_its_rules_come_from(name: str) -> None:
    loaded = load_sheet(name)
    assert loaded.rules
    for rule in loaded.rules.values():
        assert rule.title, rule.id
        assert rule.source or rule.clause, rule.id
        assert rule.why, rule.id


def test_a_sheet_lays_its_keys_over_those_it_extends(tmp_path: Path) -> None:
    path = sheet(
        tmp_path,
        """
title = "Ours"
extends = ["physics"]
drop = ["ping-gap"]
[limits]
target_size = "0.5 m"
[rule.range-resolution]
allow = "5 %"
""",
    )
    loaded, base = load_sheet(path), load_sheet("physics")
    assert "ping-gap" not in loaded.rules
    rule = loaded.rules["range-resolution"]
    assert (rule.allow, rule.text) == (0.05, base.rules["range-resolution"].text)
    assert (rule.sheet, rule.changed_by) == ("physics", ("own",))
    assert (loaded.limits["target_size"].text, loaded.limits["target_size"].origin) == (
        "0.5 m",
        "own",
    )
    assert loaded.limits["target_size"].about == base.limits["target_size"].about
    assert loaded.extends == ("physics",)
    assert loaded.sha256 != base.sha256


def test_of_several_sheets_the_later_wins(tmp_path: Path) -> None:
    sheet(
        tmp_path,
        '[limits]\na = "1 m"\nb = "1 m"\n' + LIMIT.replace("[limits]\n", "") + RULE,
        "one.toml",
    )
    sheet(tmp_path, '[limits]\na = "2 m"\n', "two.toml")
    loaded = load_sheet(sheet(tmp_path, 'extends = ["one.toml", "two.toml"]\n'))
    assert {n: (limit.text, limit.origin) for n, limit in loaded.limits.items()} == {
        "a": ("2 m", "two"),
        "b": ("1 m", "one"),
        "target_size": ("1 m", "one"),
    }


def test_survey_file_and_command_override_limits_in_turn(tmp_path: Path) -> None:
    survey = SurveyFile(limits={"target_size": "2 m", "hits_required": 4})
    loaded = load_sheet("physics", survey, {"target_size": "0.5 m"})
    assert (loaded.limits["target_size"].text, loaded.limits["target_size"].origin) == (
        "0.5 m",
        "--set",
    )
    assert (loaded.limits["hits_required"].text, loaded.limits["hits_required"].origin) == (
        "4",
        "survey file",
    )


def test_possible_hits_are_counted_where_a_sheet_says_so(tmp_path: Path) -> None:
    path = sheet(tmp_path, 'extends = ["physics"]\n[rule.pings-on-target]\ncount = "possible"\n')
    assert load_sheet(path).rules["pings-on-target"].text == "possible_hits >= hits_required"


MISTAKES = {
    "no toml": "[rule.r\n",
    "unknown top key": "titel = 'x'\n",
    "unknown rule key": LIMIT + RULE + "requires = 'x'\n",
    "unknown limit key": "[limits]\na = { value = '1 m', untis = 'm' }\n",
    "extends unknown": "extends = ['physiks']\n",
    "extends itself": "extends = ['own.toml']\n",
    "extends a number": "extends = 3\n",
    "drop unknown": "extends = ['physics']\ndrop = ['ping-pase']\n",
    "title a number": "title = 3\n",
    "rule no table": "[rule]\nr = 3\n",
    "limits no table": "limits = 3\n",
    "no require": "[rule.r]\ntitle = 'x'\n",
    "empty require": "[rule.r]\nrequire = ''\n",
    "require a number": "[rule.r]\nrequire = 3\n",
    "require no comparison": "[rule.r]\nrequire = 'depth'\n",
    "require names nothing": "[rule.r]\nrequire = '1 <= 2'\n",
    "wrong units": "[rule.r]\nrequire = 'ping_interval <= footprint_along'\n",
    "wrong unit sum": "[rule.r]\nrequire = 'depth + ping_interval <= depth'\n",
    "unknown name": "[rule.r]\nrequire = 'range_resolushun <= 1*m'\n",
    "unknown function": "[rule.r]\nrequire = 'median(depth) <= 1*m'\n",
    "syntax": "[rule.r]\nrequire = 'depth <= <= 3'\n",
    "import": "[rule.r]\nrequire = \"__import__('os').system('true') == 0\"\n",
    "attribute": "[rule.r]\nrequire = 'depth.real <= 1*m'\n",
    "subscript": "[rule.r]\nrequire = 'depth[0] <= 1*m'\n",
    "lambda": "[rule.r]\nrequire = '(lambda: depth)() <= 1*m'\n",
    "walrus": "[rule.r]\nrequire = '(x := depth) <= 1*m'\n",
    "comprehension": "[rule.r]\nrequire = 'max([d for d in depth]) <= 1*m'\n",
    "f-string": '[rule.r]\nrequire = \'f"{depth}" == "1"\'\n',
    "keyword argument": "[rule.r]\nrequire = 'abs(x=depth) <= 1*m'\n",
    "huge exponent": "[rule.r]\nrequire = 'depth**99 <= 1*m**99'\n",
    "exponent no constant": "[rule.r]\nrequire = '2**count(accepted) <= 3'\n",
    "huge number": "[rule.r]\nrequire = 'depth <= " + "9" * 400 + "*m'\n",
    "too long": "[rule.r]\nrequire = '" + "depth + " * 200 + "depth <= 1*m'\n",
    "too deep": "[rule.r]\nrequire = '"
    + "(" * 60
    + "depth"
    + ")" * 60
    + " <= -"
    + "-" * 60
    + "1*m'\n",
    "complex": "[rule.r]\nrequire = 'depth <= 3j'\n",
    "bytes": "[rule.r]\nrequire = 'kind == b\"x\"'\n",
    "text never that": "[rule.r]\nrequire = 'depth <= 1*m'\nwhen = \"kind == 'sidescan'\"\n",
    "text less than": "[rule.r]\nrequire = 'kind <= \"side-scan\"'\n",
    "division by zero": "[rule.r]\nrequire = 'depth / 0 <= 1*m'\n",
    "in": "[rule.r]\nrequire = 'depth in (1, 2)'\n",
    "reducer in reducer": "[rule.r]\nrequire = 'greatest(least(depth)) <= 1*m'\n",
    "angle of metres": "[rule.r]\nrequire = 'nearest_angle(depth, 1*m) <= 1*m'\n",
    "sine of metres": "[rule.r]\nrequire = 'sin(depth) <= 1'\n",
    "allow over all": LIMIT + RULE + "allow = '100 %'\n",
    "allow in metres": LIMIT + RULE + "allow = '1 m'\n",
    "severity": LIMIT + RULE + "severity = 'fatal'\n",
    "join pings": LIMIT + RULE + "join_pings = -1\n",
    "keep pings": LIMIT + RULE + "keep_pings = true\n",
    "count": LIMIT + RULE + "count = 'likely'\n",
    "when a number": LIMIT + RULE + "when = 'depth'\n",
    "remedy field": LIMIT + RULE + "remedy = 'Use {longest_puls:us}'\n",
    "remedy unit": LIMIT + RULE + "remedy = 'Use {longest_pulse:m}'\n",
    "remedy brace": LIMIT + RULE + "remedy = 'Use {longest_pulse'\n",
    "remedy kind": LIMIT + RULE + "[rule.r.remedy]\nsonar = 'x'\n",
    "limit cycle": "[limits]\na = 'b'\nb = 'a'\n",
    "limit self": "[limits]\na = '2 * a'\n",
    "limit unit": "[limits]\na = { value = '1 m', unit = 's' }\n",
    "limit no unit": "[limits]\na = { about = 'x' }\n",
    "limit a list": "[limits]\na = [1]\n",
    "limit true": "[limits]\na = true\n",
    "limit nan": "[limits]\na = nan\n",
    "limit named like a quantity": "[limits]\ndepth = '1 m'\n",
    "limit named like a unit": "[limits]\nkt = '1 m'\n",
    "limit name": "[limits]\n'a b' = '1 m'\n",
}


@pytest.mark.parametrize("case", MISTAKES)
def test_a_mistake_is_refused_with_one_clear_message(case: str, tmp_path: Path) -> None:
    with pytest.raises(SheetError) as caught:
        load_sheet(sheet(tmp_path, MISTAKES[case]))
    message = str(caught.value)
    assert "own.toml" in message
    assert "\n" not in message.strip()
    assert len(message) < 1500


def test_there_are_at_least_forty_mistakes() -> None:
    assert len(MISTAKES) >= 40


def test_a_wrong_name_is_answered_with_the_nearest(tmp_path: Path) -> None:
    with pytest.raises(SheetError, match='Did you mean "range_resolution"'):
        load_sheet(sheet(tmp_path, MISTAKES["unknown name"]))
    with pytest.raises(SheetError, match=r"ping_interval is in s, footprint_along in m"):
        load_sheet(sheet(tmp_path, MISTAKES["wrong units"]))
