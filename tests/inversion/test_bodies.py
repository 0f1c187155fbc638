import numpy as np
import pytest
import xarray as xr
from numpy.typing import NDArray

from gradred import survey
from gradred.errors import FitError
from gradred.inversion.bodies import BodySettings, fit_bodies
from gradred.inversion.cautions import CAUTION
from gradred.inversion.shapes import SHAPES, bounds_of
from gradred.tensor import enu_to_grid
from tests.synthetic import EAST, NORTH, lines_part, pattern

Array = NDArray[np.float64]

NOISE = 3.0
TRUTH = {
    "sphere": np.array([EAST + 800.0, NORTH + 900.0, -450.0, 200.0, 700.0]),
    "prism": np.array([EAST + 2200.0, NORTH + 2100.0, -200.0, 600.0, 500.0, 400.0, -450.0]),
    "sheet": np.array(
        [EAST + 1500.0, NORTH + 1500.0, -150.0, 40.0, 60.0, 1200.0, 500.0, 100.0, 600.0]
    ),
}


def flown(kinds: list[str], seed: int) -> xr.Dataset:
    random = np.random.default_rng(seed)
    flight = pattern(traverses=16, ties=4, step=60.0)
    points = np.column_stack([flight.easting, flight.northing, np.full(len(flight.line), 60.0)])
    part = lines_part(flight, np.zeros((len(points), 6)))
    field = sum((SHAPES[k].tensor(TRUTH[k], points) for k in kinds), np.zeros((len(points), 6)))
    turn = enu_to_grid(part["convergence"].to_numpy()).inverse()
    constant = np.array([4.0, 1.0, -2.0, 3.0, -1.0, 5.0])
    readings = turn.tensor(field) + constant + random.normal(0.0, NOISE, field.shape)
    part = survey.put("lines", part, "gradient", readings, frame="enu")
    return survey.put("lines", part, "sigma", np.full(field.shape, NOISE), frame="enu")


def settings(kinds: list[str], seed: int = 0, hold: list[str] | None = None) -> BodySettings:
    """Return start values some way off the truth."""
    random = np.random.default_rng(seed)
    held = {"sphere": ["radius"], "prism": ["density"], "sheet": ["thickness"]}
    bodies: list[dict[str, object]] = []
    for kind in kinds:
        fixed = held[kind] if hold is None else hold
        values = {
            name: truth
            if name in fixed
            else truth + random.normal() * {"m": 40.0, "degree": 5.0, "kg/m3": 50.0}[unit]
            for (name, unit), truth in zip(
                SHAPES[kind].parameters.items(), TRUTH[kind], strict=True
            )
        }
        bodies.append({"kind": kind, "hold": fixed, **values})
    return BodySettings.model_validate({"bodies": bodies})


@pytest.mark.parametrize("kind", ["sphere", "prism", "sheet"])
def test_a_planted_body_comes_back_within_its_standard_errors(kind: str) -> None:
    scores = []
    for seed in range(8 if kind == "sphere" else 4):
        model = fit_bodies(flown([kind], seed), settings([kind], seed))
        sd = model["body_sigma"].to_numpy()[0]
        error = model["body_value"].to_numpy()[0] - TRUTH[kind]
        scores.append((error / np.where(sd > 0, sd, np.inf))[sd > 0])
        np.testing.assert_array_equal(error[sd == 0], 0.0)
        # the depth within 10 % or two standard errors, whichever is larger
        depth = list(SHAPES[kind].parameters).index("height" if kind == "sphere" else "top")
        below = 60.0 - TRUTH[kind][depth]
        assert abs(error[depth]) < max(0.1 * below, 2 * sd[depth])
    # 24 to 32 scores that hang together within a body: 20 % sampling error, at 2.5 of it
    assert np.sqrt(np.mean(np.square(scores))) == pytest.approx(1.0, abs=0.5)


def test_three_bodies_at_once() -> None:
    kinds = ["sphere", "prism", "sheet"]
    data = flown(kinds, 5)
    before = data.copy(deep=True)
    model = fit_bodies(data, settings(kinds, 5))
    xr.testing.assert_identical(data, before)
    assert list(model["body_kind"].to_numpy()) == kinds
    for row, kind in enumerate(kinds):
        count = len(TRUTH[kind])
        error = model["body_value"].to_numpy()[row, :count] - TRUTH[kind]
        sd = model["body_sigma"].to_numpy()[row, :count]
        # 18 errors at once: below 3.5 standard errors
        assert np.all(np.abs(error) <= 3.5 * sd)
    # 1020 readings per component: 4.4 % sampling error of a variance, at 3 of it
    np.testing.assert_allclose(model["chi_squared_bodies"], 1.0, atol=0.14)
    assert model["body_value"].attrs["caution"] == CAUTION
    constants = model["predicted_bodies"].attrs["constants"]
    turned = enu_to_grid(-1.5).tensor(np.array([4.0, 1.0, -2.0, 3.0, -1.0, 5.0]))
    np.testing.assert_allclose(constants, turned, atol=0.5)
    total = model["predicted_bodies"] + model["residual_bodies"]
    level = data["gradient"].to_numpy() - total.to_numpy()
    # what is left between reading and prediction is one constant, turned to true north
    np.testing.assert_allclose(level, np.broadcast_to(level[0], level.shape), atol=1e-9)


def test_a_perfect_body_is_found_to_many_digits() -> None:
    data = flown(["sphere"], 0)
    points = np.column_stack([data[n].to_numpy() for n in ("easting", "northing", "height")])
    turn = enu_to_grid(data["convergence"].to_numpy()).inverse()
    exact = turn.tensor(SHAPES["sphere"].tensor(TRUTH["sphere"], points))
    model = fit_bodies(
        survey.put("lines", data, "gradient", exact, frame="enu"), settings(["sphere"], 1)
    )
    # no noise: down to the tolerance of the search, 1e-8 of steps of 10 m
    np.testing.assert_allclose(
        model["body_value"].to_numpy()[0], TRUTH["sphere"], rtol=0, atol=1e-3
    )


def test_mass_and_size_of_a_sphere_cannot_be_told_apart() -> None:
    with pytest.raises(FitError) as caught:
        fit_bodies(flown(["sphere"], 0), settings(["sphere"], hold=[]))
    assert str(caught.value) == (
        "FitError: the readings do not tell apart: radius of body 1, density of body 1\n"
        "  where: stage fit_bodies\n"
        "  cure:  hold one of them at a value known from elsewhere"
    )


def test_a_parameter_that_is_not_there_cannot_be_held() -> None:
    with pytest.raises(FitError) as caught:
        fit_bodies(flown(["sphere"], 0), settings(["sphere"], hold=["dip"]))
    assert str(caught.value) == (
        "FitError: body 1, a sphere, has no parameter 'dip' to hold\n"
        "  where: stage fit_bodies, hold\n"
        "  cure:  name some of: easting, northing, height, radius, density"
    )


def test_a_search_without_rest_is_refused() -> None:
    few = settings(["sheet"], 3).model_copy(update={"rounds": 5})
    with pytest.raises(FitError) as caught:
        fit_bodies(flown(["sheet"], 0), few)
    assert "had not come to rest after 5 evaluations" in caught.value.what


def test_every_parameter_has_bounds() -> None:
    for shape in SHAPES.values():
        for name in shape.parameters:
            low, high = bounds_of(name)
            assert low < high
    with pytest.raises(KeyError):
        bounds_of("colour")
