import math

import pytest
from scipy import constants

from gradred import units
from gradred.errors import ReadingsError


def test_constants_are_those_of_scipy() -> None:
    # scipy carries the CODATA adjustment current at its release: 2018 and 2022 share this value
    assert units.G == constants.G
    # Moritz 2000: GRS80, 7292115e-11 rad/s exactly
    assert units.EARTH_RATE == 7292115e-11


@pytest.mark.parametrize(
    ("unit", "quantity", "value"),
    [
        # scipy.constants holds the exact definitions
        ("ft", "length", constants.foot),
        ("ft-us", "length", constants.survey_foot),
        ("rad", "angle", 1.0 / constants.degree),
        ("deg/s", "rate", constants.degree),
        ("deg/h", "rate", constants.degree / constants.hour),
        # 1 E = 0.1 mGal/km = 0.1 µGal/m: the definition of the eotvos
        ("mGal/km", "gradient", 10.0),
        ("uGal/m", "gradient", 10.0),
        ("g/cm3", "density", 1000.0),
    ],
)
def test_factors(unit: str, quantity: str, value: float) -> None:
    # products of two constants: one rounding
    assert math.isclose(units.factor(unit, quantity, where="here"), value, rel_tol=1e-9)


def test_an_unknown_unit_is_refused() -> None:
    with pytest.raises(ReadingsError) as caught:
        units.factor("mE", "gradient", where="lines.csv, column txx")
    assert str(caught.value) == (
        "ReadingsError: unknown unit 'mE' for a gradient\n"
        "  where: lines.csv, column txx\n"
        "  cure:  write one of: E, s-2, 1e-9 s-2, mGal/km, uGal/m"
    )
