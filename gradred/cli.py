"""The commands, and the only room that prints: results to stdout, progress and refusals to stderr.

Only click is imported at the top, so that ``--help`` answers at once.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from rich.progress import Progress, TaskID

    from gradred.pipeline_file import Step

_FILE = click.Path(dir_okay=False, path_type=Path)
_FOLDER = click.Path(file_okay=False, path_type=Path)


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="gradred")
def main() -> None:
    """Reduce airborne gravity gradiometry: flight lines to levelled maps and a density model."""


@main.command("run")
@click.argument("pipeline", type=_FILE)
@click.option(
    "--into", type=_FOLDER, help="Folder of the run. Default: PIPELINE's name and '-run'."
)
def run_pipeline(pipeline: Path, into: Path | None) -> None:
    """Run the pipeline file PIPELINE; unchanged stages are not computed again."""
    with _refusals():
        from gradred import pipeline as chain
        from gradred.pipeline_file import read_pipeline

        understood = read_pipeline(pipeline, chain.STAGES)
        folder = into or Path(f"{pipeline.stem}-run")
        with _Screen() as screen:
            made = chain.run(understood, folder, screen)
        click.echo(f"{len(made.products)} products and record.json are in {folder}")
        reports = [path for path in made.products if path.suffix == ".html"]
        for path in reports:
            click.echo(f"read {path} first")


@main.command("check")
@click.argument("pipeline", type=_FILE)
def check_pipeline(pipeline: Path) -> None:
    """Look at PIPELINE and its inputs: what is there, what is missing, time and memory to come."""
    with _refusals():
        from gradred import pipeline as chain
        from gradred.forecast import forecast
        from gradred.pipeline_file import read_pipeline

        click.echo(forecast(read_pipeline(pipeline, chain.STAGES)))


@main.command("stages")
@click.option("--markdown", is_flag=True, help="The table of stages as it stands in the README.")
def list_stages(markdown: bool) -> None:
    """List the stages in working order, with what each one needs, makes and rests on."""
    from gradred import pipeline as chain
    from gradred.stage_table import as_markdown, as_text

    click.echo(as_markdown(chain.STAGES) if markdown else as_text(chain.STAGES))


@contextmanager
def _refusals() -> Iterator[None]:
    """Print refusals in plain words and leave with status 2; let bugs show their traceback."""
    from gradred.errors import GradredError

    try:
        yield
    except* GradredError as group:
        for error in _flat(group):
            click.echo(str(error), err=True)
        sys.exit(2)


def _flat(group: BaseExceptionGroup[BaseException]) -> Iterator[BaseException]:
    for error in group.exceptions:
        if isinstance(error, BaseExceptionGroup):
            yield from _flat(error)
        else:
            yield error


class _Screen:
    """Shows a run on stderr: one line per finished stage, a bar with the time left in long ones."""

    def __init__(self) -> None:
        self._progress: Progress | None = None
        self._task: TaskID | None = None

    def __enter__(self) -> _Screen:
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

        self._progress = Progress(
            TextColumn("  {task.description:<40}"),
            BarColumn(bar_width=30),
            TimeRemainingColumn(),
            console=Console(stderr=True),
            transient=True,
        )
        self._progress.start()
        return self

    def __exit__(self, *_: object) -> None:
        if self._progress:
            self._progress.stop()

    def started(self, step: Step, number: int, total: int) -> None:
        assert self._progress is not None
        label = f"{number}/{total} {step.stage.name}"
        self._task = self._progress.add_task(label, total=None)

    def progressed(self, done: float, total: float, what: str) -> None:
        if self._progress is not None and self._task is not None:
            self._progress.update(self._task, completed=done, total=total, description=what)

    def finished(self, step: Step, seconds: float, *, kept: bool) -> None:
        assert self._progress is not None
        if self._task is not None:
            self._progress.remove_task(self._task)
        said = "kept from before" if kept else f"{seconds:.1f} s"
        self._progress.console.print(f"{step.stage.name:<24}{said}", highlight=False)
