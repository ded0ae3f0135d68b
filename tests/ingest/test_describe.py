"""What is said of logs before an audit: names, units and where they came from, ranges, gaps, doubts."""

from __future__ import annotations

from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from qa.ingest import open_line, plan_logs
from qa.ingest.describe import Layout, describe_logs
from qa.model.errors import InputError
from qa.model.survey_file import SurveyFile, load_survey_file

ROOT = Path(__file__).resolve().parent.parent.parent
SAMPLE = ROOT / "sample_logs"
BAY = ROOT / "tests" / "data" / "bay"


def described(folder: Path, content: str, survey: str = "", name: str = "log.csv") -> Layout:
    (folder / name).write_text(content, "utf-8")
    facts = None
    if survey:
        (folder / "survey.toml").write_text(survey, "utf-8")
        facts = load_survey_file(folder / "survey.toml")
    found = describe_logs([folder / name], facts)
    assert not found.failed
    assert len(found.layouts) == 1
    return found.layouts[0]


HEAD = "Time,Depth (ft),Lat,Lon,Pulse us,SOG [kn],Remark\n"
ROWS = (
    "2024-05-14T08:00:00Z,10,47.5,-5.25,60,4,x\n2024-05-14T08:00:01Z,20,0,0,60,-999,x\n"
    "2024-05-14T08:00:02Z,bad,47.5,-5.25,60,4,x\n2024-05-14T08:00:03Z,30,47.6,-5.25,80,4,x\n"
)


def test_a_column_is_told_with_its_name_unit_range_and_gaps(tmp_path: Path) -> None:
    layout = described(tmp_path, HEAD + ROWS)
    depth = layout.column("depth")
    assert depth is not None
    assert (depth.sources, depth.unit, depth.unit_from) == (("Depth (ft)",), "ft", "header")
    assert (depth.least, depth.greatest) == pytest.approx((3.048, 9.144))
    assert depth.example == "10"
    pulse = layout.column("pulse_length")
    assert pulse is not None
    assert (pulse.unit, pulse.least, pulse.greatest) == ("us", 60e-6, 80e-6)
    latitude = layout.column("latitude")
    assert latitude is not None
    assert latitude.missing == pytest.approx(1 / 3)
    assert latitude.unit_from == "taken as is"
    speed = layout.column("speed")
    assert speed is not None
    assert speed.missing == pytest.approx(1 / 3)
    assert layout.column("frequency") is None
    assert "frequency" in layout.missing


def test_rows_are_counted_and_rejections_told(tmp_path: Path) -> None:
    layout = described(tmp_path, HEAD + ROWS)
    assert (layout.rows_read, layout.rows_kept, layout.rows_rejected) == (4, 3, 1)
    assert layout.reasons == (("depth is no number", 1),)


def test_columns_not_used_are_named(tmp_path: Path) -> None:
    layout = described(tmp_path, HEAD + ROWS)
    assert ("Remark", "") in layout.unused


def test_where_a_unit_came_from(tmp_path: Path) -> None:
    layout = described(
        tmp_path,
        "time,depth,altitude,speed\nUTC,,ft,\n2024-05-14T08:00:00Z,10,20,4\n2024-05-14T08:00:01Z,11,21,4\n",
        '[columns.units]\ndepth = "fathom"\n',
    )
    ways = {c.name: (c.unit, c.unit_from) for c in layout.columns}
    assert ways["depth"] == ("fathom", "survey file")
    assert ways["altitude"] == ("ft", "units row")
    assert ways["speed"] == ("", "taken as is")


def test_a_unit_of_the_metadata(tmp_path: Path) -> None:
    fields = [
        pa.field("time", pa.timestamp("ms", "UTC")),
        pa.field("depth", pa.float32(), metadata={"units": "ft"}),
    ]
    table = pa.table([[1_715_000_000_000, 1_715_000_001_000], [10.1, None]], pa.schema(fields))
    pq.write_table(table, tmp_path / "log.parquet")
    depth = describe_logs([tmp_path / "log.parquet"]).layouts[0].column("depth")
    assert depth is not None
    assert (depth.unit, depth.unit_from, depth.missing, depth.example) == (
        "ft",
        "metadata",
        0.5,
        "10.1",
    )


def test_a_name_that_the_survey_file_gives_is_marked(tmp_path: Path) -> None:
    layout = described(
        tmp_path,
        "time,Z snd\n2024-05-14T08:00:00Z,10\n2024-05-14T08:00:01Z,11\n",
        '[columns]\ndepth = "Z snd"\n',
    )
    depth = layout.column("depth")
    assert depth is not None
    assert depth.named_by_survey
    assert layout.column("time") is not None
    assert not layout.columns[0].named_by_survey


def test_two_columns_that_fit_one_meaning_are_named_with_what_to_write(tmp_path: Path) -> None:
    layout = described(
        tmp_path,
        "time,depth,SOG,Ship speed\n2024-05-14T08:00:00Z,10,1,2\n2024-05-14T08:00:01Z,11,1,2\n",
    )
    told = dict(layout.unused)
    assert 'speed = "SOG"' in told["SOG"]
    assert told["SOG"] == told["Ship speed"]


def test_a_near_miss_is_named_with_what_to_write(tmp_path: Path) -> None:
    layout = described(
        tmp_path,
        "time,depth,Pulse lenght,Range\n2024-05-14T08:00:00Z,10,1,2\n2024-05-14T08:00:01Z,11,1,2\n",
    )
    told = dict(layout.unused)
    assert 'pulse_length = "Pulse lenght"' in told["Pulse lenght"]
    assert "range_scale" in told["Range"]
    assert "slant_range" in told["Range"]


def test_beams_side_by_side_are_one_column(tmp_path: Path) -> None:
    head = "time," + ",".join(f"depth_{i:03d}" for i in range(1, 5))
    layout = described(
        tmp_path,
        head + "\n2024-05-14T08:00:00Z,10,11,,13\n2024-05-14T08:00:01Z,10,11,12,13\n",
    )
    depth = layout.column("depth")
    assert depth is not None
    assert layout.layout == "wide"
    assert len(depth.sources) == 4
    assert (depth.least, depth.greatest, depth.missing) == (10.0, 13.0, 0.0)


def test_names_and_flags_show_their_values(tmp_path: Path) -> None:
    layout = described(
        tmp_path,
        "time,ping,beam,channel,depth,accepted,pulse form\n"
        + "".join(
            f"2024-05-14T08:00:0{i}Z,{i},{b},port,10,{'yes' if b else 'no'},CW\n"
            for i in range(3)
            for b in range(3)
        ),
    )
    values = {c.name: c.names for c in layout.columns if c.names}
    assert values == {
        "channel": ("port",),
        "accepted": ("rejected", "accepted"),
        "pulse_form": ("CW",),
    }


def test_a_column_without_any_value_counts_as_missing(tmp_path: Path) -> None:
    layout = described(
        tmp_path,
        "time,depth,heave\n2024-05-14T08:00:00Z,10,\n2024-05-14T08:00:01Z,11,\n",
    )
    heave = layout.column("heave")
    assert heave is not None
    assert not heave.has_values
    assert "heave" in layout.missing
    assert "heave" not in layout.present


def test_layouts_of_the_sample_are_told_apart() -> None:
    survey = load_survey_file(SAMPLE / "survey.toml")
    folders = [SAMPLE / name for name in ("multibeam", "side_scan", "single_beam")]
    found = describe_logs(folders, survey)
    assert not found.failed
    assert sum(len(x.files) for x in found.layouts) == 20
    assert sorted(f for x in found.layouts for f in x.files) == sorted(
        p.as_posix() for folder in folders for p in folder.iterdir()
    )
    side = next(x for x in found.layouts if x.files[0].endswith("FW03.csv"))
    channel = side.column("channel")
    assert channel is not None
    assert channel.named_by_survey
    pair = next(x for x in found.layouts if x.files[0].endswith("CK01.csv"))
    assert [Path(f).name for f in pair.files] == ["CK01.csv", "CK04.csv"]
    time = pair.column("time")
    assert time is not None
    assert time.sources == ("Date", "Time")


def test_real_logs_without_a_header_say_what_to_write() -> None:
    found = describe_logs([BAY])
    assert not found.layouts
    assert len(found.failed) == 2
    assert all("order" in (item.error or "") for item in found.failed)


def test_real_logs_with_their_columns_named(tmp_path: Path) -> None:
    (tmp_path / "bay.toml").write_text(
        '[columns]\norder = ["latitude", "longitude", "depth", "temperature", "time"]\n', "utf-8"
    )
    found = describe_logs([BAY], load_survey_file(tmp_path / "bay.toml"))
    assert len(found.layouts) == 1
    layout = found.layouts[0]
    assert len(layout.files) == 2
    depth, latitude = layout.column("depth"), layout.column("latitude")
    assert depth is not None
    assert latitude is not None
    # Counted in the files with cut and sort.
    assert (depth.least, depth.greatest) == BAY_DEPTHS
    assert latitude.missing > 0.0


def _bay_depths() -> tuple[float, float]:
    found = [
        float(line.split(",")[2])
        for path in sorted(BAY.glob("*.csv"))
        for line in path.read_text("utf-8").splitlines()
        if line.count(",") == 4
    ]
    return min(found), max(found)


BAY_DEPTHS = _bay_depths()


def test_files_beyond_the_budget_are_listed_and_not_read(tmp_path: Path) -> None:
    for name in ("a.csv", "b.csv", "c.csv"):
        (tmp_path / name).write_text(
            "time,depth\n2024-05-14T08:00:00Z,10\n2024-05-14T08:00:01Z,11\n", "utf-8"
        )
    layout = describe_logs([tmp_path], most_bytes=60).layouts[0]
    assert (len(layout.files), layout.read, layout.rows_read) == (3, 1, 2)


def test_a_file_that_ends_in_ruins_is_described_as_far_as_it_goes(tmp_path: Path) -> None:
    table = pa.table(
        {
            "time": pa.array(range(1_715_000_000, 1_715_100_000), pa.int64()),
            "depth": pa.array([10.0] * 100_000),
        }
    )
    pq.write_table(table, tmp_path / "log.parquet", row_group_size=50_000, compression="zstd")
    content = bytearray((tmp_path / "log.parquet").read_bytes())
    middle = len(content) * 3 // 4
    content[middle : middle + 400] = b"\xff" * 400
    (tmp_path / "log.parquet").write_bytes(content)
    found = describe_logs([tmp_path / "log.parquet"])
    assert found.failed or found.layouts[0].failed


def test_a_path_that_matches_nothing_is_an_error(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="no such file"):
        describe_logs([tmp_path / "none.csv"])


CORPUS = ROOT / "tests" / "data" / "ingest"


@pytest.mark.parametrize(
    "path",
    sorted(p for p in CORPUS.iterdir() if p.is_file() and p.suffix not in (".toml", ".py")),
    ids=lambda p: p.name,
)
def test_a_description_counts_the_rows_that_an_audit_reads(path: Path) -> None:
    """Every log of the corpus is described where it can be read, and its failure told where it cannot."""
    found = describe_logs([path])
    try:
        lines = [open_line(task, SurveyFile()) for task in plan_logs([path], SurveyFile()).lines]
        for line in lines:
            line.ping_table()
    except InputError as error:
        told = [*found.failed, *(item for x in found.layouts for item in x.failed)]
        assert error.message in (told[0].error or "")
        return
    (layout,) = found.layouts
    accounts = [account for line in lines for account in line.accounts()]
    assert layout.rows_read == sum(account.rows_read for account in accounts)
    assert layout.rows_rejected <= sum(account.rows_rejected for account in accounts)
    held = {name for line in lines for name in (*line.ping_table().columns, *line.beam_columns)}
    assert held <= layout.present
