"""Every published value of the table beside this file, compared in one loop."""

from __future__ import annotations

import importlib
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest

TABLE = tomllib.loads(
    (Path(__file__).parent / "values.toml").read_text(encoding="utf-8"), parse_float=float
)["value"]


def _name(row: dict[str, Any]) -> str:
    return f"{row['function']}-{row['value']}-{row['source']}"


@pytest.mark.parametrize("row", TABLE, ids=_name)
def test_published_value_is_reproduced(row: dict[str, Any]) -> None:
    module, function = row["function"].split(".")
    compute = getattr(importlib.import_module(f"qa.physics.{module}"), function)
    got = float(compute(**row["inputs"])) * row.get("scale", 1.0)
    assert abs(got - row["value"]) <= row["tolerance"], (
        f"{row['function']}: got {got}, published {row['value']} ({row['source']} {row['section']})"
    )


def test_table_holds_at_least_sixty_values_each_with_its_source() -> None:
    assert len(TABLE) >= 60
    for row in TABLE:
        assert row["source"] and row["section"] and row["sure"]


def test_root_sum_of_squares_of_the_handbooks_worked_budget() -> None:
    """C-13 figure 3.33 [read]: terms at 95 % for 30 m of water."""
    from qa.physics.uncertainty import combined, s44_tvu

    budget = combined(0.10, 30.0 / 150.0, 0.04, 0.10, 0.10, 0.10, 0.10)
    assert abs(float(budget) - 0.303) < 5e-4
    assert budget < s44_tvu("1a", 30.0)


def test_track_keeping_errors_of_the_handbook() -> None:
    """C-13 chapter 4 §2.3.8 [read]: 10, 5, 1 and 1.5 m make 11.3 m; 24 m of overlap leave 21 m."""
    from qa.physics.uncertainty import combined

    together = float(combined(10.0, 5.0, 1.0, 1.5))
    assert abs(together - 11.3) < 0.05
    assert abs(np.sqrt(24.0**2 - together**2) - 21.0) < 0.5
