"""Unchanged lines are taken as they were kept, changed ones never; and the bytes are the same either way."""

from __future__ import annotations

import datetime as dt
import os
import pickle
import re
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa import job, kept_lines
from qa.fingerprints import fingerprint, of_program
from qa.ingest import plan_logs
from qa.job import audit
from qa.kept import Kept, checked_folder, kept_folder
from qa.model.errors import OutputError
from qa.model.survey_file import SurveyFile
from qa.unfinished import folder_beside, leftovers
from tests.made_lines import files_of, write_line

ROOT = Path(__file__).resolve().parent.parent
LINES = 3
LIMITS = {"target_size": "0.05 m"}


@pytest.fixture
def logs(tmp_path: Path) -> Path:
    folder = tmp_path / "logs"
    folder.mkdir()
    for line in range(1, LINES + 1):
        write_line(folder / f"line_{line}.csv", line)
        settle(folder / f"line_{line}.csv")
    return folder


def settle(path: Path, seconds: float = 100.0) -> None:
    """Give a file a time of change that lies a while ago."""
    now = path.stat().st_mtime
    os.utime(path, (now - seconds, now - seconds))


class Again:
    """The same audit many times, with and without what is kept."""

    def __init__(self, folder: Path, logs: Path) -> None:
        self.folder, self.logs = folder, logs
        self.survey: Path | None = None
        self.limits: dict[str, str] = dict(LIMITS)
        self.pages: Any = "auto"

    def __call__(self, **options: Any) -> tuple[int, dict[str, bytes]]:
        """Lines taken, and the files written; they are those of an audit that keeps nothing."""
        kept = Kept(self.folder / "kept", **options)
        with_kept, without = self.folder / "with", self.folder / "without"
        alike: dict[str, Any] = {"limits": self.limits, "workers": 1, "pages": self.pages}
        audit(self.logs, self.survey, out=with_kept, kept=kept, **alike)
        audit(self.logs, self.survey, out=without, **alike)
        assert not kept.trouble
        assert files_of(with_kept) == files_of(without)
        return kept.taken, files_of(with_kept)


@pytest.fixture
def again(tmp_path: Path, logs: Path) -> Again:
    return Again(tmp_path, logs)


def test_cold_warm_and_off_write_the_same_bytes(again: Again) -> None:
    taken, cold = again()
    assert taken == 0
    taken, warm = again()
    assert taken == LINES
    assert cold == warm
    assert {"report.html", "findings.json", "pings.parquet"} <= set(warm)


def test_a_new_line_among_others_is_computed_alone(again: Again) -> None:
    again()
    write_line(again.logs / "line_0.csv", 0)
    taken, files = again()
    assert taken == LINES, "though every other line has another number now"
    assert b"L0004" in files["report.html"]


@pytest.fixture
def made(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """What was rendered or looked at for an audit that keeps, rather than taken."""
    found: list[str] = []
    kept_page, remembered = kept_lines.kept_page, kept_lines.remembered

    def page(kept: Kept, path: Path, inputs: bytes, make: Any) -> None:
        kept_page(kept, path, inputs, lambda: found.append(path.name) or make())

    def file(kept: Kept, path: Path, about: Any, make: Any) -> Any:
        return remembered(kept, path, about, lambda: found.append(path.name) or make())

    monkeypatch.setattr(job, "kept_page", page)
    monkeypatch.setattr(job, "remembered", file)
    return found


def test_pages_of_unchanged_lines_are_not_rendered_again(again: Again, made: list[str]) -> None:
    again.pages = "many"
    again()
    assert {f"{n:04d}.html" for n in (1, 2, 3)} <= set(made)
    made.clear()
    _, files = again()
    assert made == []
    assert {"lines/0001.html", "lines/0003.html"} <= {name.replace(os.sep, "/") for name in files}
    write_line(again.logs / "line_4.csv", 4)
    again()
    # The line before the new one has a link to it now.
    assert made == ["line_4.csv", "0003.html", "0004.html"]


def test_pages_follow_their_lines_to_other_numbers(again: Again, made: list[str]) -> None:
    again.pages = "many"
    again()
    made.clear()
    write_line(again.logs / "line_0.csv", 0)
    assert again()[0] == LINES
    assert made == ["line_0.csv", *(f"{n:04d}.html" for n in (1, 2, 3, 4))]


def test_pages_are_rendered_again_where_the_titles_of_rules_change(
    again: Again, made: list[str], tmp_path: Path
) -> None:
    again.pages = "many"
    again()
    again.limits = dict(LIMITS, target_size="0.06 m")
    made.clear()
    again()
    assert made == [f"{n:04d}.html" for n in (1, 2, 3)]


def test_a_page_that_was_damaged_is_rendered_again(
    again: Again, made: list[str], tmp_path: Path
) -> None:
    again.pages = "many"
    again()
    pages = sorted((tmp_path / "kept").glob("page-*.kept"))
    assert len(pages) == LINES
    text = pages[0].read_bytes()
    pages[0].unlink()
    pages[0].write_bytes(text.replace(b"<h1>", b"<h2>"))
    made.clear()
    again()
    assert len(made) == 1


def test_files_that_did_not_change_are_not_looked_at_again(
    again: Again, made: list[str], tmp_path: Path
) -> None:
    again()
    made.clear()
    again()
    assert made == []
    os.utime(again.logs / "line_2.csv", (1e9, 1e9))
    again()
    assert made == ["line_2.csv"]
    made.clear()
    again(rehash=True)
    assert made == ["line_1.csv", "line_2.csv", "line_3.csv"]
    made.clear()
    again.survey = tmp_path / "survey.toml"
    again.survey.write_text("[survey]\ntime_zone = 'Europe/Lisbon'\n", encoding="utf-8")
    again()
    assert made == ["line_1.csv", "line_2.csv", "line_3.csv"]


def test_a_changed_log_is_computed_again(again: Again) -> None:
    again()
    path = again.logs / "line_2.csv"
    text = path.read_text(encoding="utf-8")
    path.write_text(text.replace(",100,", ",200,"), encoding="utf-8")
    assert again()[0] == LINES - 1


def test_a_log_that_was_only_touched_is_not(again: Again) -> None:
    again()
    os.utime(again.logs / "line_2.csv")
    assert again()[0] == LINES


def test_rehash_finds_a_change_that_size_and_time_hide(again: Again, tmp_path: Path) -> None:
    again()
    path = again.logs / "line_2.csv"
    before = path.stat()
    text = path.read_text(encoding="utf-8")
    path.write_text(text.replace(",100,", ",200,"), encoding="utf-8")
    os.utime(path, ns=(before.st_atime_ns, before.st_mtime_ns))
    hidden = Kept(tmp_path / "kept")
    audit(again.logs, limits=LIMITS, out=tmp_path / "hidden", kept=hidden)
    assert hidden.taken == LINES, "which is why there is another way"
    assert again(rehash=True)[0] == LINES - 1


def test_a_file_changed_a_moment_ago_is_read_again(tmp_path: Path) -> None:
    """Within one step of a file system's clock, size and time tell nothing."""
    path, kept = tmp_path / "log.csv", Kept(tmp_path / "kept")
    path.write_text("one", encoding="utf-8")
    first, moment = kept.content(path), path.stat()
    path.write_text("two", encoding="utf-8")
    os.utime(path, ns=(moment.st_atime_ns, moment.st_mtime_ns))
    assert kept.content(path).sha256 != first.sha256


def test_limits_count_and_the_name_of_the_survey_does_not(again: Again, tmp_path: Path) -> None:
    again.survey = tmp_path / "survey.toml"
    again.survey.write_text("[survey]\nname = 'One'\n", encoding="utf-8")
    again()
    again.survey.write_text("[survey]\nname = 'Another'\n", encoding="utf-8")
    assert again()[0] == LINES
    again.limits = {"target_size": "0.5 m"}
    assert again()[0] == 0
    again.survey.write_text("[water]\nsound_speed = '1480 m/s'\n", encoding="utf-8")
    assert again()[0] == 0


def test_a_part_of_the_survey_file_counts_for_its_logs_only(again: Again, tmp_path: Path) -> None:
    again.survey = tmp_path / "survey.toml"
    text = "[[part]]\nlogs = ['logs/line_2.csv']\n[part.sonar]\nbeamwidth_along = '{} deg'\n"
    again.survey.write_text(text.format(1), encoding="utf-8")
    again()
    again.survey.write_text(text.format(2), encoding="utf-8")
    assert again()[0] == LINES - 1


def test_the_content_of_a_cast_counts(again: Again, tmp_path: Path) -> None:
    cast = tmp_path / "cast.csv"
    again.survey = tmp_path / "survey.toml"
    again.survey.write_text("[water]\nprofile = 'cast.csv'\n", encoding="utf-8")
    cast.write_text("depth (m),sound speed (m/s)\n0,1500\n10,1495\n60,1490\n", encoding="utf-8")
    again()
    assert again()[0] == LINES
    cast.write_text("depth (m),sound speed (m/s)\n0,1500\n10,1495\n60,1470\n", encoding="utf-8")
    assert again()[0] == 0


def test_another_program_takes_nothing(again: Again, monkeypatch: pytest.MonkeyPatch) -> None:
    again()
    monkeypatch.setattr(kept_lines, "of_program", lambda: "another")
    assert again()[0] == 0


def test_the_program_is_known_by_its_source(tmp_path: Path) -> None:
    """A copy in which one rule's text differs has another fingerprint."""
    for name in ("qa", "rules", "reports"):
        shutil.copytree(ROOT / name, tmp_path / name, ignore=shutil.ignore_patterns("__pycache__"))
    code = "from qa.fingerprints import of_program; print(of_program())"

    def told() -> str:
        env = {**os.environ, "PYTHONPATH": str(tmp_path)}
        done = subprocess.run(
            [sys.executable, "-c", code], cwd=tmp_path, env=env, capture_output=True, text=True
        )
        assert done.returncode == 0, done.stderr
        return done.stdout.strip()

    first = told()
    assert first == told() == of_program()
    for name in ("rules/physics.toml", "qa/physics/pulse.py", "reports/words.toml"):
        path = tmp_path / name
        path.write_text(path.read_text(encoding="utf-8") + "\n# changed\n", encoding="utf-8")
        assert told() != first, name
        first = told()


@pytest.mark.parametrize("ending", [".record", ".pings.kept", ".figures.kept"])
@pytest.mark.parametrize("ruin", ["cut", "empty", "flipped", "gone"])
def test_what_is_damaged_is_ignored_and_written_again(
    ending: str, ruin: str, again: Again, tmp_path: Path
) -> None:
    again()
    for path in (tmp_path / "kept").glob(f"*{ending}"):
        raw = path.read_bytes()
        at = len(raw) // 2
        ruined = {
            "cut": raw[:at],
            "empty": b"",
            "flipped": raw[:at] + bytes([raw[at] ^ 1]) + raw[at + 1 :],
        }
        path.unlink()
        if ruin != "gone":
            path.write_bytes(ruined[ruin])
    assert again()[0] == 0
    assert again()[0] == LINES


class Intruder:
    """What a record must never hold: something that runs when it is read."""

    def __reduce__(self) -> tuple[Any, ...]:
        return os.mkdir, (os.environ["INTRUDER"],)


def test_a_record_runs_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("INTRUDER", str(tmp_path / "intruded"))
    kept = Kept(tmp_path / "kept")
    kept.put("a", Intruder())
    assert kept.get("a") is None
    assert not (tmp_path / "intruded").exists()
    pickle.loads(pickle.dumps(Intruder()))
    assert (tmp_path / "intruded").exists(), "the record would have, read without care"


def test_a_log_that_reaches_into_the_future_is_not_kept(tmp_path: Path) -> None:
    path = tmp_path / "line.csv"
    write_line(path, 1)
    year = dt.datetime.now(dt.UTC).year + 2
    text = path.read_text(encoding="utf-8")
    path.write_text(text.replace("2025-", f"{year}-"), encoding="utf-8")
    for _ in range(2):
        kept = Kept(tmp_path / "kept")
        audit(path, kept=kept)
        assert kept.taken == kept.added == 0


def test_lines_that_failed_are_not_kept(tmp_path: Path, logs: Path) -> None:
    (logs / "bad.csv").write_text(
        "time,ping,depth (m)\n" + "2025-05-04T10:00:00Z,1,mud\n" * 5, encoding="utf-8"
    )
    for taken in (0, LINES):
        kept = Kept(tmp_path / "kept")
        findings = audit(logs, kept=kept)
        assert kept.taken == taken
        assert findings.exit_status == 2


def test_the_records_used_longest_ago_go_first(tmp_path: Path) -> None:
    kept = Kept(tmp_path / "kept")
    for n, key in enumerate("abcd"):
        big = tmp_path / f"big {key}"
        big.write_bytes(bytes([n]) * 10_000)
        kept.put(key, n, {"big": big})
        for path in (tmp_path / "kept").glob(f"{key}.*"):
            os.utime(path, (1000 + n, 1000 + n))
    into = tmp_path / "into"
    into.mkdir()
    assert kept.get("a", into) == 0
    assert (into / "big").read_bytes() == bytes(10_000)
    kept.budget = 25_000
    assert kept.trim() > 15_000
    left = {key for key in "abcd" if kept.get(key, into) is not None}
    assert left == {"a", "d"}
    assert kept.size()[1] <= 25_000


def test_clearing_removes_nothing_else(tmp_path: Path) -> None:
    kept = Kept(tmp_path / "kept")
    kept.put("a", 1)
    (tmp_path / "kept" / "notes.txt").write_text("mine", encoding="utf-8")
    assert kept.clear() > 0
    assert kept.size() == (0, 0)
    assert kept.get("a") is None
    assert (tmp_path / "kept" / "notes.txt").read_text(encoding="utf-8") == "mine"


def test_a_folder_with_something_else_is_refused(tmp_path: Path) -> None:
    (tmp_path / "thesis").mkdir()
    (tmp_path / "thesis" / "chapter.record").write_text("precious", encoding="utf-8")
    with pytest.raises(OutputError, match="--keep-in"):
        checked_folder(tmp_path / "thesis")
    assert Kept(tmp_path / "thesis").clear() == 0
    assert (tmp_path / "thesis" / "chapter.record").exists()


def test_a_folder_that_cannot_be_written_is_no_reason_to_fail(tmp_path: Path, logs: Path) -> None:
    (tmp_path / "file").write_text("", encoding="utf-8")
    kept = Kept(tmp_path / "file" / "kept")
    findings = audit(logs, out=tmp_path / "out", limits=LIMITS, kept=kept)
    assert len(findings.lines) == LINES
    assert str(tmp_path / "file") in kept.trouble


def test_the_folder_is_the_one_named_then_that_of_the_environment(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("PINGWORTHY_KEPT", str(tmp_path / "of environment"))
    assert kept_folder(tmp_path / "named") == tmp_path / "named"
    assert kept_folder() == tmp_path / "of environment"
    monkeypatch.delenv("PINGWORTHY_KEPT")
    assert kept_folder().name.lower() in ("pingworthy", "cache")


def test_every_log_of_the_corpus_has_a_key() -> None:
    """Whatever a log's form, what is known of it can be named."""
    corpus = ROOT / "tests" / "data" / "ingest"
    named = 0
    for path in sorted(p for p in corpus.iterdir() if p.is_file()):
        try:
            tasks = plan_logs([path], SurveyFile()).lines
        except Exception:
            continue
        assert fingerprint(tasks) == fingerprint(plan_logs([path], SurveyFile()).lines)
        named += 1
    assert named > 50


plain = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats(allow_nan=False)
    | st.text()
    | st.binary(),
    lambda inner: (
        st.lists(inner).map(tuple)
        | st.frozensets(st.integers() | st.text())
        | st.dictionaries(st.text(), inner)
    ),
)


def written(value: Any) -> str:
    """A second opinion on whether two values are the same: kinds count, order in mappings and sets does not."""
    if isinstance(value, dict):
        return f"dict({sorted((repr(k), written(v)) for k, v in value.items())})"
    if isinstance(value, frozenset):
        return f"set({sorted(map(repr, value))})"
    if isinstance(value, tuple):
        return f"tuple({[written(v) for v in value]})"
    return f"{type(value).__name__}({value!r})"


@given(plain, plain)
def test_two_values_share_a_fingerprint_only_if_they_are_the_same(a: Any, b: Any) -> None:
    assert (fingerprint(a) == fingerprint(b)) == (written(a) == written(b))


# The command


def command(*arguments: str | Path) -> list[str]:
    return [sys.executable, "-m", "qa.cli", *map(str, arguments)]


def pingworthy(*arguments: str | Path) -> subprocess.CompletedProcess[str]:
    env = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "utf-8"}
    return subprocess.run(
        command(*arguments),
        capture_output=True,
        text=True,
        encoding="utf-8",
        env=env,
        timeout=300,
    )


def taken_of(stderr: str) -> int:
    found = re.search(r"(\d+) lines unchanged", stderr)
    return int(found[1]) if found else 0


def test_the_command_keeps_shows_and_clears(tmp_path: Path, logs: Path) -> None:
    place = ("--keep-in", tmp_path / "kept")
    for taken in (0, LINES):
        done = pingworthy("audit", logs, "--out", tmp_path / "out", *place)
        assert done.returncode == 0, done.stderr
        assert taken_of(done.stderr) == taken
    done = pingworthy("audit", logs, "--out", tmp_path / "off", "--no-keep")
    assert taken_of(done.stderr) == 0
    assert files_of(tmp_path / "out") == files_of(tmp_path / "off")
    shown = pingworthy("kept", *place)
    assert str(tmp_path / "kept") in shown.stdout
    assert f"Lines kept: {LINES}\n" in shown.stdout
    assert "Removed" in pingworthy("kept", "--clear", *place).stdout
    assert "Lines kept: 0\n" in pingworthy("kept", *place).stdout
    done = pingworthy("audit", logs, "--out", tmp_path / "out", "--no-keep", "--rehash")
    assert done.returncode == 2
    assert "--rehash" in done.stderr


def test_an_audit_that_was_killed_goes_on_where_it_was(tmp_path: Path) -> None:
    logs, total = tmp_path / "logs", 20
    logs.mkdir()
    for line in range(total):
        write_line(logs / f"line_{line}.csv", line, 300)
    out, place = tmp_path / "out", ("--keep-in", tmp_path / "kept")
    arguments = ("audit", logs, "--out", out, "--workers", "1", "--set", "target_size=0.05m")
    running = subprocess.Popen(
        command(*arguments, *place),
        stderr=subprocess.PIPE,
        stdout=subprocess.DEVNULL,
        text=True,
        encoding="utf-8",
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )
    assert running.stderr is not None
    for text in running.stderr:
        if text.startswith("4 of"):
            running.kill()
            break
    running.communicate()
    assert running.returncode not in (0, 1, 2, 3), "it was killed before its end"
    assert not (out / "findings.json").exists()
    assert len(leftovers(out)) == 1
    done = pingworthy(*arguments, *place)
    assert done.returncode == 1, done.stderr
    assert 4 <= taken_of(done.stderr) < total
    assert sorted(p.name for p in tmp_path.iterdir()) == ["kept", "logs", "out"]
    pingworthy(*arguments[:3], tmp_path / "at once", *arguments[4:], "--no-keep")
    assert files_of(out) == files_of(tmp_path / "at once")


def test_only_what_a_killed_audit_of_the_same_target_left_is_removed(tmp_path: Path) -> None:
    target, other = tmp_path / "out", tmp_path / "other"
    with folder_beside(target) as alive, folder_beside(other) as of_other:
        assert leftovers(target) == []
        (tmp_path / ".pingworthy-mine").mkdir()
        for folder, name in ((alive, "dead"), (of_other, "dead of other")):
            shutil.copytree(folder, tmp_path / f".pingworthy-{name}")
        assert leftovers(target) == [tmp_path / ".pingworthy-dead"]
        with folder_beside(target):
            assert leftovers(target) == []
            assert alive.is_dir()
    left = sorted(p.name for p in tmp_path.iterdir())
    assert left == [".pingworthy-dead of other", ".pingworthy-mine"]
