"""The demo survey from its line files to maps and model, against its truth.

The truth is what the readings were made from (demo_survey/truth.json): bodies in closed form.
"""

import json
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from numpy.typing import NDArray

from gradred import pipeline, survey
from gradred.inversion.shapes import SHAPES
from gradred.simulate import Prism, Sheet, Sphere
from tests.shipped import ROOT, run_shipped

Array = NDArray[np.float64]

pytestmark = pytest.mark.xdist_group("demo")
TRUTH = json.loads((ROOT / "demo_survey" / "truth.json").read_text(encoding="utf-8"))
KINDS = {"sphere": Sphere, "prism": Prism, "sheet": Sheet}


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> tuple[pipeline.Run, list[str]]:
    return run_shipped("demo.toml", tmp_path_factory.mktemp("demo") / "run")


@pytest.fixture(scope="module")
def lines(demo: tuple[pipeline.Run, list[str]]) -> xr.Dataset:
    return demo[0].part("lines")


@pytest.fixture(scope="module")
def model(demo: tuple[pipeline.Run, list[str]]) -> xr.Dataset:
    return demo[0].part("model")


def bodies(points: Array) -> Array:
    total = np.zeros((len(points), 6))
    for body in TRUTH["bodies"]:
        values = {k: v for k, v in body.items() if k != "kind"}
        total += KINDS[body["kind"]](**values).tensor(points)
    return total


def test_every_stage_ran_and_left_its_input_unchanged(
    demo: tuple[pipeline.Run, list[str]],
) -> None:
    # the comparison itself is made around every call: tests/shipped.py
    assert demo[1] == [stage.name for stage in pipeline.STAGES]


def test_the_ledger_closes_and_is_whole(lines: xr.Dataset) -> None:
    assert survey.closure(lines) < 1e-9
    assert survey.removed(lines) == tuple(survey.CORRECTIONS)
    assert sum(survey.flag_counts(lines).values()) == 0
    for name in ("gradient", "as_read", *(f"removed_{key}" for key in survey.CORRECTIONS)):
        assert lines[name].attrs["frame"] == "enu"


def test_what_is_left_is_the_bodies_and_the_noise(lines: xr.Dataset) -> None:
    with np.load(ROOT / "demo_survey" / "truth_stations.npz") as stored:
        truth = stored["bodies"]
    error = lines["gradient"].to_numpy() - truth
    traverse = lines["kind"].to_numpy() == "traverse"
    error -= error[traverse].mean(axis=0)
    ratio = np.sqrt(np.mean(error**2, axis=0)) / np.sqrt(np.mean(lines["sigma"] ** 2, axis=0))
    assert np.all((ratio > 0.9) & (ratio < 1.1)), ratio
    # and the stated noise is that of the truth: 4 E on the diagonal, less by √2 beside it; levelled
    # and turned, with a sampling error of 2 %
    np.testing.assert_allclose(
        lines["sigma"].attrs["rms"], np.array([1, 0.707, 0.707, 1, 0.707, 1]) * 4.0, rtol=0.06
    )


def test_the_terrain_is_that_of_the_truth(lines: xr.Dataset) -> None:
    with np.load(ROOT / "demo_survey" / "truth_stations.npz") as stored:
        truth = stored["terrain"]
    told = lines["removed_terrain"].attrs
    assert np.abs(lines["removed_terrain"].to_numpy() - truth).max() < told["tolerance"]
    assert told["proof_max"] < told["tolerance"]


def test_the_self_gradient_comes_back(lines: xr.Dataset) -> None:
    told = lines["removed_self"].attrs
    planted = TRUTH["self_gradient_body_E"]
    found, sd = told["body_tensor"], told["body_sigma"]
    for place, name in ((1, "xy"), (2, "xz"), (4, "yz")):
        assert abs(found[place] - planted[name]) < 3 * sd[place]
    difference = found[0] - found[3] - (planted["xx"] - planted["yy"])
    assert abs(difference) < 3 * 2 * sd[0]


def test_the_mapped_field_is_better_than_half_the_noise(
    demo: tuple[pipeline.Run, list[str]], lines: xr.Dataset
) -> None:
    grid = demo[0].part("grid")
    x, y = np.meshgrid(grid["easting"].to_numpy(), grid["northing"].to_numpy())
    surface = grid["surface"].to_numpy()
    there = np.isfinite(surface)
    points = np.column_stack([x[there], y[there], surface[there]])
    error = grid["gradient"].to_numpy()[there] - bodies(points)
    noise = float(np.sqrt(np.mean(lines["sigma"].to_numpy()[:, 5] ** 2)))
    assert np.sqrt(np.mean(error[:, 5] ** 2)) < 0.5 * noise
    # stated standard deviations hold within a quarter
    score = np.sqrt(np.mean((error / grid["sigma"].to_numpy()[there]) ** 2))
    assert score == pytest.approx(1.0, abs=0.25)


def test_depths_of_the_bodies(model: xr.Dataset, lines: xr.Dataset) -> None:
    flight = float(lines["height"].mean())
    for row, truth in enumerate(TRUTH["bodies"]):
        name = "height" if truth["kind"] == "sphere" else "top"
        place = list(SHAPES[truth["kind"]].parameters).index(name)
        found = float(model["body_value"].to_numpy()[row, place])
        sd = float(model["body_sigma"].to_numpy()[row, place])
        depth = float(lines["terrain_height"].mean()) - truth[name]
        assert flight > found
        assert abs(found - truth[name]) < max(0.1 * depth, 2 * sd), truth["kind"]


def test_the_voxels_fit_to_the_noise(model: xr.Dataset) -> None:
    assert 0.9 < float(model["voxel_density"].attrs["chi_squared"]) < 1.1
    assert 0.9 < float(model["chi_squared_voxels"].mean()) < 1.1
    assert 0.9 < float(model["chi_squared_bodies"].mean()) < 1.1


def test_products_and_record(demo: tuple[pipeline.Run, list[str]]) -> None:
    folder = demo[0].folder
    record = json.loads((folder / "record.json").read_text(encoding="utf-8"))
    assert record["closure_E"] < 1e-9
    assert len(record["inputs"]) == 5
    names = {Path(product["file"]).name for product in record["products"]}
    wanted = {"report.html", "tensor.png", "gradient_zz.tif", "grid.nc", "lines.parquet"}
    assert wanted | {"lines.csv.gz", "model.nc", "bodies.csv", "ledger.csv"} <= names
    assert all((folder / product["file"]).stat().st_size > 0 for product in record["products"])
