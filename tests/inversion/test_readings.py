import numpy as np
import pytest
import xarray as xr
from numpy.typing import NDArray

from gradred import survey
from gradred.errors import FitError, SurveyError
from gradred.inversion.bodies import BodySettings, fit_bodies
from gradred.inversion.readings import station_readings
from gradred.newton.bodies import prism_tensor
from gradred.tensor import enu_to_grid
from tests.synthetic import EAST, NORTH, lines_part, pattern

Array = NDArray[np.float64]

BOX = np.array([[EAST + 1000.0, EAST + 1700.0, NORTH + 1200.0, NORTH + 1800.0, -500.0, -150.0]])


def flown() -> xr.Dataset:
    flight = pattern(traverses=10, ties=3, step=60.0)
    points = np.column_stack([flight.easting, flight.northing, np.full(len(flight.line), 60.0)])
    part = lines_part(flight, np.zeros((len(points), 6)))
    turn = enu_to_grid(part["convergence"].to_numpy()).inverse()
    noise = np.random.default_rng(2).normal(0.0, 3.0, (len(points), 6))
    readings = turn.tensor(prism_tensor(points, BOX, 500.0)) + [3.0, 0, -2.0, 1.0, 0, 5.0] + noise
    part = survey.put("lines", part, "gradient", readings, frame="enu")
    return survey.put("lines", part, "sigma", np.full(readings.shape, 3.0), frame="enu")


def test_good_readings_in_the_frame_of_the_grid() -> None:
    data = flown()
    flags = np.zeros(data.sizes["station"])
    flags[[4, 9]] = 16
    data = survey.put("lines", data, "flag", flags)
    before = data.copy(deep=True)
    used = station_readings(data, where="here")
    xr.testing.assert_identical(data, before)
    assert len(used.points) == data.sizes["station"] - 2
    assert used.count == 6 * len(used.points)
    assert used.line.max() == 12
    np.testing.assert_array_equal(used.common, 0.0)
    back = enu_to_grid(-1.5).inverse().tensor(used.readings)
    # a turn there and back: rounding
    np.testing.assert_allclose(back, data["gradient"].to_numpy()[flags == 0], atol=1e-12)


def test_what_levelling_left_is_kept_apart() -> None:
    data = flown()
    sd = np.full((data.sizes["station"], 6), 1.5)
    sd[3] = np.nan
    used = station_readings(
        survey.put("lines", data, "sigma_levelling", sd, frame="enu"), where="here"
    )
    # vertical components do not mix with themselves under a turn about the vertical
    np.testing.assert_allclose(np.delete(used.common[:, 5], 3), 1.5)
    np.testing.assert_array_equal(used.common[3], 0.0)


def test_a_completed_element_is_not_fitted_but_its_constant_follows() -> None:
    data = flown()
    readings = data["gradient"].to_numpy().copy()
    readings[:, 5] = -readings[:, 0] - readings[:, 3]
    sigma = np.full(readings.shape, 3.0)
    sigma[:, 5] *= np.sqrt(2.0)
    data = survey.put("lines", data, "gradient", readings, frame="enu", completed="zz")
    data = survey.put("lines", data, "sigma", sigma, frame="enu")
    used = station_readings(data, where="here")
    assert used.count == 5 * len(used.points)
    start = {"easting": EAST + 1350, "northing": NORTH + 1500, "top": -150, "width": 700}
    box = {"kind": "prism", "length": 600, "extent": 350, "density": 500, "hold": ["density"]}
    model = fit_bodies(data, BodySettings.model_validate({"bodies": [{**start, **box}]}))
    constants = model["predicted_bodies"].attrs["constants"]
    assert constants[5] == pytest.approx(-constants[0] - constants[3], abs=1e-12)
    # 663 readings per component: 5.5 % sampling error of a variance, at 3 of it
    np.testing.assert_allclose(model["chi_squared_bodies"], 1.0, atol=0.17)


def test_lines_without_good_stations_or_noise_are_refused() -> None:
    data = flown()
    with pytest.raises(FitError) as none:
        station_readings(
            survey.put("lines", data, "flag", np.full(data.sizes["station"], 1)), where="here"
        )
    assert str(none.value) == (
        "FitError: none of the 663 stations is good\n"
        "  where: here\n"
        "  cure:  look at the flags of the lines"
    )
    sigma = data["sigma"].to_numpy().copy()
    sigma[7, 2] = 0.0
    with pytest.raises(SurveyError) as noiseless:
        station_readings(survey.put("lines", data, "sigma", sigma, frame="enu"), where="here")
    assert str(noiseless.value) == (
        "SurveyError: 'sigma' is missing or not above 0 in 1 of 3978 good readings\n"
        "  where: here\n"
        "  cure:  put estimate_noise before this stage"
    )
