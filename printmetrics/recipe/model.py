"""The recipe's keys and what they mean."""

from __future__ import annotations

import hashlib
import json
import math
import re
import warnings
from collections import Counter
from datetime import datetime
from pathlib import Path, PureWindowsPath
from typing import TYPE_CHECKING, Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    GetCoreSchemaHandler,
    PrivateAttr,
    ValidationInfo,
    model_validator,
)
from pydantic_core import CoreSchema, PydanticCustomError, core_schema

from printmetrics.calibrate.scalefile import ScaleFile, read_scale_file
from printmetrics.errors import PictureError, RecipeError, ScaleError
from printmetrics.flags import Flag
from printmetrics.measure.kinds import KINDS
from printmetrics.measure.options import FeatureOptions, Limits
from printmetrics.quantities import CATALOGUE
from printmetrics.recipe.context import CONTEXT_COLUMNS, clean, moment
from printmetrics.recipe.problems import nearest
from printmetrics.scale import Scale

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

Axis = Literal["+x", "-x", "+y", "-y"]


def _fault(text: str, key: str | None = None) -> PydanticCustomError:
    """Return an error whose text is shown as it is; `key` names the key below the table where it arose."""
    return PydanticCustomError("recipe", "{text}", {"text": text, "key": key})


def _pair(value: Any, info: ValidationInfo) -> tuple[float, float]:  # noqa: ANN401  (whatever the recipe holds)
    is_u = str(info.field_name).startswith("u_")
    numbers = value if isinstance(value, list | tuple) else [value, value]
    good = [n for n in numbers if type(n) in (int, float) and math.isfinite(n) and (n > 0 or (is_u and n == 0))]
    if len(good) != 2 or len(numbers) != 2:  # noqa: PLR2004  (x and y)
        rule, remedy = (
            ("zero or more", "take it from the target's certificate and the repeatability of the measurement")
            if is_u
            else (
                "positive",
                "measure it on a ruler picture of known pitch, or write pixels = true while it is unknown",
            )
        )
        shown = json.dumps(value, default=str)
        msg = f"must be a number of micrometres per pixel, {rule}, or a pair [x, y]; got {shown}; {remedy}"
        raise _fault(msg)
    return float(numbers[0]), float(numbers[1])


PerPixel = Annotated[tuple[float, float], BeforeValidator(_pair, json_schema_input_type=float | tuple[float, float])]


def _inside(name: str, info: ValidationInfo) -> str:
    folder = (info.context or {}).get("folder", Path.cwd()).resolve()
    if Path(name).is_absolute() or PureWindowsPath(name).drive or "\\" in name:
        msg = f"{name!r} must be a path relative to the recipe, with / between folders; copy the file beside the recipe"
        raise _fault(msg)
    try:
        target = (folder / name).resolve()
        found = target.is_file()
    except (OSError, RuntimeError, ValueError):  # too long, a loop of links, or a null character
        target, found = folder, False
    if not target.is_relative_to(folder):
        msg = f"{name!r} leaves the recipe's folder; copy the file beside the recipe"
        raise _fault(msg)
    if not found:
        msg = f"there is no file {name!r} in the recipe's folder; paths are relative to the recipe"
        raise _fault(msg)
    return name


RecipeFile = Annotated[str, AfterValidator(_inside)]


def _scale_file(name: str, info: ValidationInfo) -> str:
    try:
        read_scale_file((info.context or {}).get("folder", Path.cwd()) / name)
    except ScaleError as error:
        raise _fault(str(error)) from error
    return name


def _context_pattern(pattern: str) -> str:
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            groups = re.compile(pattern).groupindex
    except (re.error, Warning, OverflowError, RecursionError) as error:
        msg = f"is no valid pattern: {error}; write it between single quotes, in Python's regular expressions"
        raise _fault(msg) from error
    for group in groups:
        if group not in CONTEXT_COLUMNS:
            msg = f"the group {group!r} is no context column; {nearest(group, CONTEXT_COLUMNS)}"
            raise _fault(msg)
    if not groups:
        msg = f"has no named group; name what it finds like (?P<lot>...), from: {', '.join(CONTEXT_COLUMNS)}"
        raise _fault(msg)
    return pattern


def _time_zone(text: str) -> str:
    try:
        moment("20260101T000000", text)
    except ValueError:
        text = ""
    if not re.fullmatch(r"Z|[+-]\d\d:\d\d", text):
        msg = 'must be an offset such as "+01:00", "-05:00" or "Z"'
        raise _fault(msg)
    return text


def _glob(pattern: str) -> str:
    if not pattern or "/" in pattern or "\\" in pattern:
        msg = f"{pattern!r} must be a pattern of file names without folders, such as '*.tif'"
        raise _fault(msg)
    return pattern


class _ByKind:
    """Chooses the model of a feature by its kind, from the table of kinds."""

    def __get_pydantic_core_schema__(self, source: object, handler: GetCoreSchemaHandler) -> CoreSchema:
        choices = {name: handler.generate_schema(kind.options) for name, kind in KINDS.items()}
        return core_schema.tagged_union_schema(choices, discriminator="kind")


class _Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class Images(_Section):
    """Which pictures, and what their names say."""

    include: tuple[Annotated[str, AfterValidator(_glob)], ...] | None = Field(
        None, min_length=1, description="Patterns of file names; default: every format that can be read."
    )
    context: Annotated[str, AfterValidator(_context_pattern)] | None = Field(
        None,
        description="Regular expression matched against the whole file name without its ending; its group names are "
        "columns of the tables: " + ", ".join(CONTEXT_COLUMNS) + ".",
    )
    time_zone: Annotated[str, AfterValidator(_time_zone)] | None = Field(
        None, description="Offset for times that have none in names or EXIF, such as +01:00; else they stay empty."
    )
    channel: Literal["luminance", "red", "green", "blue"] = Field(
        "luminance", description="What is measured of a colour picture."
    )


class ScaleSource(_Section):
    """Where the scale comes from: exactly one of um_per_px, file, from_image, pixels."""

    um_per_px: PerPixel | None = Field(None, description="Micrometres per pixel, or [x, y].")
    u_um_per_px: PerPixel | None = Field(
        None, description="Its standard uncertainty, or [x, y]; needed with um_per_px and from_image."
    )
    file: Annotated[RecipeFile, AfterValidator(_scale_file)] | None = Field(
        None, description="A scale file, relative to the recipe."
    )
    from_image: bool = Field(default=False, description="Take the scale that the picture carries.")
    pixels: bool = Field(
        default=False, description="The scale is unknown: all lengths are in px, and limits on them get no verdict."
    )

    @model_validator(mode="after")
    def _one_source(self) -> ScaleSource:
        given = [key for key in ("um_per_px", "file", "from_image", "pixels") if getattr(self, key)]
        if not given:
            msg = (
                "the scale is missing; give um_per_px with u_um_per_px, or file, or from_image = true, "
                "or pixels = true while it is unknown"
            )
            raise _fault(msg)
        if len(given) > 1:
            msg = f"more than one scale is given ({', '.join(given)}); keep one of them"
            raise _fault(msg, given[1])
        needs_u = given[0] in ("um_per_px", "from_image")
        if needs_u and self.u_um_per_px is None:
            msg = (
                f"is missing; with {given[0]} give the scale's standard uncertainty in um per px "
                "(0 if it is to be neglected: that is then said aloud)"
            )
            raise _fault(msg, "u_um_per_px")
        if self.u_um_per_px is not None and not needs_u:
            msg = f"has no use with {given[0]}; remove it"
            raise _fault(msg, "u_um_per_px")
        if (
            self.um_per_px
            and self.u_um_per_px
            and any(u >= s for u, s in zip(self.u_um_per_px, self.um_per_px, strict=True))
        ):
            msg = f"{self.u_um_per_px} is not smaller than um_per_px {self.um_per_px}; give it in um per px"
            raise _fault(msg, "u_um_per_px")
        return self


class Optics(_Section):
    """The microscope or camera lens; lets the validity of narrow widths be judged."""

    na: Annotated[float, Field(gt=0, le=2)] | None = Field(None, description="Numerical aperture on the object's side.")
    wavelength_um: Annotated[float, Field(ge=0.1, le=2)] | None = Field(
        None, description="Mean wavelength of the light, in um."
    )
    illumination: Literal["reflected", "transmitted", "diffuse", "dark_field"] | None = Field(
        None, description="How the sample is lit."
    )

    @model_validator(mode="after")
    def _both(self) -> Optics:
        if (self.na is None) != (self.wavelength_um is None):
            missing = "na" if self.na is None else "wavelength_um"
            msg = "is missing; the resolution limit needs both na and wavelength_um"
            raise _fault(msg, missing)
        return self


class Correct(_Section):
    """How the camera's counts become linear light."""

    flat_field: RecipeFile | None = Field(
        None, description="Picture of an evenly lit empty field, relative to the recipe."
    )
    dark: RecipeFile | None = Field(None, description="Picture without light, relative to the recipe.")
    gamma: Annotated[float, Field(gt=0, le=10)] | Literal["srgb"] = Field(
        1.0, description="The camera's encoding exponent: light = counts ** gamma; 1 is linear; or srgb."
    )


class Web(_Section):
    """How the web runs through the picture."""

    machine_direction: Axis = Field(description="The picture axis that runs downstream.")
    cross_direction: Axis = Field(description="The picture axis counted as positive across the web.")

    @model_validator(mode="after")
    def _perpendicular(self) -> Web:
        if self.machine_direction[1] == self.cross_direction[1]:
            other = "x" if self.machine_direction[1] == "y" else "y"
            msg = (
                f"{self.cross_direction!r} runs along machine_direction {self.machine_direction!r}; "
                f'it must be perpendicular: "+{other}" or "-{other}"'
            )
            raise _fault(msg, "cross_direction")
        return self


class Recipe(_Section):
    """What to measure, where, with which limits."""

    schema_version: int = Field(alias="schema", ge=1, le=1, description="Version of the recipe's language: 1.")
    name: str = Field(min_length=1, description="Name of the recipe, as in the tables.")
    version: str = Field("", description="Your own version of it, as text.")
    layer: str = Field("", description="The layer it measures; fills the column layer.")
    images: Images = Field(default_factory=Images, description="Which pictures, and what their names say.")
    scale: ScaleSource = Field(
        description="Where the scale comes from: um_per_px with u_um_per_px, or file, or from_image = true, "
        "or pixels = true while it is unknown."
    )
    optics: Optics = Field(default_factory=Optics, description="The lens and the light.")
    correct: Correct = Field(default_factory=Correct, description="How the camera's counts become linear light.")
    web: Web | None = Field(None, description="How the web runs through the picture.")
    features: tuple[Annotated[FeatureOptions, _ByKind()], ...] = Field(
        alias="feature", description="What to measure, one [[feature]] for each."
    )

    _path: Path = PrivateAttr(default_factory=Path)
    _digests: dict[str, str] = PrivateAttr(default_factory=dict)
    _scale_file: ScaleFile | None = PrivateAttr(None)

    @model_validator(mode="after")
    def _names_differ(self) -> Recipe:
        if not self.features:
            msg = "there is nothing to measure; add a [[feature]]"
            raise _fault(msg, "feature")
        name, times = Counter(f.name for f in self.features).most_common(1)[0]
        if times > 1:
            msg = f"the feature name {name!r} is given {times} times; give each feature its own name"
            raise _fault(msg, "feature")
        return self

    def model_post_init(self, context: Any, /) -> None:  # noqa: ANN401  (pydantic's signature)
        """Read what the recipe refers to.

        Parameters
        ----------
        context : dict or None
            The recipe's ``folder`` and ``file``.
        """
        context = context or {}
        self._path = context.get("folder", Path.cwd()) / context.get("file", "")
        for role, path in self.files.items():
            self._digests[role] = hashlib.sha256(path.read_bytes()).hexdigest()
        if self.scale.file is not None:
            self._scale_file = read_scale_file(self.files["scale"])

    @property
    def path(self) -> Path:
        """The recipe's own file."""
        return self._path

    @property
    def files(self) -> dict[str, Path]:
        """The files it refers to, by role: ``scale``, ``flat_field``, ``dark``."""
        names = {"scale": self.scale.file, "flat_field": self.correct.flat_field, "dark": self.correct.dark}
        return {role: self._path.parent / name for role, name in names.items() if name is not None}

    @property
    def recipe_id(self) -> str:
        """Hash of the parsed recipe with the contents of the files it refers to; comments don't count."""
        return _hash(self.model_dump(mode="json", by_alias=True), self._digests)

    @property
    def scale_id(self) -> str:
        """Hash of the scale with the content of its file."""
        digests = {role: digest for role, digest in self._digests.items() if role == "scale"}
        return _hash(self.scale.model_dump(mode="json"), digests)

    @property
    def scale_size(self) -> tuple[int, int] | None:
        """Width and height of the pictures that the scale file was made for, where it says so, in px."""
        return self._scale_file.picture_size_px if self._scale_file else None

    @property
    def length_unit(self) -> str:
        """Unit of the lengths in the recipe and in the readings."""
        return "{px}" if self.scale.pixels else "um"

    @property
    def notes(self) -> tuple[str, ...]:
        """What a reader of the results should know before a run, in plain sentences."""
        notes = []
        u = self._scale_file.u_um_per_px if self._scale_file else self.scale.u_um_per_px
        if u is not None and 0.0 in u:
            notes.append("the scale's uncertainty u_um_per_px is zero: readings are stated as if the scale were exact")
        if self.scale_flags():
            notes.append("the scale file has expired: limited readings will be undecided; make the scale again")
        if not any(f.limits for f in self.features):
            notes.append("no feature has limits: nothing will be judged")
        if self.scale.pixels:
            notes.append("pixels = true: all lengths, in this recipe and in the readings, are in px")
            ignored = [
                f"{f.name}.{quantity}"
                for f in self.features
                for quantity in f.limits
                if not self.limits_for(f, quantity)
            ]
            if ignored:
                notes.append(f"limits in um get no verdict while the scale is unknown: {', '.join(ignored)}")
        return tuple(notes)

    @property
    def title(self) -> str:
        """Name and version."""
        return f"{self.name} {self.version}".strip()

    @property
    def judges_items(self) -> bool:
        """Whether anything gets a verdict beside the number of items, which is limited wherever it is expected."""
        return any(
            self.limits_for(feature, quantity)
            for feature in self.features
            for quantity in feature.limits
            if quantity != KINDS[feature.kind].count
        )

    def limits_for(self, feature: FeatureOptions, quantity: str) -> Limits | None:
        """Return the limits that a quantity is judged by.

        Parameters
        ----------
        feature : FeatureOptions
            A feature of this recipe.
        quantity : str
            Name of the quantity.

        Returns
        -------
        Limits or None
            None where there are none, or where they are in um and the scale is unknown.
        """
        in_um = CATALOGUE[feature.kind][quantity].dimension in ("length", "area")
        return None if in_um and self.scale.pixels else feature.limits.get(quantity)

    def scale_for(self, hint: tuple[float, float] | None, picture_size: tuple[int, int], refusal: str = "") -> Scale:
        """Return the scale of one picture.

        Parameters
        ----------
        hint : (float, float) or None
            Micrometres per pixel in x and y that the picture carries.
        picture_size : (int, int)
            The picture's width and height. [px]
        refusal : str, optional
            Why the picture's own scale is not to be trusted, where `hint` is None.

        Returns
        -------
        Scale
            As the recipe says; of two relative uncertainties the larger counts for both axes.

        Raises
        ------
        PictureError
            When the picture carries no usable scale, or the scale file was made for another size.
        """
        if self.scale.pixels:
            return Scale.pixels()
        if self._scale_file is not None:
            return self._scale_file.scale(picture_size)
        pair = self.scale.um_per_px or hint
        if pair is None:
            msg = (
                f"the recipe takes the scale from the picture, but {refusal or 'the picture carries none'}; "
                "give um_per_px or a scale file in the recipe"
            )
            raise PictureError(msg)
        u = self.scale.u_um_per_px or (0.0, 0.0)
        return Scale(x=pair[0], y=pair[1], u_relative=max(u[0] / pair[0], u[1] / pair[1]))

    def scale_flags(self, captured_at: str = "") -> Flag:
        """Return what is doubtful about the scale.

        Parameters
        ----------
        captured_at : str, optional
            When the picture was taken, RFC 3339; default: now.

        Returns
        -------
        Flag
            ``SCALE_EXPIRED`` after the scale file's last day.
        """
        if self._scale_file is None:
            return Flag.NONE
        return self._scale_file.flags(datetime.fromisoformat(captured_at) if captured_at else None)

    def apply_set(self, pairs: Iterable[str]) -> dict[str, str | float]:
        """Return the columns that ``--set key=value`` fills for all pictures.

        Parameters
        ----------
        pairs : iterable of str
            ``key=value`` each; keys are ``source`` and the context columns.

        Returns
        -------
        dict
            Values by column.

        Raises
        ------
        RecipeError
            When a pair is not ``key=value``, the key is unknown or given twice, or the value is wrong.
        """
        columns: dict[str, str | float] = {"layer": self.layer} if self.layer else {}
        given = set()
        for pair in pairs:
            key, equals, text = pair.partition("=")
            known = ("source", *CONTEXT_COLUMNS)
            if not (equals and text):
                msg = f"--set {pair}: write it as key=value, such as lot=L7"
            elif key not in known:
                msg = f"--set {pair}: {key!r} is no context column; {nearest(key, known)}"
            elif key in given:
                msg = f"--set {pair}: {key} is given twice; keep one"
            elif key == "layer" and self.layer not in ("", text):
                msg = f"--set {pair}: the recipe is for layer {self.layer!r}; change one of them"
            else:
                try:
                    columns[key] = clean(key, text, self.images.time_zone)
                except ValueError as error:
                    msg = f"--set {pair}: {error}"
                    raise RecipeError(msg) from error
                given.add(key)
                continue
            raise RecipeError(msg)
        return columns

    def context_of(self, stem: str, fixed: Mapping[str, str | float] | None = None) -> dict[str, str | float]:
        """Return the context columns of one picture.

        What ``--set`` and the recipe's layer say fills columns; it never overrides what the name says.
        Where the two differ the picture is refused: one of them is about another picture.

        Parameters
        ----------
        stem : str
            The file's name without its ending, and without the page number.
        fixed : mapping, optional
            What `apply_set` gave.

        Returns
        -------
        dict
            A value for each of `CONTEXT_COLUMNS`, empty where nothing is known.

        Raises
        ------
        PictureError
            When the name doesn't match, holds a wrong number or time, or contradicts `fixed`.
        """
        columns: dict[str, str | float] = dict.fromkeys(CONTEXT_COLUMNS, "")
        columns |= {"layer": self.layer} | {k: v for k, v in (fixed or {}).items() if k in CONTEXT_COLUMNS}
        if self.images.context is None:
            return columns
        match = re.fullmatch(self.images.context, stem)
        if match is None:
            msg = (
                f"the name {stem!r} doesn't match the recipe's context '{self.images.context}'; "
                "rename the picture or change context"
            )
            raise PictureError(msg)
        for column, text in match.groupdict().items():
            if not text:
                continue
            try:
                value = clean(column, text, self.images.time_zone)
            except ValueError as error:
                msg = f"the name {stem!r}: {error}"
                raise PictureError(msg) from error
            if columns[column] not in ("", value):
                msg = (
                    f"the name {stem!r} says {column} {value!r}, but --set or the recipe says {columns[column]!r}; "
                    "measure the picture with its own recipe, or correct one of them"
                )
                raise PictureError(msg)
            columns[column] = value
        return columns


def _hash(content: dict[str, Any], digests: dict[str, str]) -> str:
    text = json.dumps([content, digests], sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()[:16]
