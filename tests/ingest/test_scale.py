"""Many files, huge files and files that lie: bounded handles, bounded memory, a clear message.

Memory and handles are measured in a process of its own. How much a process used at most is asked of the system
where it tells (not on Windows).
"""

from __future__ import annotations

import gzip
import importlib.util
import io
import os
import subprocess
import sys
import zlib
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

ROOT = Path(__file__).resolve().parent.parent.parent
MEASURED = importlib.util.find_spec("resource") is not None
needs_measure = pytest.mark.skipif(not MEASURED, reason="this system does not tell what was used")

READ = """
import sys
from qa.ingest import open_line, plan_logs
from qa.model.errors import PingworthyError
from qa.model.survey_file import SurveyFile, load_survey_file
survey = load_survey_file(sys.argv[2]) if len(sys.argv) > 2 else SurveyFile()
if MOST_OPEN:
    import pyarrow, pyarrow.csv, pyarrow.parquet, resource
    resource.setrlimit(resource.RLIMIT_NOFILE, (MOST_OPEN, MOST_OPEN))
try:
    plan = plan_logs([sys.argv[1]], survey)
    assert not plan.inputs, plan.inputs
    lines = pings = rows = 0
    for task in plan.lines:
        line = open_line(task, survey)
        lines, pings = lines + 1, pings + len(line.ping_table())
        for batch in line.beam_batches(line.beam_columns):
            rows += len(batch.pings)
        assert all(a.balances for a in line.accounts())
    print("lines", lines, "pings", pings, rows)
except PingworthyError as error:
    print("refused:", error)
try:
    import resource
    used = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    print("kilobytes", used // 1024 if sys.platform == "darwin" else used)
except ImportError:
    print("kilobytes 0")
"""


def read(*arguments: Path, limit: int = 0) -> tuple[str, float]:
    """What came of reading a log in a process of its own, and the megabytes that it took at most."""
    done = subprocess.run(
        [sys.executable, "-c", READ.replace("MOST_OPEN", str(limit)), *map(str, arguments)],
        capture_output=True,
        encoding="utf-8",
        timeout=300,
        env={**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "utf-8"},
    )
    assert done.returncode == 0, done.stderr
    result, _, used = done.stdout.strip().rpartition("\n")
    return result, int(used.split()[1]) / 1024


@pytest.fixture(scope="module")
def nothing(tmp_path_factory: pytest.TempPathFactory) -> float:
    """Megabytes that reading three rows takes: the libraries."""
    path = tmp_path_factory.mktemp("small") / "small.csv"
    path.write_text(rows(0, 3), encoding="utf-8")
    result, used = read(path)
    assert result == "lines 1 pings 3 3"
    return used


def rows(start: int, count: int, header: bool = True) -> str:
    text = "".join(
        f"2026-05-04T{10 + i // 3600:02d}:{i // 60 % 60:02d}:{i % 60:02d}Z,{i},10.5,A\n"
        for i in range(start, start + count)
    )
    return ("time,ping,depth (m),line\n" if header else "") + text


def many(folder: Path) -> None:
    folder.mkdir()
    for i in range(1000):
        text = rows(3 * i, 3)
        path = folder / f"part_{i}"
        if i % 4 == 1:
            path.with_suffix(".csv.gz").write_bytes(gzip.compress(text.encode()))
        elif i % 4 == 2:
            table = pa.table(
                {
                    "time": pa.array(
                        [1777888800 + 3 * i + k for k in range(3)], pa.timestamp("s", "UTC")
                    ),
                    "ping": [3 * i + k for k in range(3)],
                    "depth": [10.5] * 3,
                    "line": ["A"] * 3,
                }
            )
            pq.write_table(table, path.with_suffix(".parquet"))
            if i % 8 == 2:
                path.with_suffix(".parquet").unlink()
                with pa.ipc.new_file(path.with_suffix(".arrow"), table.schema) as writer:
                    writer.write_table(table)
        else:
            path.with_suffix(".csv").write_text(text, encoding="utf-8")


@pytest.mark.skipif(not MEASURED or sys.platform == "win32", reason="no limit on open files here")
@pytest.mark.parametrize("source", ["file", "column"])
def test_a_thousand_files_are_read_with_few_of_them_open(source: str, tmp_path: Path) -> None:
    many(tmp_path / "logs")
    survey = tmp_path / "survey.toml"
    survey.write_text(f'[lines]\nfrom = "{source}"\n', encoding="utf-8")
    result, _ = read(tmp_path / "logs", survey, limit=32)
    lines = 1000 if source == "file" else 1
    assert result == f"lines {lines} pings 3000 3000"


def bomb(text: bytes, megabytes: int) -> bytes:
    """A gzip file of one text over and over, made without making what it unpacks to."""
    packer = zlib.compressobj(9, wbits=31)
    head = packer.compress(b"time,ping,depth (m)\n") + packer.flush(zlib.Z_FULL_FLUSH)
    piece = text * ((1 << 20) // len(text))
    block = packer.compress(piece) + packer.flush(zlib.Z_FULL_FLUSH)
    # after a full flush nothing refers back: the same block may stand again
    return head + block * megabytes


@needs_measure
@pytest.mark.parametrize("text", [b"2026-05-04T10:00:00Z,1,10.5\n", b"\0" * 64, b"5"])
def test_a_gzip_bomb_is_refused_in_bounded_memory(
    text: bytes, nothing: float, tmp_path: Path
) -> None:
    path = tmp_path / "bomb.csv.gz"
    path.write_bytes(bomb(text, 1500))
    assert path.stat().st_size < 4 << 20
    result, used = read(path)
    assert result.startswith("refused:")
    assert "bomb.csv.gz" in result
    assert "unpack" in result or "longer than" in result or "NUL" in result
    assert used - nothing < 300


def sparse(path: Path, size: int) -> bool:
    """Make a file long without filling it, where the file system can."""
    try:
        with path.open("r+b") as stream:
            stream.truncate(size)
    except OSError:
        return False
    blocks: int | None = getattr(path.stat(), "st_blocks", None)
    return blocks is not None and blocks * 512 < size // 100


@needs_measure
@pytest.mark.parametrize("after", ["", rows(5000, 100, header=False)])
def test_a_sparse_file_of_10_gigabytes_is_refused_in_bounded_memory(
    after: str, nothing: float, tmp_path: Path
) -> None:
    path = tmp_path / "sparse.csv"
    path.write_text(rows(0, 2000), encoding="utf-8")
    if not sparse(path, 10 * 10**9):
        pytest.skip("no sparse files on this file system")
    with path.open("ab") as stream:
        stream.write(after.encode())
    result, used = read(path)
    path.unlink()
    assert result.startswith("refused:")
    for words in ("sparse.csv", "NUL", "row 2002"):
        assert words.lower() in result.lower()
    assert used - nothing < 300


@needs_measure
def test_memory_does_not_follow_the_size_of_the_file(nothing: float, tmp_path: Path) -> None:
    """A beam log of 160 MB: its pings are held, its beams are put aside."""
    path = tmp_path / "long.csv"
    with path.open("w", encoding="utf-8", newline="") as stream:
        stream.write(
            "time,ping,beam,beam angle (deg),depth (m),slant range (m),two-way time (ms)\n"
        )
        for ping in range(8000):
            stamp = (
                f"2026-05-04T{10 + ping // 3600:02d}:{ping // 60 % 60:02d}:{ping % 60:02d}Z,{ping},"
            )
            stream.write("".join(f"{stamp}{b},{b * 0.25 - 50:.2f},10.5000,14.2500,19.1234\n" for b in range(400)))  # fmt: skip
    assert path.stat().st_size > 150 << 20
    result, used = read(path)
    assert result == "lines 1 pings 8000 8000"
    assert used - nothing < 300


def varint(value: int) -> bytes:
    """A whole number as Parquet's footer keeps it (Thrift compact protocol: zigzag, 7 bits a byte; 0x16 before it)."""
    value *= 2
    found = b""
    while value >= 128:
        found += bytes([value & 127 | 128])
        value >>= 7
    return found + bytes([value])


@needs_measure
@pytest.mark.parametrize("claimed", [301, 299, 10**6, 10**12, 2**62])
@pytest.mark.parametrize("which", ["file", "group", "both", "all"])
def test_a_parquet_file_that_lies_about_its_rows_is_refused(
    claimed: int, which: str, nothing: float, tmp_path: Path
) -> None:
    count = 300
    table = pa.table(
        {
            "time": pa.array([1777888800 + k for k in range(count)], pa.timestamp("s", "UTC")),
            "ping": list(range(count)),
            "depth": [10.5 + 0.01 * k for k in range(count)],
        }
    )
    buffer = io.BytesIO()
    pq.write_table(table, buffer, compression="none", use_dictionary=False, write_statistics=False)
    data = buffer.getvalue()
    length = int.from_bytes(data[-8:-4], "little")
    body, footer = data[: -8 - length], data[-8 - length : -8]
    pieces = footer.split(b"\x16" + varint(count))
    # the file's own count comes first, then the columns' values, the group's count last
    assert len(pieces) == 6
    if (which, claimed) == ("all", 299):
        pytest.skip("a file that states fewer rows wherever it can is a shorter file")
    claims = {"file": {0}, "group": {4}, "both": {0, 4}, "all": set(range(5))}[which]
    lying = pieces[0]
    for i, piece in enumerate(pieces[1:]):
        lying += b"\x16" + (varint(claimed) if i in claims else varint(count)) + piece
    path = tmp_path / "liar.parquet"
    path.write_bytes(body + lying + len(lying).to_bytes(4, "little") + b"PAR1")
    result, used = read(path)
    assert result.startswith("refused:"), result
    assert "liar.parquet" in result
    assert used - nothing < 300
