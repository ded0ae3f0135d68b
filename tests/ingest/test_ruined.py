"""Ruined logs that once ended in a traceback or a hang: each is read, or refused by a clear message."""

from __future__ import annotations

import subprocess
import sys
import warnings
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from qa.ingest import open_line, plan_logs
from qa.ingest.planning import natural
from qa.model.errors import InputError
from qa.model.log import FileAccount
from qa.model.survey_file import SurveyFile, load_survey_file

TIMES = [f"2024-05-14T08:00:{i:02d}Z" for i in range(12)]


def accounts(path: Path, survey: str = "") -> list[FileAccount]:
    """Every account of a log that is read to its end, without a warning."""
    facts = SurveyFile()
    if survey:
        (path.parent / "survey.toml").write_text(survey, "utf-8")
        facts = load_survey_file(path.parent / "survey.toml")
    found = []
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for task in plan_logs([path], facts).lines:
            line = open_line(task, facts)
            line.ping_table()
            for _ in line.beam_batches(line.beam_columns):
                pass
            found += line.accounts()
    assert all(account.balances for account in found)
    return found


def text(folder: Path, content: str) -> Path:
    (folder / "log.csv").write_text(content, "utf-8")
    return folder / "log.csv"


def rows(row: str, header: str = "time,depth") -> str:
    return "\n".join([header, *(f"{t},{row}" for t in TIMES), ""])


@pytest.mark.parametrize("what", ["9", " ", "1.", "A", "-", "1,"])
def test_a_field_of_enormous_length_costs_no_more_than_its_row(tmp_path: Path, what: str) -> None:
    content = rows("10.5").replace(f"{TIMES[4]},10.5", f"{TIMES[4]},{what * 200_000}")
    (account,) = accounts(text(tmp_path, content))
    assert account.rows_read == 12
    assert account.rows_used in (11, 12)


@pytest.mark.parametrize("what", ["9", " ", "_1", "A", "(", "m"])
def test_a_header_of_enormous_length_is_not_looked_into(tmp_path: Path, what: str) -> None:
    content = rows("10.5,1", f"time,depth,{what * (200_000 // len(what))}")
    (account,) = accounts(text(tmp_path, content))
    assert account.rows_used == 12


def test_spaces_without_end_between_columns(tmp_path: Path) -> None:
    gap = " " * 200_000
    content = rows("10.5").replace(",", " ").replace(f"{TIMES[4]} 10.5", f"{TIMES[4]}{gap}10.5")
    (account,) = accounts(text(tmp_path, content))
    assert account.rows_used == 12


@pytest.mark.parametrize("what", ["-", "- ", "---|", "=+"])
def test_a_line_under_the_header_that_does_not_end_as_one(tmp_path: Path, what: str) -> None:
    rows = [f"{time},10" for time in TIMES]
    path = tmp_path / "log.csv"
    path.write_text(f"{what * 4000}x\ntime,depth (m)\n" + "\n".join(rows) + "\n", "utf-8")
    (account,) = accounts(path)
    assert account.rows_used == len(TIMES)


@pytest.mark.parametrize("what", [" ", " 7", "1:", "° "])
def test_a_position_of_enormous_length(tmp_path: Path, what: str) -> None:
    rows = [f"{time},38.5,-9.25,10" for time in TIMES]
    rows[3] = f"{TIMES[3]},12{what * 3000}x,-9.25,10"
    path = tmp_path / "log.csv"
    path.write_text("time,latitude,longitude,depth (m)\n" + "\n".join(rows) + "\n", "utf-8")
    (account,) = accounts(path)
    assert (account.rows_used, account.rows_rejected) == (len(TIMES) - 1, 1)


def test_a_units_row_longer_than_its_header(tmp_path: Path) -> None:
    content = rows("10.5,1").replace("\n", "\nUTC,m,m,m,m\n", 1).replace("depth", "depth,x")
    (account,) = accounts(text(tmp_path, content))
    assert account.rows_used == 12


def test_columns_without_names_and_none_that_is_known(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="no column of times"):
        accounts(text(tmp_path, rows("1,2,3", "a,,,")))


def test_beams_side_by_side_of_which_one_kind_has_more_columns(tmp_path: Path) -> None:
    header = "time,depth_1,depth_2,depth_3,angle_1,angle_2,angle_3,angle_4"
    path = text(tmp_path, rows("10,11,12,-40,-20,20,40", header))
    (task,) = plan_logs([path], SurveyFile()).lines
    line = open_line(task, SurveyFile())
    (batch,) = line.beam_batches(["beam", "depth", "beam_angle"])
    assert batch.columns["beam"][:4].tolist() == [1, 2, 3, 4]
    np.testing.assert_equal(batch.columns["depth"][:4], [10, 11, 12, np.nan])
    assert batch.columns["beam_angle"][:4].tolist() == [-40, -20, 20, 40]


def test_numbers_beyond_all_measure_give_no_warning(tmp_path: Path) -> None:
    content = rows("10.5,300", "time,depth (ft),freq (kHz)").replace("300", "1e308", 3)
    (account,) = accounts(text(tmp_path, content))
    assert account.rows_read == 12


@pytest.mark.parametrize("source", ["column", "gap"])
def test_lines_of_a_log_none_of_whose_rows_can_be_used(tmp_path: Path, source: str) -> None:
    content = rows("10.5,L1", "time,depth,line").replace("2024-", "1970-")
    survey = f'[lines]\nfrom = "{source}"\n'
    found = accounts(text(tmp_path, content), survey)
    assert sum(account.rows_used for account in found) == 0


@pytest.mark.parametrize("name", ["L²", "L" + "7" * 10_000, "٣", "007", ""])
def test_any_digits_in_a_line_s_name(tmp_path: Path, name: str) -> None:
    content = rows(f"10.5,{name}", "time,depth,line").replace(
        f"{TIMES[3]},10.5,{name}", TIMES[3] + ",1,L2"
    )
    found = accounts(text(tmp_path, content), '[lines]\nfrom = "column"\n')
    assert sum(account.rows_used for account in found) == 12
    assert isinstance(natural(name), tuple)


def test_natural_order_of_names_with_zeros_in_front() -> None:
    assert sorted(["L10", "L009", "L8", "L"], key=natural) == ["L", "L8", "L009", "L10"]


def arrow(folder: Path, table: pa.Table, damage: dict[bytes, bytes]) -> Path:
    sink = pa.BufferOutputStream()
    with pa.ipc.new_file(sink, table.schema) as writer:
        writer.write_table(table)
    content = sink.getvalue().to_pybytes()
    for old, new in damage.items():
        assert old in content
        content = content.replace(old, new)
    (folder / "log.arrow").write_bytes(content)
    return folder / "log.arrow"


def stamps(tz: str = "UTC") -> pa.Array:
    start = 1_715_673_600_000_000
    return pa.array([start + i * 1_000_000 for i in range(12)], pa.timestamp("us", tz))


def test_a_time_zone_of_no_letters(tmp_path: Path) -> None:
    table = pa.table({"time": stamps("Zulu"), "depth": [10.5] * 12})
    with pytest.raises(InputError, match="damaged"):
        accounts(arrow(tmp_path, table, {b"Zulu": b"\x98\xff\xa0\xfe"}))


def test_a_column_s_name_of_no_letters(tmp_path: Path) -> None:
    table = pa.table({"time": stamps(), "depth": [10.5] * 12, "remark": [1] * 12})
    with pytest.raises(InputError, match="damaged"):
        accounts(arrow(tmp_path, table, {b"remark": b"\x98\xff\xa0\xfe\xff\xff"}))


def test_lists_whose_offsets_lead_elsewhere(tmp_path: Path) -> None:
    lists = pa.array([[10.0, 11.0]] * 12, pa.list_(pa.float64()))
    table = pa.table({"time": stamps(), "depth": lists})
    wrong = {
        np.arange(0, 26, 2, np.int32).tobytes(): np.arange(0, 26_000, 2000, np.int32).tobytes()
    }
    with pytest.raises(InputError, match="damaged"):
        accounts(arrow(tmp_path, table, wrong))


def test_dictionaries_whose_indices_lead_elsewhere(tmp_path: Path) -> None:
    names = pa.DictionaryArray.from_arrays(pa.array([0, 1] * 6, pa.int32()), ["port", "stbd"])
    table = pa.table({"time": stamps(), "depth": [10.5] * 12, "channel": names})
    old = np.array([0, 1] * 6, np.int32).tobytes()
    wrong = {old: np.array([0, 66] * 6, np.int32).tobytes()}
    with pytest.raises(InputError, match="damaged"):
        accounts(arrow(tmp_path, table, wrong))


def test_a_record_of_the_name_of_a_column_beside_it(tmp_path: Path) -> None:
    columns = [
        pa.array(np.arange(12) * 1000 + 1_715_673_600_000, pa.timestamp("ms", "UTC")),
        pa.array([{"frequency_khz": 200.0}] * 12),
        pa.array(["A"] * 6 + ["B"] * 6),
        pa.array(np.linspace(10, 11, 12)),
    ]
    table = pa.Table.from_arrays(columns, names=["time", "line", "line", "depth"])
    pq.write_table(table, tmp_path / "log.parquet")
    (account,) = accounts(tmp_path / "log.parquet")
    assert account.rows_used == 12
    assert any("names several lines" in note for note in account.notes)


def test_statistics_that_would_end_the_process() -> None:
    """The file comes of the campaign: its size statistics disagree with its schema, which the library aborts on."""
    path = Path(__file__).resolve().parent.parent / "data" / "ruined" / "size_statistics.parquet"
    code = f"import qa; qa.read_log({str(path)!r})"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 1
    assert "InputError" in done.stderr
    assert "damaged" in done.stderr


def test_rejected_times_beyond_the_calendar_keep_their_words(tmp_path: Path) -> None:
    times = pa.array([*stamps().cast(pa.int64()).to_pylist()[:11], 2**62], pa.int64())
    table = pa.table({"time": times.cast(pa.timestamp("us", "UTC")), "depth": [10.5] * 12})
    pq.write_table(table, tmp_path / "log.parquet")
    (account,) = accounts(tmp_path / "log.parquet")
    assert account.rows_rejected == 1
    assert str(2**62) in account.rejected_rows[0].text
