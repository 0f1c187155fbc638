"""Small deliveries for the tests of ingest: tables as text, and settings that read them."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from gradred.errors import ReadingsError
from gradred.ingest.tables import LineSettings

CRS = "EPSG:32633"

GOOD = """\
flight,line,time,lon,lat,h,clr,hdg,pit,rol,wx,wy,wz,xx,xy,xz,yx,yy,yz,zx,zy,zz
F1,L10,2031-03-05T08:00:00,15.0,47.0,500.5,80.1,359.5,1.0,-2.0,0.00001,0.00002,0.00003,1,2,3,2.5,4,5,3.5,5.5,-5
F1,L10,2031-03-05T08:00:01,15.0,47.001,501.5,80.2,0.5,1.0,-2.0,0.00001,0.00002,0.00003,2,2,3,2.5,4,5,3.5,5.5,-6
F1,L10,2031-03-05T08:00:02.5,15.0,47.002,502.5,80.3,1.5,1.0,-2.0,0.00001,0.00002,0.00003,3,2,3,2.5,4,5,3.5,5.5,-7
F1,T90,2031-03-05T08:10:00,15.001,47.0,503.5,80.4,90.0,1.0,-2.0,0.00001,0.00002,0.00003,4,2,3,2.5,4,5,3.5,5.5,-8
F1,T90,2031-03-05T08:10:01,15.002,47.0,504.5,80.5,90.0,1.0,-2.0,0.00001,0.00002,0.00003,5,2,3,2.5,4,5,3.5,5.5,-9
"""

COLUMNS: dict[str, str] = {
    "flight": "flight", "line": "line", "time": "time", "longitude": "lon", "latitude": "lat",
    "height": "h", "clearance": "clr", "heading": "hdg", "pitch": "pit", "roll": "rol",
    "rate_x": "wx", "rate_y": "wy", "rate_z": "wz",
    **{name: name for name in ("xx", "xy", "xz", "yx", "yy", "yz", "zx", "zy", "zz")},
}  # fmt: skip

STATED: dict[str, Any] = {
    "crs": CRS,
    "delimiter": ",",
    "header": 1,
    "columns": COLUMNS,
    "units": {
        "gradient": "E", "height": "m", "clearance": "m", "longitude": "deg", "attitude": "deg",
        "rates": "rad/s",
    },
    "frame": "body",
    "sign": "static-positive",
    "rates_sign": "right-handed",
    "height_reference": "ellipsoid",
    "ties": ["T*"],
}  # fmt: skip


def settings(*tables: Path, **changes: Any) -> LineSettings:
    """Return the settings that read ``GOOD``, with some of them changed; None leaves one out."""
    stated = {"tables": list(tables), **STATED, **changes}
    return LineSettings.model_validate({k: v for k, v in stated.items() if v is not None})


def columns(**changes: str | None) -> dict[str, str]:
    """Return the columns of ``GOOD``, with some of them changed; None leaves one out."""
    merged = {**COLUMNS, **changes}
    return {name: column for name, column in merged.items() if column is not None}


def table(folder: Path, text: str | bytes = GOOD, name: str = "lines.csv") -> Path:
    """Write a table and return its path."""
    path = folder / name
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return path


def message(what: str, where: str, cure: str) -> str:
    """Return the message of a ``ReadingsError``, line by line."""
    return str(ReadingsError(what, where=where, cure=cure))
