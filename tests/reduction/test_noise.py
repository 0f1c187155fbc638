import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st

from gradred.errors import FitError
from gradred.reduction.noise import NoiseSettings, difference_noise, estimate_noise
from gradred.tensor import COMPONENTS
from tests.synthetic import lines_part, pattern, point_masses

COMPONENT = np.array([4.0, 2.0, 3.0, 4.0, 3.0, 5.0])


def test_planted_noise_comes_back_per_component_and_line() -> None:
    random = np.random.default_rng(11)
    flight = pattern(traverses=40, ties=5)
    factor = np.where(np.arange(45) % 5 == 0, 1.6, 1.0)
    sigma = COMPONENT * factor[flight.line][:, None]
    field = point_masses(flight)
    found = difference_noise(
        field + random.normal(0.0, sigma), flight.line, np.ones(len(sigma), bool)
    )
    # 2565 differences: 3 % sampling error, and the median over lines of two kinds lies 8 % above
    # the quieter; the product, which is what counts, is compared per station: 61 × 6 differences
    # per line, 8 %, at 2.5 sd
    ratio = found.sigma / sigma
    assert np.abs(ratio - 1.0).max() < 0.2
    assert ratio.mean() == pytest.approx(1.0, abs=0.04)


@settings(deadline=None, max_examples=20)
@given(st.floats(0.01, 100.0), st.integers(2, 8))
def test_noise_scales_with_the_readings(scale: float, order: int) -> None:
    random = np.random.default_rng(2)
    flight = pattern(traverses=5, ties=3)
    readings = random.normal(0.0, 1.0, (len(flight.line), 6))
    good = np.ones(len(readings), dtype=bool)
    one = difference_noise(readings, flight.line, good, order=order).sigma
    many = difference_noise(scale * readings, flight.line, good, order=order).sigma
    np.testing.assert_allclose(many, scale * one, rtol=1e-12)


def test_a_polynomial_field_is_not_taken_for_noise() -> None:
    random = np.random.default_rng(3)
    flight = pattern()
    x = (flight.easting - flight.easting.mean()) / 1e3 + (flight.northing - 5.3e6) / 1e3
    noise = random.normal(0.0, 1.0, (len(x), 6))
    good = np.ones(len(x), dtype=bool)
    alone = difference_noise(noise, flight.line, good).sigma
    with_field = difference_noise(noise + 100 * x[:, None] ** 3, flight.line, good).sigma
    # differences of order 4 of a cubic vanish; rounding of values up to 3e4
    np.testing.assert_allclose(with_field, alone, rtol=1e-8)


def test_the_figure_is_told_whole() -> None:
    random = np.random.default_rng(4)
    flight = pattern()
    noise = random.normal(0.0, 3.0, (len(flight.line), 6))
    part = lines_part(flight, point_masses(flight) + noise)
    before = part.copy(deep=True)
    out = estimate_noise(part, NoiseSettings())
    xr.testing.assert_identical(part, before)
    told = out["sigma"].attrs
    assert told["ground_speed"] == pytest.approx(50.0)
    assert told["cutoff_wavelength"] == pytest.approx(100.0)
    # white noise of n E at 1 s: n √2 E/√Hz, one-sided (Parseval)
    np.testing.assert_allclose(told["density"], np.sqrt(2.0) * told["rms"])
    # geology has no trace, so the trace holds √3 times the noise of one element; 1342 readings:
    # 2 % sampling error for the rms, 4 % for the median of differences
    assert told["trace_rms"] == pytest.approx(3.0 * np.sqrt(3.0), rel=0.06)
    assert told["trace_white"] == pytest.approx(3.0 * np.sqrt(3.0), rel=0.12)
    assert told["components"].split() == list(COMPONENTS)


def test_too_few_readings_are_refused() -> None:
    flight = pattern(traverses=2, ties=2, step=1000.0)
    part = lines_part(flight, np.zeros((len(flight.line), 6)))
    with pytest.raises(FitError) as caught:
        estimate_noise(part, NoiseSettings())
    assert str(caught.value) == (
        "FitError: only 0 runs of 5 good readings in a row, 30 are needed\n"
        "  where: stage estimate_noise\n"
        "  cure:  lower its setting 'order', or look at why so many stations are flagged"
    )
