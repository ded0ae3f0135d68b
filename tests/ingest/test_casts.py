"""Casts of many spellings, and the mistakes that are refused with what to do."""

from __future__ import annotations

import gzip
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.ingest.casts import read_cast
from qa.model.cast import Cast
from qa.model.errors import InputError
from qa.model.survey_file import load_survey_file


def read(folder: Path, content: str | bytes, name: str = "cast.csv") -> Cast:
    path = folder / name
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    found = read_cast(path, shown=name)
    assert found.account.balances
    assert (np.diff(found.depth) > 0).all()
    return found


SPELLINGS = {
    "commas": "depth,sound_speed\n0,1490\n10,1485.5\n",
    "units in brackets": "Depth [m],Sound Velocity (m/s)\n0,1490\n10,1485.5\n",
    "units in the name": "Depth_m,SV_m/s\n0,1490\n10,1485.5\n",
    "a units row": "Depth,Sound speed\nm,m/s\n0,1490\n10,1485.5\n",
    "semicolons and decimal commas": "Depth;SV\n0,0;1490,0\n10,0;1485,5\n",
    "tabs": "DEPTH\tSVEL\n".replace("SVEL", "SOUND VELOCITY") + "0\t1490\n10\t1485.5\n",
    "spaces": "Depth   SV\n  0.0   1490.0\n 10.0   1485.5\n",
    "comments and a preamble": "# cast 3\n# launch\nDepth,SV\n0,1490\n10,1485.5\n",
    "UTF-16": "Depth,SV\r\n0,1490\r\n10,1485.5\r\n".encode("utf-16"),
    "a byte order mark": "\ufeffDepth,SV\r\n0,1490\r\n10,1485.5\r\n",
    "packed": gzip.compress(b"Depth,SV\n0,1490\n10,1485.5\n", mtime=0),
    "a pressure beside the depth": "Pressure,Depth,SV\n0,0,1490\n10.2,10,1485.5\n",
    "an unknown column": "Depth,SV,Battery\n0,1490,12\n10,1485.5,12\n",
    "bottom up": "Depth,SV\n10,1485.5\n0,1490\n",
}


@pytest.mark.parametrize("content", SPELLINGS.values(), ids=SPELLINGS)
def test_one_cast_in_many_spellings(tmp_path: Path, content: str | bytes) -> None:
    cast = read(tmp_path, content)
    assert cast.depth.tolist() == [0.0, 10.0]
    assert cast.sound_speed is not None
    assert cast.sound_speed.tolist() == [1490.0, 1485.5]
    assert cast.account.rows_used == 2


def test_parquet_with_units_in_its_metadata(tmp_path: Path) -> None:
    fields = [
        pa.field("Depth", pa.float32(), metadata={"units": "ft"}),
        pa.field("Sound speed", pa.float64(), metadata={"units": "ft/s"}),
    ]
    table = pa.table([[0.0, 100.0], [4900.0, 4890.0]], schema=pa.schema(fields))
    pq.write_table(table, tmp_path / "cast.parquet")
    cast = read_cast(tmp_path / "cast.parquet")
    assert cast.depth == pytest.approx([0.0, 30.48])
    assert cast.sound_speed == pytest.approx([1493.52, 1490.472])


def test_temperature_and_salinity_where_no_sound_speed_is_given(tmp_path: Path) -> None:
    cast = read(tmp_path, "Depth,Temp (degF),Salinity (PSU)\n1,50,35\n2,41,35.1\n")
    assert cast.sound_speed is None
    assert cast.temperature == pytest.approx([10.0, 5.0])
    assert cast.salinity == pytest.approx([35.0, 35.1])


def test_a_sound_speed_that_is_empty_leaves_temperature_and_salinity(tmp_path: Path) -> None:
    cast = read(tmp_path, "Depth,SV,T,Temp,Sal\n1,,x,10,35\n2,,x,9,35\n")
    assert cast.sound_speed is None
    assert cast.temperature is not None


def test_time_and_place_of_the_cast(tmp_path: Path) -> None:
    cast = read(
        tmp_path,
        "Date,Time,Lat,Lon,Depth,SV\n2024-05-14,08:00:00Z,0,0,1,1490\n2024-05-14,08:00:05Z,47.5,-5.25,2,1489\n",
    )
    assert cast.time == 1_715_673_600_000_000_000
    assert (cast.latitude, cast.longitude) == (47.5, -5.25)


def test_a_time_that_runs_from_the_start_of_the_cast_is_left_out_with_a_note(
    tmp_path: Path,
) -> None:
    cast = read(tmp_path, "Time (s),Depth,SV\n0,1,1490\n1,2,1489\n")
    assert cast.time is None
    assert any("time was not used" in note for note in cast.notes)


def test_the_way_down_is_used_and_the_way_up_left_out(tmp_path: Path) -> None:
    cast = read(tmp_path, "Depth,SV\n0,1490\n5,1489\n10,1488\n10,1486\n6,1480\n1,1470\n")
    assert cast.depth.tolist() == [0.0, 5.0, 10.0]
    assert cast.sound_speed is not None
    assert cast.sound_speed.tolist() == [1490.0, 1489.0, 1487.0]
    assert cast.account.rows_out_of_scope == 2
    assert any("2 rows of the way up" in note for note in cast.notes)


def test_the_way_up_serves_where_the_way_down_is_not_whole(tmp_path: Path) -> None:
    cast = read(tmp_path, "Depth,SV\n8,1400\n10,1488\n6,1489\n3,1490\n0,1491\n")
    assert cast.depth.tolist() == [0.0, 3.0, 6.0, 10.0]
    assert cast.account.rows_out_of_scope == 1
    assert any("way up was used" in note for note in cast.notes)


def test_heave_on_the_way_down_loses_no_row(tmp_path: Path) -> None:
    t = np.arange(0.0, 60.0, 0.1)
    depth = 0.5 * t + 0.6 * (1 + np.sin(2 * np.pi * t / 6))
    rows = "".join(f"{z:.3f},{1500 - 0.1 * z:.4f}\n" for z in np.concatenate([depth, depth[::-1]]))
    cast = read(tmp_path, "Depth,SV\n" + rows)
    assert cast.account.rows_rejected == 0
    assert cast.account.rows_used > len(t) - 80
    assert cast.sound_speed == pytest.approx(1500 - 0.1 * cast.depth, abs=1e-3)


def test_an_unsorted_table_is_sorted_with_a_note(tmp_path: Path) -> None:
    cast = read(tmp_path, "Depth,SV\n0,1490\n20,1488\n5,1489\n30,1487\n10,1488.5\n")
    assert cast.depth.tolist() == [0.0, 5.0, 10.0, 20.0, 30.0]
    assert any("sorted" in note for note in cast.notes)


def test_rows_that_cannot_be_used_are_counted_with_their_words(tmp_path: Path) -> None:
    cast = read(tmp_path, "Depth,SV\n0,1490\n1,-999\nx,1489\n3,900\n4,1488,7\n5,1487\n,1486\n")
    assert cast.depth.tolist() == [0.0, 5.0]
    assert [(r.row, r.text) for r in cast.account.rejected_rows] == [
        (3, "1,-999"),
        (4, "x,1489"),
        (5, "3,900"),
        (6, "4,1488,7"),
        (8, ",1486"),
    ]
    assert cast.account.missing == {"sound_speed": 1}


MISTAKES = {
    "pressure": (
        "Pressure (dbar),SV\n0,1490\n1,1491\n",
        "pressure and no depth",
        "depth in metres",
    ),
    "no header": ("0,1490\n1,1491\n2,1492\n", "no header", "[part.columns]"),
    "no depth": ("foo,SV\n0,1490\n1,1491\n", "no depth", "[part.columns]"),
    "no speed": ("Depth,foo\n0,1490\n1,1491\n", "no sound speed", "[part.columns]"),
    "no salinity": ("Depth,Temp\n0,10\n1,11\n", "no salinity", "[part.columns]"),
    "two speeds": ("Depth,SV,SOS\n0,1490,1491\n1,1491,1492\n", "no sound speed", "both fit"),
    "one depth": ("Depth,SV\n5,1490\n5,1491\n", "two depths", ""),
    "positive up": ("Depth,SV\n-1,1490\n-2,1491\n-3,1492\n", "positive up", "positive down"),
    "feet a second": ("Depth,SV\n1,4900\n2,4890\n3,4880\n", "cannot be in m/s", "ft/s"),
    "fahrenheit": ("Depth,Temp,Sal\n1,55,35\n2,54,35\n", "cannot be in degC", "degF"),
    "wrong unit": ("Depth (s),SV\n1,1490\n2,1491\n", "no depth", "unit"),
    "empty": ("", "empty", ""),
    "header only": ("Depth,SV\n", "no rows", ""),
    "no text": (b"\x00\x01\x02\x03" * 100, "neither text nor Parquet", ""),
    "nothing usable": ("Depth,SV\nx,1490\ny,1491\n", "No row", "depth is no number"),
    "no value": ("Depth,SV\n1,\n2,\n", "empty", ""),
    "torn Parquet": (b"PAR1" + b"x" * 60, "damaged", "again"),
}


@pytest.mark.parametrize("mistake", MISTAKES.values(), ids=MISTAKES)
def test_a_mistake_is_refused_with_what_to_do(
    tmp_path: Path, mistake: tuple[str | bytes, str, str]
) -> None:
    content, says, advises = mistake
    with pytest.raises(InputError) as caught:
        read(tmp_path, content)
    assert "cast.csv" in str(caught.value)
    assert says in str(caught.value)
    assert advises in str(caught.value)


def test_a_cast_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="no such file"):
        read_cast(tmp_path / "none.csv")


def test_columns_of_the_logs_are_not_those_of_the_cast(tmp_path: Path) -> None:
    (tmp_path / "survey.toml").write_text(
        '[columns]\norder = ["time", "depth", "latitude"]\n[columns.units]\ndepth = "ft"\n', "utf-8"
    )
    (tmp_path / "cast.csv").write_text("Depth,SV\n0,1490\n10,1485\n", "utf-8")
    cast = read_cast(tmp_path / "cast.csv", load_survey_file(tmp_path / "survey.toml"))
    assert cast.depth.tolist() == [0.0, 10.0]


def test_a_part_names_the_columns_of_the_cast(tmp_path: Path) -> None:
    (tmp_path / "survey.toml").write_text(
        '[[part]]\nlogs = ["cast.csv"]\n[part.columns]\norder = ["depth", "sound_speed"]\n'
        '[part.columns.units]\ndepth = "ft"\n',
        "utf-8",
    )
    (tmp_path / "cast.csv").write_text("0,1490\n10,1485\n20,1484\n", "utf-8")
    cast = read_cast(tmp_path / "cast.csv", load_survey_file(tmp_path / "survey.toml"))
    assert cast.depth == pytest.approx([0.0, 3.048, 6.096])


@settings(max_examples=60, deadline=None)
@given(
    rows=st.lists(
        st.tuples(st.integers(0, 4000), st.integers(13_000, 17_000)),
        min_size=2,
        max_size=30,
        unique_by=lambda row: row[0],
    ),
    separator=st.sampled_from([",", ";", "\t"]),
    ends=st.sampled_from(["\n", "\r\n"]),
)
def test_depths_that_fall_once_come_back_as_written(
    tmp_path_factory: pytest.TempPathFactory,
    rows: list[tuple[int, int]],
    separator: str,
    ends: str,
) -> None:
    rows = sorted(rows)
    lines = [f"depth{separator}sound speed", *(f"{z / 10}{separator}{c / 10}" for z, c in rows), ""]
    cast = read(tmp_path_factory.mktemp("cast"), ends.join(lines))
    assert cast.depth.tolist() == [z / 10 for z, _ in rows]
    assert cast.sound_speed is not None
    assert cast.sound_speed.tolist() == [c / 10 for _, c in rows]
