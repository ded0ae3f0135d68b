"""The files of an audit: complete, the same each time, and safe to open."""

from __future__ import annotations

import csv
import json
from typing import Any

import jsonschema
import numpy as np
import pyarrow.parquet as pq
import pytest

from qa.model.shipped import shipped
from qa.report.tables import geometry, safe_cell


def read(audit: Any, name: str) -> Any:
    return json.loads((audit.folder / name).read_text(encoding="utf-8"))


def test_all_files_and_nothing_else(audit: Any) -> None:
    names = {p.name for p in audit.folder.iterdir()}
    assert names == {
        *("report.html", "findings.json", "sections.csv", "rerun.geojson", "pings.parquet"),
        "rejected.csv",
    }


def test_pages_are_named_by_number_never_by_line(audit_pages: Any) -> None:
    assert [p.name for p in audit_pages.pages[1:]] == [f"{n:04d}.html" for n in range(1, 6)]


def test_twenty_lines_stay_one_file_and_one_more_makes_pages(write: Any, made: Any) -> None:
    twenty = tuple(made.LineKind(f"L{n}", pings=3) for n in range(20))
    assert len(write(twenty).pages) == 1
    assert len(write((*twenty, made.LineKind("L20", pings=3))).pages) == 22
    assert len(write((*twenty, made.LineKind("L20", pings=3)), "one").pages) == 1


def test_findings_are_what_the_audit_found(audit: Any) -> None:
    assert (audit.folder / "findings.json").read_text(encoding="utf-8") == audit.findings.to_json()


def test_findings_keep_to_their_schema(audit: Any) -> None:
    schema = json.loads((shipped("reports") / "findings.schema.json").read_text(encoding="utf-8"))
    validator = jsonschema.Draft202012Validator(schema)
    validator.check_schema(schema)
    found = read(audit, "findings.json")
    assert [e.message for e in validator.iter_errors(found)] == []
    del found["sections"][0]["first_index"]
    assert not validator.is_valid(found), "a schema that asks for nothing would pass anything"


def test_the_schema_knows_every_field(audit: Any) -> None:
    schema = json.loads((shipped("reports") / "findings.schema.json").read_text(encoding="utf-8"))
    found = read(audit, "findings.json")
    parts = schema["$defs"]
    pairs = [
        (found, schema),
        (found["inputs"][0], parts["input"]),
        (found["assumptions"][0], parts["assumption"]),
        (found["rules"][0], parts["rule"]),
        (found["lines"][0], parts["line"]),
        (found["lines"][0]["rules"][0], parts["line_rule"]),
        (found["sections"][0], parts["section"]),
        (found["sections"][0]["evidence"][0], parts["evidence"]),
    ]
    for value, part in pairs:
        assert set(value) == set(part["properties"])


def test_same_bytes_each_time(write: Any, made: Any) -> None:
    first, second = (write(made.SOME_FAULTS, "many") for _ in range(2))
    for path in sorted(p for p in first.folder.rglob("*") if p.is_file()):
        other = second.folder / path.relative_to(first.folder)
        assert path.read_bytes() == other.read_bytes(), path.name


def test_no_place_of_this_machine_in_any_file(audit_pages: Any) -> None:
    place = str(audit_pages.folder.parent)
    for path in audit_pages.folder.rglob("*"):
        if path.is_file():
            assert place.encode() not in path.read_bytes(), path.name


def test_sections_csv_has_a_row_for_each_section(audit: Any) -> None:
    with (audit.folder / "sections.csv").open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert len(rows) == len(audit.findings.sections) > 0
    for row, section in zip(rows, audit.findings.sections, strict=True):
        assert (row["line"], row["rule"]) == (section.line, section.rule)
        assert (int(row["first_ping"]), int(row["last_ping"])) == (
            section.first_ping,
            section.last_ping,
        )
        assert float(row["worst"]) == section.worst


@pytest.mark.parametrize("start", ["=", "+", "-", "@", "\t", "\r", " =", "＝"])
def test_no_cell_begins_a_formula(start: str) -> None:
    cell = safe_cell(start + "HYPERLINK(1)")
    assert cell == "'" + start + "HYPERLINK(1)"


def test_rejected_rows_are_kept_and_safe(audit: Any) -> None:
    with (audit.folder / "rejected.csv").open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [(r["file"], r["row"], r["reason"]) for r in rows] == [
        ("logs/A.csv", "12", "no time"),
        ("logs/A.csv", "15", "no time"),
    ]
    assert rows[1]["text"] == "'=cmd|x!A0"


def positions(value: Any) -> list[Any]:
    return [value] if isinstance(value[0], float) else [p for v in value for p in positions(v)]


def test_rerun_is_geojson_of_the_sections_that_fail(audit: Any) -> None:
    found = read(audit, "rerun.geojson")
    assert set(found) == {"type", "features"} and found["type"] == "FeatureCollection"
    failing = [s for s in audit.findings.sections if s.severity == "out of spec"]
    assert [f["properties"]["id"] for f in found["features"]] == [s.id for s in failing]
    for feature, section in zip(found["features"], failing, strict=True):
        assert feature["type"] == "Feature" and feature["geometry"]["type"] == "LineString"
        along = positions(feature["geometry"]["coordinates"])
        assert along[0] == pytest.approx(
            [section.start_longitude, section.start_latitude], abs=1e-6
        )
        assert along[-1] == pytest.approx([section.end_longitude, section.end_latitude], abs=1e-6)
        assert all(-180 <= x <= 180 and -90 <= y <= 90 for x, y in along)
        assert feature["properties"]["remedy"] == section.remedy


def test_a_stretch_over_the_180th_meridian_is_cut_there(write: Any, made: Any) -> None:
    kind = made.LineKind("M", places="meridian", faults=(made.Fault("ping-interval", 10, 290),))
    feature = read(write((kind,)), "rerun.geojson")["features"][0]
    assert feature["geometry"]["type"] == "MultiLineString"
    for part in feature["geometry"]["coordinates"]:
        longitudes = [x for x, _ in part]
        assert len({x > 0 for x in longitudes if abs(x) != 180.0}) == 1


def test_a_section_of_one_place_is_a_point() -> None:
    assert geometry([(3.0, 54.0)])["type"] == "Point"


def test_no_positions_no_geojson(write: Any, made: Any) -> None:
    kinds = tuple(
        made.LineKind(p, places=p, faults=(made.Fault("ping-interval", 9, 20),))
        for p in ("none", "grid")
    )
    assert not (write(kinds).folder / "rerun.geojson").exists()


def test_pings_parquet_holds_every_ping_with_units(audit: Any) -> None:
    table = pq.read_table(audit.folder / "pings.parquet")
    assert table.num_rows == sum(line.pings for line in audit.findings.lines)
    assert table.schema.field("depth").metadata[b"units"] == b"m"
    assert table.schema.field("ping-interval: value").metadata[b"units"] == b"s"
    start = 0
    for result in audit.results:
        part = table.slice(start, len(result.time))
        start += len(result.time)
        assert set(part["line"].to_pylist()) == {result.finding.line}
        np.testing.assert_array_equal(part["ping"].to_numpy(), result.ping)
        np.testing.assert_array_equal(part["time"].cast("int64").to_numpy(), result.time)
        np.testing.assert_array_equal(part["depth"].to_numpy(), result.columns["depth"])
        for rule, series in result.rules.items():
            words = np.array(["not assessed", "met", "missed", "exempt"])[series.status]
            assert part[f"{rule}: verdict"].to_pylist() == words.tolist()


def test_unknown_values_are_null_not_nan(audit: Any) -> None:
    table = pq.read_table(audit.folder / "pings.parquet")
    for column, field in zip(table.columns, table.schema, strict=True):
        if str(field.type) == "double":
            values = column.drop_null().to_numpy()
            assert not np.isnan(values).any(), field.name


def test_lines_with_other_columns_are_joined(write: Any, made: Any) -> None:
    kinds = (made.LineKind("G", places="grid"), made.LineKind("P"))
    table = pq.read_table(write(kinds).folder / "pings.parquet")
    assert table["easting"].null_count == table["latitude"].null_count == 300
