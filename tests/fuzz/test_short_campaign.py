"""A few hundred ruined logs, always the same: each is read, or refused by a clear message, and accounted for."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.fuzz import campaign
from tests.fuzz.seeds import Seed, seeds

FILES, CHUNK = 360, 60


@pytest.mark.parametrize("first", range(0, FILES, CHUNK))
def test_a_ruined_log_is_read_or_refused_by_a_clear_message(tmp_path: Path, first: int) -> None:
    reader = campaign.Reader(tmp_path, seed=7)
    outcomes = [reader.read(number) for number in range(first, first + CHUNK)]
    wrong = [o for o in outcomes if o.kind not in ("read", "refused")]
    assert not wrong, "\n".join(f"{o.number}: {o.kind}: {o.told}" for o in wrong)
    kinds = {o.kind for o in outcomes}
    assert kinds == {"read", "refused"}, "the mutations are neither all harmless nor all fatal"


@pytest.mark.parametrize("number", range(len(seeds())), ids=[s.name for s in seeds()])
def test_every_seed_is_sound(tmp_path: Path, number: int, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(campaign, "mutant", lambda seed, rng: seed.content)
    seed: Seed = seeds()[number]
    reader = campaign.Reader(tmp_path, seed=7)
    for again in range(number, number + 10 * len(seeds()), len(seeds())):
        found = reader.read(again)
        if reader.file(again)[1] == seed.name:
            assert (found.kind, found.told) == ("read", "")
            assert found.rows >= 8


def test_a_traceback_is_a_failure(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(*_: object) -> None:
        raise ZeroDivisionError("by design")

    monkeypatch.setattr(campaign, "plan_logs", broken)
    monkeypatch.setattr(campaign, "audit", broken)
    found = campaign.Reader(tmp_path, seed=7).read(0)
    assert found.kind == "a traceback"
    assert "by design" in found.told


def test_an_account_that_is_not_exact_is_a_failure(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    account = campaign.FileAccount("a.csv", rows_read=3, rows_used=2)
    with pytest.raises(campaign.Wrong, match="not exact"):
        campaign._exact(account)
    account.rows_rejected = 1
    with pytest.raises(campaign.Wrong, match="reasons"):
        campaign._exact(account)
    account.reasons = {"no time": 1}
    with pytest.raises(campaign.Wrong, match="kept"):
        campaign._exact(account)


def test_a_campaign_counts_every_file_and_keeps_what_failed(tmp_path: Path) -> None:
    run = campaign.Campaign(seed=7, files=40, workers=2, keep=tmp_path / "kept")
    assert run.run(), run.summary()
    assert sum(run.kinds.values()) == 40
    assert not (tmp_path / "kept").exists()
    run._fail(campaign.Outcome(3, "a traceback", "told"))
    assert {p.suffix for p in (tmp_path / "kept").iterdir()} >= {".told"}
    assert len(list((tmp_path / "kept").iterdir())) == 2
    assert "3: a traceback: told" in run.summary()
