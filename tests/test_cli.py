import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner

from gradred import pipeline
from gradred.cli import main
from gradred.errors import FitError
from gradred.stage_table import as_markdown
from tests.shipped import ROOT


def bad_file(folder: Path) -> Path:
    path = folder / "bad.toml"
    path.write_text(
        'name = "n"\ncrs = "EPSG:32633"\ncolour = 1\n[[stages]]\nstage = "read_limes"\n'
        '[[stages]]\nstage = "remove_terrain"\ndenisty = 2\n'
    )
    return path


@pytest.mark.parametrize("command", ["run", "check"])
def test_bad_input_is_refused_with_status_2_and_no_traceback(tmp_path: Path, command: str) -> None:
    path = bad_file(tmp_path)
    result = CliRunner().invoke(main, [command, str(path)])
    assert result.exit_code == 2
    assert result.stderr == (
        "PipelineFileError: a pipeline file has no key 'colour'\n"
        f"  where: {path}, line 3\n"
        "  cure:  write one of: name, crs, stages\n"
        "PipelineFileError: there is no stage 'read_limes'\n"
        f"  where: {path}, line 5\n"
        "  cure:  did you mean 'read_lines'?\n"
        "PipelineFileError: stage 'remove_terrain' has no setting 'denisty'\n"
        f"  where: {path}, line 8\n"
        "  cure:  did you mean 'density'?\n"
    )
    assert result.stdout == ""


def test_check_tells_what_is_there_and_writes_nothing(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    result = CliRunner().invoke(main, ["check", str(ROOT / "pipelines" / "demo.toml")])
    assert result.exit_code == 0
    assert "4,712 stations on 38 lines" in result.stdout
    assert list(tmp_path.iterdir()) == []


def test_stages_are_listed_in_working_order() -> None:
    result = CliRunner().invoke(main, ["stages"])
    assert result.exit_code == 0
    told = [line for line in result.stdout.split("\n") if line and not line.startswith(" ")]
    assert told == [stage.name for stage in pipeline.STAGES]
    table = CliRunner().invoke(main, ["stages", "--markdown"]).stdout
    assert table.strip() == as_markdown(pipeline.STAGES)


def test_help_needs_none_of_the_heavy_libraries() -> None:
    # what makes `gradred --help` answer at once: measured 0.1 s, see DEVELOPERS.md
    code = (
        "import sys, gradred.cli; "
        "print(sorted({'numpy', 'numba', 'xarray', 'matplotlib'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout == "[]\n"


def test_a_bug_shows_its_traceback(monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(*_: object) -> None:
        raise ZeroDivisionError

    monkeypatch.setattr("gradred.pipeline_file.read_pipeline", broken)
    result = CliRunner().invoke(main, ["check", "any.toml"])
    assert result.exit_code == 1
    assert isinstance(result.exception, BaseExceptionGroup | ZeroDivisionError)


def test_a_refusal_of_a_stage_is_told_alone(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def refuse(*_: object) -> None:
        raise FitError("too little", where="stage x", cure="fly more")

    monkeypatch.setattr(pipeline, "run", refuse)
    path = ROOT / "pipelines" / "real_lines.toml"
    result = CliRunner().invoke(main, ["run", str(path), "--into", str(tmp_path / "r")])
    assert result.exit_code == 2
    told = "FitError: too little\n  where: stage x\n  cure:  fly more\n"
    assert result.stderr.endswith(told)
