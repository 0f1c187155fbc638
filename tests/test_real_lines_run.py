"""Real flight lines over real ground and bedrock, readings simulated: the bedrock is mapped."""

from pathlib import Path

import numpy as np
import pytest

from gradred import pipeline, survey
from tests.shipped import run_shipped
from tests.wisconsin import simulate_wisconsin

pytestmark = pytest.mark.xdist_group("real")


@pytest.fixture(scope="module")
def real(tmp_path_factory: pytest.TempPathFactory) -> pipeline.Run:
    return run_shipped("real_lines.toml", tmp_path_factory.mktemp("real") / "run")[0]


def test_the_ledger_closes(real: pipeline.Run) -> None:
    assert survey.closure(real.part("lines")) < 1e-9


def test_the_bedrock_signal_is_left(real: pipeline.Run) -> None:
    lines = real.part("lines")
    truth = simulate_wisconsin().bedrock
    left = lines["gradient"].to_numpy()
    good = survey.good(lines)
    for component in range(6):
        # a contrast of 670 kg/m3 on tens of metres of relief against 3 E of noise
        match = np.corrcoef(left[good, component], truth[good, component])[0, 1]
        assert match > 0.5, component


def test_the_bedrock_is_mapped(real: pipeline.Run) -> None:
    grid = real.part("grid")
    zz = grid["gradient"].to_numpy()[..., 5]
    there = np.isfinite(zz)
    assert np.count_nonzero(there) > 1000
    # the signal stands above what the map says of its own uncertainty
    assert np.std(zz[there]) > 2.0 * np.nanmedian(grid["sigma"].to_numpy()[..., 5])


def test_documents_say_that_the_readings_are_simulated() -> None:
    root = Path(__file__).parents[1]
    for path in ("pipelines/real_lines.toml", "tests/data/SOURCES.md", "README.md"):
        assert "simulated" in (root / path).read_text(encoding="utf-8").lower()
