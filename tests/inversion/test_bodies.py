import numpy as np
import pytest
import xarray as xr
from numpy.typing import NDArray

from gradred import survey
from gradred.errors import FitError, SurveyError
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


def mass_of(kind: str) -> float:
    """Return the planted excess mass, 1e9 kg: volumes in closed form."""
    truth = TRUTH[kind]
    volume = {
        "sphere": 4.0 / 3.0 * np.pi * 200.0**3,
        "prism": 600.0 * 500.0 * 400.0,
        "sheet": 1200.0 * 500.0 * 100.0,
    }[kind]
    return float(volume * truth[-1] / 1e9)


@pytest.mark.parametrize("kind", ["sphere", "prism", "sheet"])
def test_a_planted_body_comes_back_within_its_standard_errors(kind: str) -> None:
    scores = []
    for seed in range({"sphere": 20, "prism": 5, "sheet": 3}[kind]):
        model = fit_bodies(flown([kind], seed), settings([kind], seed))
        sd = model["body_sigma"].to_numpy()[0]
        error = model["body_value"].to_numpy()[0] - np.append(TRUTH[kind], mass_of(kind))
        scores.append((error / np.where(sd > 0, sd, np.inf))[sd > 0])
        np.testing.assert_array_equal(error[sd == 0], 0.0)
        # the depth within 10 % or two standard errors, whichever is larger
        depth = list(SHAPES[kind].parameters).index("height" if kind == "sphere" else "top")
        below = 60.0 - TRUTH[kind][depth]
        assert abs(error[depth]) < max(0.1 * below, 2 * sd[depth])
    # 27 to 100 scores that hang together within a body, some 20 to 60 of their own: 9 to 16 %
    # sampling error, at 2.5 of it
    assert np.sqrt(np.mean(np.square(scores))) == pytest.approx(
        1.0, abs=0.25 if kind == "sphere" else 0.4
    )


def test_standard_errors_hold_with_drift_left_on_the_lines() -> None:
    scores, widened = [], []
    for seed in range(20):
        data = flown(["sphere"], seed)
        number = np.unique(data["line"].to_numpy().astype(str), return_inverse=True)[1]
        drift = np.random.default_rng(100 + seed).normal(0.0, 1.5, (number.max() + 1, 6))
        drifted = data["gradient"].to_numpy() + drift[number]
        model = fit_bodies(
            survey.put("lines", data, "gradient", drifted, frame="enu"), settings(["sphere"], seed)
        )
        sd = model["body_sigma"].to_numpy()[0]
        free = sd > 0
        error = model["body_value"].to_numpy()[0] - np.append(TRUTH["sphere"], mass_of("sphere"))
        scores.append(error[free] / sd[free])
        if seed < 4:
            plain = fit_bodies(data, settings(["sphere"], seed))
            widened.append(sd[free] / plain["body_sigma"].to_numpy()[0][free])
    # 100 scores, some 60 of their own: 9 % sampling error, at 3 of it
    assert np.sqrt(np.mean(np.square(scores))) == pytest.approx(1.0, abs=0.3)
    # a drift of half the noise, common to the 51 readings of a line, counts
    assert np.mean(widened) > 1.3


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
        model["body_value"].to_numpy()[0, :5], TRUTH["sphere"], rtol=0, atol=1e-3
    )
    assert model["body_parameter"].to_numpy()[0, 5] == "excess mass [1e9 kg]"
    # 1e-3 m of 510 m depth is 2e-6 of it, three times that of the mass
    assert model["body_value"].to_numpy()[0, 5] == pytest.approx(mass_of("sphere"), rel=1e-5)


@pytest.mark.parametrize("digits", [0, 3, 6])
def test_a_fit_that_starts_where_another_ended_stays_there(digits: int) -> None:
    data = flown(["sphere"], 0)
    first = fit_bodies(data, settings(["sphere"]))
    printed = np.round(first["body_value"].to_numpy()[0, :5], digits)
    start = {"kind": "sphere", **dict(zip(SHAPES["sphere"].parameters, printed, strict=True))}
    again = fit_bodies(data, BodySettings.model_validate({"bodies": [start]}))
    sd = first["body_sigma"].to_numpy()
    # both searches end at a change of the misfit by 1e-10 of 6000: far below a standard error
    np.testing.assert_allclose(again["body_value"], first["body_value"], atol=1e-3 * sd.max())
    np.testing.assert_allclose(again["body_sigma"], sd, rtol=1e-4)


def test_a_linear_regional_field_is_told_from_the_body() -> None:
    data = flown(["sphere"], 3)
    east = (data["easting"].to_numpy() - data["easting"].to_numpy().mean())[:, None] / 1e3
    slope = np.array([5.0, 0.0, -3.0, -5.0, 2.0, 0.0])
    turn = enu_to_grid(data["convergence"].to_numpy()).inverse()
    sloped = data["gradient"].to_numpy() + turn.tensor(east * slope)
    tilted = survey.put("lines", data, "gradient", sloped, frame="enu")
    linear = settings(["sphere"], 3).model_copy(update={"regional": "linear"})
    model = fit_bodies(tilted, linear)
    found = model["predicted_bodies"].attrs["per_km_easting"]
    # noise of 3 E over 1020 readings within 0.9 km rms: 0.1 E/km, at 4 of it
    np.testing.assert_allclose(found, slope, atol=0.4)
    np.testing.assert_allclose(model["chi_squared_bodies"], 1.0, atol=0.14)
    error = (model["body_value"].to_numpy()[0, :5] - TRUTH["sphere"])[[0, 1, 2, 4]]
    assert np.all(np.abs(error) < 3.5 * model["body_sigma"].to_numpy()[0, [0, 1, 2, 4]])
    # without it the plane stays in the residuals
    assert float(fit_bodies(tilted, settings(["sphere"], 3))["chi_squared_bodies"][0]) > 2.0


def test_outliers_pull_little_with_the_soft_loss() -> None:
    data = flown(["sphere"], 2)
    wild = data["gradient"].to_numpy().copy()
    near = np.hypot(data["easting"] - TRUTH["sphere"][0], data["northing"] - TRUTH["sphere"][1])
    wild[np.argsort(near.to_numpy())[:12], 5] += 40.0
    spoilt = survey.put("lines", data, "gradient", wild, frame="enu")
    soft = settings(["sphere"], 2).model_copy(update={"loss": "soft"})

    def depth_error(model: xr.Dataset) -> float:
        return float(abs(model["body_value"].to_numpy()[0, 2] - TRUTH["sphere"][2]))

    robust, plain = fit_bodies(spoilt, soft), fit_bodies(spoilt, settings(["sphere"], 2))
    assert depth_error(robust) < 3.0 * float(robust["body_sigma"].to_numpy()[0, 2])
    assert depth_error(plain) > 3.0 * depth_error(robust)


def test_what_is_not_seen_keeps_the_sd_that_was_stated() -> None:
    start = settings(["sphere"], 1).bodies[0].model_copy(update={"hold": [], "sd": {"radius": 15}})
    model = fit_bodies(flown(["sphere"], 1), BodySettings(bodies=[start]))
    # the readings show mass only: the radius stays where it was, with the error stated for it
    assert model["body_value"].to_numpy()[0, 3] == pytest.approx(200.0, abs=0.01)
    assert model["body_sigma"].to_numpy()[0, 3] == pytest.approx(15.0, rel=1e-3)
    held = fit_bodies(flown(["sphere"], 1), settings(["sphere"], 1))
    # density takes the radius' error on, the mass does not
    assert model["body_sigma"].to_numpy()[0, 4] > 3.0 * held["body_sigma"].to_numpy()[0, 4]
    np.testing.assert_allclose(
        model["body_sigma"].to_numpy()[0, 5], held["body_sigma"].to_numpy()[0, 5], rtol=0.02
    )


@pytest.mark.parametrize("seed", [1, 2])
def test_many_starts_find_what_one_start_misses(seed: int) -> None:
    data = flown(["sphere"], 4)
    # a start 700 m beside a body 510 m deep, of the wrong sign: the search runs away from it
    wrong = (
        settings(["sphere"])
        .bodies[0]
        .model_copy(update={"density": -200.0, "easting": EAST + 1500.0, "height": -300.0})
    )
    with pytest.raises(FitError):
        fit_bodies(data, BodySettings(bodies=[wrong], rounds=60))
    wide = wrong.model_copy(update={"sd": {"easting": 500.0, "northing": 500.0, "height": 200.0}})
    many = BodySettings(bodies=[wide], starts=4, seed=seed, rounds=60)
    best, again = fit_bodies(data, many), fit_bodies(data, many)
    assert best["body_value"].attrs["starts"] == 4
    assert 1 <= best["body_value"].attrs["starts_that_agree"] < 4
    xr.testing.assert_identical(best, again)
    np.testing.assert_allclose(best["chi_squared_bodies"], 1.0, atol=0.14)


def test_mass_and_size_of_a_sphere_cannot_be_told_apart() -> None:
    with pytest.raises(FitError) as caught:
        fit_bodies(flown(["sphere"], 0), settings(["sphere"], hold=[]))
    assert str(caught.value) == (
        "FitError: the readings do not tell apart: radius of body 1, density of body 1\n"
        "  where: stage fit_bodies\n"
        "  cure:  hold one of them at a value known from elsewhere, or state its 'sd'"
    )


@pytest.mark.parametrize("key", ["hold", "sd"])
def test_a_parameter_that_is_not_there_is_refused(key: str) -> None:
    stated: object = ["dip"] if key == "hold" else {"dip": 3.0}
    start = settings(["sphere"]).bodies[0].model_copy(update={key: stated})
    with pytest.raises(FitError) as caught:
        fit_bodies(flown(["sphere"], 0), BodySettings(bodies=[start]))
    assert str(caught.value) == (
        "FitError: body 1, a sphere, has no parameter 'dip'\n"
        f"  where: stage fit_bodies, {key}\n"
        "  cure:  name some of: easting, northing, height, radius, density"
    )


def test_a_parameter_on_its_bound_is_refused() -> None:
    # a radius of 60 m cannot hold the mass of one of 200 m below 6000 kg/m3
    start = settings(["sphere"]).bodies[0].model_copy(update={"radius": 60.0, "density": 5000.0})
    with pytest.raises(FitError) as caught:
        fit_bodies(flown(["sphere"], 0), BodySettings(bodies=[start]))
    assert str(caught.value) == (
        "FitError: density of body 1 ended on its bound, 6000: what it trades with has run away\n"
        "  where: stage fit_bodies\n"
        "  cure:  hold it, hold another parameter of the body at a nearer value, or start nearer"
    )


def test_a_body_held_whole_is_refused() -> None:
    with pytest.raises(FitError) as caught:
        fit_bodies(
            flown(["sphere"], 0), settings(["sphere"], hold=list(SHAPES["sphere"].parameters))
        )
    assert str(caught.value) == (
        "FitError: every parameter of every body is held: there is nothing to fit\n"
        "  where: stage fit_bodies, hold\n"
        "  cure:  free what the readings show, such as easting, northing and a height"
    )


def test_too_few_readings_are_refused() -> None:
    data = flown(["sphere"], 0)
    flags = np.full(data.sizes["station"], 16)
    with pytest.raises(FitError) as caught:
        fit_bodies(survey.put("lines", data, "flag", flags), settings(["sphere"]))
    assert str(caught.value) == (
        "FitError: none of the 1020 stations is good\n"
        "  where: stage fit_bodies\n"
        "  cure:  look at the flags of the lines"
    )
    flags[:3] = 0
    with pytest.raises(FitError) as caught:
        fit_bodies(survey.put("lines", data, "flag", flags), settings(["sphere"]))
    assert str(caught.value) == (
        "FitError: 18 readings cannot tell 4 parameters and a regional field\n"
        "  where: stage fit_bodies\n"
        "  cure:  look at the flags of the lines, or hold more"
    )


@pytest.mark.parametrize("value", [0.0, np.nan, -1.0])
def test_readings_without_noise_are_refused(value: float) -> None:
    data = flown(["sphere"], 0)
    sigma = data["sigma"].to_numpy().copy()
    sigma[3] = value
    with pytest.raises(SurveyError) as caught:
        fit_bodies(survey.put("lines", data, "sigma", sigma, frame="enu"), settings(["sphere"]))
    assert str(caught.value) == (
        "SurveyError: 'sigma' is missing or not above 0 in 6 of 6120 good readings\n"
        "  where: stage fit_bodies\n"
        "  cure:  put estimate_noise before this stage"
    )


def test_a_search_without_rest_is_refused() -> None:
    few = settings(["sheet"], 3).model_copy(update={"rounds": 5})
    with pytest.raises(FitError) as caught:
        fit_bodies(flown(["sheet"], 0), few)
    assert str(caught.value) == (
        "FitError: the search for the bodies had not come to rest after 5 evaluations\n"
        "  where: stage fit_bodies\n"
        "  cure:  start nearer, hold what the readings do not show, or allow more 'rounds'"
    )


def test_every_parameter_has_bounds() -> None:
    for shape in SHAPES.values():
        for name in shape.parameters:
            low, high = bounds_of(name)
            assert low < high
    with pytest.raises(KeyError):
        bounds_of("colour")
