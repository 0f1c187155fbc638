import tomllib
from pathlib import Path

import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import Field

from gradred import survey
from gradred.errors import GradredError, PipelineFileError
from gradred.pipeline_file import Pipeline, lines_of_keys, read_pipeline
from gradred.stage import Crs, InputFile, Metres, Settings, stage, stage_of


class FetchSettings(Settings):
    """Settings of the stage ``fetch``."""

    file: InputFile = Field(description="the table")
    crs: Crs = Field(description="the survey's CRS")
    units: dict[str, str] = Field(default_factory=dict, description="unit per column")


class RaiseSettings(Settings):
    """Settings of the stage ``lift``."""

    by: Metres = Field(10.0, ge=0, le=1000, description="metres upward")


@stage(makes="lines", adds=("height",))
def fetch(settings: FetchSettings) -> xr.Dataset:
    """Read the lines."""
    return survey.new("lines", settings.crs)


@stage(makes="lines", needs={"lines": ("height",)}, adds=("clearance",))
def lift(lines: xr.Dataset, settings: RaiseSettings) -> xr.Dataset:
    """Lift the lines."""
    return lines


@stage(makes="grid", needs={"lines": ("clearance", "sigma")}, adds=("gz",))
def grid_it(lines: xr.Dataset, settings: RaiseSettings) -> xr.Dataset:
    """Map the lines."""
    return lines


STAGES = tuple(stage_of(f) for f in (fetch, lift, grid_it))

GOOD = """\
name = "Northern block"  # as the contract calls it
crs = "EPSG:32633"

[[stages]]
stage = "fetch"
file = "a.csv"
units = { height = "ft", x = "m" }
# each line of this text is counted below

[[stages]]
stage = "lift"
by = "10 ft"
"""


def read(folder: Path, text: str) -> Pipeline:
    (folder / "a.csv").touch()
    path = folder / "p.toml"
    path.write_text(text, encoding="utf-8")
    return read_pipeline(path, STAGES)


def faults(folder: Path, text: str) -> list[str]:
    with pytest.raises(ExceptionGroup) as caught:
        read(folder, text)
    told = [str(error) for error in caught.value.exceptions]
    return [line.replace(f"{folder}/", "") for line in told]


def test_a_good_file_is_understood(tmp_path: Path) -> None:
    made = read(tmp_path, GOOD)
    assert (made.name, made.crs) == ("Northern block", "EPSG:32633")
    assert [(step.stage.name, step.line) for step in made.steps] == [("fetch", 4), ("lift", 10)]
    first, second = (step.settings for step in made.steps)
    assert isinstance(first, FetchSettings)
    assert isinstance(second, RaiseSettings)
    assert first.file == (tmp_path / "a.csv").resolve()
    assert first.crs == "EPSG:32633"
    assert second.by == pytest.approx(3.048)


def test_three_faults_are_told_at_once_with_their_lines(tmp_path: Path) -> None:
    text = GOOD.replace("lift", "lifft").replace('file = "a.csv"', 'fiel = "a.csv"')
    text = text.replace('crs = "EPSG:32633"', 'crs = "EPSG:32633"\ncolour = 3')
    assert faults(tmp_path, text) == [
        "PipelineFileError: a pipeline file has no key 'colour'\n"
        "  where: p.toml, line 3\n"
        "  cure:  write one of: name, crs, stages",
        "PipelineFileError: stage 'fetch' lacks the setting 'file'\n"
        "  where: p.toml, line 5\n"
        "  cure:  state it: the table",
        "PipelineFileError: stage 'fetch' has no setting 'fiel'\n"
        "  where: p.toml, line 7\n"
        "  cure:  did you mean 'file'?",
        "PipelineFileError: there is no stage 'lifft'\n"
        "  where: p.toml, line 12\n"
        "  cure:  did you mean 'lift'?",
    ]


def test_a_value_out_of_bounds_names_its_bounds(tmp_path: Path) -> None:
    assert faults(tmp_path, GOOD.replace('"10 ft"', "-5")) == [
        "PipelineFileError: stage 'lift', setting 'by': input should be greater than or equal to 0,"
        " not -5\n"
        "  where: p.toml, line 12\n"
        "  cure:  it is: metres upward"
    ]


def test_the_chain_is_checked_before_any_data_is_opened(tmp_path: Path) -> None:
    text = GOOD + '\n[[stages]]\nstage = "grid_it"\n\n[[stages]]\nstage = "lift"\n'
    assert faults(tmp_path, text) == [
        "PipelineFileError: stage 'grid_it' needs 'sigma' of the lines\n"
        "  where: p.toml, line 14\n"
        "  cure:  deliver it: name its column",
        "PipelineFileError: stage 'lift' cannot follow 'grid_it'\n"
        "  where: p.toml, line 17\n"
        "  cure:  name each stage once, in the working order that `gradred stages` lists",
    ]
    alone = 'name = "n"\ncrs = "EPSG:32633"\n[[stages]]\nstage = "lift"\n'
    assert faults(tmp_path, alone) == [
        "PipelineFileError: stage 'lift' needs the lines, which no stage before it makes\n"
        "  where: p.toml, line 3\n"
        "  cure:  put fetch or lift before it"
    ]


def test_a_missing_input_is_told_with_its_line(tmp_path: Path) -> None:
    assert faults(tmp_path, GOOD.replace("a.csv", "b.csv")) == [
        "PipelineFileError: stage 'fetch': there is no file b.csv\n"
        "  where: p.toml, line 6\n"
        "  cure:  correct the path; it is taken from the folder of the pipeline file"
    ]


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (
            b"name = \n",
            "PipelineFileError: is not TOML: Invalid value\n"
            "  where: p.toml, line 1\n"
            "  cure:  correct that line; text stands in double quotes, tables in [[stages]]",
        ),
        (
            b'name = "a"\nname = "b"\n',
            "PipelineFileError: is not TOML: Cannot overwrite a value\n"
            "  where: p.toml, line 2\n"
            "  cure:  correct that line; text stands in double quotes, tables in [[stages]]",
        ),
        (
            b'name = "\xff"\n',
            "PipelineFileError: is not UTF-8 text: byte 8 is 0xff\n"
            "  where: p.toml\n"
            "  cure:  save it as UTF-8",
        ),
    ],
)
def test_what_is_not_toml_is_refused(tmp_path: Path, content: bytes, message: str) -> None:
    path = tmp_path / "p.toml"
    path.write_bytes(content)
    with pytest.raises(PipelineFileError) as caught:
        read_pipeline(path, STAGES)
    assert str(caught.value).replace(f"{tmp_path}/", "") == message


def test_no_file_is_refused(tmp_path: Path) -> None:
    with pytest.raises(PipelineFileError) as caught:
        read_pipeline(tmp_path / "none.toml", STAGES)
    assert str(caught.value) == (
        "PipelineFileError: cannot be read: No such file or directory\n"
        f"  where: {tmp_path / 'none.toml'}\n"
        "  cure:  name an existing TOML file"
    )


def test_lines_of_keys_agree_with_the_toml_reader() -> None:
    text = GOOD + 'note = """\n[[stages]]\nby = 3\n"""\n[stages.deep]\n"a b".c = [\n 1, 2 ]\n'
    found = lines_of_keys(text)
    raw = tomllib.loads(text)
    for place, line in found.items():
        value: object = raw
        for part in place:
            assert isinstance(value, dict | list)
            value = value[part]  # type: ignore[index]
        shown = text.split("\n")[line - 1]
        assert str(place[-1]) in shown or shown == "[[stages]]"
    assert found["stages", 1, "deep", "a b", "c"] == 18


@settings(deadline=None, max_examples=200)
@given(st.text(alphabet="[]{}\"'=.,# \n\\abstage19-", max_size=80))
def test_any_text_is_refused_or_read(tmp_path_factory: pytest.TempPathFactory, text: str) -> None:
    path = tmp_path_factory.getbasetemp() / "any.toml"
    path.write_text(text, encoding="utf-8")
    try:
        read_pipeline(path, STAGES)
    except (GradredError, ExceptionGroup) as error:
        errors = error.exceptions if isinstance(error, ExceptionGroup) else [error]
        assert all(isinstance(e, PipelineFileError) for e in errors)
