"""Delimited text → columns, with every value that cannot be read told by its row and column.

A table is parsed in one go by Arrow. Only if Arrow refuses it is the text gone through row by row,
to say where the fault is. Rows are counted from 1 and include the header, as an editor shows them.
"""

from __future__ import annotations

import csv
import functools
import gzip
import re
import zlib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final, Literal

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv
from numpy.typing import NDArray

from gradred.errors import ReadingsError
from gradred.ingest.faults import nearest, number_of, tell

_NUMBER: Final = re.compile(r"[-+]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][-+]?[0-9]+)?")
_BLANKS: Final = re.compile(rb"[ \t]+")
_MOST: Final = 10
"""No more faults than these are told of one table."""


@dataclass(frozen=True)
class Dialect:
    """How a table is written.

    Parameters
    ----------
    delimiter : str
        One character; a blank stands for any run of blanks.
    header : int
        Row with the names of the columns; 0 where there is none, and columns go by number.
    comment : str
        What a row starts with that is to be skipped; empty where there are none.
    nulls : sequence of str
        Texts that mean a missing value, besides an empty field.
    encoding : str
        Of the text.
    """

    delimiter: str
    header: int
    comment: str = ""
    nulls: Sequence[str] = ()
    encoding: Literal["utf-8", "latin-1"] = "utf-8"


@dataclass(frozen=True)
class Delimited:
    """A table that has been parsed: the wanted columns, and the way back to the rows of the file.

    Parameters
    ----------
    path : Path
        The file.
    columns : mapping of str to Arrow array
        The wanted columns: numbers as float64, all else as text.
    body : bytes
        The rows below the header.
    dialect : Dialect
        How the table is written.
    """

    path: Path
    columns: Mapping[str, Any]
    body: bytes = field(repr=False)
    dialect: Dialect

    @property
    def size(self) -> int:
        """How many rows of data there are."""
        return len(next(iter(self.columns.values())))

    def number(self, name: str) -> NDArray[np.float64]:
        """Return (n,) numbers of a column, NaN where the value is missing."""
        values = np.array(self.columns[name].to_numpy(zero_copy_only=False))
        for null in self.dialect.nulls:
            if _NUMBER.fullmatch(null):
                values[values == float(null)] = np.nan
        return np.asarray(values)

    def text(self, name: str) -> NDArray[np.object_]:
        """Return (n,) texts of a column, empty where the value is missing."""
        coded = self.columns[name].dictionary_encode()
        known = np.array([*coded.dictionary.to_pylist(), ""], dtype=object)
        return np.asarray(known[coded.indices.fill_null(len(known) - 1).to_numpy()])

    def row(self, index: int) -> int:
        """Return the row of the file in which a row of data stands."""
        return self._rows[index]

    @functools.cached_property
    def _rows(self) -> list[int]:
        return [number for number, _ in _data_rows(self.body, self.dialect)]


def read_delimited(
    path: Path, dialect: Dialect, numbers: Mapping[str, str], texts: Mapping[str, str]
) -> Delimited:
    """Return the wanted columns of a table; refuse, all faults together, what is not one.

    Parameters
    ----------
    path : Path
        Plain or gzipped text.
    dialect : Dialect
        How it is written.
    numbers, texts : mapping of str to str
        Wanted columns by name, with what each is wanted for.

    Returns
    -------
    Delimited
        Every wanted column, in the file's order of rows.
    """
    content = _decoded(path, _content(path), dialect)
    names, body = _split_header(path, content, dialect)
    _check_names(path, names, dialect, {**numbers, **texts})
    try:
        columns = _columns(body, names, dialect, list(numbers), list(texts))
    except pa.ArrowInvalid as error:
        tell(_faults(path, body, names, dialect, list(numbers)), f"{path.name} cannot be read")
        raise ReadingsError(
            f"the table cannot be parsed: {str(error).splitlines()[0]}",
            where=path.name,
            cure="check the delimiter and the quotes",
        ) from None
    if len(next(iter(columns.values()))) == 0:
        raise ReadingsError(
            "the table has no rows of data", where=path.name, cure="deliver a file with readings"
        )
    _check_last_row(path, body, dialect)
    return Delimited(path, columns, body, dialect)


def _content(path: Path) -> bytes:
    """Return the bytes of a file, unpacked if its name or its first bytes say gzip."""
    try:
        raw = path.read_bytes()
    except OSError as error:
        raise ReadingsError(
            f"cannot be read: {error.strerror}", where=path.name, cure="name an existing table"
        ) from None
    if path.suffix != ".gz" and raw[:2] != b"\x1f\x8b":
        return raw
    try:
        return gzip.decompress(raw)
    except EOFError:
        what = "the gzip file is cut off"
    except (gzip.BadGzipFile, zlib.error) as error:
        what = f"is not a sound gzip file: {error}"
    raise ReadingsError(what, where=path.name, cure="copy or pack the file again")


def _decoded(path: Path, raw: bytes, dialect: Dialect) -> bytes:
    """Return a table's content as UTF-8 without mark, one kind of line end, blanks joined."""
    raw = raw.removeprefix(b"\xef\xbb\xbf")
    if not raw or raw.isspace():
        raise ReadingsError(
            "the file is empty", where=path.name, cure="deliver a file with readings"
        )
    if (place := raw.find(b"\0")) >= 0:
        row = raw.count(b"\n", 0, place) + 1
        raise ReadingsError(
            f"byte {place} is NUL, which no text holds",
            where=f"{path.name}, row {row}",
            cure="copy the file again, and save UTF-16 text as UTF-8",
        )
    if not raw.isascii():
        raw = _to_utf8(path, raw, dialect)
    if b"\r" in raw:
        raw = raw.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    if dialect.delimiter == " ":
        raw = b"\n".join(_BLANKS.sub(b" ", line).strip(b" ") for line in raw.split(b"\n"))
    return raw


def _to_utf8(path: Path, raw: bytes, dialect: Dialect) -> bytes:
    try:
        return raw.decode(dialect.encoding).encode()
    except UnicodeDecodeError as error:
        row = raw.count(b"\n", 0, error.start) + 1
        raise ReadingsError(
            f"byte {error.start} is {raw[error.start]:#04x}, which is not {dialect.encoding} text",
            where=f"{path.name}, row {row}",
            cure="save the file as UTF-8, or state its encoding",
        ) from None


def _split_header(path: Path, content: bytes, dialect: Dialect) -> tuple[list[str], bytes]:
    """Return the names of the columns and what stands below them."""
    if dialect.header == 0:
        first = next(_data_rows(content, dialect), (0, ""))[1]
        return [str(n + 1) for n in range(len(_fields(first, dialect)))], content
    start = 0
    for _ in range(dialect.header - 1):
        start = content.find(b"\n", start) + 1
        if start == 0:
            raise ReadingsError(
                f"the file ends before row {dialect.header}, which must hold the names",
                where=path.name,
                cure="correct the setting 'header', or copy the file again",
            )
    end = content.find(b"\n", start)
    end = len(content) if end < 0 else end
    header = content[start:end].decode()
    if dialect.comment and header.startswith(dialect.comment):
        header = header.removeprefix(dialect.comment)
    return [name.strip() for name in _fields(header, dialect)], content[end + 1 :]


def _fields(row: str, dialect: Dialect) -> list[str]:
    try:
        return next(csv.reader([row], delimiter=dialect.delimiter), [])
    except csv.Error:
        return row.split(dialect.delimiter)


def _check_names(
    path: Path, names: Sequence[str], dialect: Dialect, wanted: Mapping[str, str]
) -> None:
    if len(names) == 1 and len(wanted) > 1:
        raise ReadingsError(
            f"the header is one column for the delimiter {dialect.delimiter!r}: {names[0][:40]!r}",
            where=f"{path.name}, row {max(dialect.header, 1)}",
            cure="state the delimiter and the row of the header as they are in the file",
        )
    faults = []
    for name, purpose in wanted.items():
        count = names.count(name)
        if count == 1:
            continue
        what = f"there is no column {name!r}" if count == 0 else f"{count} columns are {name!r}"
        cure = nearest(name, names) if count == 0 else "give each column a name of its own"
        where = f"{path.name}, row {max(dialect.header, 1)}"
        faults.append(ReadingsError(f"{what}, wanted for {purpose}", where=where, cure=cure))
    tell(faults, f"{path.name} lacks columns")


def _columns(
    body: bytes, names: Sequence[str], dialect: Dialect, numbers: list[str], texts: list[str]
) -> dict[str, Any]:
    """Return the wanted columns; numbers padded with blanks go the longer way through text."""
    try:
        columns = _parse(body, names, dialect, numbers, texts)
        padded: list[str] = []
    except pa.ArrowInvalid:
        columns = _parse(body, names, dialect, [], [*numbers, *texts])
        padded = numbers
    for name in [*padded, *texts]:
        column = pc.utf8_trim_whitespace(columns[name])
        absent = pc.is_in(column, value_set=pa.array(["", *dialect.nulls], pa.string()))
        columns[name] = pc.if_else(absent, pa.scalar(None, pa.string()), column)
    for name in padded:
        columns[name] = pc.cast(columns[name], pa.float64())
    return columns


def _parse(
    body: bytes, names: Sequence[str], dialect: Dialect, numbers: list[str], texts: list[str]
) -> dict[str, Any]:
    """Return the Arrow arrays of the wanted columns."""
    if dialect.comment:
        mark = dialect.comment.encode()
        if body.startswith(mark) or b"\n" + mark in body:
            body = b"\n".join(row for row in body.split(b"\n") if not row.startswith(mark))
    # unwanted columns go by their place, so that equal names among them do no harm
    wanted = {*numbers, *texts}
    unique = [name if name in wanted else f"#{n}" for n, name in enumerate(names)]
    if not body or body.isspace():
        return {name: pa.array([], pa.string()) for name in [*numbers, *texts]}
    table = pa.csv.read_csv(
        pa.BufferReader(body),
        pa.csv.ReadOptions(column_names=unique, block_size=1 << 24),
        pa.csv.ParseOptions(delimiter=dialect.delimiter),
        pa.csv.ConvertOptions(
            column_types={
                **dict.fromkeys(numbers, pa.float64()),
                **dict.fromkeys(texts, pa.string()),
            },
            include_columns=[*numbers, *texts],
            null_values=["", *dialect.nulls],
            strings_can_be_null=True,
        ),
    )
    return {name: table.column(name).combine_chunks() for name in table.column_names}


def _data_rows(body: bytes, dialect: Dialect) -> Iterator[tuple[int, str]]:
    """Yield every row of data with its number in the file."""
    for number, row in enumerate(body.split(b"\n"), dialect.header + 1):
        text = row.decode()
        if row and not (dialect.comment and text.startswith(dialect.comment)):
            yield number, text


def _faults(
    path: Path, body: bytes, names: Sequence[str], dialect: Dialect, numbers: Sequence[str]
) -> list[ReadingsError]:
    """Go through the text row by row and return what is wrong with it."""
    places = [(name, names.index(name)) for name in numbers]
    short: list[tuple[int, int]] = []
    texts: dict[str, list[tuple[int, str]]] = {}
    for number, row in _data_rows(body, dialect):
        values = _fields(row, dialect)
        if len(values) != len(names):
            short.append((number, len(values)))
            continue
        for name, place in places:
            value = values[place].strip()
            if value and value not in dialect.nulls and not _is_number(value):
                texts.setdefault(name, []).append((number, value))
    faults = [_text_fault(path, name, found) for name, found in texts.items()]
    if short:
        faults.insert(0, _width_fault(path, short, len(names), body))
    return faults[:_MOST]


def _is_number(value: str) -> bool:
    return bool(_NUMBER.fullmatch(value)) or value.lower().lstrip("+-") in (
        "nan", "inf", "infinity",
    )  # fmt: skip


def _text_fault(path: Path, name: str, found: Sequence[tuple[int, str]]) -> ReadingsError:
    row, value = found[0]
    more = "" if len(found) == 1 else f", and text in {number_of(len(found) - 1, 'more row')}"
    return ReadingsError(
        f"column {name!r} holds {value!r} where a number must stand{more}",
        where=f"{path.name}, row {row}",
        cure=f"correct it, or add {value!r} to the nulls if it means a missing value",
    )


def _width_fault(
    path: Path, short: Sequence[tuple[int, int]], width: int, body: bytes
) -> ReadingsError:
    row, count = short[0]
    more = "" if len(short) == 1 else f", as {number_of(len(short) - 1, 'more row')}"
    cut = len(short) == 1 and count < width and not body.endswith(b"\n")
    return ReadingsError(
        f"the row has {number_of(count, 'field')}, not {width} as the header{more}",
        where=f"{path.name}, row {row}",
        cure="the file is cut off there: copy it again"
        if cut
        else "correct the row, or state the delimiter that the file is written with",
    )


def _check_last_row(path: Path, body: bytes, dialect: Dialect) -> None:
    """Refuse a last row that breaks off inside its last number.

    Without a line end the last number may be cut short, which its value does not show; it shows
    in decimals other than those of the row before.
    """
    if body.endswith(b"\n"):
        return
    rows = body.rsplit(b"\n", 2)[-2:]
    ends = [row.rpartition(dialect.delimiter.encode())[2].strip().decode() for row in rows]
    decimals = [len(end.partition(".")[2]) for end in ends]
    if len(rows) == 2 and decimals[1] != decimals[0]:
        raise ReadingsError(
            f"the file ends without a line end in {ends[1]!r}, written unlike the {ends[0]!r} "
            "in the row before: it may be cut off",
            where=f"{path.name}, last row",
            cure="copy the file again; if it is whole, add a line end",
        )
