"""pingworthy: audits the ping logs of a finished sonar survey.

The public names load when they are first used, so that the command starts fast.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from qa.engine.quantities import quantity
    from qa.engine.sheets import load_sheet
    from qa.ingest import read_log
    from qa.job import audit
    from qa.model.findings import Findings
    from qa.model.survey_file import load_survey_file

__version__ = "0.1.0"

__all__ = [
    "Findings",
    "__version__",
    "audit",
    "load_sheet",
    "load_survey_file",
    "quantity",
    "read_log",
]

_PLACES = {
    "Findings": "qa.model.findings",
    "audit": "qa.job",
    "load_sheet": "qa.engine.sheets",
    "load_survey_file": "qa.model.survey_file",
    "quantity": "qa.engine.quantities",
    "read_log": "qa.ingest",
}


def __getattr__(name: str) -> Any:
    if name not in _PLACES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    from importlib import import_module

    found = getattr(import_module(_PLACES[name]), name)
    globals()[name] = found
    return found
