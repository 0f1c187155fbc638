import hashlib
import json
from pathlib import Path

import numpy as np
import pytest

from gradred import pipeline, survey
from gradred.errors import PipelineFileError
from gradred.pipeline_file import Pipeline, read_pipeline
from gradred.stage import Stage
from tests.shipped import ROOT, watched_inputs

# the first half of the demo's chain on one of its four flights; seconds
KEPT = ("read_lines", "read_terrain", "remove_motion", "rotate_to_enu", "remove_normal_field")


def short(folder: Path, density: int = 2480) -> Pipeline:
    """Return a short chain over one flight of the demo survey."""
    whole = (ROOT / "pipelines" / "demo.toml").read_text(encoding="utf-8")
    head, *tables = whole.split("[[stages]]\n")
    chosen = [t for t in tables if t.split('"')[1] in (*KEPT, "remove_terrain", "write_ledger")]
    text = "[[stages]]\n".join([head, *chosen]).replace("density = 2480", f"density = {density}")
    for flight in ("F02", "F03", "F04"):
        text = text.replace(f'    "../demo_survey/lines_{flight}.csv.gz",\n', "")
    text = text.replace("../demo_survey", str(ROOT / "demo_survey"))
    path = folder / "short.toml"
    path.write_text(text, encoding="utf-8")
    return read_pipeline(path, pipeline.STAGES)


def test_an_unchanged_stage_is_not_computed_twice(tmp_path: Path) -> None:
    with watched_inputs() as first:
        pipeline.run(short(tmp_path), tmp_path / "run")
    assert first == [*KEPT, "remove_terrain", "write_ledger"]
    before = {p: p.read_bytes() for p in (tmp_path / "run").glob("*.csv")}
    with watched_inputs() as second:
        made = pipeline.run(short(tmp_path), tmp_path / "run")
    assert second == []
    assert all(step["kept"] for step in made.steps)
    assert {p: p.read_bytes() for p in (tmp_path / "run").glob("*.csv")} == before
    with watched_inputs() as third:
        pipeline.run(short(tmp_path, density=2670), tmp_path / "run")
    # changing the density recomputes from terrain on
    assert third == ["remove_terrain", "write_ledger"]


def test_a_damaged_kept_result_is_computed_again(tmp_path: Path) -> None:
    pipeline.run(short(tmp_path), tmp_path / "run")
    kept = next((tmp_path / "run" / "kept").glob("remove_motion-*.nc"))
    content = bytearray(kept.read_bytes())
    content[len(content) // 2] ^= 0xFF
    kept.write_bytes(content)
    with watched_inputs() as ran:
        made = pipeline.run(short(tmp_path), tmp_path / "run")
    assert ran == ["remove_motion"]
    assert survey.closure(made.part("lines")) < 1e-9


def test_a_run_that_broke_off_goes_on(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    bare = pipeline._call

    def breaking(stage: Stage) -> object:
        if stage.name == "remove_terrain":
            raise KeyboardInterrupt
        return bare(stage)

    monkeypatch.setattr(pipeline, "_call", breaking)
    with pytest.raises(KeyboardInterrupt):
        pipeline.run(short(tmp_path), tmp_path / "run")
    monkeypatch.undo()
    with watched_inputs() as ran:
        pipeline.run(short(tmp_path), tmp_path / "run")
    assert ran == ["remove_terrain", "write_ledger"]


def test_two_runs_give_the_same_bytes(tmp_path: Path) -> None:
    for name in ("one", "two"):
        pipeline.run(short(tmp_path), tmp_path / name)
    one, two = (tmp_path / n / "ledger.csv" for n in ("one", "two"))
    assert one.read_bytes() == two.read_bytes()
    seals = [
        sorted(p.read_text() for p in (tmp_path / n / "kept").glob("*.sha256"))
        for n in ("one", "two")
    ]
    assert seals[0] == seals[1]


def test_the_record_is_complete(tmp_path: Path) -> None:
    made = pipeline.run(short(tmp_path), tmp_path / "run")
    record = json.loads((tmp_path / "run" / "record.json").read_text(encoding="utf-8"))
    by_name = {Path(entry["file"]).name: entry for entry in record["inputs"]}
    for name in ("lines_F01.csv.gz", "terrain.tif"):
        path = ROOT / "demo_survey" / name
        # SHA-256 by the standard library
        assert by_name[name]["sha256"] == hashlib.sha256(path.read_bytes()).hexdigest()
        assert by_name[name]["bytes"] == path.stat().st_size
    terrain = next(s for s in record["stages"] if s["stage"] == "remove_terrain")
    assert terrain["settings"]["density"] == 2480
    assert terrain["settings"]["proof"] == 50  # a default, filled in
    assert record["pipeline"]["text"] == made.pipeline.text
    assert {"gradred", "python", "numpy", "numba"} <= set(record["versions"])
    assert record["closure_E"] < 1e-9
    assert record["flags"]["spike"] == 0
    entries = {row["entry"] for row in record["ledger"]}
    assert {"as read", "attraction of the terrain", "left"} <= entries


def test_a_folder_with_other_files_is_refused(tmp_path: Path) -> None:
    (tmp_path / "home").mkdir()
    (tmp_path / "home" / "thesis.txt").write_text("mine")
    with pytest.raises(PipelineFileError) as caught:
        pipeline.run(short(tmp_path), tmp_path / "home")
    assert str(caught.value) == (
        "PipelineFileError: the folder for the run holds other files\n"
        f"  where: {tmp_path / 'home'}\n"
        "  cure:  name a new or an earlier run's folder with --into"
    )
    assert [p.name for p in (tmp_path / "home").iterdir()] == ["thesis.txt"]


def test_a_ledger_that_does_not_close_is_a_bug_and_stops_the_run(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(survey, "closure", lambda _: 1e-6)
    with pytest.raises(AssertionError, match="the ledger does not close by 1e-06 E after"):
        pipeline.run(short(tmp_path), tmp_path / "run")


def test_the_working_order_is_that_of_the_physics() -> None:
    order = [stage.name for stage in pipeline.STAGES]
    assert len(set(order)) == len(order) == 21
    for first, second in (
        ("remove_motion", "rotate_to_enu"),
        ("rotate_to_enu", "remove_normal_field"),
        ("remove_terrain", "level_lines"),
        ("estimate_noise", "map_field"),
    ):
        assert order.index(first) < order.index(second)


def test_a_forecast_reads_the_inputs_and_computes_nothing(tmp_path: Path) -> None:
    from gradred.forecast import forecast

    with watched_inputs() as ran:
        told = forecast(short(tmp_path))
    assert ran == []
    assert "1,364 stations on 11 lines" in told
    assert "lines_F01.csv.gz" in told
    assert "terrain of 520 × 520 cells of 25 m" in told
    assert "all, with start-up" in told
    assert np.all([word in told for word in ("inputs", "found", "expected on two cores")])
