"""The public names: each there, each what it says, however often it is asked for."""

from __future__ import annotations

from pathlib import Path

import pytest

import qa

SAMPLE = Path(__file__).resolve().parent.parent / "sample_logs"


@pytest.mark.parametrize("name", qa.__all__)
def test_every_public_name_loads(name: str) -> None:
    assert getattr(qa, name) is getattr(qa, name)


@pytest.mark.parametrize("name", qa.__all__)
def test_no_module_stands_in_the_way_of_a_public_name(name: str) -> None:
    # Importing a module of that name would put the module in the function's place.
    assert not (Path(qa.__file__).parent / f"{name}.py").exists()
    assert not (Path(qa.__file__).parent / name).exists()


def test_a_name_that_is_not_there_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="soundings"):
        _ = qa.soundings


def test_audit_from_python_is_the_job_twice_over() -> None:
    logs = SAMPLE / "single_beam"
    first = qa.audit([logs], survey=SAMPLE / "survey.toml")
    second = qa.audit([logs], survey=SAMPLE / "survey.toml")
    assert first == second
    assert first.verdict == "out of spec"
    assert first.exit_status == 1


def test_read_log_gives_canonical_rows() -> None:
    table = qa.read_log(SAMPLE / "single_beam" / "CK01.csv", SAMPLE / "survey.toml")
    assert {"line", "ping", "time", "depth"} <= set(table.column_names)
    assert table.num_rows == 500
    assert str(table.schema.field("time").type) == "timestamp[ns, tz=UTC]"
