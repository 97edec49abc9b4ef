"""The scale file: a scale kept with where it came from."""

from __future__ import annotations

import json
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Annotated, Literal

from pydantic import AwareDatetime, BaseModel, ConfigDict, Field, ValidationError

from printmetrics.errors import PictureError, ScaleError
from printmetrics.flags import Flag
from printmetrics.scale import Scale

if TYPE_CHECKING:
    from pathlib import Path

FORMAT = "printmetrics-scale"
VERSION = 1

_Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
_ZeroOrMore = Annotated[float, Field(ge=0, allow_inf_nan=False)]
_Pixels = Annotated[int, Field(gt=0)]


class ScaleFile(BaseModel):
    """What stands in a scale file.

    Every key must be there, so that a missing one is seen; what is not known is null.
    """

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True)

    format: Literal["printmetrics-scale"] = Field(description="Tells this file from other JSON files.")
    version: Literal[1] = Field(description="Version of the format.")
    um_per_px: tuple[_Positive, _Positive] = Field(description="Length per pixel in x and y. [um/px]")
    u_um_per_px: tuple[_ZeroOrMore, _ZeroOrMore] = Field(description="Its standard uncertainty. [um/px]")
    picture_size_px: tuple[_Pixels, _Pixels] | None = Field(description="Width and height it holds for; null: any.")
    made_at: AwareDatetime = Field(description="When it was made, RFC 3339 with offset.")
    valid_until: AwareDatetime | None = Field(description="When it expires, RFC 3339 with offset; null: never.")
    target: str | None = Field(description="The target it was measured on.")
    certificate: str | None = Field(description="The target's certificate.")
    camera: str | None = Field(description="Camera.")
    objective: str | None = Field(description="Objective.")
    magnification: float | str | None = Field(description="Magnification, a number or free text.")
    temperature_c: float | str | None = Field(description="Temperature, a number in degrees Celsius or free text.")
    software: str | None = Field(description="What made the file.")

    def scale(self, picture_size: tuple[int, int]) -> Scale:
        """Return the scale for a picture.

        Parameters
        ----------
        picture_size : (int, int)
            The picture's width and height. [px]

        Returns
        -------
        Scale
            The larger of the two relative uncertainties counts for both axes.

        Raises
        ------
        PictureError
            When the scale was made for pictures of another size.
        """
        if self.picture_size_px not in (None, picture_size):
            msg = (
                "the picture has {} x {} px, but the scale file was made for {} x {} px; "
                "a binned or cropped picture has another scale: use the scale file made for it"
            ).format(*picture_size, *self.picture_size_px or ())
            raise PictureError(msg)
        (x, y), (u_x, u_y) = self.um_per_px, self.u_um_per_px
        return Scale(x=x, y=y, u_relative=max(u_x / x, u_y / y))

    def flags(self, when: datetime | None = None) -> Flag:
        """Return what is doubtful about the scale.

        Parameters
        ----------
        when : datetime, optional
            When the picture was taken, with offset; default: now.

        Returns
        -------
        Flag
            ``SCALE_EXPIRED`` after `valid_until`.
        """
        expired = self.valid_until is not None and (when or datetime.now(UTC)) > self.valid_until
        return Flag.SCALE_EXPIRED if expired else Flag.NONE


def read_scale_file(path: Path) -> ScaleFile:
    """Read a scale file.

    Parameters
    ----------
    path : Path
        The file, usually ``*.scale.json``.

    Returns
    -------
    ScaleFile
        Its content, checked.

    Raises
    ------
    ScaleError
        When it cannot be read, is no scale file, is of another version, or a key is missing or wrong.
    """
    try:
        text = path.read_text(encoding="utf-8-sig")
    except OSError as error:
        msg = f"scale file {path} cannot be read: {error.strerror or error}; check its name and your access rights"
        raise ScaleError(msg) from error
    except UnicodeDecodeError as error:
        msg = f"scale file {path} is not text in UTF-8; make it again, or name the right file"
        raise ScaleError(msg) from error
    try:
        content = json.loads(text)
    except (json.JSONDecodeError, RecursionError) as error:
        msg = f"scale file {path} is damaged: no valid JSON ({error}); make it again or take it from a copy"
        raise ScaleError(msg) from error
    if not isinstance(content, dict) or content.get("format") != FORMAT:
        msg = f'{path} is no scale file: "format" must be "{FORMAT}"; name the right file in the recipe'
        raise ScaleError(msg)
    if content.get("version") != VERSION:
        msg = (
            f"scale file {path} has version {content.get('version')!r}, this program reads version {VERSION}; "
            "update the program or make the scale file again"
        )
        raise ScaleError(msg)
    try:
        return ScaleFile.model_validate_json(text)
    except ValidationError as error:
        problems = {
            str(e["loc"][0]): _WORDS.get(e["type"], "wrong") if len(e["loc"]) == 1 else "wrong" for e in error.errors()
        }
        listed = ", ".join(f'"{key}" is {problem}' for key, problem in problems.items())
        msg = f"scale file {path} cannot be used: {listed}; correct it or make it again"
        raise ScaleError(msg) from error


_WORDS = {"missing": "missing", "extra_forbidden": "not a key of a scale file"}
