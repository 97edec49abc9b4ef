"""Context of a picture: what its name and the command line say about where it was taken."""

from __future__ import annotations

import math
import re
from datetime import datetime

CONTEXT_COLUMNS = ("captured_at", "lot", "roll", "position_m", "lane", "site", "layer", "rotation_deg")
NUMERIC_COLUMNS = ("position_m", "rotation_deg")

_MOMENT = re.compile(
    r"(\d{4})[-:]?(\d\d)[-:]?(\d\d)[Tt _-]?(\d\d)[-:.]?(\d\d)[-:.]?(\d\d)(?:[.,](\d{1,6})\d*)? ?([Zz]|[+-]\d\d:?\d\d)?"
)


def moment(text: str, time_zone: str | None = None) -> str:
    """Return a time as RFC 3339 with offset.

    Parameters
    ----------
    text : str
        RFC 3339, EXIF's ``2026:01:31 08:15:00``, or a form fit for file names such as ``20260131T081500``.
    time_zone : str, optional
        Offset for a time that has none, such as ``+01:00``.

    Returns
    -------
    str
        The time, or empty where no offset is known.

    Raises
    ------
    ValueError
        When `text` is no time.

    Examples
    --------
    >>> moment("20260131T081500", "+01:00")
    '2026-01-31T08:15:00+01:00'
    >>> moment("20260131T081500")
    ''
    """
    match = _MOMENT.fullmatch(text.strip())
    if match is None:
        msg = f"{text!r} is no time; write it like 20260131T081500 or 2026-01-31T08:15:00+01:00"
        raise ValueError(msg)
    year, month, day, hour, minute, second, fraction, offset = match.groups()
    fraction = f".{fraction:0<6}" if fraction else ""
    offset = offset or time_zone or ""
    try:
        when = datetime.fromisoformat(f"{year}-{month}-{day}T{hour}:{minute}:{second}{fraction}{offset.upper()}")
    except ValueError as error:
        msg = f"{text!r} is no time: {error}"
        raise ValueError(msg) from error
    return when.isoformat() if offset else ""


def clean(column: str, text: str, time_zone: str | None) -> str | float:
    """Return a context column's value as it goes to the tables.

    Parameters
    ----------
    column : str
        One of `CONTEXT_COLUMNS`, or ``source``.
    text : str
        As written in the file's name or on the command line.
    time_zone : str or None
        Offset for a time that has none.

    Returns
    -------
    str or float
        A number for ``position_m`` and ``rotation_deg``, an RFC 3339 time for ``captured_at``, else the text.

    Raises
    ------
    ValueError
        When the text is no finite number or no time where one is needed.
    """
    if column == "captured_at":
        return moment(text, time_zone)
    if column in NUMERIC_COLUMNS:
        try:
            number = float(text)
        except ValueError:
            number = math.nan
        if not math.isfinite(number):
            msg = f"{column} must be a number, got {text!r}"
            raise ValueError(msg)
        return number
    return text
