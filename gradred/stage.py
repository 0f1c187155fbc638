"""What a stage is: a pure function of parts and settings, with its contract written above it.

The decorator ``stage`` states what a stage needs and adds, checks both doors, and leaves the
signature and the docstring alone. ``Settings`` is the base of every stage's settings; the types
below it carry units, so that a bare number is in the stated unit and text may name another.
"""

from __future__ import annotations

import functools
import inspect
import json
import re
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from contextvars import ContextVar
from dataclasses import dataclass, field
from pathlib import Path
from typing import Annotated, Any, Final

import xarray as xr
from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, ValidationInfo

from gradred import survey
from gradred.errors import SurveyError
from gradred.units import FACTORS

_NUMBER_WITH_UNIT: Final = re.compile(r"\s*([-+]?[0-9.]+(?:[eE][-+]?[0-9]+)?)\s*(\S.*?)\s*")


class Settings(BaseModel):
    """Base of every stage's settings: nothing unknown, nothing infinite, nothing changed later."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False)


def _in_unit(quantity: str, unit: str) -> BeforeValidator:
    factors = FACTORS[quantity]

    def convert(value: Any) -> Any:
        if not isinstance(value, str):
            return value
        match = _NUMBER_WITH_UNIT.fullmatch(value)
        if match is None or match[2] not in factors:
            raise ValueError(f"write a number in {unit}, or text with one of: {', '.join(factors)}")
        return float(match[1]) * factors[match[2]] / factors[unit]

    return BeforeValidator(convert)


Metres = Annotated[float, _in_unit("length", "m")]
Degrees = Annotated[float, _in_unit("angle", "deg")]
Eotvos = Annotated[float, _in_unit("gradient", "E")]
KilogramsPerCubicMetre = Annotated[float, _in_unit("density", "kg/m3")]
RadiansPerSecond = Annotated[float, _in_unit("rate", "rad/s")]


def _resolved(path: Path, info: ValidationInfo) -> Path:
    folder = (info.context or {}).get("folder")
    return path if folder is None else (Path(folder) / path).resolve()


InputFile = Annotated[Path, AfterValidator(_resolved)]
"""A file that the stage reads: resolved against the folder of the pipeline file, then hashed."""


def _epsg(value: str) -> str:
    if not re.fullmatch(r"EPSG:[0-9]{4,6}", value):
        raise ValueError("write it as 'EPSG:' and the code, for example 'EPSG:32633'")
    return value


Crs = Annotated[str, AfterValidator(_epsg)]


@dataclass(frozen=True)
class Cost:
    """What a stage is expected to take: seconds on two cores, and bytes at its peak."""

    seconds: float
    memory: float


Sizes = Mapping[str, float]
"""What is known once the inputs are read: ``stations``, ``lines``, ``terrain_cells``, and the
``width`` and ``length`` of the block in metres."""


@dataclass(frozen=True)
class Stage:
    """A stage with its contract, as the chain and the table of stages see it."""

    name: str
    function: Callable[..., Any]
    settings: type[Settings]
    makes: str | None
    takes: tuple[str, ...]
    optional: tuple[str, ...]
    needs: Mapping[str, tuple[str, ...]]
    adds: tuple[str, ...]
    gives: Callable[[Any], tuple[str, ...]] | None
    physics: Callable[..., Any] | None
    forecast: Callable[[Any, Sizes], Cost] | None
    writes: bool = field(default=False)

    @property
    def summary(self) -> str:
        """First sentence of the stage's docstring, in one line."""
        text = inspect.getdoc(self.function) or ""
        return " ".join(text.split("\n\n")[0].split())


def stage(
    *,
    makes: str | None,
    needs: Mapping[str, tuple[str, ...]] | None = None,
    adds: tuple[str, ...] = (),
    gives: Callable[[Any], tuple[str, ...]] | None = None,
    physics: Callable[..., Any] | None = None,
    forecast: Callable[[Any, Sizes], Cost] | None = None,
) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """Declare a function as a stage, and check both of its doors at every call.

    Parameters
    ----------
    makes : str or None
        The part that it returns; None for a writer, which returns the files it wrote.
    needs : mapping, optional
        Per part that it takes, the variables that must be there.
    adds : tuple of str
        Variables that the returned part has afterwards, whatever it had before.
    gives : function, optional
        From the settings to further variables of the returned part (a reader's columns).
    physics : function, optional
        The function on bare arrays that holds formula, accuracy, source and check.
    forecast : function, optional
        From settings and sizes to the expected ``Cost``.

    Returns
    -------
    decorator
        The function keeps its signature and docstring, and gains the attribute ``stage``.
    """

    def declare(function: Callable[..., Any]) -> Callable[..., Any]:
        signature = inspect.signature(function)
        contract = _contract(
            function, signature, makes, needs or {}, adds, gives, physics, forecast
        )

        @functools.wraps(function)
        def checked(*args: Any, **kwargs: Any) -> Any:
            bound = signature.bind(*args, **kwargs)
            for part in contract.takes:
                data = bound.arguments.get(part)
                if data is not None:
                    wanted = contract.needs.get(part, ())
                    survey.check(part, data, wanted, where=f"going into stage {contract.name}")
            result = function(*args, **kwargs)
            if makes is None:
                return result
            survey.check(makes, result, adds, where=f"coming out of stage {contract.name}")
            return _recorded(result, contract.name, bound.arguments["settings"])

        checked.stage = contract  # type: ignore[attr-defined]
        return checked

    return declare


def _contract(
    function: Callable[..., Any],
    signature: inspect.Signature,
    makes: str | None,
    needs: Mapping[str, tuple[str, ...]],
    adds: tuple[str, ...],
    gives: Callable[[Any], tuple[str, ...]] | None,
    physics: Callable[..., Any] | None,
    forecast: Callable[[Any, Sizes], Cost] | None,
) -> Stage:
    parts = [name for name in signature.parameters if name in survey.PARTS]
    optional = tuple(n for n in parts if signature.parameters[n].default is None)
    hints = inspect.get_annotations(function, eval_str=True)
    for part in needs:
        for name in needs[part]:
            if name not in ("easting", "northing"):
                survey.variable(part, name)
    return Stage(
        name=function.__name__,
        function=function,
        settings=hints["settings"],
        makes=makes,
        takes=tuple(parts),
        optional=optional,
        needs=needs,
        adds=adds,
        gives=gives,
        physics=physics,
        forecast=forecast,
        writes="folder" in signature.parameters,
    )


def _recorded(part: xr.Dataset, name: str, settings: Settings) -> xr.Dataset:
    """Return the part with this call appended to the record in its attributes."""
    calls = json.loads(part.attrs.get("record", "[]"))
    # a path differs between machines; its content stands in the record of the run, by hash
    calls.append({"stage": name, "settings": plain(settings, lambda path: path.name)})
    return part.assign_attrs(record=json.dumps(calls, sort_keys=True))


def plain(value: Any, path_as: Callable[[Path], str] = str) -> Any:
    """Return settings as JSON types, defaults filled in, every path told by ``path_as``."""
    if isinstance(value, BaseModel):
        return {name: plain(getattr(value, name), path_as) for name in type(value).model_fields}
    if isinstance(value, Mapping):
        return {str(key): plain(item, path_as) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [plain(item, path_as) for item in value]
    return path_as(value) if isinstance(value, Path) else value


def files(settings: Settings) -> list[Path]:
    """Return every file that the settings name, in order."""
    found: list[Path] = []

    def note(path: Path) -> str:
        found.append(path)
        return path.name

    plain(settings, note)
    return found


Listener = Callable[[float, float, str], None]
_listener: ContextVar[Listener | None] = ContextVar("listener", default=None)


def progress(done: float, total: float, what: str) -> None:
    """Tell whoever listens how far a long loop has come; does nothing where nobody does."""
    listener = _listener.get()
    if listener is not None:
        listener(done, total, what)


@contextmanager
def listening(listener: Listener) -> Iterator[None]:
    """Hand every ``progress`` call inside the block to ``listener``."""
    token = _listener.set(listener)
    try:
        yield
    finally:
        _listener.reset(token)


def stage_of(function: Callable[..., Any]) -> Stage:
    """Return the contract of a function that ``stage`` declared."""
    found = getattr(function, "stage", None)
    if not isinstance(found, Stage):
        raise SurveyError(
            f"{function.__name__} is not a stage",
            where="pipeline.STAGES",
            cure="declare it with @stage",
        )
    return found
