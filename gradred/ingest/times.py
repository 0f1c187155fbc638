"""Delivered dates and times → UTC."""

from __future__ import annotations

from datetime import datetime
from typing import Any, Final, Literal

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from gradred.errors import ReadingsError
from gradred.ingest.columns import LineColumns
from gradred.ingest.delimited import Delimited
from gradred.ingest.faults import number_of

Times = NDArray[np.datetime64]
DateFormat = Literal["YYYY-MM-DD", "YYYY/MM/DD", "YYYYMMDD", "DD/MM/YYYY", "MM/DD/YYYY"]

_STRPTIME: Final[dict[str, str]] = {
    "YYYY-MM-DD": "%Y-%m-%d",
    "YYYY/MM/DD": "%Y/%m/%d",
    "YYYYMMDD": "%Y%m%d",
    "DD/MM/YYYY": "%d/%m/%Y",
    "MM/DD/YYYY": "%m/%d/%Y",
}
_DAY: Final = 86_400.0
_EARLIEST, _LATEST = np.datetime64("1960-01-01", "ns"), np.datetime64("2100-01-01", "ns")


class _UnreadableError(Exception):
    """Texts of a column, by mask, that are not what they should be."""

    def __init__(self, column: str, values: Any, wrong: NDArray[np.bool_], wanted: str) -> None:
        super().__init__(column)
        self.column, self.values, self.wrong, self.wanted = column, values, wrong, wanted


def times(
    table: Delimited, columns: LineColumns, date_format: DateFormat, ahead_of_utc: float
) -> Times:
    """Return the (n,) UTC of every row of a table, ns.

    Parameters
    ----------
    table : Delimited
        With the columns of time read as text, those of seconds as numbers.
    columns : LineColumns
        Which column holds what.
    date_format : str
        Of a date column.
    ahead_of_utc : float
        What the delivered times are ahead of UTC, s; subtracted.
    """
    if ahead_of_utc and columns.time is not None:
        _check_zone(table, columns.time, ahead_of_utc)
    try:
        found = _delivered(table, columns, date_format)
    except _UnreadableError as error:
        raise _refusal(table, error) from None
    shift = np.rint(ahead_of_utc * 1e9).astype("timedelta64[ns]")
    return np.asarray(found - shift)


def _check_zone(table: Delimited, column: str, ahead_of_utc: float) -> None:
    """Refuse times that say that they are UTC, and are stated not to be."""
    said = pc.fill_null(pc.ends_with(table.columns[column], "Z"), False)
    if pc.any(said).as_py():
        index = pc.index(said, True).as_py()
        raise ReadingsError(
            f"column {column!r} holds {table.columns[column][index].as_py()!r}, whose Z says UTC, "
            f"but 'ahead_of_utc' is {ahead_of_utc:g} s",
            where=f"{table.path.name}, row {table.row(index)}",
            cure="leave out 'ahead_of_utc', or correct the column",
        )


def _delivered(table: Delimited, columns: LineColumns, date_format: DateFormat) -> Times:
    if columns.date is None:
        assert columns.time is not None
        return _stamps(columns.time, table.columns[columns.time], "", "a date and time in ISO form")
    days = _days(columns.date, table.columns[columns.date], date_format)
    if columns.time is not None:
        clock = _stamps(
            columns.time, table.columns[columns.time], "1970-01-01T", "a time of day as hh:mm:ss"
        )
        return np.asarray(days + (clock - np.datetime64(0, "ns")))
    assert columns.seconds is not None
    seconds = table.number(columns.seconds)
    wrong = ~((seconds >= 0.0) & (seconds < _DAY))
    if wrong.any():
        raise _UnreadableError(columns.seconds, seconds, wrong, "seconds of a day, 0 to 86400")
    return np.asarray(days + np.rint(seconds * 1e9).astype("timedelta64[ns]"))


def _stamps(column: str, text: Any, before: str, wanted: str) -> Times:
    """Return (n,) times from ISO text; a final Z, which says UTC, is taken off."""
    full = pc.utf8_rtrim(text, characters="Z")
    if before:
        full = pc.binary_join_element_wise(before, full, "")
    try:
        stamps = pc.cast(full, pa.timestamp("ns"))
    except pa.ArrowInvalid:
        wrong = np.array([not _is_stamp(value) for value in full])
        raise _UnreadableError(column, text, wrong, wanted) from None
    found = stamps.to_numpy(zero_copy_only=False).astype("datetime64[ns]")
    wrong = np.isnat(found)
    if not before:
        wrong |= (found < _EARLIEST) | (found > _LATEST)
    if wrong.any():
        raise _UnreadableError(column, text, wrong, wanted)
    return np.asarray(found)


def _is_stamp(value: Any) -> bool:
    try:
        pc.cast(pa.array([value], pa.string()), pa.timestamp("ns"))
    except pa.ArrowInvalid:
        return False
    return value.is_valid if isinstance(value, pa.Scalar) else value is not None


def _days(column: str, text: Any, date_format: DateFormat) -> Times:
    coded = text.dictionary_encode()
    known = [_day(value.as_py(), date_format) for value in coded.dictionary]
    days = np.array([*known, np.datetime64("NaT")], dtype="datetime64[ns]")
    index = coded.indices.fill_null(len(known)).to_numpy(zero_copy_only=False)
    found = days[index]
    wrong = np.isnat(found) | (found < _EARLIEST) | (found > _LATEST)
    if wrong.any():
        raise _UnreadableError(column, text, wrong, f"a date as {date_format}")
    return np.asarray(found)


def _day(value: str, date_format: DateFormat) -> np.datetime64:
    try:
        day = datetime.strptime(value, _STRPTIME[date_format])
    except ValueError:
        return np.datetime64("NaT")
    return np.datetime64(day.date().isoformat())


def _refusal(table: Delimited, error: _UnreadableError) -> ReadingsError:
    index = int(np.flatnonzero(error.wrong)[0])
    value = error.values[index]
    told = value.as_py() if isinstance(value, pa.Scalar) else float(value)
    more = int(np.count_nonzero(error.wrong)) - 1
    also = f", and {number_of(more, 'more row')} like it" if more else ""
    missing = told is None or told != told
    return ReadingsError(
        f"column {error.column!r} {'holds nothing' if missing else f'holds {told!r}'}"
        f" where {error.wanted} must stand{also}",
        where=f"{table.path.name}, row {table.row(index)}",
        cure="correct it, or state 'date_format'; a reading without its time cannot be used",
    )
