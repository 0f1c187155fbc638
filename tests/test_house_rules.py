"""Rules of the house that a machine can check."""

import ast
import inspect
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from annotated_types import Ge, Gt, Le, Lt
from pydantic.fields import FieldInfo

from gradred import survey
from gradred.pipeline import STAGES
from gradred.stage import Settings, Stage
from gradred.stage_table import as_markdown, section

ROOT = Path(__file__).parents[1]
SOURCES = sorted((ROOT / "gradred").rglob("*.py"))
# rooms from the ground up: a room imports only from its own floor and the floors below it
FLOORS = (
    ("errors", "units", "tensor"),
    ("newton",),
    ("survey",),
    ("stage", "flight"),
    ("ingest", "reduction", "mapping", "inversion", "simulate"),
    ("export",),
    ("pipeline_file", "stage_table"),
    ("pipeline", "forecast"),
    ("cli", "__init__"),
)


def room(path: Path) -> str:
    return path.relative_to(ROOT / "gradred").parts[0].removesuffix(".py")


def floor(name: str) -> int:
    return next(number for number, rooms in enumerate(FLOORS) if name in rooms)


def imports(path: Path) -> Iterator[str]:
    """Yield the rooms of gradred that a module imports at run time."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.module == "gradred":
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom) and (node.module or "").startswith("gradred."):
            yield str(node.module).split(".")[1]


def settings_classes(model: type[Settings]) -> Iterator[type[Settings]]:
    yield model
    for field in model.model_fields.values():
        for part in [field.annotation, *getattr(field.annotation, "__args__", ())]:
            if isinstance(part, type) and issubclass(part, Settings):
                yield from settings_classes(part)


def fields() -> Iterator[tuple[str, FieldInfo]]:
    for stage in STAGES:
        for model in settings_classes(stage.settings):
            for name, field in model.model_fields.items():
                yield f"{stage.name}.{model.__name__}.{name}", field


def bounds(field: FieldInfo) -> set[str]:
    found = set()
    for item in field.metadata:
        if isinstance(item, Ge | Gt):
            found.add("lower")
        if isinstance(item, Le | Lt):
            found.add("upper")
    return found


def is_number(annotation: Any) -> bool:
    parts = getattr(annotation, "__args__", (annotation,))
    return any(part in (int, float) for part in parts)


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: str(path.relative_to(ROOT)))
def test_a_room_imports_only_from_below(path: Path) -> None:
    own = floor(room(path))
    above = {name for name in imports(path) if name != room(path) and floor(name) > own}
    assert not above or room(path) == "cli"


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: str(path.relative_to(ROOT)))
def test_modules_are_short_and_public_functions_have_a_docstring(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    assert text.count("\n") <= 500
    tree = ast.parse(text)
    assert ast.get_docstring(tree)
    for node in tree.body:
        if isinstance(node, ast.FunctionDef) and not node.name.startswith("_"):
            assert ast.get_docstring(node), node.name


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: str(path.relative_to(ROOT)))
def test_only_newton_compiles_and_only_the_commands_print(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    assert room(path) == "newton" or not re.search(r"^\s*(import|from) numba", text, re.M)
    assert room(path) == "cli" or not re.search(r"^\s*print\(", text, re.M)


@pytest.mark.parametrize(("name", "field"), list(fields()), ids=lambda value: str(value)[:60])
def test_every_setting_has_a_description_and_every_number_two_bounds(
    name: str, field: FieldInfo
) -> None:
    assert field.description, name
    if is_number(field.annotation):
        assert bounds(field) == {"lower", "upper"}, name


@pytest.mark.parametrize("stage", STAGES, ids=lambda stage: stage.name)
def test_every_stage_tells_what_it_rests_on(stage: Stage) -> None:
    assert stage.summary.endswith(".")
    assert (inspect.getdoc(stage.settings) or "").startswith("Settings of the stage")
    for part, names in stage.needs.items():
        for name in names:
            if name not in ("easting", "northing"):
                survey.variable(part, name)
    if stage.makes is not None:
        for name in stage.adds:
            survey.variable(stage.makes, name)
    if stage.physics is not None:
        for title in ("Source", "Checked by", "Accuracy", "Parameters", "Returns"):
            assert section(stage.physics, title), (stage.name, title)
        for path in re.findall(r"``(tests/[\w/]+\.py)", section(stage.physics, "Checked by")):
            assert (ROOT / path).is_file(), path


def test_the_readme_shows_the_table_of_stages_as_it_is() -> None:
    assert as_markdown(STAGES) in (ROOT / "README.md").read_text(encoding="utf-8")


def test_the_readme_has_two_commands() -> None:
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    blocks = re.findall(r"```(?:sh|bash)\n(.*?)```", text, re.S)
    assert len(blocks) == 2
    assert all(block.count("\n") == 1 for block in blocks)
