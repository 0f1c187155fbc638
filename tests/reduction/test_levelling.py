import numpy as np
import pytest
import xarray as xr

from gradred import survey
from gradred.errors import FitError
from gradred.reduction.levelling import LevelSettings, drift_basis, level_lines
from tests.synthetic import Array, Flight, lines_part, pattern, point_masses

NOISE = 3.0
PLANTED = LevelSettings(offset_sd=8.0, bend_sd=4.0)


def drifting(seed: int) -> tuple[Flight, xr.Dataset, Array, Array]:
    """Return a flight, its part, the planted drift and the field without its mean."""
    random = np.random.default_rng(seed)
    flight = pattern()
    n = len(flight.line)
    along = np.concatenate([np.linspace(-1, 1, c) for c in np.bincount(flight.line)])
    offset, slope = (random.normal(0.0, s, (flight.line.max() + 1, 6)) for s in (8.0, 4.0))
    drift = offset[flight.line] + slope[flight.line] * along[:, None]
    field = point_masses(flight)
    data = lines_part(flight, field + drift + random.normal(0.0, NOISE, (n, 6)))
    return flight, data, drift, field


def test_planted_drift_comes_back_within_its_standard_deviation() -> None:
    scores = []
    for seed in range(12):
        flight, data, drift, _ = drifting(seed)
        out = level_lines(data, PLANTED)
        found = out["removed_levelling"].to_numpy()
        wrong = found - drift
        wrong -= wrong[~flight.tie].mean(axis=0)
        scores.append(wrong / out["sigma_levelling"].to_numpy())
    # z-scores of 12 seeds, 22 lines, 6 components, 2 coefficients: 2 % sampling error; few common
    # modes hold much of the variance, and the field curves a little within the window: 12 %
    assert np.std(scores) == pytest.approx(1.0, abs=0.12)


def test_levelling_leaves_the_noise_only() -> None:
    flight, data, _, field = drifting(3)
    out = level_lines(data, PLANTED)
    error = out["gradient"].to_numpy() - field
    error -= error[~flight.tie].mean(axis=0)
    rms = np.sqrt(np.mean(error**2, axis=0))
    # what is left is the noise and what the drift's own standard deviation says; 1342 readings,
    # but few common modes over the whole block: 20 %
    expected = np.sqrt(NOISE**2 + np.mean(out["sigma_levelling"].to_numpy() ** 2, axis=0))
    np.testing.assert_allclose(rms, expected, rtol=0.2)
    assert np.all(expected < 1.2 * NOISE)
    misfit = out["removed_levelling"].attrs
    assert np.all(misfit["misfit_after"] < 0.5 * misfit["misfit_before"])
    assert misfit["crossings"] == 16 * 6
    assert misfit["unlevelled"] == "none"


def test_spikes_at_crossings_do_not_pull() -> None:
    flight, data, _, field = drifting(4)
    spiked = data["gradient"].to_numpy().copy()
    random = np.random.default_rng(1)
    hit = random.choice(len(spiked), 25, replace=False)
    spiked[hit] += 400.0
    calm = np.delete(np.arange(len(spiked)), hit)
    part = lines_part(flight, spiked)
    error = (level_lines(part, PLANTED)["gradient"].to_numpy() - field)[calm]
    error -= error.mean(axis=0)
    # 25 spikes of 130 sd, each within the window of one crossing or none: a fifth of all 96
    # crossings is spoilt (a pull of 50 to 130 E each), and the drift stays within 2 sd of a reading
    assert np.sqrt(np.mean(error**2)) < 2.0 * NOISE


def test_the_datum_is_zero_over_the_traverses_or_kept() -> None:
    flight, data, _, _ = drifting(5)
    zero = level_lines(data, LevelSettings())["gradient"].to_numpy()[~flight.tie]
    # the mean of 976 readings of up to 500 E: rounding
    np.testing.assert_allclose(zero.mean(axis=0), 0.0, atol=1e-10)
    kept = level_lines(data, LevelSettings(datum="kept"))
    moved = kept["removed_levelling"].to_numpy()
    assert np.abs(moved.mean(axis=0)).max() < 5.0


def test_input_is_not_changed_and_the_ledger_closes() -> None:
    _, data, _, _ = drifting(6)
    before = data.copy(deep=True)
    out = level_lines(data, LevelSettings(order=2))
    xr.testing.assert_identical(data, before)
    # a sum and a difference of numbers below 1e3 E
    assert survey.closure(out) < 1e-9


def test_a_line_without_crossings_is_named() -> None:
    flight, data, _, _ = drifting(7)
    east = data["easting"].to_numpy().copy()
    east[flight.line == 2] += 20_000.0
    out = level_lines(survey.put("lines", data, "easting", east), LevelSettings())
    assert out["removed_levelling"].attrs["unlevelled"] == "L002"


def test_drift_polynomials_are_nearly_orthogonal() -> None:
    line = np.repeat([0, 1], 201)
    along = np.tile(np.linspace(0.0, 4000.0, 201), 2)
    basis = drift_basis(line, along, 2).toarray()
    product = basis.T @ basis / 201
    # the Legendre norms 1 / (2 k + 1) of Abramowitz and Stegun 1964, 22.2.10, over 201 points:
    # the sum differs from the integral by about one part in 100
    np.testing.assert_allclose(product, np.diag(np.tile([1, 1 / 3, 1 / 5], 2)), atol=0.02)


def test_too_few_crossings_are_refused() -> None:
    flight = pattern(traverses=4, ties=2)
    alone = Flight(
        flight.easting, flight.northing, np.minimum(flight.line, 3), flight.heading, flight.tie
    )
    chosen = alone.line < 3
    part = lines_part(alone, np.zeros((len(alone.line), 6))).isel(station=chosen)
    with pytest.raises(FitError) as caught:
        level_lines(part, LevelSettings())
    assert str(caught.value) == (
        "FitError: 3 lines have only 0 crossings with readings on both sides\n"
        "  where: stage level_lines\n"
        "  cure:  fly tie lines, or leave this stage out of the pipeline file"
    )
