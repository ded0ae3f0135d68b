"""Values that are taken where neither the log nor the survey file says, each with its reason."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

from qa.engine import quantities
from qa.model.errors import SheetError
from qa.model.shipped import shipped
from qa.model.survey_file import Value, read_toml
from qa.model.units import measure


@dataclass(frozen=True, slots=True)
class Assumed:
    """One value: ``text`` as written. ``ping_logs_only``: it holds only for logs of one row per ping."""

    name: str
    value: Value
    text: str
    reason: str
    ping_logs_only: bool = False


@cache
def assumed_values() -> dict[str, Assumed]:
    """The shipped file of assumed values, checked.

    Raises
    ------
    SheetError
        If the installation's file is damaged.
    """
    path = shipped("rules") / "assumed.toml"
    content, _ = read_toml(path, SheetError)
    found = {}
    for name, table in content.items():
        symbol = quantities.symbol(name)
        if symbol is None:
            raise SheetError(f'There is no quantity "{name}".', where=str(path))
        value = table["value"]
        if symbol.type == "number":
            value = measure(value, symbol.unit, f"{path}: {name}")[0]
        found[name] = Assumed(
            name,
            value,
            str(table["value"]),
            table["reason"],
            bool(table.get("ping_logs_only", False)),
        )
    return found
