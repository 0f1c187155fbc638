"""What no reading can be: absurd values, times that stand still or run backwards."""

from __future__ import annotations

from typing import Final

import numpy as np

from gradred.errors import ReadingsError
from gradred.ingest.columns import NINE
from gradred.ingest.faults import number_of
from gradred.ingest.readings import Mask, Readings, runs, told

_DEGREES: Final = "degrees"
RANGES: Final[dict[str, tuple[float, float, str]]] = {
    "latitude": (-90.0, 90.0, _DEGREES),
    "longitude": (-180.0, 360.0, _DEGREES),
    "easting": (-1e8, 1e8, "m"),
    "northing": (-1e8, 1e8, "m"),
    "height": (-500.0, 20_000.0, "m"),
    "clearance": (0.0, 20_000.0, "m"),
    "heading": (-360.0, 360.0, _DEGREES),
    "pitch": (-90.0, 90.0, _DEGREES),
    "roll": (-180.0, 180.0, _DEGREES),
    **dict.fromkeys(("rate_x", "rate_y", "rate_z"), (-10.0, 10.0, "rad/s")),
    "turbulence": (0.0, 10.0, ""),
    **dict.fromkeys(NINE, (-1e8, 1e8, "E")),
}
"""Beyond these a number is not a reading but a slip of unit, column or null value."""


def value_faults(readings: Readings) -> list[ReadingsError]:
    """Return a fault per variable that has values no reading can have, infinities included."""
    faults = []
    for name, values in readings.values.items():
        low, high, unit = RANGES[name]
        wrong = (values < low) | (values > high)
        if wrong.any():
            worst = int(np.flatnonzero(wrong)[0])
            faults.append(
                ReadingsError(
                    f"{name} is {values[worst]:g} {unit}".rstrip()
                    + f", beyond {low:g} to {high:g}{_also(wrong)}",
                    where=readings.where(worst),
                    cure=f"check the column and the unit of {name}, "
                    "and name every null value among the nulls",
                )
            )
    return faults


def name_faults(readings: Readings) -> list[ReadingsError]:
    """Return a fault if readings have no name of a line or a flight."""
    faults = []
    for what, texts in (("line", readings.line), ("flight", readings.flight)):
        wrong = np.array(texts == "", dtype=bool)
        if wrong.any():
            file, row = readings.row(int(np.flatnonzero(wrong)[0]))
            faults.append(
                ReadingsError(
                    f"the name of the {what} is missing{_also(wrong)}",
                    where=f"{file}, row {row}",
                    cure=f"name the {what} of every reading",
                )
            )
    return faults


def flight_faults(readings: Readings) -> list[ReadingsError]:
    """Return a fault if one name of a line stands for pieces of several flights."""
    names, code = runs(readings.line)
    flights, flight = runs(readings.flight)
    pairs = np.unique(code * len(flights) + flight)
    twice = np.flatnonzero(np.bincount(pairs // len(flights)) > 1)
    if not len(twice):
        return []
    line = int(twice[0])
    flown = [str(flights[pair % len(flights)]) for pair in pairs if pair // len(flights) == line]
    last = np.flatnonzero((code == line) & (readings.flight == flown[-1]))
    more = f", and {number_of(len(twice) - 1, 'more line')} like it" if len(twice) > 1 else ""
    return [
        ReadingsError(
            f"line {names[line]} was flown in the flights {' and '.join(flown)}{more}",
            where=readings.where(int(last[0])),
            cure="give each piece a name of its own: drift is estimated line by line",
        )
    ]


def order_faults(readings: Readings) -> list[ReadingsError]:
    """Return a fault per flight line whose times do not go on from reading to reading."""
    _, code = runs(readings.line)
    order = np.argsort(code, kind="stable")
    step = np.diff(readings.time[order])
    same_line = np.diff(code[order]) == 0
    faults = []
    for what, wrong in (
        ("twice", same_line & (step == np.timedelta64(0, "ns"))),
        ("after", same_line & (step < np.timedelta64(0, "ns"))),
    ):
        places = np.flatnonzero(wrong)
        if len(places):
            first, second = int(order[places[0]]), int(order[places[0] + 1])
            faults.append(_order_fault(readings, what, first, second, len(places) - 1))
    return faults


def _order_fault(
    readings: Readings, what: str, first: int, second: int, more: int
) -> ReadingsError:
    (file_1, row_1), (file_2, row_2) = readings.row(first), readings.row(second)
    rows = (
        f"{file_1}, rows {row_1} and {row_2}"
        if file_1 == file_2
        else f"{file_1}, row {row_1} and {file_2}, row {row_2}"
    )
    earlier, later = told(readings.time[second]), told(readings.time[first])
    again = f"the time {earlier} twice" if what == "twice" else f"the time {earlier} after {later}"
    also = f", and {number_of(more, 'more step')} like it" if more else ""
    return ReadingsError(
        f"line {readings.line[second]} has {again}{also}",
        where=rows,
        cure="deliver each reading once, in the order in which its line was flown; "
        "a line flown again needs a name of its own",
    )


def missing_faults(readings: Readings) -> list[ReadingsError]:
    """Return a fault per variable of which not one value is there."""
    return [
        ReadingsError(
            f"{name} is missing at all of {number_of(readings.size, 'reading')}",
            where=", ".join(table.path.name for table in readings.tables),
            cure=f"leave out the column of {name}, or correct the nulls",
        )
        for name, values in readings.values.items()
        if np.isnan(values).all()
    ]


def _also(wrong: Mask) -> str:
    more = int(np.count_nonzero(wrong)) - 1
    return f", and {number_of(more, 'more reading')} like it" if more else ""
