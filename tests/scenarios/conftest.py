"""The programs beside the tests are run by them, not collected as tests."""

from __future__ import annotations

collect_ignore = ["catalogue_faults.py", "generate.py", "score.py"]
