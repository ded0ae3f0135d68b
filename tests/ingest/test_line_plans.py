"""Line plans of many spellings, and the mistakes that are refused with what to do."""

from __future__ import annotations

from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from qa.ingest.line_plans import read_line_plan
from qa.model.errors import InputError
from qa.model.line_plan import LinePlan, PlannedLine


def read(folder: Path, content: str) -> LinePlan:
    path = folder / "plan.csv"
    path.write_text(content, "utf-8")
    plan = read_line_plan(path, shown="plan.csv")
    assert plan.account.balances
    return plan


ROW = "L1,47.5,-5.25,47.75,-5\n"
SPELLINGS = {
    "words": "Line,Start Latitude,Start Longitude,End Latitude,End Longitude\n" + ROW,
    "short": "line_name,start_lat,start_lon,end_lat,end_lon\n" + ROW,
    "behind": "Line,Lat start,Lon start,Lat end,Lon end\n" + ROW,
    "run together": "Line,LatStart,LonStart,LatEnd,LonEnd\n" + ROW,
    "numbered": "Line,Lat1,Lon1,Lat2,Lon2\n" + ROW,
    "of the line": "LineName,SOL Lat (deg),SOL Long (deg),EOL Lat (deg),EOL Long (deg)\n" + ROW,
    "from and to": "name,from latitude,from longitude,to latitude,to longitude\n" + ROW,
    "another order": "End Lon,End Lat,Line,Start Lon,Start Lat\n-5,47.75,L1,-5.25,47.5\n",
    "two rows": "Line,Latitude,Longitude\nL1,47.5,-5.25\nL1,47.75,-5\n",
    "decimal commas": "Line;Start Lat;Start Lon;End Lat;End Lon\nL1;47,5;-5,25;47,75;-5,0\n",
}


@pytest.mark.parametrize("content", SPELLINGS.values(), ids=SPELLINGS)
def test_one_line_in_many_spellings(tmp_path: Path, content: str) -> None:
    plan = read(tmp_path, content)
    assert plan.lines == (PlannedLine("L1", (47.5, -5.25), (47.75, -5.0)),)
    assert plan.position == "latitude and longitude"
    assert plan.line("L1") is plan.lines[0]
    assert plan.line("L2") is None


@pytest.mark.parametrize(
    "header",
    [
        "Line,Start Easting (ft),Start Northing (ft),End Easting (ft),End Northing (ft)",
        "Line,E1 (ft),N1 (ft),E2 (ft),N2 (ft)",
    ],
)
def test_a_grid_in_feet_becomes_metres(tmp_path: Path, header: str) -> None:
    plan = read(tmp_path, header + "\n7,1000,2000,1500,2500\n")
    assert plan.position == "easting and northing"
    assert plan.lines[0].name == "7"
    assert plan.lines[0].start == pytest.approx((304.8, 609.6))
    assert plan.lines[0].end == pytest.approx((457.2, 762.0))


def test_names_keep_their_leading_zeros(tmp_path: Path) -> None:
    plan = read(tmp_path, "Line,Lat1,Lon1,Lat2,Lon2\n001,47,-5,48,-5\n010,47,-6,48,-6\n")
    assert [line.name for line in plan.lines] == ["001", "010"]


def test_a_plan_in_parquet(tmp_path: Path) -> None:
    table = pa.table(
        {"line": [1, 2], "start_lat": [47.0] * 2, "start_lon": [-5.0] * 2, "end_lat": [48.0] * 2}
        | {"end_lon": [-5.0, -6.0]}
    )
    pq.write_table(table, tmp_path / "plan.parquet")
    plan = read_line_plan(tmp_path / "plan.parquet")
    assert [line.name for line in plan.lines] == ["1", "2"]
    assert plan.lines[1].end == (48.0, -6.0)


def test_rows_that_cannot_be_used_are_counted_with_their_words(tmp_path: Path) -> None:
    plan = read(
        tmp_path,
        "Line,Lat1,Lon1,Lat2,Lon2\nA,95,0,1,1\nB,1,1,1,1\nC,,1,1,2\nD,x,1,2,3\n,1,2,3,4\nE,1,2,3,4\nE,5,2,3,4\n",
    )
    assert [line.name for line in plan.lines] == ["E"]
    assert [r.row for r in plan.account.rejected_rows] == [2, 3, 4, 5, 6, 8]
    assert plan.account.reasons["the line starts where it ends"] == 1
    assert plan.account.reasons["a line of that name stands before"] == 1
    assert any("6 rows rejected" in note for note in plan.notes)


def test_a_line_of_one_position_is_rejected_beside_a_whole_one(tmp_path: Path) -> None:
    plan = read(tmp_path, "Line,Lat,Lon\nA,47,-5\nA,48,-5\nB,47,-5\n")
    assert [line.name for line in plan.lines] == ["A"]
    assert plan.account.reasons == {"the line has one position only": 1}


MISTAKES = {
    "no names": ("Lat1,Lon1,Lat2,Lon2\n1,2,3,4\n", "no line names"),
    "no end": ("Line,Lat1,Lon1,Lat2\nA,1,2,3\n", "no end longitude"),
    "no positions": ("Line,Depth\nA,1\nB,2\n", "no start and end positions"),
    "x and y": ("Line,x1,y1,x2,y2\nA,1,2,3,4\n", "no start and end positions"),
    "twice": ("Line,Lat1,start lat,Lon1,Lat2,Lon2\nA,1,1,2,3,4\n", "both fit the start latitude"),
    "a bend": ("Line,Lat,Lon\nA,1,2\nA,2,3\nA,3,4\n", "two positions"),
    "nothing usable": ("Line,Lat1,Lon1,Lat2,Lon2\nA,1,1,1,1\n", "starts where it ends"),
    "header only": ("Line,Lat1,Lon1,Lat2,Lon2\n", "no rows"),
}


@pytest.mark.parametrize("mistake", MISTAKES.values(), ids=MISTAKES)
def test_a_mistake_is_refused_with_what_to_do(tmp_path: Path, mistake: tuple[str, str]) -> None:
    with pytest.raises(InputError) as caught:
        read(tmp_path, mistake[0])
    assert "plan.csv" in str(caught.value)
    assert mistake[1] in str(caught.value)
    assert "Expected" in str(caught.value) or "rows" in str(caught.value) or caught.value.advice
