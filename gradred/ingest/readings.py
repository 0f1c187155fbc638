"""The readings of all tables of a delivery, one after another, and the way back to their rows."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gradred.ingest.delimited import Delimited

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Texts = NDArray[np.object_]
Times = NDArray[np.datetime64]


@dataclass(frozen=True)
class Readings:
    """What was delivered, in gradred's units, before any of it is judged.

    Parameters
    ----------
    tables : sequence of Delimited
        Where it came from, in order.
    time : (n,) array
        UTC.
    line, flight : (n,) arrays of str
        Names.
    kind : (n,) array of str, or None
        As delivered.
    values : dict of str to (n,) array
        Every other delivered variable by its name in ``LineColumns``.
    """

    tables: Sequence[Delimited]
    time: Times
    line: Texts
    flight: Texts
    kind: Texts | None
    values: dict[str, Array]

    @property
    def size(self) -> int:
        """How many readings there are."""
        return len(self.time)

    def row(self, index: int) -> tuple[str, int]:
        """Return the name of the file and the row in which a reading stands."""
        for table in self.tables:
            if index < table.size:
                return table.path.name, table.row(index)
            index -= table.size
        raise IndexError(index)

    def where(self, index: int) -> str:
        """Return file, row, flight line and time of a reading, for a message."""
        name, row = self.row(index)
        return f"{name}, row {row} (line {self.line[index]}, {told(self.time[index])})"


def told(time: np.datetime64) -> str:
    """Return a time as text without needless zeros: 2031-03-05T08:00:03.25."""
    text = str(np.datetime_as_string(time, unit="ns"))
    return text.rstrip("0").rstrip(".")


def runs(line: Iterable[str]) -> tuple[Texts, NDArray[np.intp]]:
    """Return the names of lines in order, and for each reading the number of its line."""
    names, code = np.unique(np.asarray(line, dtype=str), return_inverse=True)
    return names.astype(object), code
