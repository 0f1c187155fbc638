import numpy as np
import pytest
import xarray as xr

from gradred import survey
from gradred.errors import FitError
from gradred.reduction.self_gradient import (
    SEPARABLE,
    SelfGradientSettings,
    remove_self_gradient,
)
from gradred.tensor import body_to_enu
from tests.synthetic import Array, lines_part, pattern, point_masses

PLANTED = np.array([4.0, -6.0, 9.0, -4.0, 5.0, 0.0])
DRIFT, NOISE = 5.0, 3.0


def burdened(seed: int, *, drift: float = DRIFT) -> xr.Dataset:
    """Return lines with bodies, an offset per line, noise and the planted tensor in body axes."""
    random = np.random.default_rng(seed)
    flight = pattern()
    n = len(flight.line)
    field = point_masses(flight) + random.normal(0.0, NOISE, (n, 6))
    field += random.normal(0.0, drift, (flight.line.max() + 1, 6))[flight.line]
    part = lines_part(flight, field)
    attitude = [part[name].to_numpy() for name in ("heading", "pitch", "roll")]
    return survey.put(
        "lines", part, "gradient", field + body_to_enu(*attitude).tensor(PLANTED), frame="enu"
    )


def separable(tensor: Array) -> Array:
    return np.array([tensor[0] - tensor[3], tensor[1], tensor[2], tensor[4]])


def test_planted_tensor_comes_back_within_its_standard_error() -> None:
    scores = []
    for seed in range(25):
        out = remove_self_gradient(burdened(seed), SelfGradientSettings())
        attrs = out["removed_self"].attrs
        sd = attrs["body_sigma"]
        error = separable(attrs["body_tensor"]) - separable(PLANTED)
        scores.append(error / np.array([2 * sd[0], sd[1], sd[2], sd[4]]))
    # 100 z-scores: 7 % sampling error of their spread; the robust scale takes a share of the
    # offsets for noise: 25 % in all
    assert np.sqrt(np.mean(np.square(scores))) == pytest.approx(1.0, abs=0.25)


def test_crossings_agree_better_afterwards() -> None:
    out = remove_self_gradient(burdened(1, drift=0.5), SelfGradientSettings(drift_sd=0.5))
    attrs = out["removed_self"].attrs
    # the planted elements make 2 to 18 E between headings that differ by 90 or 180 degrees
    assert np.all(attrs["misfit_after"][:3] < 0.5 * attrs["misfit_before"][:3])
    # standard errors near 0.5 E / √11: 4 of them
    np.testing.assert_allclose(separable(attrs["body_tensor"]), separable(PLANTED), atol=1.0)


def test_what_headings_cannot_separate_is_left_alone() -> None:
    attrs = remove_self_gradient(burdened(2), SelfGradientSettings())["removed_self"].attrs
    assert attrs["body_tensor"][5] == 0.0
    assert attrs["body_tensor"][0] == -attrs["body_tensor"][3]
    assert attrs["body_sigma"][5] == 0.0
    # the law behind it: diag(-1/2, -1/2, 1) is unchanged by any turn about the vertical
    lone = np.array([-0.5, 0.0, 0.0, -0.5, 0.0, 1.0])
    turned = body_to_enu(np.linspace(0, 360, 13), np.zeros(13), np.zeros(13)).tensor(lone)
    np.testing.assert_allclose(turned, np.broadcast_to(lone, (13, 6)), atol=1e-15)
    np.testing.assert_allclose(SEPARABLE @ lone, 0.0, atol=1e-15)


def test_input_is_not_changed_and_the_ledger_closes() -> None:
    data = burdened(3)
    data = survey.put("lines", data, "as_read", data["gradient"].to_numpy(), frame="enu")
    before = data.copy(deep=True)
    out = remove_self_gradient(data, SelfGradientSettings())
    xr.testing.assert_identical(data, before)
    # a difference and a sum of numbers below 1e3 E
    assert survey.closure(out) < 1e-9


def test_lines_that_do_not_cross_are_refused() -> None:
    flight = pattern(traverses=6, ties=2)
    part = lines_part(flight, np.zeros((len(flight.line), 6))).isel(station=~flight.tie)
    with pytest.raises(FitError) as caught:
        remove_self_gradient(part, SelfGradientSettings())
    assert str(caught.value) == (
        "FitError: 6 lines have only 0 crossings with readings on both sides\n"
        "  where: stage remove_self_gradient\n"
        "  cure:  fly lines at several headings that cross, or leave this stage out"
    )
