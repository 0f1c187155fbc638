"""The table of stages for the README and the command line, made from the docstrings."""

from __future__ import annotations

import inspect
import re
from collections.abc import Callable, Iterable
from typing import Any

from gradred.stage import Stage


def section(function: Callable[..., Any], title: str) -> str:
    """Return one section of a numpydoc docstring in one line, or an empty text."""
    text = inspect.getdoc(function) or ""
    found = re.search(rf"^{title}\n-{{3,}}\n(.*?)(?=^\S[^\n]*\n-{{3,}}$|\Z)", text, re.M | re.S)
    return " ".join(found[1].split()) if found else ""


def as_markdown(stages: Iterable[Stage]) -> str:
    """Return the table of stages: what each does, its source, its check, its accuracy."""
    rows = ["| stage | what it does | source | checked by | accuracy |", "|---|---|---|---|---|"]
    for stage in stages:
        told = stage.physics or stage.function
        cells = [section(told, title) for title in ("Source", "Checked by", "Accuracy")]
        row = [f"`{stage.name}`", stage.summary, *(cell or "–" for cell in cells)]
        rows.append("| " + " | ".join(cell.replace("|", "\\|") for cell in row) + " |")
    return "\n".join(rows)


def as_text(stages: Iterable[Stage]) -> str:
    """Return the stages in working order, with what each needs and makes."""
    blocks = []
    for stage in stages:
        needs = [f"{part} ({', '.join(names)})" for part, names in stage.needs.items()]
        makes = stage.makes or "files"
        adds = f" with {', '.join(stage.adds)}" if stage.adds else ""
        blocks.append(
            f"{stage.name}\n  {stage.summary}\n"
            f"  needs: {'; '.join(needs) or 'files' if not stage.writes else 'what there is'}\n"
            f"  makes: {makes}{adds}"
        )
    return "\n".join(blocks)
