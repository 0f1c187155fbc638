from pathlib import Path

import netCDF4
import numpy as np
import pytest
import xarray as xr

from gradred import survey
from gradred.errors import SurveyError
from tests.synthetic import lines_part, pattern


@pytest.fixture
def lines() -> xr.Dataset:
    flight = pattern(traverses=3, ties=2, step=500.0)
    random = np.random.default_rng(0)
    return lines_part(flight, random.normal(0.0, 30.0, (len(flight.line), 6)))


def test_saved_and_opened_is_identical(lines: xr.Dataset, tmp_path: Path) -> None:
    survey.save("lines", lines, tmp_path / "lines.nc")
    part, back = survey.open_part(tmp_path / "lines.nc")
    assert part == "lines"
    xr.testing.assert_identical(back, lines)
    assert [path.name for path in tmp_path.iterdir()] == ["lines.nc"]


def test_units_in_the_file_are_those_of_udunits(lines: xr.Dataset, tmp_path: Path) -> None:
    survey.save("lines", lines, tmp_path / "lines.nc")
    # netCDF4 is another reader than the one that wrote
    with netCDF4.Dataset(tmp_path / "lines.nc") as stored:
        assert stored.Conventions == "CF-1.11"
        assert stored["gradient"].units == "1e-9 s-2"
        assert stored["gradient"].frame == "enu"
        assert stored["time"].units == "nanoseconds since 1970-01-01"
        assert "flag_meanings" in stored["flag"].ncattrs()


def test_flags_are_counted_and_left_out(lines: xr.Dataset) -> None:
    some = np.zeros(lines.sizes["station"], dtype=bool)
    some[:3] = True
    marked = survey.flag(survey.flag(lines, "spike", some), "reading_missing", some[::-1])
    counts = survey.flag_counts(marked)
    assert counts["spike"] == counts["reading_missing"] == 3
    assert sum(counts.values()) == 6
    assert survey.good(marked).sum() == lines.sizes["station"] - 6
    assert survey.good(lines).all()


def test_a_correction_adds_back_and_leaves_its_input(lines: xr.Dataset) -> None:
    before = lines.copy(deep=True)
    amount = np.random.default_rng(1).normal(0.0, 50.0, (lines.sizes["station"], 6))
    out = survey.subtract(lines, "terrain", amount, 1.5, density=2480.0)
    xr.testing.assert_identical(lines, before)
    assert survey.closure(out) < 1e-12  # one subtraction and one addition of numbers near 1e2
    assert survey.removed(out) == ("terrain",)
    assert out["removed_terrain"].attrs["density"] == 2480.0
    assert out["gradient"].attrs["frame"] == "enu"
    broken = survey.put("lines", out, "as_read", out["as_read"].to_numpy() + 1e-3, frame="enu")
    assert survey.closure(broken) == pytest.approx(1e-3, rel=1e-6)


def test_a_correction_made_twice_is_refused(lines: xr.Dataset) -> None:
    once = survey.subtract(lines, "tide", np.zeros((lines.sizes["station"], 6)), 0.0)
    with pytest.raises(SurveyError) as caught:
        survey.subtract(once, "tide", np.zeros((lines.sizes["station"], 6)), 0.0)
    assert str(caught.value) == (
        "SurveyError: tide of Moon and Sun has been removed already\n"
        "  where: ledger of the lines, removed_tide\n"
        "  cure:  name the stage once in the pipeline file"
    )


def test_a_tensor_without_a_frame_is_refused(lines: xr.Dataset) -> None:
    with pytest.raises(SurveyError) as caught:
        survey.put("lines", lines, "gradient", lines["gradient"].to_numpy())
    assert str(caught.value) == (
        "SurveyError: 'gradient' of lines cannot be in the frame None\n"
        "  where: survey.put\n"
        "  cure:  name one of: enu, grid, ned, body"
    )


def test_the_door_refuses_what_breaks_the_contract(lines: xr.Dataset) -> None:
    wrong_unit = lines.copy(deep=True)
    wrong_unit["gradient"].attrs["units"] = "s-2"
    for broken, part in (
        (wrong_unit, "lines"),
        (lines.assign(unheard=lines["height"]), "lines"),
        (lines, "grid"),
        (lines.drop_vars("height"), "lines"),
    ):
        with pytest.raises(SurveyError):
            survey.check(part, broken, ("height",), where="going into stage x")
    survey.check("lines", lines, ("height",), where="going into stage x")


def test_the_table_names_every_variable_once() -> None:
    table = survey.table()
    assert not table.duplicated(["part", "name"]).any()
    assert (table["meaning"].str.len() > 10).all()
    assert set(table["part"]) == set(survey.PARTS)


def test_another_file_is_refused(tmp_path: Path) -> None:
    xr.Dataset({"a": ("x", [1.0])}).to_netcdf(tmp_path / "a.nc", engine="h5netcdf")
    with pytest.raises(SurveyError) as caught:
        survey.open_part(tmp_path / "a.nc")
    assert str(caught.value) == (
        "SurveyError: no part of a survey is called 'None'\n"
        f"  where: {tmp_path / 'a.nc'}\n"
        "  cure:  open a file that gradred saved"
    )
