"""Deliveries that cannot be vouched for, each refused with its full message."""

import gzip
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from gradred.errors import PipelineFileError, ReadingsError
from gradred.ingest.positions import projected_crs, to_map
from gradred.ingest.tables import read_lines
from gradred.pipeline_file import read_pipeline
from gradred.stage import stage_of
from tests.ingest.deliveries import GOOD, STATED, columns, message, settings, table


def refusal(text: str | bytes, folder: Path, name: str = "lines.csv", **stated: Any) -> str:
    with pytest.raises(ReadingsError) as caught:
        read_lines(settings(table(folder, text, name), **stated))
    return str(caught.value)


def test_a_missing_column(tmp_path: Path) -> None:
    assert refusal(GOOD, tmp_path, columns=columns(heading="hgd")) == message(
        "there is no column 'hgd', wanted for heading", "lines.csv, row 1", "did you mean 'hdg'?"
    )


def test_a_column_that_is_there_twice(tmp_path: Path) -> None:
    assert refusal(GOOD.replace("clr", "h"), tmp_path, columns=columns(clearance=None)) == message(
        "2 columns are 'h', wanted for height",
        "lines.csv, row 1",
        "give each column a name of its own",
    )


def test_text_in_a_number_column(tmp_path: Path) -> None:
    text = GOOD.replace("502.5", "n/a").replace("504.5", "bad")
    assert refusal(text, tmp_path) == message(
        "column 'h' holds 'n/a' where a number must stand, and text in 1 more row",
        "lines.csv, row 4",
        "correct it, or add 'n/a' to the nulls if it means a missing value",
    )


def test_several_faults_of_several_tables_are_told_together(tmp_path: Path) -> None:
    first = table(tmp_path, GOOD.replace("502.5", "n/a").replace("80.4", "-"), "a.csv")
    second = table(tmp_path, GOOD.replace("lat", "latitude").replace("lon", "long"), "b.csv")
    with pytest.raises(ExceptionGroup, match="the tables cannot be read") as caught:
        read_lines(settings(first, second))
    assert [str(error).splitlines()[:2] for error in caught.value.exceptions] == [
        [
            "ReadingsError: column 'h' holds 'n/a' where a number must stand",
            "  where: a.csv, row 4",
        ],
        [
            "ReadingsError: column 'clr' holds '-' where a number must stand",
            "  where: a.csv, row 5",
        ],
        ["ReadingsError: there is no column 'lon', wanted for longitude", "  where: b.csv, row 1"],
        ["ReadingsError: there is no column 'lat', wanted for latitude", "  where: b.csv, row 1"],
    ]


def test_the_same_fault_of_many_tables_is_told_once(tmp_path: Path) -> None:
    tables = [table(tmp_path, GOOD.replace("hdg", "hdgs"), f"{name}.csv") for name in "abc"]
    with pytest.raises(ReadingsError) as caught:
        read_lines(settings(*tables))
    assert str(caught.value) == message(
        "there is no column 'hdg', wanted for heading",
        "a.csv, row 1, and 2 more like it",
        "did you mean 'hdgs'?",
    )


def test_duplicated_times(tmp_path: Path) -> None:
    assert refusal(GOOD.replace("08:00:01", "08:00:00"), tmp_path) == message(
        "line L10 has the time 2031-03-05T08:00:00 twice",
        "lines.csv, rows 2 and 3",
        "deliver each reading once, in the order in which its line was flown; "
        "a line flown again needs a name of its own",
    )


def test_times_that_run_backwards_across_tables(tmp_path: Path) -> None:
    header, *rows = GOOD.splitlines(keepends=True)
    late = table(tmp_path, "".join([header, *rows[1:]]), "late.csv")
    early = table(tmp_path, "".join([header, rows[0]]), "early.csv")
    with pytest.raises(ReadingsError) as caught:
        read_lines(settings(late, early))
    assert str(caught.value) == message(
        "line L10 has the time 2031-03-05T08:00:00 after 2031-03-05T08:00:02.5",
        "late.csv, row 3 and early.csv, row 2",
        "deliver each reading once, in the order in which its line was flown; "
        "a line flown again needs a name of its own",
    )


def with_map_positions(zone: int) -> str:
    """Return ``GOOD`` with easting and northing of a UTM zone beside longitude and latitude."""
    crs = projected_crs(f"EPSG:{32600 + zone}", where="here")
    header, *rows = GOOD.splitlines()
    longitude, latitude = np.array([row.split(",")[3:5] for row in rows], dtype=float).T
    places = zip(rows, *to_map(longitude, latitude, crs), strict=True)
    return "\n".join([header + ",e,n", *(f"{row},{e:.2f},{n:.2f}" for row, e, n in places), ""])


MAPPED: dict[str, Any] = {
    "columns": columns(easting="e", northing="n"),
    "units": {**STATED["units"], "easting": "m"},
}


def test_a_wrong_epsg_code(tmp_path: Path) -> None:
    read_lines(settings(table(tmp_path, with_map_positions(33)), **MAPPED))
    # a zone is 6 degrees wide: 456 km at latitude 47
    assert refusal(with_map_positions(32), tmp_path, **MAPPED) == message(
        "easting and northing in EPSG:32633 (WGS 84 / UTM zone 33N) are up to 456430.9 m from "
        "longitude and latitude, more than 5 m at 5 of 5 readings",
        "lines.csv, row 6 (line T90, 2031-03-05T08:10:01)",
        "state the CRS of the delivered easting and northing in 'position_crs'; "
        "this EPSG code is likely the wrong one",
    )
    lines = read_lines(
        settings(table(tmp_path, with_map_positions(32)), position_crs="EPSG:32632", **MAPPED)
    )
    # the survey's own zone is that of longitude 15
    np.testing.assert_allclose(lines["easting"][:3], 500_000.0, atol=1e-6)


@pytest.mark.parametrize(
    ("code", "what", "cure"),
    [
        (
            "EPSG:4326",
            "EPSG:4326 (WGS 84) has the axes north in degree, east in degree; "
            "a map in metres is needed",
            "name a projected CRS with axes east and north in metres, as the UTM zone",
        ),
        (
            "EPSG:2264",
            "EPSG:2264 (NAD83 / North Carolina (ftUS)) has the axes east in US survey foot, "
            "north in US survey foot; a map in metres is needed",
            "name a projected CRS with axes east and north in metres, as the UTM zone",
        ),
        ("EPSG:99999", "there is no EPSG:99999", "look the code up in the EPSG register"),
    ],
)
def test_a_crs_that_is_no_map_in_metres(tmp_path: Path, code: str, what: str, cure: str) -> None:
    assert refusal(GOOD, tmp_path, crs=code) == message(what, "crs of the survey", cure)


def test_a_crs_made_for_another_area(tmp_path: Path) -> None:
    # the Mercator map of the web is too large by 1 / cos 47 degrees = 1.4663
    assert refusal(GOOD, tmp_path, crs="EPSG:3857") == message(
        "at longitude 15.00000, latitude 47.00000 the map EPSG:3857 (WGS 84 / Pseudo-Mercator) "
        "has the scales 1.4663 and 1.4663",
        "lines.csv, row 2 (line L10, 2031-03-05T08:00:00)",
        "name a CRS made for the area, with a scale within 1 % of 1, as the UTM zone",
    )


@pytest.mark.parametrize(
    ("old", "new", "what", "row"),
    [
        ("47.001", "90.5", "latitude is 90.5 degrees, beyond -90 to 90", 3),
        ("502.5", "-9999", "height is -9999 m, beyond -500 to 20000", 4),
        ("502.5", "inf", "height is inf m, beyond -500 to 20000", 4),
        ("3,2,3,2.5", "1e32,2,3,2.5", "xx is 1e+32 E, beyond -1e+08 to 1e+08", 4),
        ("359.5", "400", "heading is 400 degrees, beyond -360 to 360", 2),
    ],
)
def test_values_that_no_reading_can_have(
    tmp_path: Path, old: str, new: str, what: str, row: int
) -> None:
    told = refusal(GOOD.replace(old, new, 1), tmp_path).splitlines()
    assert told[0] == f"ReadingsError: {what}"
    assert told[1].startswith(f"  where: lines.csv, row {row} (line L10, 2031-03-05T08:00:0")


@pytest.mark.parametrize(
    ("time", "told"),
    [
        ("2031-13-05T08:00:00", "holds '2031-13-05T08:00:00'"),
        ("05.03.2031 08:00", "holds '05.03.2031 08:00'"),
        ("1880-01-01T08:00:00", "holds '1880-01-01T08:00:00'"),
        ("2031-03-05T08:00:00+01:00", "holds '2031-03-05T08:00:00+01:00'"),
        ("", "holds nothing"),
    ],
)
def test_times_that_cannot_be_read(tmp_path: Path, time: str, told: str) -> None:
    assert refusal(GOOD.replace("2031-03-05T08:00:00", time, 1), tmp_path) == message(
        f"column 'time' {told} where a date and time in ISO form must stand",
        "lines.csv, row 2",
        "correct it, or state 'date_format'; a reading without its time cannot be used",
    )


def test_a_name_that_is_missing(tmp_path: Path) -> None:
    assert refusal(GOOD.replace("F1,L10", "F1,", 2), tmp_path) == message(
        "the name of the line is missing, and 1 more reading like it",
        "lines.csv, row 2",
        "name the line of every reading",
    )


def test_a_line_of_two_flights(tmp_path: Path) -> None:
    text = GOOD.replace("F1,L10,2031-03-05T08:00:02.5", "F2,L10,2031-03-05T09:00:00")
    assert refusal(text, tmp_path) == message(
        "line L10 was flown in the flights F1 and F2",
        "lines.csv, row 4 (line L10, 2031-03-05T09:00:00)",
        "give each piece a name of its own: drift is estimated line by line",
    )


def test_times_that_say_utc_and_are_stated_not_to_be(tmp_path: Path) -> None:
    assert refusal(GOOD.replace(":01,", ":01Z,"), tmp_path, ahead_of_utc=18.0) == message(
        "column 'time' holds '2031-03-05T08:00:01Z', whose Z says UTC, but 'ahead_of_utc' is 18 s",
        "lines.csv, row 3",
        "leave out 'ahead_of_utc', or correct the column",
    )


def test_a_kind_that_is_none_and_a_pattern_that_fits_no_line(tmp_path: Path) -> None:
    stated: dict[str, Any] = {"columns": columns(flight=None, kind="flight"), "ties": None}
    assert refusal(GOOD.replace("F1", "tei"), tmp_path, **stated) == message(
        "there is no kind of line 'tei', and 4 more readings like it",
        "lines.csv, row 2 (line L10, 2031-03-05T08:00:00)",
        "did you mean 'tie'?",
    )
    assert refusal(GOOD, tmp_path, ties=["C*"]) == message(
        "no line fits the pattern 'C*' of the tie lines",
        "stage read_lines, ties",
        "correct it; lines are called L10, T90",
    )


def test_a_variable_that_is_missing_everywhere(tmp_path: Path) -> None:
    assert refusal(GOOD, tmp_path, nulls=["1.0"]) == message(
        "pitch is missing at all of 5 readings",
        "lines.csv",
        "leave out the column of pitch, or correct the nulls",
    )


@pytest.mark.parametrize(
    ("content", "what", "where", "cure"),
    [
        (b"", "the file is empty", "", "deliver a file with readings"),
        (b"\xef\xbb\xbf \n", "the file is empty", "", "deliver a file with readings"),
        (
            GOOD.partition("\n")[0].encode(),
            "the table has no rows of data",
            "",
            "deliver a file with readings",
        ),
        (
            GOOD.encode("utf-16-le"),
            "byte 1 is NUL, which no text holds",
            ", row 1",
            "copy the file again, and save UTF-16 text as UTF-8",
        ),
        (
            GOOD.replace("F1,T90", "Fünf,T90").encode("latin-1"),
            f"byte {GOOD.index('F1,T90') + 1} is 0xfc, which is not utf-8 text",
            ", row 5",
            "save the file as UTF-8, or state its encoding",
        ),
        (
            GOOD[:-30].encode(),
            "the row has 13 fields, not 22 as the header",
            ", row 6",
            "the file is cut off there: copy it again",
        ),
        (
            GOOD.replace("-8\n", "-8.25\n").replace("-9\n", "-9.2").encode(),
            "the file ends without a line end in '-9.2', written unlike the '-8.25' in the row "
            "before: it may be cut off",
            ", last row",
            "copy the file again; if it is whole, add a line end",
        ),
        (
            GOOD.replace(",", ";").encode(),
            "the header is one column for the delimiter ',': "
            "'flight;line;time;lon;lat;h;clr;hdg;pit;r'",
            ", row 1",
            "state the delimiter and the row of the header as they are in the file",
        ),
    ],
    ids=["empty", "blank", "header only", "NUL", "latin", "cut row", "cut number", "delimiter"],
)
def test_files_that_are_no_tables(
    tmp_path: Path, content: bytes, what: str, where: str, cure: str
) -> None:
    assert refusal(content, tmp_path) == message(what, f"lines.csv{where}", cure)


@pytest.mark.parametrize("cut", [4, 60, 200])
def test_a_gzip_file_that_is_cut_off(tmp_path: Path, cut: int) -> None:
    packed = gzip.compress(GOOD.encode(), mtime=0)
    assert refusal(packed[:cut], tmp_path, "lines.csv.gz") == message(
        "the gzip file is cut off", "lines.csv.gz", "copy or pack the file again"
    )


def test_a_file_that_only_is_called_gzip(tmp_path: Path) -> None:
    assert refusal(GOOD, tmp_path, "lines.csv.gz") == message(
        "is not a sound gzip file: Not a gzipped file (b'fl')",
        "lines.csv.gz",
        "copy or pack the file again",
    )
    packed = bytearray(gzip.compress(GOOD.encode(), mtime=0))
    packed[40:60] = bytes(20)
    told = refusal(bytes(packed), tmp_path, "lines.csv.gz")
    assert told.startswith("ReadingsError: is not a sound gzip file: ")


PIPELINE = """\
name = "Test"
crs = "EPSG:32633"

[[stages]]
stage = "read_lines"
tables = ["lines.csv"]
delimiter = ","
header = 1
frame = "ned"
sign = "static-positive"
height_reference = "ellipsoid"

[stages.columns]
line = "line"
time = "time"
longitude = "lon"
latitude = "lat"
height = "h"
xx = "xx"
xy = "xy"
xz = "xz"
yy = "yy"
yz = "yz"
zz = "zz"

[stages.units]
gradient = "E"
height = "m"
longitude = "deg"
"""


def pipeline_refusals(text: str, folder: Path) -> list[str]:
    path = folder / "pipeline.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(ExceptionGroup) as caught:
        read_pipeline(path, [stage_of(read_lines)])
    assert all(isinstance(error, PipelineFileError) for error in caught.value.exceptions)
    return [str(error).replace(str(path), path.name) for error in caught.value.exceptions]


def test_a_pipeline_file_states_it_all(tmp_path: Path) -> None:
    table(tmp_path)
    path = tmp_path / "pipeline.toml"
    path.write_text(PIPELINE, encoding="utf-8")
    (step,) = read_pipeline(path, [stage_of(read_lines)]).steps
    assert read_lines(step.settings).sizes["station"] == 5


def test_an_unknown_unit(tmp_path: Path) -> None:
    table(tmp_path)
    told = pipeline_refusals(PIPELINE.replace('height = "m"', 'height = "fathom"'), tmp_path)
    assert told == [
        "PipelineFileError: stage 'read_lines', setting 'units.height': "
        "write one of the units of length m, km, ft, ft-us, not 'fathom'\n"
        "  where: pipeline.toml, line 28\n"
        "  cure:  it is: unit of height: m, km, ft, ft-us"
    ]


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        (
            'longitude = "deg"\n',
            "",
            "state the unit of longitude in 'units': longitude has a column",
        ),
        ('"ned"', '"body"', "name the columns of heading, pitch, roll: readings are in body axes"),
        (
            '"ellipsoid"',
            '"orthometric"',
            "state 'separation' with orthometric heights, and only with them",
        ),
        (
            'xx = "xx"\nxy = "xy"',
            "",
            "name the columns of all nine elements, of the six xx xy xz yy yz zz, "
            "or of five of these, without one of xx yy zz",
        ),
        ('latitude = "lat"', "", "name the columns of longitude and latitude, of easting and "),
        (
            '"time"\n',
            '"time"\nseconds = "s"\n',
            "name the column of time, of date and time, or of ",
        ),
        ('"time"\n', '"time"\npitch = "p"\n', "name the columns of heading, pitch, roll all, or n"),
        ('xx = "xx"', 'xx = "xy"', "the column 'xy' is named for xx and xy"),
    ],
)
def test_settings_that_do_not_go_together(tmp_path: Path, old: str, new: str, told: str) -> None:
    table(tmp_path)
    assert PIPELINE.count(old) == 1
    (found,) = pipeline_refusals(PIPELINE.replace(old, new), tmp_path)
    assert told in found.splitlines()[0]
