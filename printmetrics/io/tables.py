"""Tables out: the columns, once, and CSV that a process log, a spreadsheet and a program all read alike."""

from __future__ import annotations

import csv
import io
import json
import math
import os
import re
from contextlib import suppress
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Literal, Self
from urllib.parse import quote

from printmetrics.errors import FolderError

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

Datatype = Literal["text", "number", "integer", "datetime"]
Value = str | float | int | datetime | None


@dataclass(frozen=True, slots=True)
class Column:
    """One column of a table.

    Parameters
    ----------
    name : str
        As in the header.
    datatype : {"text", "number", "integer", "datetime"}
        What its cells hold.
    description : str
        One sentence.
    unit : str, optional
        UCUM, where it is the same in every row.
    """

    name: str
    datatype: Datatype
    description: str
    unit: str = ""


@dataclass(frozen=True, slots=True)
class Table:
    """A kind of table.

    Parameters
    ----------
    name : str
        Its file's name without suffix.
    description : str
        What one row is.
    columns : tuple of Column
        In the order of the file.
    key : tuple of str, optional
        Columns that together tell each row from all others.
    """

    name: str
    description: str
    columns: tuple[Column, ...]
    key: tuple[str, ...] = ()

    @property
    def header(self) -> list[str]:
        """The columns' names."""
        return [column.name for column in self.columns]


_IMAGE = Column("image", "text", "Name of the picture's file; #n is page n of a multi-page file.")
_SHA256 = Column("image_sha256", "text", "SHA-256 of the picture's file; empty where it could not be read.")
_LOT = Column("lot", "text", "Lot.")
_ROLL = Column("roll", "text", "Roll.")
_POSITION = Column("position_m", "number", "Position along the web.", "m")
_LANE = Column("lane", "text", "Lane across the web.")
_FEATURE = Column("feature", "text", "Name of the feature in the recipe.")
_ITEM = Column("item", "text", "Member of the feature, such as L3; all for the whole feature.")
_MEASURED_AT = Column("measured_at", "datetime", "When it was measured.")

MEASUREMENTS = Table(
    "measurements",
    "One reading a row.",
    (
        Column("source", "text", "Camera or folder the picture came from."),
        _IMAGE,
        _SHA256,
        Column("captured_at", "datetime", "When the picture was taken; empty where the offset from UTC is unknown."),
        _LOT,
        _ROLL,
        _POSITION,
        _LANE,
        Column("site", "text", "Site on the product."),
        Column("layer", "text", "Printed layer."),
        Column("rotation_deg", "number", "How far the sample was turned for this picture.", "deg"),
        _FEATURE,
        Column("kind", "text", "Kind of feature."),
        _ITEM,
        Column("quantity", "text", "What was measured, by its name in the catalogue."),
        Column("value", "number", "The reading, in unit; empty where it is withheld, then flags says why."),
        Column("unit", "text", "Unit of value, uncertainties and limits, UCUM."),
        Column("u", "number", "Combined standard uncertainty, in unit; empty where it is unknown."),
        Column("u_noise", "number", "Part of u from pixel noise, in unit."),
        Column("u_sampling", "number", "Part of u from the sampling of a rough line, in unit."),
        Column("u_common", "number", "Part of u that all readings share (scale, model), in unit."),
        Column("expanded_u", "number", "Expanded uncertainty, 95 %, Student's factor with dof, in unit."),
        Column("dof", "number", "Effective degrees of freedom of u; INF where every part is known exactly."),
        Column("lower", "number", "Lower limit, in unit."),
        Column("target", "number", "Target, in unit."),
        Column("upper", "number", "Upper limit, in unit."),
        Column("verdict", "text", "conforming, nonconforming or undecided; empty without limits."),
        Column("flags", "text", "What is doubtful about the reading, words joined by a semicolon."),
        Column("eval_length_um", "number", "Length evaluated; in pixels where the scale is unknown.", "um"),
        Column("sampling_um", "number", "Sampling interval along it; in pixels where the scale is unknown.", "um"),
        Column("revision", "integer", "0 is the automatic reading, higher a person's later decision."),
        Column("decision", "text", "accepted, rejected or corrected; empty for the automatic reading."),
        Column("reason", "text", "Reason of the decision."),
        Column("operator", "text", "Who decided."),
        _MEASURED_AT,
        Column("recipe", "text", "Name and version of the recipe."),
        Column("recipe_id", "text", "Hash of the recipe and of every file it refers to."),
        Column("scale_id", "text", "Hash of the scale."),
        Column("software", "text", "Program and version."),
    ),
    ("source", "image", "image_sha256", "recipe_id", "scale_id", "software", "feature", "item", "quantity", "revision"),
)

EVENTS = Table(
    "events",
    "One local finding a row.",
    (
        _IMAGE,
        _SHA256,
        _LOT,
        _ROLL,
        _POSITION,
        _LANE,
        _FEATURE,
        _ITEM,
        Column("event", "text", "open, bridge, neck, bulge, void, overflow or satellite."),
        Column("x_px", "number", "Centre, to the right of the centre of the top left pixel.", "{px}"),
        Column("y_px", "number", "Centre, below the centre of the top left pixel.", "{px}"),
        Column("x", "number", "Centre to the right, in unit."),
        Column("y", "number", "Centre downwards, in unit."),
        Column("md", "number", "Centre along the machine direction, in unit."),
        Column("cd", "number", "Centre along the cross direction, in unit."),
        Column("size", "number", "Extent along the line; for a bridge, its narrowest; in unit."),
        Column("area", "number", "Area of ink missing or in excess, in unit squared."),
        Column("unit", "text", "Unit of length, UCUM."),
    ),
)

PROFILES = Table(
    "profiles",
    "One point of a curve a row.",
    (
        _IMAGE,
        _SHA256,
        _FEATURE,
        _ITEM,
        Column("profile", "text", "Name of the curve."),
        Column("distance", "number", "Abscissa, in unit."),
        Column("value", "number", "Ordinate, in unit."),
        Column("u", "number", "Standard uncertainty of value, in unit."),
        Column("unit", "text", "Unit, UCUM."),
    ),
)

IMAGES = Table(
    "images",
    "One picture found a row.",
    (
        _IMAGE,
        _SHA256,
        Column("status", "text", "measured, failed or skipped."),
        Column("reason", "text", "Why it failed or was skipped."),
        Column("width_px", "integer", "Width of the picture.", "{px}"),
        Column("height_px", "integer", "Height of the picture.", "{px}"),
        Column("bits", "integer", "Depth of the camera's data, as far as the file gives evidence.", "bit"),
        Column("seconds", "number", "Time it took.", "s"),
        _MEASURED_AT,
    ),
    ("image", "image_sha256"),
)

TABLES = (MEASUREMENTS, EVENTS, PROFILES, IMAGES)


class TableWriter:
    """Append rows to a table as they come.

    Parameters
    ----------
    path : Path
        Made, with its header, where it does not exist or is empty.
    table : Table
        Which kind of table it is.

    Raises
    ------
    FolderError
        When the file holds other columns, or cannot be written.

    Notes
    -----
    Rows given together are written by one call and handed to the system at once. Locking, and mending a row
    cut short by a power cut, are the caller's.
    """

    def __init__(self, path: Path, table: Table) -> None:
        self.table = table
        try:
            # Unbuffered: what is written is out, or the call fails.
            self._file = path.open("ab+", buffering=0)
            self._file.seek(0)
            expected = encode_rows(table, (), header=True)
            start = self._file.read(len(expected))
            if not start:
                _write_whole(self._file, expected)
        except OSError as error:
            msg = f"{str(path)!r} cannot be written: {error.strerror}"
            raise FolderError(msg) from error
        if start and start != expected:
            self._file.close()
            msg = f"{str(path)!r} holds other columns than those of {table.name}.csv; give another file"
            raise FolderError(msg)

    def write(self, rows: Iterable[Mapping[str, object]]) -> None:
        """Append rows.

        Parameters
        ----------
        rows : iterable of mapping
            Values by name of column; a missing one, None and NaN leave the cell empty.

        Raises
        ------
        FolderError
            When they cannot be written.
        """
        data = encode_rows(self.table, rows)
        try:
            _write_whole(self._file, data)
        except OSError as error:
            msg = f"{self._file.name!r} cannot be written: {error.strerror}"
            raise FolderError(msg) from error

    def close(self) -> None:
        """Close the file."""
        self._file.close()

    def __enter__(self) -> Self:
        """Return the writer."""
        return self

    def __exit__(self, *_: object) -> None:
        """Close the file."""
        self.close()


def encode_rows(table: Table, rows: Iterable[Mapping[str, object]], *, header: bool = False) -> bytes:
    r"""Return rows as they stand in the file.

    Parameters
    ----------
    table : Table
        Which kind of table it is.
    rows : iterable of mapping
        Values by name of column; a missing one, None and NaN leave the cell empty.
    header : bool, optional
        Begin with the names of the columns.

    Returns
    -------
    bytes
        CSV after RFC 4180: CRLF, UTF-8 without byte order mark.

    Raises
    ------
    ValueError
        When a row has a column the table does not have, or a value of the wrong type.

    Notes
    -----
    Text that begins with ``=``, ``+``, ``-``, ``@``, TAB, CR or a single quote gets a single quote in front,
    so that no spreadsheet runs it; numbers are never touched. A byte of a file name that is no UTF-8 becomes
    ``\udcNN``; a backslash that stands before such letters already is doubled. `read_table` undoes both.

    References
    ----------
    .. [1] RFC 4180. OWASP, CSV injection.

    Examples
    --------
    >>> encode_rows(IMAGES, [{"image": "=1.png", "status": "measured", "seconds": 0.25}])
    b"'=1.png,,measured,,,,,0.25,\r\n"
    """
    out = io.StringIO(newline="")
    writer = csv.writer(out, lineterminator="\r\n")
    if header:
        writer.writerow(table.header)
    known = set(table.header)
    for row in rows:
        if not known.issuperset(row):
            msg = f"{table.name}.csv has no column {sorted(set(row) - known)}"
            raise ValueError(msg)
        writer.writerow([_cell(column, row.get(column.name)) for column in table.columns])
    return out.getvalue().encode()


def write_table(path: Path, table: Table, rows: Iterable[Mapping[str, object]]) -> None:
    """Write a whole table at once: the file is the old one or the new one, never half of it.

    Parameters
    ----------
    path : Path
        Where.
    table : Table
        Which kind of table it is.
    rows : iterable of mapping
        As for `encode_rows`.

    Raises
    ------
    FolderError
        When it cannot be written.
    """
    _replace(path, encode_rows(table, rows, header=True))


def describe_table(path: Path, table: Table) -> Path:
    """Write the CSV-on-the-Web description of a table beside it.

    Parameters
    ----------
    path : Path
        The table's file.
    table : Table
        Which kind of table it is.

    Returns
    -------
    Path
        The description, ``<name>.csv-metadata.json``.

    Raises
    ------
    FolderError
        When it cannot be written.

    References
    ----------
    .. [1] W3C, Metadata Vocabulary for Tabular Data.
    """
    about: dict[str, object] = {
        "@context": "http://www.w3.org/ns/csvw",
        "url": quote(os.fsencode(path.name)),
        "dc:description": f"{table.description} {_TEXT_NOTE}",
        "dialect": {"encoding": "utf-8", "lineTerminators": ["\r\n"], "header": True},
        "tableSchema": {
            "columns": [_described(column) for column in table.columns],
            **({"primaryKey": list(table.key)} if table.key else {}),
        },
    }
    target = path.with_name(path.name + "-metadata.json")
    _replace(target, (json.dumps(about, indent=1, ensure_ascii=False) + "\n").encode())
    return target


def read_table(path: str | Path, table: Table | None = None) -> list[dict[str, Value]]:
    """Read a table back.

    Parameters
    ----------
    path : str or Path
        A file that `TableWriter` or `write_table` wrote.
    table : Table, optional
        Which kind of table it must be; otherwise told by its header.

    Returns
    -------
    list of dict
        Values by name of column: text as it was before it was defused, numbers as float, integers as int,
        times as datetime; an empty cell is None, or empty text in a column of text.

    Raises
    ------
    FolderError
        When the file cannot be read, holds other columns, or a cell is not of its column's type.
    """
    path = Path(path)
    try:
        with path.open(encoding="utf-8", newline="") as file:
            reader = csv.reader(file, strict=True)
            header = next(reader, [])
            kinds = TABLES if table is None else (table,)
            table = next((kind for kind in kinds if kind.header == header), None)
            if table is None:
                msg = f"{str(path)!r} does not have the columns of {' or '.join(kind.name for kind in kinds)}.csv"
                raise FolderError(msg)
            return [_row(table, cells) for cells in reader]
    except OSError as error:
        msg = f"{str(path)!r} cannot be read: {error.strerror}"
        raise FolderError(msg) from error
    except (csv.Error, ValueError) as error:  # bad UTF-8 is a ValueError too
        msg = f"{str(path)!r} is no sound table (row {reader.line_num}): {error}; restore it from a copy"
        raise FolderError(msg) from error


_TEXT_NOTE = (
    "Text that a spreadsheet could run as a formula, or that begins with a single quote, has a single quote in "
    "front. A byte of a file name that is no UTF-8 stands as \\udcNN. Numbers have 9 digits, times follow RFC 3339, "
    "units are UCUM."
)
_XSD = {"text": "string", "number": "double", "integer": "integer", "datetime": "dateTime"}

_LONE_SURROGATE = re.compile(r"(\\*)(?:([\ud800-\udfff])|(?=ud[89a-f][0-9a-f]{2}))")
_ESCAPED_SURROGATE = re.compile(r"(\\+)u(d[89a-f][0-9a-f]{2})")


def _cell(column: Column, value: object) -> str:
    if value is None:
        return ""
    if column.datatype in ("number", "integer"):
        return _number(column, value)
    if isinstance(value, datetime) and column.datatype == "datetime":
        value = value.isoformat()
    if not isinstance(value, str):
        msg = f"column {column.name!r} holds {column.datatype}, got {value!r}"
        raise ValueError(msg)  # noqa: TRY004  (one error for a row that does not fit)
    value = _LONE_SURROGATE.sub(_escape, value)
    return "'" + value if value.startswith(("=", "+", "-", "@", "\t", "\r", "'")) else value


def _number(column: Column, value: object) -> str:
    number = float(value)  # type: ignore[arg-type]  # what is no number raises
    if math.isnan(number):
        return ""
    if column.datatype == "integer":
        if not number.is_integer():
            msg = f"column {column.name!r} holds whole numbers, got {value!r}"
            raise ValueError(msg)
        return str(int(number))
    if math.isinf(number):
        return "INF" if number > 0 else "-INF"  # as XML Schema and CSV on the Web write it
    return f"{number:.9g}"


def _escape(found: re.Match[str]) -> str:
    slashes, surrogate = found.groups()
    return slashes * 2 + (f"\\u{ord(surrogate):04x}" if surrogate else "")


def _unescape(found: re.Match[str]) -> str:
    slashes, code = found.groups()
    half = slashes[: len(slashes) // 2]
    return half + (chr(int(code, 16)) if len(slashes) % 2 else "u" + code)


def _row(table: Table, cells: list[str]) -> dict[str, Value]:
    if len(cells) != len(table.columns):
        msg = f"{len(cells)} cells instead of {len(table.columns)}"
        raise ValueError(msg)
    return {column.name: _value(column, cell) for column, cell in zip(table.columns, cells, strict=True)}


def _value(column: Column, cell: str) -> Value:
    if column.datatype == "text":
        return _ESCAPED_SURROGATE.sub(_unescape, cell.removeprefix("'"))
    if not cell:
        return None
    if column.datatype == "datetime":
        return datetime.fromisoformat(cell)
    return int(cell) if column.datatype == "integer" else float(cell)


def _described(column: Column) -> dict[str, object]:
    about: dict[str, object] = {
        "name": column.name,
        "titles": column.name,
        "datatype": _XSD[column.datatype],
        "dc:description": column.description,
    }
    if column.unit:
        # CSV on the Web has no property for units: said in a second title, and by schema.org's.
        about |= {"titles": [column.name, f"{column.name} [{column.unit}]"], "schema:unitText": column.unit}
    return about


def _write_whole(file: io.FileIO, data: bytes) -> None:
    view = memoryview(data)
    while view:
        view = view[file.write(view) :]


def _replace(path: Path, data: bytes) -> None:
    part = path.with_name(path.name + ".part")
    try:
        with part.open("wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        part.replace(path)
    except OSError as error:
        with suppress(OSError):
            part.unlink()
        msg = f"{str(path)!r} cannot be written: {error.strerror}"
        raise FolderError(msg) from error
