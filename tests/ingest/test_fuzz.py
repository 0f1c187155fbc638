"""Whatever stands in a file: it is read into a valid part, or refused; nothing else happens."""

import tempfile
from pathlib import Path

import xarray as xr
from hypothesis import HealthCheck, event, given
from hypothesis import settings as budget
from hypothesis import strategies as st

from gradred import survey
from gradred.errors import GradredError
from gradred.ingest.tables import read_lines
from tests.ingest.deliveries import GOOD, settings, table

BYTES = GOOD.encode()
FREE = budget(deadline=None, max_examples=30, suppress_health_check=[HealthCheck.too_slow])
PIECES = st.sampled_from(
    [
        b"",
        b",",
        b'"',
        b"\n",
        b"\r",
        b"\0",
        b"\xff",
        b"\xc3\xa9",
        b"-",
        b"1e999",
        b"nan",
        b"inf",
        b"9" * 400,
        b"2031-03-05T08:00:00",
        b"2031-03-05",
        b"T90",
        b"#",
        b";",
        b" ",
        b"\x1f\x8b",
        b"1_0",
        "\u0661".encode(),
        b"\xe2\x80\xa8",
    ]
)


def read_or_refuse(content: bytes, name: str) -> None:
    read: list[xr.Dataset] = []
    with tempfile.TemporaryDirectory() as folder:
        try:
            read.append(read_lines(settings(table(Path(folder), content, name), nulls=["*"])))
        except* GradredError:
            event("refused")
    for lines in read:
        event("read")
        survey.check("lines", lines, ("gradient", "time", "flag"), where="fuzz")
        assert lines.sizes["station"] > 0


@given(st.binary(max_size=400), st.sampled_from(["lines.csv", "lines.csv.gz"]))
@FREE
def test_random_bytes(content: bytes, name: str) -> None:
    read_or_refuse(content, name)


@given(st.binary(max_size=200))
@FREE
def test_random_bytes_below_a_good_header(content: bytes) -> None:
    read_or_refuse(BYTES[: BYTES.index(b"\n") + 1] + content, "lines.csv")


@given(
    st.lists(
        st.tuples(st.integers(0, len(BYTES)), st.integers(0, 40), PIECES), min_size=1, max_size=3
    )
)
@FREE
def test_a_good_table_with_pieces_put_in_or_taken_out(
    changes: list[tuple[int, int, bytes]],
) -> None:
    content = BYTES
    for start, length, piece in changes:
        content = content[:start] + piece + content[start + length :]
    read_or_refuse(content, "lines.csv")


@given(st.integers(0, 4), st.integers(0, 21), st.one_of(PIECES, st.text(max_size=12)))
@FREE
def test_a_good_table_with_one_other_value(row: int, column: int, value: bytes | str) -> None:
    rows = [line.split(b",") for line in BYTES.splitlines()]
    rows[row + 1][column] = value if isinstance(value, bytes) else value.encode()
    read_or_refuse(b"\n".join(b",".join(line) for line in rows) + b"\n", "lines.csv")
