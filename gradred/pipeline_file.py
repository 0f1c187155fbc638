"""Text → settings: a pipeline file is read whole, and all its faults are told with their lines.

The file is TOML: the keys ``name`` and ``crs`` of the survey, then one ``[[stages]]`` table per
stage with its settings, in working order. There is no inheritance and no include: a file is the
whole truth of a run.
"""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from gradred.errors import PipelineFileError
from gradred.stage import Settings, Stage, files

Place = tuple[str | int, ...]

_HEADER: Final = re.compile(r"\s*(\[\[?)\s*([^\[\]#]+?)\s*\]\]?\s*(?:#.*)?$")
_KEY: Final = re.compile(
    r"\s*((?:[A-Za-z0-9_-]+|\"[^\"]*\"|'[^']*')(?:\s*\.\s*[\w\"'-]+)*)\s*=(.*)$"
)
_TOP: Final = ("name", "crs", "stages")
_FROM_TOP: Final = {"crs": "crs", "survey_name": "name"}


@dataclass(frozen=True)
class Step:
    """One stage of a pipeline with its settings, and the line of the file it stands in."""

    stage: Stage
    settings: Settings
    line: int


@dataclass(frozen=True)
class Pipeline:
    """A pipeline file that has been understood whole."""

    path: Path
    text: str
    name: str
    crs: str
    steps: tuple[Step, ...]


def read_pipeline(path: Path, stages: Iterable[Stage]) -> Pipeline:
    """Read a pipeline file and check it whole, before any data is opened.

    Parameters
    ----------
    path : Path
        The TOML file.
    stages : iterable of Stage
        All stages there are, in working order.

    Returns
    -------
    Pipeline
        Settings with their defaults filled in, files resolved against the file's folder.
        All faults are raised together in an ``ExceptionGroup`` of ``PipelineFileError``.
    """
    text = _text_of(path)
    raw = _parsed(path, text)
    reader = _Reader(path, lines_of_keys(text), {entry.name: entry for entry in stages})
    name, crs = reader.top(raw)
    steps = [
        step for n, table in enumerate(reader.tables(raw)) if (step := reader.step(n, table, raw))
    ]
    if not reader.faults:
        reader.chain(steps)
        reader.input_files(steps)
    if reader.faults:
        faults = sorted(reader.faults, key=lambda fault: fault[0])
        raise ExceptionGroup(f"{path} cannot be run", [error for _, error in faults])
    return Pipeline(path, text, name, crs, tuple(steps))


def _text_of(path: Path) -> str:
    try:
        return path.read_bytes().decode("utf-8")
    except OSError as error:
        raise PipelineFileError(
            f"cannot be read: {error.strerror}", where=str(path), cure="name an existing TOML file"
        ) from None
    except UnicodeDecodeError as error:
        raise PipelineFileError(
            f"is not UTF-8 text: byte {error.start} is {error.object[error.start]:#04x}",
            where=str(path),
            cure="save it as UTF-8",
        ) from None


def _parsed(path: Path, text: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        place = re.search(r"\(at (line \d+), column \d+\)", str(error))
        what = re.sub(r"\s*\(at .*\)", "", str(error))
        raise PipelineFileError(
            f"is not TOML: {what}",
            where=f"{path}, {place[1]}" if place else f"{path}, last line",
            cure="correct that line; text stands in double quotes, tables in [[stages]]",
        ) from None


def lines_of_keys(text: str) -> dict[Place, int]:
    """Return the line, counted from 1, of every table and key that starts a line of a TOML text.

    A key inside an inline table or an array has no line of its own: the line of the key that
    opens it holds for all of it.
    """
    found: dict[Place, int] = {}
    counts: dict[Place, int] = {}
    table: Place = ()
    closing = ""
    for number, line in enumerate(text.split("\n"), 1):
        if closing:
            closing = _still_open(line, closing)
            continue
        if header := _HEADER.match(line):
            table = _table_place(header[1], _split_key(header[2]), counts)
            found[table] = number
        elif key := _KEY.match(line):
            found[table + _split_key(key[1])] = number
            closing = _still_open(key[2], "")
    return found


def _split_key(text: str) -> tuple[str, ...]:
    parts = re.findall(r"\"[^\"]*\"|'[^']*'|[A-Za-z0-9_-]+", text)
    return tuple(part.strip("\"'") for part in parts)


def _table_place(bracket: str, names: tuple[str, ...], counts: dict[Place, int]) -> Place:
    place: Place = ()
    for depth, name in enumerate(names):
        place = (*place, name)
        last = depth == len(names) - 1
        if last and bracket == "[[":
            counts[place] = counts.get(place, -1) + 1
        if place in counts:
            place = (*place, counts[place])
    return place


def _still_open(rest: str, closing: str) -> str:
    """Return what is still open after a piece of a value: a string's end, brackets, or nothing."""
    brackets = "" if closing.startswith(('"""', "'''")) else closing
    quote = "" if brackets == closing else closing
    i = 0
    while i < len(rest):
        if quote:
            end = rest.find(quote, i)
            if end < 0:
                return quote if len(quote) == 3 else brackets
            i, quote = end + len(quote), ""
            continue
        character = rest[i]
        if rest.startswith(('"""', "'''"), i):
            quote, i = rest[i : i + 3], i + 3
            continue
        if character in "\"'":
            quote = character
        elif character == "#":
            break
        elif character in "[{":
            brackets += character
        elif character in "]}":
            brackets = brackets[:-1]
        i += 1
    return quote if len(quote) == 3 else brackets


class _Reader:
    """Gathers every fault of one file with its line."""

    def __init__(self, path: Path, lines: Mapping[Place, int], stages: Mapping[str, Stage]) -> None:
        self.path = path
        self.lines = lines
        self.stages = stages
        self.faults: list[tuple[int, PipelineFileError]] = []

    def line(self, place: Place) -> int:
        while place and place not in self.lines:
            place = place[:-1]
        return self.lines.get(place, 1)

    def fault(self, place: Place, what: str, cure: str) -> None:
        number = self.line(place)
        where = f"{self.path}, line {number}"
        self.faults.append((number, PipelineFileError(what, where=where, cure=cure)))

    def top(self, raw: Mapping[str, Any]) -> tuple[str, str]:
        for key in raw:
            if key not in _TOP:
                self.fault((key,), f"a pipeline file has no key {key!r}", _near(key, _TOP))
        for key, example in (("name", '"Northern block"'), ("crs", '"EPSG:32633"')):
            if not isinstance(raw.get(key), str):
                self.fault(
                    (key,),
                    f"the file lacks the text {key!r}",
                    f"write {key} = {example} at the top",
                )
        return str(raw.get("name")), str(raw.get("crs"))

    def tables(self, raw: Mapping[str, Any]) -> list[dict[str, Any]]:
        tables = raw.get("stages")
        if isinstance(tables, list) and tables and all(isinstance(t, dict) for t in tables):
            return tables
        self.fault(("stages",), "the file lists no stages", "write one [[stages]] table per stage")
        return []

    def step(self, number: int, table: dict[str, Any], raw: Mapping[str, Any]) -> Step | None:
        place: Place = ("stages", number)
        name = str(table.get("stage", ""))
        if name not in self.stages:
            what = f"there is no stage {name!r}" if name else "a [[stages]] table names no stage"
            self.fault((*place, "stage"), what, _near(name, self.stages))
            return None
        entry = self.stages[name]
        given = {key: value for key, value in table.items() if key != "stage"}
        for field, key in _FROM_TOP.items():
            if field in entry.settings.model_fields and key in raw:
                given.setdefault(field, raw[key])
        try:
            context = {"folder": self.path.parent}
            settings = entry.settings.model_validate(given, context=context)
        except ValidationError as error:
            for detail in error.errors(include_url=False):
                self.setting_fault(entry, place, detail)
            return None
        return Step(entry, settings, self.line(place))

    def setting_fault(self, entry: Stage, place: Place, detail: ErrorDetails) -> None:
        at = detail["loc"]
        spelled = ".".join(str(part) for part in at)
        where = (*place, *at)
        if detail["type"] == "extra_forbidden":
            known = _fields_at(entry.settings, at[:-1])
            self.fault(
                where, f"stage {entry.name!r} has no setting {spelled!r}", _near(str(at[-1]), known)
            )
            return
        about = _description(entry.settings, at)
        if detail["type"] == "missing":
            self.fault(
                where, f"stage {entry.name!r} lacks the setting {spelled!r}", f"state it: {about}"
            )
            return
        said = detail["msg"].removeprefix("Value error, ")
        said = said[0].lower() + said[1:]
        given = repr(detail["input"])
        # a whole table that misses one key is not worth repeating
        told = f", not {given}" if len(given) < 80 else ""
        what = f"stage {entry.name!r}, setting {spelled!r}: {said}{told}"
        if not at:
            what = f"stage {entry.name!r}: {said}"
        self.fault(
            where, what, f"it is: {about}" if about else "correct the settings of this stage"
        )

    def chain(self, steps: list[Step]) -> None:
        order = list(self.stages)
        there: dict[str, set[str]] = {}
        before: Step | None = None
        for number, step in enumerate(steps):
            place: Place = ("stages", number)
            if before is not None and order.index(step.stage.name) <= order.index(
                before.stage.name
            ):
                self.fault(
                    place,
                    f"stage {step.stage.name!r} cannot follow {before.stage.name!r}",
                    "name each stage once, in the working order that `gradred stages` lists",
                )
            self.needs(place, step, there)
            if step.stage.makes is not None:
                gives = step.stage.gives(step.settings) if step.stage.gives else ()
                there.setdefault(step.stage.makes, set()).update(step.stage.adds, gives)
            before = step

    def needs(self, place: Place, step: Step, there: Mapping[str, set[str]]) -> None:
        entry = step.stage
        for part in entry.takes:
            if part not in there:
                if part not in entry.optional:
                    makers = [s.name for s in self.stages.values() if s.makes == part]
                    self.fault(
                        place,
                        f"stage {entry.name!r} needs the {part}, which no stage before it makes",
                        f"put {' or '.join(makers[:2])} before it",
                    )
                continue
            for name in entry.needs.get(part, ()):
                if name not in there[part] and name not in ("easting", "northing"):
                    makers = [s.name for s in self.stages.values() if name in s.adds]
                    cure = f"put {makers[0]} before it" if makers else "deliver it: name its column"
                    self.fault(place, f"stage {entry.name!r} needs {name!r} of the {part}", cure)

    def input_files(self, steps: list[Step]) -> None:
        for number, step in enumerate(steps):
            for path in files(step.settings):
                if not path.is_file():
                    self.fault(
                        self.place_of_file(number, path),
                        f"stage {step.stage.name!r}: there is no file {path}",
                        "correct the path; it is taken from the folder of the pipeline file",
                    )

    def place_of_file(self, number: int, path: Path) -> Place:
        """Return the place of the setting whose line names the file, else of its stage."""
        text = self.path.read_text(encoding="utf-8").split("\n")
        for place, line in self.lines.items():
            if place[:2] == ("stages", number) and len(place) > 2 and path.name in text[line - 1]:
                return place
        return ("stages", number)


def _near(word: str, known: Iterable[str]) -> str:
    names = list(known)
    close = difflib.get_close_matches(word, names, n=1)
    return f"did you mean {close[0]!r}?" if close else f"write one of: {', '.join(names)}"


def _model_at(model: type[BaseModel], at: tuple[int | str, ...]) -> type[BaseModel] | None:
    """Return the settings class that holds the setting at a place, through lists and tables."""
    for part in at:
        if isinstance(part, int):
            continue
        field = model.model_fields.get(part)
        inner = _settings_in(field.annotation) if field else None
        if inner is None:
            return None
        model = inner
    return model


def _settings_in(annotation: Any) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    for part in getattr(annotation, "__args__", ()):
        if (found := _settings_in(part)) is not None:
            return found
    return None


def _fields_at(model: type[BaseModel], at: tuple[int | str, ...]) -> list[str]:
    found = _model_at(model, at)
    return list(found.model_fields) if found else []


def _description(model: type[BaseModel], at: tuple[int | str, ...]) -> str:
    """Return the description of the innermost setting on the way to a place that has one."""
    text = ""
    for end in range(1, len(at) + 1):
        holder = _model_at(model, at[: end - 1])
        field = holder.model_fields.get(str(at[end - 1])) if holder else None
        if field is not None and field.description:
            text = field.description
    return text
