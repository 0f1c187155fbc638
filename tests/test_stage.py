from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from pydantic import Field, ValidationError

from gradred import survey
from gradred.errors import SurveyError
from gradred.stage import (
    Cost,
    Crs,
    InputFile,
    KilogramsPerCubicMetre,
    Metres,
    Settings,
    files,
    listening,
    plain,
    progress,
    stage,
    stage_of,
)
from tests.synthetic import lines_part, pattern


class LiftSettings(Settings):
    """Settings of the stage ``lift``."""

    by: Metres = Field(10.0, ge=0, le=1000, description="metres upward")
    density: KilogramsPerCubicMetre = Field(2670.0, ge=500, le=6000, description="density")
    table: InputFile | None = Field(None, description="a file")


@stage(
    makes="lines",
    needs={"lines": ("height",)},
    adds=("clearance",),
    forecast=lambda _, sizes: Cost(sizes["stations"], 0.0),
)
def lift(lines: xr.Dataset, settings: LiftSettings) -> xr.Dataset:
    """Put the clearance below every station."""
    return survey.put("lines", lines, "clearance", lines["height"].to_numpy() - settings.by)


@stage(makes="lines", needs={"lines": ("height",)}, adds=("clearance",))
def forget(lines: xr.Dataset, settings: LiftSettings) -> xr.Dataset:
    """Claim more than it does."""
    return lines


@pytest.fixture
def lines() -> xr.Dataset:
    flight = pattern(traverses=3, ties=2, step=500.0)
    return lines_part(flight, np.zeros((len(flight.line), 6)))


def test_a_stage_is_recorded_and_leaves_its_input(lines: xr.Dataset) -> None:
    before = lines.copy(deep=True)
    out = lift(lines, LiftSettings(by=5.0))
    xr.testing.assert_identical(lines, before)
    assert '"stage": "lift"' in out.attrs["record"]
    assert '"by": 5.0' in out.attrs["record"]
    contract = stage_of(lift)
    assert contract.takes == ("lines",)
    assert contract.summary == "Put the clearance below every station."
    assert contract.forecast is not None
    assert contract.forecast(LiftSettings(), {"stations": 3.0}) == Cost(3.0, 0.0)


def test_both_doors_are_checked(lines: xr.Dataset) -> None:
    with pytest.raises(SurveyError) as caught:
        lift(lines.drop_vars("height"), LiftSettings())
    assert str(caught.value) == (
        "SurveyError: the lines lack height\n"
        "  where: going into stage lift\n"
        "  cure:  deliver it, or put the stage that makes it before this one"
    )
    with pytest.raises(SurveyError) as caught:
        forget(lines, LiftSettings())
    assert str(caught.value) == (
        "SurveyError: the lines lack clearance\n"
        "  where: coming out of stage forget\n"
        "  cure:  deliver it, or put the stage that makes it before this one"
    )


def test_text_may_name_another_unit() -> None:
    assert LiftSettings.model_validate({"density": "2.67 g/cm3"}).density == 2670.0
    # international foot, exact by definition
    assert LiftSettings.model_validate({"by": "100 ft"}).by == pytest.approx(30.48)
    with pytest.raises(ValidationError, match="write a number in kg/m3"):
        LiftSettings.model_validate({"density": "2.67 oz"})
    with pytest.raises(ValidationError, match="greater than or equal to 500"):
        LiftSettings.model_validate({"density": 2.67})
    with pytest.raises(ValidationError):
        LiftSettings.model_validate({"by": float("inf")})


def test_a_crs_is_an_epsg_code() -> None:
    class Mapped(Settings):
        crs: Crs

    assert Mapped(crs="EPSG:32633").crs == "EPSG:32633"
    with pytest.raises(ValidationError, match="for example 'EPSG:32633'"):
        Mapped(crs="UTM 33N")


def test_files_are_found_against_the_folder_of_the_pipeline(tmp_path: Path) -> None:
    context = {"folder": tmp_path / "pipelines"}
    made = LiftSettings.model_validate({"table": "../data/a.csv"}, context=context)
    assert files(made) == [(tmp_path / "data" / "a.csv").resolve()]
    assert plain(made, lambda path: path.name) == {"by": 10.0, "density": 2670.0, "table": "a.csv"}


def test_progress_reaches_whoever_listens() -> None:
    heard: list[tuple[float, float, str]] = []
    progress(1.0, 2.0, "nobody")
    with listening(lambda *told: heard.append(told)):
        progress(1.0, 2.0, "terrain")
    progress(2.0, 2.0, "nobody")
    assert heard == [(1.0, 2.0, "terrain")]
