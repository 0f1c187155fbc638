"""Several refusals found in one delivery are told together."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Sequence

from gradred.errors import ReadingsError


def tell(faults: Sequence[ReadingsError], about: str) -> None:
    """Raise the fault that was found, or all of them as one ``ExceptionGroup``; else nothing.

    Parameters
    ----------
    faults : sequence of ReadingsError
        In the order in which they are to be read.
    about : str
        What they have in common.
    """
    if len(faults) == 1:
        raise faults[0]
    if faults:
        raise ExceptionGroup(about, list(faults))


def merged(faults: Iterable[ReadingsError]) -> list[ReadingsError]:
    """Return the faults with those that say the same of several tables told once."""
    places: dict[tuple[str, str], list[str]] = {}
    for fault in faults:
        places.setdefault((fault.what, fault.cure), []).append(fault.where)
    return [
        ReadingsError(
            what,
            where=where[0] if len(where) == 1 else f"{where[0]}, and {len(where) - 1} more like it",
            cure=cure,
        )
        for (what, cure), where in places.items()
    ]


def nearest(word: str, known: Iterable[str]) -> str:
    """Return a cure for a misspelt name: the nearest of the known names, or all of them."""
    names = list(known)
    close = difflib.get_close_matches(word, names, n=1)
    return f"did you mean {close[0]!r}?" if close else f"write one of: {', '.join(names)}"


def number_of(count: int, what: str) -> str:
    """Return "1 row" or "2 rows"."""
    return f"{count} {what}" + ("" if count == 1 else "s")
