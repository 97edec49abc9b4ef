"""Flags: what can be doubtful about one number, each with a numeric criterion."""

from enum import Flag as _Flag
from enum import auto


class Flag(_Flag):
    """A property of one reading that its reader must know.

    Names are written to tables in lower case, joined by ``;``. The criterion of each
    flag stands in README's table of flags.
    """

    NONE = 0
    SATURATED = auto()
    LOW_CONTRAST = auto()
    DEFOCUSED = auto()
    SHARPENED = auto()
    CUT_BY_BORDER = auto()
    SHORT_SAMPLING = auto()
    NOT_RESOLVED = auto()
    LEVELS_UNRESOLVED = auto()
    COUNT_DIFFERS = auto()
    MARK_MISSING = auto()
    SCALE_EXPIRED = auto()
    UNEVEN_LIGHT = auto()
    REPEATED_PICTURE = auto()
    POSITION_GAP = auto()
    OUTSIDE_VALIDITY = auto()

    def words(self) -> str:
        """Return the flags as they stand in a table.

        Returns
        -------
        str
            Lower-case words joined by ``;``, empty for none.

        Examples
        --------
        >>> (Flag.SATURATED | Flag.NOT_RESOLVED).words()
        'saturated;not_resolved'
        """
        return ";".join(flag.name.lower() for flag in self if flag.name)


DECISIVE = (
    Flag.SATURATED
    | Flag.NOT_RESOLVED
    | Flag.DEFOCUSED
    | Flag.LEVELS_UNRESOLVED
    | Flag.COUNT_DIFFERS
    | Flag.MARK_MISSING
    | Flag.SCALE_EXPIRED
    | Flag.OUTSIDE_VALIDITY
)
"""Any of these makes the verdict of a limited reading `undecided`."""
