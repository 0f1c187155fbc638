"""THE CHAIN: every stage in working order, the run of a pipeline file, its record and kept results.

``STAGES`` is the product in one list. A run goes through the steps of a pipeline file, keeps what
each stage made under a key of everything it depends on, and leaves a record from which the same
run can be made again.
"""

from __future__ import annotations

import hashlib
import json
import logging
import os
import platform
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from importlib import metadata
from pathlib import Path
from typing import Any, Final, Protocol

import xarray as xr

import gradred
from gradred import survey
from gradred.errors import PipelineFileError
from gradred.export.grids import write_grids
from gradred.export.maps import draw_maps
from gradred.export.models import write_model
from gradred.export.report import write_report
from gradred.export.tables import ledger_summary, write_ledger, write_lines
from gradred.ingest.heights import check_heights
from gradred.ingest.rasters import read_terrain
from gradred.ingest.tables import read_lines
from gradred.inversion.bodies import fit_bodies
from gradred.inversion.voxels import fit_voxels
from gradred.mapping.derived import derive_maps
from gradred.mapping.layer import map_field
from gradred.pipeline_file import Pipeline, Step
from gradred.reduction.attitude import rotate_to_enu
from gradred.reduction.levelling import level_lines
from gradred.reduction.motion import remove_motion
from gradred.reduction.noise import estimate_noise
from gradred.reduction.normal_field import remove_normal_field
from gradred.reduction.self_gradient import remove_self_gradient
from gradred.reduction.terrain import remove_terrain
from gradred.reduction.tide import remove_tide
from gradred.stage import Listener, Stage, files, listening, plain, stage_of

log = logging.getLogger(__name__)

STAGES: Final[tuple[Stage, ...]] = tuple(
    stage_of(function)
    for function in (
        read_lines,
        read_terrain,
        check_heights,
        remove_motion,
        rotate_to_enu,
        remove_tide,
        remove_normal_field,
        remove_terrain,
        remove_self_gradient,
        level_lines,
        estimate_noise,
        map_field,
        derive_maps,
        fit_bodies,
        fit_voxels,
        write_grids,
        write_lines,
        write_model,
        write_ledger,
        draw_maps,
        write_report,
    )
)

CLOSURE_TOLERANCE: Final = 1e-9
"""E. Readings reach 1e7 E, whose rounding is 2e-9; a ledger that does not close is a bug."""

LIBRARIES: Final = (
    "numpy",
    "scipy",
    "pandas",
    "xarray",
    "numba",
    "pyproj",
    "pyerfa",
    "rasterio",
    "h5netcdf",
    "pyarrow",
    "pydantic",
    "matplotlib",
)


class Watcher(Protocol):
    """Whoever wants to see a run go by."""

    def started(self, step: Step, number: int, total: int) -> None:
        """See a stage begin."""

    def finished(self, step: Step, seconds: float, *, kept: bool) -> None:
        """See a stage end, or its kept result found."""

    def progressed(self, done: float, total: float, what: str) -> None:
        """See how far a long loop inside the stage has come."""


@dataclass
class Held:
    """A part on its way: in memory, or kept in a file and opened when somebody needs it."""

    key: str
    path: Path
    data: xr.Dataset | None = None

    def get(self) -> xr.Dataset:
        """Return the data, from memory or from the file."""
        if self.data is None:
            self.data = survey.open_part(self.path)[1]
        return self.data


@dataclass
class Run:
    """What a run has made so far."""

    pipeline: Pipeline
    folder: Path
    parts: dict[str, Held] = field(default_factory=dict)
    products: list[Path] = field(default_factory=list)
    steps: list[dict[str, Any]] = field(default_factory=list)
    inputs: dict[Path, str] = field(default_factory=dict)

    def part(self, name: str) -> xr.Dataset:
        """Return one of the parts as the run left it."""
        return self.parts[name].get()


def run(pipeline: Pipeline, folder: Path, watcher: Watcher | None = None) -> Run:
    """Run a pipeline into a folder; a stage whose result is kept there is not computed again.

    Parameters
    ----------
    pipeline : Pipeline
        As ``pipeline_file.read_pipeline`` returns it.
    folder : Path
        Made if it is not there; refused if it holds anything but an earlier run.
    watcher : Watcher, optional
        Sees stages begin and end.

    Returns
    -------
    Run
        The parts and the products; ``record.json`` in the folder tells the same.
    """
    _own(folder)
    made = Run(pipeline, folder)
    for step in pipeline.steps:
        for path in files(step.settings):
            made.inputs.setdefault(path, sha256(path))
    for number, step in enumerate(pipeline.steps, 1):
        if watcher:
            watcher.started(step, number, len(pipeline.steps))
        begun = time.perf_counter()
        with _heard(watcher.progressed if watcher else None):
            kept = _write(made, step) if step.stage.writes else _make(made, step)
        seconds = time.perf_counter() - begun
        log.info("%s: %.2f s%s", step.stage.name, seconds, ", kept" if kept else "")
        if watcher:
            watcher.finished(step, seconds, kept=kept)
        made.steps[-1] |= {"seconds": round(seconds, 3), "kept": kept}
    write_whole(folder / "record.json", json.dumps(record(made), indent=1).encode())
    return made


@contextmanager
def _heard(listener: Listener | None) -> Iterator[None]:
    if listener is None:
        yield
    else:
        with listening(listener):
            yield


def _own(folder: Path) -> None:
    """Make the run folder, or refuse one that holds something else."""
    folder.mkdir(parents=True, exist_ok=True)
    if any(folder.iterdir()) and not (folder / "kept").is_dir():
        raise PipelineFileError(
            "the folder for the run holds other files",
            where=str(folder),
            cure="name a new or an earlier run's folder with --into",
        )
    (folder / "kept").mkdir(exist_ok=True)


def _make(made: Run, step: Step) -> bool:
    """Find or make the part of one stage; return True where it was kept."""
    key = _key(made, step)
    stage = step.stage
    assert stage.makes is not None
    path = made.folder / "kept" / f"{stage.name}-{key[:20]}.nc"
    made.steps.append({"stage": stage.name, "key": key})
    if _sound(path):
        made.parts[stage.makes] = Held(key, path)
        return True
    parts = {name: made.parts[name].get() for name in stage.takes if name in made.parts}
    data = _call(stage)(**parts, settings=step.settings)
    _closes(data, stage)
    survey.save(stage.makes, data, path)
    write_whole(_seal(path), sha256(path).encode())
    made.parts[stage.makes] = Held(key, path, data)
    return False


def _write(made: Run, step: Step) -> bool:
    """Have one writer write its files; return True where they are there, whole and unchanged."""
    key = _key(made, step)
    stage = step.stage
    note = made.folder / "kept" / f"{stage.name}-{key[:20]}.json"
    made.steps.append({"stage": stage.name, "key": key})
    if note.is_file():
        written = {made.folder / p: h for p, h in json.loads(note.read_text()).items()}
        if all(path.is_file() and sha256(path) == value for path, value in written.items()):
            made.products.extend(written)
            return True
    parts = {name: made.parts[name].get() for name in stage.takes if name in made.parts}
    paths = _call(stage)(**parts, settings=step.settings, folder=made.folder)
    written = {path.relative_to(made.folder).as_posix(): sha256(path) for path in paths}
    write_whole(note, json.dumps(written, indent=1).encode())
    made.products.extend(paths)
    return False


def _call(stage: Stage) -> Callable[..., Any]:
    """Return the stage with its doors, not the bare function behind them."""
    checked: Callable[..., Any] = globals()[stage.name]
    return checked


def _closes(data: xr.Dataset, stage: Stage) -> None:
    if data.attrs["part"] != "lines" or "as_read" not in data:
        return
    gap = survey.closure(data)
    if gap > CLOSURE_TOLERANCE:
        raise AssertionError(f"the ledger does not close by {gap:.3g} E after {stage.name}")


def _key(made: Run, step: Step) -> str:
    """Return the SHA-256 of everything that the result of a stage depends on."""
    settings = plain(step.settings, lambda path: made.inputs[path])
    before = {name: made.parts[name].key for name in step.stage.takes if name in made.parts}
    content = [package_hash(), versions(), step.stage.name, settings, before]
    return hashlib.sha256(json.dumps(content, sort_keys=True).encode()).hexdigest()


def package_hash() -> str:
    """Return the SHA-256 of the package's own text, file by file in order of name."""
    digest = hashlib.sha256()
    root = Path(gradred.__file__).parent
    for path in sorted(p for p in root.rglob("*") if p.suffix in (".py", ".jinja", ".css", ".js")):
        digest.update(path.relative_to(root).as_posix().encode())
        digest.update(path.read_bytes())
    return digest.hexdigest()


def versions() -> dict[str, str]:
    """Return the versions of gradred, Python and the libraries that make numbers."""
    found = {name: metadata.version(name) for name in LIBRARIES}
    return {"gradred": gradred.__version__, "python": platform.python_version(), **found}


def sha256(path: Path) -> str:
    """Return the SHA-256 of a file."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def write_whole(path: Path, content: bytes) -> None:
    """Write a file so that it appears whole or not at all."""
    scratch = path.with_name(f".{path.name}.{os.getpid()}")
    scratch.write_bytes(content)
    scratch.replace(path)


def _seal(path: Path) -> Path:
    return path.with_suffix(".sha256")


def _sound(path: Path) -> bool:
    """Return True where a kept result is there and is what was written."""
    seal = _seal(path)
    return path.is_file() and seal.is_file() and seal.read_text() == sha256(path)


def record(made: Run) -> dict[str, Any]:
    """Return the record of a run: inputs, settings with defaults, versions, ledger, products."""
    home = made.pipeline.path.resolve().parent
    told = [
        {
            **done,
            "line": step.line,
            "settings": plain(step.settings, lambda path: os.path.relpath(path, home)),
        }
        for done, step in zip(made.steps, made.pipeline.steps, strict=True)
    ]
    out: dict[str, Any] = {
        "survey": made.pipeline.name,
        "crs": made.pipeline.crs,
        "pipeline": {"file": made.pipeline.path.name, "text": made.pipeline.text},
        "versions": versions(),
        "package_sha256": package_hash(),
        "inputs": [
            {"file": os.path.relpath(path, home), "sha256": value, "bytes": path.stat().st_size}
            for path, value in made.inputs.items()
        ],
        "stages": told,
        "products": [
            {"file": path.relative_to(made.folder).as_posix(), "sha256": sha256(path)}
            for path in made.products
        ],
    }
    if "lines" in made.parts:
        lines = made.part("lines")
        out["flags"] = survey.flag_counts(lines)
        out["closure_E"] = survey.closure(lines) if "as_read" in lines else None
        out["ledger"] = json.loads(ledger_summary(lines).to_json(orient="records"))
    return out
