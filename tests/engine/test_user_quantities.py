"""Quantities from a user's Python file: only where allowed, as any other once they are, and errors told with their line."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

import qa
from qa.cli import app
from qa.engine import quantities
from qa.engine.user_quantities import UserPython, allowed_python, use_python
from qa.model.errors import InputError, PingworthyError, SurveyFileError
from qa.model.survey_file import load_survey_file

SAMPLE = Path(__file__).resolve().parent.parent.parent / "sample_logs"
LINES = [SAMPLE / "single_beam" / "CK01.csv", SAMPLE / "single_beam" / "CK02.csv"]

GOOD = '''import numpy as np
from qa import quantity


def wanted_beamwidth(height, target_size):
    """Beam width whose footprint under the sonar is as wide as the target."""
    return 2.0 * np.degrees(np.arctan(target_size / (2.0 * height)))


quantity("wanted_beamwidth", wanted_beamwidth, unit="deg")
'''
SHEET = """title = "Ours"
extends = ["physics"]
[rule.beamwidth]
require = "beamwidth_along <= greatest(wanted_beamwidth)"
why = "ours"
source = "ours"
"""


@pytest.fixture(autouse=True)
def nothing_left_behind() -> Iterator[None]:
    yield
    use_python(None)


def survey(folder: Path, python: str = GOOD, sheet: str = SHEET) -> Path:
    (folder / "mine.py").write_text(python, encoding="utf-8")
    (folder / "ours.toml").write_text(sheet, encoding="utf-8")
    path = folder / "survey.toml"
    path.write_text(
        '[survey]\nsheet = "ours.toml"\npython = "mine.py"\n'
        '[sonar]\nkind = "single-beam"\nbeamwidth_along = "3 deg"\ntransducer_depth = "0.6 m"\n'
        '[limits]\ntarget_size = "1 m"\n',
        encoding="utf-8",
    )
    return path


def used(path: Path) -> None:
    use_python(allowed_python(load_survey_file(path), True))


def test_a_file_is_refused_unless_it_is_allowed(tmp_path: Path) -> None:
    mark = tmp_path / "was run"
    path = survey(tmp_path, f"open({str(mark)!r}, 'w').close()\n")
    with pytest.raises(SurveyFileError, match="--allow-python"):
        qa.audit(LINES, survey=path)
    for command in ("rules", "explain", "columns", "check", "settings", "audit"):
        arguments = {
            "rules": ["--survey", path],
            "explain": ["height", "--survey", path],
            "columns": [LINES[0], "--survey", path],
            "check": [path],
            "settings": ["--survey", path, "--depth", "10m"],
            "audit": [LINES[0], "--survey", path, "--out", tmp_path / "out"],
        }[command]
        done = CliRunner().invoke(app, [command, *map(str, arguments)])
        assert "--allow-python" in done.output + str(done.exception), command
        assert done.exit_code != 0, command
    assert not mark.exists()


def test_a_quantity_of_the_users_own_serves_a_rule(tmp_path: Path) -> None:
    found = qa.audit(LINES, survey=survey(tmp_path), allow_python=True)
    rule = next(r for r in found.rules if r.id == "beamwidth")
    assert rule.pings_assessed == sum(line.pings for line in found.lines)
    # 2·atan(1 m / 2z) is under 3° where the sonar, 0.6 m down, stands more than 19.09 m over the seabed.
    depth = np.concatenate([np.asarray(qa.read_log(line)["depth"]) for line in LINES])
    assert rule.pings_missed == np.count_nonzero(depth - 0.6 > 0.5 / np.tan(np.radians(1.5)))
    assert 0 < rule.pings_missed < rule.pings_assessed
    assert found.survey["python"]["file"] == "mine.py"
    assert len(found.survey["python"]["sha256"]) == 64
    assert any("mine.py" in note for note in found.notes)
    assert qa.audit(LINES[:1], survey=SAMPLE / "survey.toml").notes == ()


def test_spawned_workers_have_it_too(tmp_path: Path) -> None:
    path = survey(tmp_path)
    alone = qa.audit(LINES, survey=path, allow_python=True, workers=1)
    shared = qa.audit(LINES, survey=path, allow_python=True, workers=2)
    assert [r for r in shared.rules if r.id == "beamwidth"] == [
        r for r in alone.rules if r.id == "beamwidth"
    ]
    assert [line.error for line in shared.lines] == [None, None]


def test_threads_have_it_too(tmp_path: Path) -> None:
    found = qa.audit(
        LINES,
        survey=survey(tmp_path),
        allow_python=True,
        executor=lambda: ThreadPoolExecutor(2),
    )
    assert [line.error for line in found.lines] == [None, None]
    assert next(r for r in found.rules if r.id == "beamwidth").pings_assessed


def test_it_is_gone_for_an_audit_that_names_no_file(tmp_path: Path) -> None:
    used(survey(tmp_path))
    assert "wanted_beamwidth" in quantities.names()
    qa.audit(LINES[:1], survey=SAMPLE / "survey.toml")
    assert "wanted_beamwidth" not in quantities.names()


def test_a_changed_file_is_run_again_and_its_old_quantities_are_gone(tmp_path: Path) -> None:
    used(survey(tmp_path))
    used(survey(tmp_path, GOOD.replace('"wanted_beamwidth", ', '"other_beamwidth", ')))
    assert "wanted_beamwidth" not in quantities.names()
    assert "other_beamwidth" in quantities.names()


def test_the_same_file_is_not_run_twice(tmp_path: Path) -> None:
    path = survey(
        tmp_path, "import builtins\nbuiltins.count = getattr(builtins, 'count', 0) + 1\n" + GOOD
    )
    import builtins

    used(path)
    used(path)
    assert builtins.count == 1  # type: ignore[attr-defined]  # the file put it there
    assert len(quantities.RECIPES["wanted_beamwidth"]) == 1


def test_another_way_to_a_known_quantity_leaves_the_old_ones(tmp_path: Path) -> None:
    before = list(quantities.RECIPES["height"])
    used(
        survey(
            tmp_path,
            "from qa import quantity\nquantity('height', lambda altitude: altitude, unit='m')\n",
        )
    )
    assert len(quantities.RECIPES["height"]) == len(before) + 1
    use_python(None)
    assert quantities.RECIPES["height"] == before


def test_explain_and_check_and_rules_know_it_where_allowed(tmp_path: Path) -> None:
    path = str(survey(tmp_path))
    done = CliRunner().invoke(
        app, ["explain", "wanted_beamwidth", "--survey", path, "--allow-python", "height=10m"]
    )
    assert "5.725°" in done.output  # 2·atan(1/20)
    assert "Beam width whose footprint" in done.output
    assert "Source: mine.py" in done.output
    assert CliRunner().invoke(app, ["check", path, "--allow-python"]).exit_code == 0
    assert (
        "beamwidth:"
        in CliRunner().invoke(app, ["rules", "--survey", path, "--allow-python"]).output
    )


WRONG = {
    "syntax": ("x = = 3\n", 1, "SyntaxError"),
    "raises": ("import math\n\nmath.sqrt(-1)\n", 3, "ValueError"),
    "imports what is not there": ("import no_such_thing_here\n", 1, "ModuleNotFoundError"),
    "another unit": (
        "from qa import quantity\nquantity('height', lambda depth: depth, unit='s')\n",
        2,
        "registered in m already",
    ),
    "no unit": (
        "from qa import quantity\nquantity('x', lambda depth: depth, unit='flurb')\n",
        2,
        "flurb",
    ),
    "exits": ("import sys\nsys.exit(0)\n", 2, "SystemExit"),
}


@pytest.mark.parametrize("case", WRONG)
def test_a_file_that_cannot_be_run_is_an_error_with_file_and_line(
    tmp_path: Path, case: str
) -> None:
    text, line, words = WRONG[case]
    before = {name: list(recipes) for name, recipes in quantities.RECIPES.items()}
    path = survey(tmp_path, text)
    with pytest.raises(InputError) as caught:
        qa.audit(LINES, survey=path, allow_python=True)
    assert f"mine.py, line {line}" in str(caught.value)
    assert words in str(caught.value)
    assert before == quantities.RECIPES


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("x = 3\n", "registers no quantity"),
        ("from qa import quantity\nquantity('x', lambda depht: depht, unit='m')\n", '"depth"'),
    ],
)
def test_a_file_that_means_nothing_is_refused_before_any_log_is_read(
    tmp_path: Path, text: str, words: str
) -> None:
    path = survey(tmp_path, text, 'extends = ["physics"]\n')
    with pytest.raises(InputError, match=words):
        qa.audit([tmp_path / "none.csv"], survey=path, allow_python=True)


@pytest.mark.parametrize(
    ("body", "words"),
    [
        ("return height / {}", "TypeError"),
        ("return height[:3]", "wrong shape"),
        ("return 'deep'", "ValueError"),
    ],
)
def test_a_function_that_fails_is_told_with_its_line(tmp_path: Path, body: str, words: str) -> None:
    python = GOOD.replace("return 2.0 * np.degrees(np.arctan(target_size / (2.0 * height)))", body)
    with pytest.raises(PingworthyError) as caught:
        qa.audit(LINES, survey=survey(tmp_path, python), allow_python=True)
    assert words in str(caught.value)
    assert "mine.py, line" in str(caught.value)


def test_a_file_that_is_not_there_is_told_with_the_key(tmp_path: Path) -> None:
    path = survey(tmp_path)
    (tmp_path / "mine.py").unlink()
    with pytest.raises(SurveyFileError, match=r"survey\.python"):
        qa.audit(LINES, survey=path, allow_python=True)


def test_a_file_that_changes_between_plan_and_worker_is_refused(tmp_path: Path) -> None:
    path = survey(tmp_path)
    with pytest.raises(InputError, match="changed"):
        use_python(UserPython(tmp_path / "mine.py", "0" * 64))
    assert path.exists()
