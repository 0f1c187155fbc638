import numpy as np
import pytest
import xarray as xr

from gradred import survey
from gradred.errors import SurveyError
from gradred.newton.tides import tide_tensor
from gradred.reduction.tide import TideSettings, remove_tide
from tests.synthetic import lines_part, pattern


def test_the_tide_is_removed_and_added_back() -> None:
    flight = pattern(traverses=3, ties=2)
    data = lines_part(flight, np.zeros((len(flight.line), 6)))
    before = data.copy(deep=True)
    out = remove_tide(data, TideSettings())
    xr.testing.assert_identical(data, before)
    place = [data[n].to_numpy() for n in ("time", "longitude", "latitude", "height")]
    np.testing.assert_array_equal(out["removed_tide"].to_numpy(), tide_tensor(*place))
    # the published limit of the tide's gradient
    assert 1e-5 < np.abs(out["removed_tide"].to_numpy()).max() < 3e-4
    assert survey.closure(out) < 1e-18
    np.testing.assert_allclose(
        out["sigma_tide"].to_numpy(), 0.2 * np.abs(out["removed_tide"].to_numpy())
    )


def test_a_station_without_a_position_keeps_nothing() -> None:
    flight = pattern(traverses=3, ties=2)
    data = lines_part(flight, np.zeros((len(flight.line), 6)))
    height = data["height"].to_numpy().copy()
    height[4] = np.nan
    out = remove_tide(survey.put("lines", data, "height", height), TideSettings())
    assert np.isnan(out["removed_tide"].to_numpy()).all(axis=1).sum() == 1


def test_readings_in_body_axes_are_refused() -> None:
    flight = pattern(traverses=2, ties=2)
    data = lines_part(flight, np.zeros((len(flight.line), 6)), frame="body")
    with pytest.raises(SurveyError) as caught:
        remove_tide(data, TideSettings())
    assert str(caught.value) == (
        "SurveyError: 'gradient' of lines is in the frame 'body', but must be in 'enu'\n"
        "  where: stage remove_tide\n"
        "  cure:  put the stage that turns it before this one (rotate_to_enu for lines)"
    )
