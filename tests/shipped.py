"""Running a shipped pipeline once for many tests, every stage watched for changes to its input."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
import xarray as xr

from gradred import pipeline
from gradred.pipeline_file import read_pipeline
from gradred.stage import Stage

ROOT = Path(__file__).parents[1]


@contextmanager
def watched_inputs() -> Iterator[list[str]]:
    """Have every stage compared with a copy of its input; yield the names of those that ran."""
    bare = pipeline._call
    ran: list[str] = []

    def watching(stage: Stage) -> Callable[..., Any]:
        function = bare(stage)

        def call(**arguments: Any) -> Any:
            parts = {k: v for k, v in arguments.items() if isinstance(v, xr.Dataset)}
            copies = {name: part.copy(deep=True) for name, part in parts.items()}
            result = function(**arguments)
            for name, part in parts.items():
                xr.testing.assert_identical(part, copies[name])
            ran.append(stage.name)
            return result

        return call

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(pipeline, "_call", watching)
        yield ran


def run_shipped(name: str, folder: Path) -> tuple[pipeline.Run, list[str]]:
    """Run a file of ``pipelines`` into a folder."""
    with watched_inputs() as ran:
        made = pipeline.run(read_pipeline(ROOT / "pipelines" / name, pipeline.STAGES), folder)
    return made, ran
