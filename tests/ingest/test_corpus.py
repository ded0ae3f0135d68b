"""Each log of tests/data/ingest comes to what its table says, row for row; the tables were written from the logs' text."""

from __future__ import annotations

import tomllib
from collections import Counter
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from qa.ingest import open_line, plan_logs, read_log
from qa.model.errors import InputError
from qa.model.log import FileAccount, RejectedRow
from qa.model.survey_file import SurveyFile, load_survey_file

LOGS = Path(__file__).resolve().parent.parent / "data" / "ingest"
CORPUS: dict[str, dict[str, Any]] = tomllib.loads(
    (LOGS / "corpus.toml").read_text(encoding="utf-8")
)
KEYS = {
    *("file", "survey", "read", "used", "out_of_scope", "rejected", "rejected_rows", "lines", "channels"),
    *("pings", "values", "missing", "notes", "no_notes", "absent", "error", "tolerance"),
}  # fmt: skip


def survey_of(case: dict[str, Any], folder: Path) -> SurveyFile:
    if "survey" not in case:
        return SurveyFile()
    path = folder / "survey.toml"
    path.write_text(case["survey"], encoding="utf-8")
    return load_survey_file(path)


def test_the_corpus_is_broad_and_every_log_in_it_is_used() -> None:
    assert len(CORPUS) >= 60
    assert not [(name, key) for name, case in CORPUS.items() for key in case if key not in KEYS]
    used = {LOGS / case["file"] for case in CORPUS.values()}
    there = {p for p in LOGS.rglob("*") if p.is_file() and p.name not in _NO_LOGS}
    unused = [p.name for p in there if not any(p == u or u in p.parents for u in used)]
    assert unused == []


_NO_LOGS = ("corpus.toml", "make.py", ".gitattributes")


@pytest.mark.parametrize("name", CORPUS)
def test_log_comes_to_what_its_text_says(name: str, tmp_path: Path) -> None:
    case = CORPUS[name]
    survey = survey_of(case, tmp_path)
    path = LOGS / case["file"]
    if "error" in case:
        with pytest.raises(InputError) as refused:
            read_log(path, survey)
        for words in case["error"]:
            assert words in str(refused.value)
        return
    plan = plan_logs([path], survey)
    assert plan.inputs == ()
    lines = [open_line(task, survey) for task in plan.lines]
    accounts = [account for line in lines for account in line.accounts()]
    check_accounts(case, accounts)
    if "lines" in case:
        assert [line.name for line in lines] == case["lines"]
    if "channels" in case:
        assert [span.name for span in lines[0].ping_table().channels] == case["channels"]
    table = read_log(path, survey)
    if "pings" in case:
        assert table.column("ping").to_pylist() == case["pings"]
    for column in case.get("absent", ()):
        assert column not in table.column_names
    for column, wanted in case.get("values", {}).items():
        found = table.column(column).to_numpy()
        if column == "time":
            assert (
                found.astype("datetime64[ns]").tolist()
                == np.array(wanted, "datetime64[ns]").tolist()
            )
        else:
            np.testing.assert_allclose(
                found.astype(float), np.array(wanted, float), rtol=case.get("tolerance", 1e-12)
            )


def check_accounts(case: dict[str, Any], accounts: list[FileAccount]) -> None:
    assert all(account.balances for account in accounts)
    assert sum(a.rows_read for a in accounts) == case["read"]
    assert sum(a.rows_used for a in accounts) == case["used"]
    assert sum(a.rows_out_of_scope for a in accounts) == case.get("out_of_scope", 0)
    reasons: Counter[str] = Counter()
    missing: Counter[str] = Counter()
    for account in accounts:
        reasons.update(account.reasons)
        missing.update(account.missing)
        assert sum(account.reasons.values()) == account.rows_rejected
        assert Counter(row.reason for row in account.rejected_rows) == account.reasons
    wanted = case.get("rejected", {})
    assert len(reasons) == len(wanted)
    for words, count in wanted.items():
        assert [n for reason, n in reasons.items() if words in reason] == [count], reasons
    assert dict(missing) == case.get("missing", {})
    if "rejected_rows" in case:
        rows: list[RejectedRow] = [row for a in accounts for row in a.rejected_rows]
        assert [[row.row, row.text] for row in rows] == case["rejected_rows"]
    notes = [note for account in accounts for note in account.notes]
    for words in case.get("notes", ()):
        assert any(words in note for note in notes), notes
    for words in case.get("no_notes", ()):
        assert not any(words in note for note in notes), notes
