"""What is told of a rule, limit or quantity: all of it, from the sheet, the registry and the docstrings, and true."""

from __future__ import annotations

import math
import re
from pathlib import Path

import pytest

from qa.engine import quantities
from qa.engine.explain import about_quantity, explain, limits_of
from qa.engine.one_ping import OnePing, given_value
from qa.engine.page import Page
from qa.engine.rule_list import list_rules
from qa.engine.sheets import RuleSheet, load_sheet, shipped_sheets
from qa.model.errors import PingworthyError
from qa.model.survey_file import SurveyFile


def told(name: str, sheet: RuleSheet | None = None, width: int = 100, **given: float | str) -> str:
    sheet = sheet or load_sheet("physics")
    return explain(name, sheet, OnePing(sheet, given), width)


def joined(text: str) -> str:
    return " ".join(text.split())


@pytest.mark.parametrize("sheet", shipped_sheets())
def test_every_rule_says_what_it_checks_why_it_matters_what_to_do_and_its_source(
    sheet: str,
) -> None:
    loaded = load_sheet(sheet)
    for rule in loaded.rules.values():
        text = told(rule.id, loaded)
        flat = joined(text)
        assert joined(rule.why) in flat, rule.id
        assert joined(rule.source) in flat, rule.id
        if rule.not_from_pings:
            assert joined(rule.not_from_pings) in flat, rule.id
            assert "What to do Show it by other records" in flat, rule.id
            continue
        assert joined(rule.text) in flat or all(c in flat for c in rule.columns), rule.id
        assert "What to do" in text, rule.id
        direct = rule.requirement.names if rule.requirement else frozenset()
        assert {x.name for x in limits_of(rule, loaded)} >= direct & set(loaded.limits), rule.id
        for limit in limits_of(rule, loaded):
            assert limit.name in text, (rule.id, limit.name)
            assert f"[{limit.unit}]" in text or limit.stated, (rule.id, limit.name)


@pytest.mark.parametrize("name", quantities.names())
def test_every_quantity_says_what_it_is_and_every_way_to_it_with_its_inputs(name: str) -> None:
    text = told(name)
    flat = joined(text)
    assert about_quantity(name) in flat
    for recipe in quantities.RECIPES.get(name, ()):
        for need in recipe.needs:
            assert need in text
        assert joined(recipe.formula) in flat
        assert joined(recipe.source) in flat
        assert joined(recipe.assumes) in flat


@pytest.mark.parametrize("name", sorted(load_sheet("physics").limits))
def test_every_limit_says_its_unit_its_origin_and_the_rules_that_use_it(name: str) -> None:
    sheet = load_sheet("physics")
    limit = sheet.limits[name]
    flat = joined(told(name, sheet))
    assert limit.about in flat
    assert ("the sheet physics" in flat) == limit.stated
    users = [r.id for r in sheet.rules.values() if limit in limits_of(r, sheet)]
    assert users, "a limit that no rule uses has no place in the sheet"
    for rule in users:
        assert rule in flat


def test_recipes_stand_in_the_order_they_are_tried() -> None:
    text = told("reduced_depth")
    assert re.findall(r"way (\d)", text) == [str(n + 1) for n in range(5)]
    assert text.index("depth_from = datum") < text.index("depth_from = transducer")


def test_the_docstring_of_the_physics_function_is_told_with_its_references() -> None:
    text = joined(told("guaranteed_hits"))
    assert "References IHO C-13, chapter 4" in text
    assert "Parameters" not in text
    assert ":func:" not in text


def test_what_a_physics_function_says_is_told_where_it_is_called_in_passing() -> None:
    from qa.physics import uncertainty

    doc = uncertainty.vertical_uncertainty.__doc__ or ""
    first = joined(doc.split("\n\n")[0])
    assert first in joined(told("vertical_uncertainty"))
    assert "References" in told("vertical_uncertainty")


def test_units_of_limits_among_the_inputs_are_the_limits_own() -> None:
    assert re.search(r"target_size +\[m\]", told("guaranteed_hits"))
    assert "From target_size [m]" in joined(told("pings-on-target"))


def test_a_limit_that_depends_on_depth_is_worked_out() -> None:
    # S-44 §3.5.2: three times the depth or 25 m, whichever is greater.
    assert "= 111 m at reduced_depth 37 m" in told("sounding-distance", reduced_depth=37.0)
    assert "= 25 m at reduced_depth 5 m" in told("sounding_distance", reduced_depth=5.0)


def test_without_the_value_it_needs_a_limit_says_what_to_give() -> None:
    assert "Its value needs depth" in told("sounding_distance")


def test_a_quantity_is_worked_out_as_in_an_audit_and_says_what_was_assumed() -> None:
    text = told("range_resolution", pulse_length=60e-6, pulse_form="CW")
    assert "0.045 m" in text  # 1500 m/s × 60 µs / 2
    assert re.search(r"sound_speed +1500 m/s, assumed", text)
    swept = told("range_resolution", pulse_form="FM", bandwidth=30e3, sound_speed=1500.0)
    assert "0.025 m" in swept  # c/(2B)


def test_values_of_a_side_scan_are_those_of_its_near_and_farthest_range() -> None:
    sheet = load_sheet("physics", None, {"near_range": "25 m"})
    here = OnePing(sheet, {"kind": "side-scan", "range_scale": 150.0, "beamwidth_along": 1.0})
    near, far = here.value("footprint_along")
    assert near == pytest.approx(2 * 25 * math.tan(math.radians(0.5)))
    assert far == pytest.approx(2 * 150 * math.tan(math.radians(0.5)))
    assert here.value("least(footprint_along)") == near
    text = explain("footprint_along", sheet, here, 100)
    assert "0.4363 m at the near range, 2.618 m at the farthest" in text


def test_with_nothing_stated_no_value_is_told() -> None:
    assert "With these values" not in told("kind")
    assert "Here" not in told("range-resolution")


def test_what_needs_a_whole_line_is_not_worked_out_from_one_ping() -> None:
    text = joined(told("ping_interval", depth=20.0))
    assert "needs a whole line of pings" in text


def test_a_rule_is_judged_for_the_values_given() -> None:
    sheet = load_sheet("physics", None, {"target_size": "0.05 m"})
    values = {"pulse_length": 100e-6, "pulse_form": "CW", "sound_speed": 1500.0}
    assert "0.075 m against 0.05 m: missed." in told("range-resolution", sheet, **values)
    assert "met." in told("range-resolution", sheet, **{**values, "pulse_length": 50e-6})
    assert "With these values" not in told("range-resolution", sheet, depth=20.0)


@pytest.mark.parametrize("form", ["CW", "FM"])
def test_a_condition_on_the_pulse_form_holds_for_a_stated_form(tmp_path: Path, form: str) -> None:
    path = tmp_path / "own.toml"
    path.write_text(
        "[rule.swept]\nwhen = \"pulse_form == 'FM'\"\nrequire = 'pulse_length >= 1*ms'\n", "utf-8"
    )
    sheet = load_sheet(path)
    judged = OnePing(sheet, {"pulse_form": form, "pulse_length": 1e-4}).judged(sheet.rules["swept"])
    assert (judged is not None) == (form == "FM")
    assert judged is None or not judged.met


def test_limits_of_the_survey_file_are_told_as_its_own() -> None:
    survey = SurveyFile(limits={"target_size": "2 m"})
    sheet = load_sheet("physics", survey)
    assert "Set by the survey file" in explain("target_size", sheet, OnePing(sheet), 100)


@pytest.mark.parametrize(
    ("wrong", "right"),
    [
        ("range-resolushun", "range-resolution"),
        ("tvu_alowed", "tvu_allowed"),
        ("wavelenth", "wavelength"),
    ],
)
def test_an_unknown_name_is_answered_with_the_nearest(wrong: str, right: str) -> None:
    with pytest.raises(PingworthyError, match=f'Did you mean "{right}"'):
        told(wrong)


def test_a_rule_is_found_with_underscores_too() -> None:
    assert told("ping_interval").startswith("ping_interval:")
    assert told("echo_in_time").startswith("echo-in-time:")


def test_a_name_of_both_a_rule_and_a_quantity_tells_both() -> None:
    text = told("speed")
    assert "speed: Speed over the ground\n" in text
    assert "A quantity in m/s." in text


def test_a_limit_that_only_one_kind_of_sonar_needs_says_so() -> None:
    assert "not stated [m] (side-scan only)" in joined(told("ping-spacing"))


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("depth", "37 s"),
        ("depth", "deep"),
        ("depth", "-5 m"),
        ("kind", "multi-beam"),
        ("speeed", "3 kt"),
    ],
)
def test_a_value_that_does_not_fit_its_quantity_is_refused(name: str, text: str) -> None:
    with pytest.raises(PingworthyError):
        given_value(name, text)


@pytest.mark.parametrize("width", [40, 60, 80, 110, 400])
def test_no_line_is_wider_than_the_terminal(width: int) -> None:
    sheet = load_sheet("physics")
    pages = [told(n, sheet, width) for n in [*sheet.rules, *sheet.limits, "vertical_uncertainty"]]
    pages.append(list_rules(sheet, OnePing(sheet), None, width))
    for line in "\n".join(pages).splitlines():
        # A word longer than the room is never broken: names and expressions are to be copied.
        longest = max((len(word) for word in line.split()), default=0)
        assert len(line) <= min(width, 110) or longest > width // 3, line
        assert line == line.rstrip()


def test_a_label_that_leaves_no_room_stands_above_its_text() -> None:
    page = Page(40)
    page.labelled("x" * 30, "text")
    assert page.lines == ["  " + "x" * 30, "      text"]


# The list of rules


def test_the_list_holds_every_rule_with_its_limits_and_their_origin(tmp_path: Path) -> None:
    path = tmp_path / "own.toml"
    path.write_text(
        'title = "Ours"\nextends = ["physics"]\n[limits]\ntarget_size = "0.5 m"\n'
        '[rule.search]\ntitle = "Search"\nnot_from_pings = "needs the record of the search"\n'
        'clause = "7.1"\nsource = "S-44 §3.3"\n',
        encoding="utf-8",
    )
    survey = SurveyFile(
        path=tmp_path / "block.toml",
        limits={"hits_required": 3},
        parts=((("a/*.csv",), {"limits": {"hits_required": 5}}),),
    )
    sheet = load_sheet(path, survey)
    text = list_rules(sheet, OnePing(sheet), survey, 100)
    flat = joined(text)
    for rule in sheet.rules.values():
        assert f"{rule.id}: {rule.title}" in flat
    assert "target_size: 0.5 m (from own)" in flat
    assert "hits_required: 3 (from survey file block.toml); 5 for a/*.csv" in flat
    assert "tvu_allowed: not stated [m]: not assessed until" in flat
    assert "severity advisory" in flat
    last = flat[flat.index("Not assessed: a ping log cannot show it") :]
    assert (
        "search: Search clause 7.1 reason needs the record of the search source S-44 §3.3" in last
    )
