"""The errors a user can cause, each with what is wrong, where, and the remedy."""

from printmetrics.flags import Flag


class PrintmetricsError(Exception):
    """Base of every error that is the input's fault, not a bug."""


class RecipeError(PrintmetricsError):
    """The recipe, or a file it refers to, cannot be used; nothing was measured."""


class ScaleError(PrintmetricsError):
    """The scale is missing, zero, negative, not a number, or its file cannot be used."""


class FolderError(PrintmetricsError):
    """The folder of pictures or the output folder cannot be used."""


class PictureError(PrintmetricsError):
    """One picture cannot be read or measured; the rest of the folder can."""


class FeatureError(PrintmetricsError):
    """One feature cannot be measured in one picture; other features can.

    Parameters
    ----------
    message : str
        What happened, where, and what to do.
    flags : Flag, optional
        Flags for the readings that are withheld because of it.
    count : int, optional
        Number of items found, where that is what was found: 0 on an unprinted web.
    """

    def __init__(self, message: str, flags: Flag | None = None, *, count: int | None = None) -> None:
        super().__init__(message)
        self.count = count
        self.flags = flags if flags is not None else Flag.OUTSIDE_VALIDITY
