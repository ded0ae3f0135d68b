"""A re-run is matched to what it mends by its place, whatever its name."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from qa.model.errors import InputError
from qa.report.compare import Comparison, compare_audits, summary


@pytest.fixture(scope="module")
def before(write: Any, made: Any) -> Any:
    """One line with two faults, at the place of number 0."""
    return write((made.LineKind("FIRST", faults=faults_of(made)),))


def faults_of(made: Any) -> Any:
    return (made.Fault("ping-interval", 40, 90), made.Fault("range-resolution", 200, 240))


def outcomes(result: Comparison) -> dict[str, str]:
    return {m.section["rule"]: m.outcome for m in result.matched}


def test_a_clean_rerun_of_another_name_mends(
    before: Any, write: Any, made: Any, tmp_path: Path
) -> None:
    after = write((made.LineKind("SECOND"),))
    result = compare_audits(before.folder, after.folder, tmp_path)
    assert outcomes(result) == {"ping-interval": "mended", "range-resolution": "mended"}
    assert {m.after_lines for m in result.matched} == {("SECOND",)} and not result.new
    found = json.loads((tmp_path / "compare.json").read_text(encoding="utf-8"))
    assert found["counts"]["mended"] == 2 and found["sections"][0]["shares"]["mended"] == 1.0
    html = (tmp_path / "compare.html").read_text(encoding="utf-8")
    assert "Of 2 sections out of spec before: 2 mended, 0 still out of spec." in html
    assert "2 mended" in summary(result)


def test_the_worst_value_after_is_of_the_rerun(before: Any, write: Any, made: Any) -> None:
    after = write((made.LineKind("SECOND"),))
    worst = {
        m.section["rule"]: m.worst_after
        for m in compare_audits(before.folder, after.folder).matched
    }
    assert worst["range-resolution"] == pytest.approx(0.045)
    assert worst["ping-interval"] == pytest.approx(0.2, abs=0.001)


def test_a_rerun_with_the_same_fault_remains_and_a_new_fault_is_new(
    before: Any, write: Any, made: Any, tmp_path: Path
) -> None:
    faults = (made.Fault("ping-interval", 60, 130), made.Fault("footprint-growth", 10, 30))
    after = write((made.LineKind("SECOND", faults=faults),))
    result = compare_audits(before.folder, after.folder, tmp_path)
    assert outcomes(result) == {"ping-interval": "remains", "range-resolution": "mended"}
    shares = next(m.shares for m in result.matched if m.section["rule"] == "ping-interval")
    assert 0.3 < shares["mended"] < 0.7 and shares["uncovered"] == 0
    assert [s["rule"] for s in result.new] == ["footprint-growth"]
    assert "still out of spec" in (tmp_path / "compare.html").read_text(encoding="utf-8")


def test_the_first_log_audited_again_beside_the_rerun_does_not_hide_it(
    before: Any, write: Any, made: Any
) -> None:
    first = made.LineKind("FIRST", faults=faults_of(made))
    after = write((first,))
    assert set(outcomes(compare_audits(before.folder, after.folder)).values()) == {"remains"}
    results = [made.line_result(first), made.line_result(made.LineKind("SECOND"))]
    folder = after.folder.parent / "both"
    folder.mkdir()
    from qa.report import write_line, write_outputs

    artifacts = [write_line(r, folder, n) for n, r in enumerate(results, start=1)]
    write_outputs(made.findings_of(results), artifacts, (), folder)
    result = compare_audits(before.folder, folder)
    assert set(outcomes(result).values()) == {"mended"} and not result.new


def test_a_neighbouring_line_mends_nothing(before: Any, write: Any, made: Any) -> None:
    """The second made-up line runs some 58 m beside the first."""
    after = write((made.LineKind("OTHER"), made.LineKind("BESIDE")))
    only = after.folder.parent / "beside"
    only.mkdir()
    from dataclasses import replace

    from qa.report import write_line, write_outputs

    result = made.line_result(replace(made.LineKind("BESIDE"), number=1))
    write_outputs(made.findings_of([result]), [write_line(result, only, 1)], (), only)
    assert set(outcomes(compare_audits(before.folder, only)).values()) == {"uncovered"}
    assert set(outcomes(compare_audits(before.folder, only, within=80.0)).values()) == {"mended"}


def test_a_rerun_that_could_not_be_assessed_mends_nothing(
    before: Any, write: Any, made: Any
) -> None:
    after = write((made.LineKind("SECOND", unassessed=("ping-interval", "vertical-uncertainty")),))
    assert outcomes(compare_audits(before.folder, after.folder))["ping-interval"] == "unassessed"


def test_a_good_port_side_does_not_mend_starboard(write: Any, made: Any) -> None:
    sides = ("port", "starboard")
    fault = made.Fault("range-resolution", 5, 60, channel=1)
    before = write((made.LineKind("A", channels=sides, faults=(fault,)),))
    after = write((made.LineKind("B", channels=sides, faults=(fault,)),))
    assert outcomes(compare_audits(before.folder, after.folder)) == {"range-resolution": "remains"}


def test_without_positions_only_the_same_log_is_recognised(write: Any, made: Any) -> None:
    faults = faults_of(made)
    before = write((made.LineKind("A", places="none", faults=faults),))
    again = write((made.LineKind("A", places="none", faults=faults),))
    other = write((made.LineKind("B", places="none"),))
    assert set(outcomes(compare_audits(before.folder, again.folder)).values()) == {"remains"}
    assert set(outcomes(compare_audits(before.folder, other.folder)).values()) == {"unmatched"}


@pytest.mark.parametrize("places", ["grid", "meridian"])
def test_grids_and_the_180th_meridian(write: Any, made: Any, places: str) -> None:
    before = write((made.LineKind("A", places=places, faults=faults_of(made)),))
    after = write((made.LineKind("B", places=places),))
    assert set(outcomes(compare_audits(before.folder, after.folder)).values()) == {"mended"}


def test_other_limits_are_told(before: Any, write: Any, made: Any) -> None:
    limits = (
        {
            "name": "target_size",
            "text": "2 m",
            "unit": "m",
            "about": "",
            "source": "",
            "origin": "",
        },
    )
    after = write((made.LineKind("SECOND"),), limits=limits)
    assert any("target_size" in note for note in compare_audits(before.folder, after.folder).notes)


def test_a_folder_without_an_audit_is_one_clear_error(before: Any, tmp_path: Path) -> None:
    with pytest.raises(InputError, match="holds no audit"):
        compare_audits(before.folder, tmp_path)
