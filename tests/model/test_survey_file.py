"""The survey file: every key of the design loads, parts lie over the rest, mistakes are named."""

from __future__ import annotations

from pathlib import Path

import pytest

from qa.model.errors import SurveyFileError
from qa.model.survey_file import load_survey_file

FULL = """
[survey]
name       = "Outer roads, block 3"
sheet      = "physics"
depth_from = "datum"
time_zone  = "Europe/Lisbon"

[sonar]
kind             = "multibeam"
frequency        = "300 kHz"
pulse_length     = "60 us"
pulse_form       = "CW"
bandwidth        = "30 kHz"
beamwidth_along  = "1.0 deg"
beamwidth_across = "1.0 deg"
beam_angle_from  = "vertical"
mount_angle      = "-30 deg"
receive_array    = "flat"
pings_in_water   = 2
transducer_depth = "0.8 m"
source_level     = "215 dB"

[water]
sound_speed = "1490 m/s"
profile     = "casts/cast.csv"

[vessel]
speed     = "4 kt"
time_zone = "Atlantic/Azores"

[limits]
target_size   = "1 m"
hits_required = 3

[columns]
depth  = "Z snd"
ignore = ["Speed"]
hold   = ["pulse_length"]
order  = ["latitude", "longitude", "depth", "temperature", "time"]

[columns.units]
depth = "ft"
time  = "ms since 1970-01-01"

[lines]
from = "gap"
gap  = "10 min"

[[part]]
logs = ["side_scan/*.csv"]

[part.sonar]
kind = "side-scan"

[part.limits]
target_size = "0.5 m"
"""


def load(tmp_path: Path, text: str):
    path = tmp_path / "survey.toml"
    path.write_text(text, encoding="utf-8")
    return load_survey_file(path)


def test_every_key_of_the_design_is_read(tmp_path: Path) -> None:
    survey = load(tmp_path, FULL)
    assert survey.stated["frequency"] == 300e3
    assert survey.stated["pulse_length"] == 60e-6
    assert survey.stated["mount_angle"] == -30.0
    assert survey.stated["pings_in_water"] == 2.0
    assert survey.stated["speed"] == pytest.approx(4 * 1852 / 3600)
    assert (survey.depth_from, survey.time_zone, survey.vessel_time_zone) == (
        "datum",
        "Europe/Lisbon",
        "Atlantic/Azores",
    )
    assert survey.profile == tmp_path / "casts" / "cast.csv"
    assert survey.columns.names == {"depth": "Z snd"}
    assert survey.columns.units["depth"] == "ft"
    assert (survey.lines.source, survey.lines.gap) == ("gap", 600.0)
    assert survey.limits["target_size"] == "1 m"


def test_a_part_lies_over_the_rest_for_its_logs_only(tmp_path: Path) -> None:
    survey = load(tmp_path, FULL)
    side = survey.for_log(tmp_path / "side_scan" / "a.csv")
    other = survey.for_log(tmp_path / "multibeam" / "a.csv")
    assert (side.stated["kind"], side.limits["target_size"]) == ("side-scan", "0.5 m")
    assert (other.stated["kind"], other.limits["target_size"]) == ("multibeam", "1 m")
    assert side.stated["frequency"] == 300e3


def test_a_file_without_a_word_states_nothing(tmp_path: Path) -> None:
    survey = load(tmp_path, "")
    assert survey.stated == {}
    assert not survey.says_depth_from


MISTAKES = {
    "[sonar]\nkind = 3": "sonar.kind",
    "[sonar]\nfrequency = '300'": "sonar.frequency",
    "[sonar]\nfrequency = '0 Hz'": "sonar.frequency",
    "[sonar]\npings_in_water = 0": "sonar.pings_in_water",
    "[sonar]\npings_in_water = true": "sonar.pings_in_water",
    "[sonar]\nbeamwidth_along = '400 deg'": "sonar.beamwidth_along",
    "[water]\nsalinty = '35'": "salinity",
    "[vessel]\nspeed = '4 m'": "vessel.speed",
    "[colums]\ndepth = 'z'": "columns",
    "[columns]\nhold = ['depth']": "columns.hold",
    "[columns]\nhold = 3": "columns.hold",
    "[columns.units]\ndepth = 's'": "columns.units.depth",
    "[columns.units]\ndepth = 'smoots'": "columns.units.depth",
    "[lines]\nfrom = 'colum'": "lines.from",
    "[lines]\ngap = '0 s'": "lines.gap",
    "[survey]\ndepth_from = 'surface'": "depth_from",
    "survey = 3": "survey",
    "[part]\nlogs = ['a']": "part",
    "[[part]]\nsonar = 1\nlogs = ['a']": "sonar",
    "[[part]]\n[part.sonar]\nkind = 'multibeam'": "part 1",
    "[[part]]\nlogs = ['a']\n[part.sonar]\nkind = 'sidescan'": "part 1.sonar.kind",
    "[[part]]\nlogs = ['a']\n[part.survey]\nname = 'x'": "part 1.survey",
}


@pytest.mark.parametrize("text", MISTAKES)
def test_a_mistake_is_named_with_its_key(text: str, tmp_path: Path) -> None:
    with pytest.raises(SurveyFileError) as caught:
        load(tmp_path, text)
    assert MISTAKES[text] in str(caught.value)
    assert "survey.toml" in str(caught.value)


def test_a_missing_file_is_named(tmp_path: Path) -> None:
    with pytest.raises(SurveyFileError, match=r"nowhere\.toml"):
        load_survey_file(tmp_path / "nowhere.toml")


def test_an_error_survives_the_way_between_processes() -> None:
    import pickle

    error = SurveyFileError("Wrong.", where="a.toml: b", found="c", expected="d", advice="Do e.")
    again = pickle.loads(pickle.dumps(error))
    assert (type(again), str(again), again.where) == (type(error), str(error), error.where)
