"""Which readings are of a traverse, a tie or a repeat line."""

from __future__ import annotations

import fnmatch
from collections.abc import Sequence

import numpy as np

from gradred.errors import ReadingsError
from gradred.ingest.faults import nearest, number_of
from gradred.ingest.readings import Readings, Texts, runs
from gradred.survey import KINDS


def line_kinds(
    readings: Readings, ties: Sequence[str], repeats: Sequence[str]
) -> tuple[Texts, list[ReadingsError]]:
    """Return the (n,) kind of the line of each reading, and what is wrong with the statement.

    Parameters
    ----------
    readings : Readings
        Their own kind, where it was delivered, is what counts.
    ties, repeats : sequences of str
        Patterns of names, with ``*`` for any text; a line that fits none is a traverse.
    """
    if readings.kind is not None:
        return _delivered(readings, readings.kind)
    names, code = runs(readings.line)
    kind = np.full(len(names), "traverse", dtype=object)
    faults = []
    for patterns, what in ((ties, "tie"), (repeats, "repeat")):
        for pattern in patterns:
            fits = np.array([fnmatch.fnmatchcase(name, pattern) for name in names], dtype=bool)
            if not fits.any():
                faults.append(_no_line(pattern, what, names))
            if np.any(fits & (kind != "traverse") & (kind != what)):
                faults.append(_both(names[fits & (kind != "traverse") & (kind != what)][0]))
            kind[fits] = what
    return kind[code], faults


def _no_line(pattern: str, what: str, names: Texts) -> ReadingsError:
    return ReadingsError(
        f"no line fits the pattern {pattern!r} of the {what} lines",
        where=f"stage read_lines, {'ties' if what == 'tie' else 'repeats'}",
        cure=f"correct it; lines are called {', '.join(names[:3])}"
        + (f" and {len(names) - 3} more" if len(names) > 3 else ""),
    )


def _both(name: str) -> ReadingsError:
    return ReadingsError(
        f"line {name} fits a pattern of ties and one of repeats",
        where="stage read_lines, ties and repeats",
        cure="make one of the patterns narrower",
    )


def _delivered(readings: Readings, delivered: Texts) -> tuple[Texts, list[ReadingsError]]:
    names, code = runs(delivered)
    known = np.array([name.lower() for name in names], dtype=object)
    faults = []
    for n, name in enumerate(known):
        if name not in KINDS:
            here = np.flatnonzero(code == n)
            more = len(here) - 1
            also = f", and {number_of(more, 'more reading')} like it" if more else ""
            faults.append(
                ReadingsError(
                    f"there is no kind of line {names[n]!r}{also}",
                    where=readings.where(int(here[0])),
                    cure=nearest(name, KINDS),
                )
            )
    return known[code], faults
