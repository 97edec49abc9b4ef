"""One picture and one recipe: readings with verdicts, events, profiles, and what to draw."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from functools import lru_cache
from typing import TYPE_CHECKING, Any

from printmetrics.analysis.light import linear_light
from printmetrics.errors import FeatureError, PictureError, RecipeError
from printmetrics.flags import Flag
from printmetrics.io.pictures import Found, read_picture
from printmetrics.measure.kinds import KINDS
from printmetrics.measure.readings import Event, Measured, Profile, Reading, Shape, expanded
from printmetrics.measure.sight import Sight
from printmetrics.quantities import CATALOGUE
from printmetrics.verdict import judge

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import NDArray

    from printmetrics.io.pictures import Picture
    from printmetrics.measure.options import FeatureOptions
    from printmetrics.recipe import Recipe
    from printmetrics.scale import Scale

ALL = "all"
Row = dict[str, Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class Inspection:
    """What one recipe gives in one picture.

    Parameters
    ----------
    rows : list of dict
        Readings by column of the table of measurements; the run's own columns are left to the run.
    events : list of dict
        Events by column of the table of events, likewise.
    profiles : list of (str, Profile)
        Feature and curve.
    shapes : list of (str, Shape)
        Feature and what to draw.
    failures : dict of str to str
        Reason by feature, for those that could not be measured.
    scale : Scale or None
        The picture's scale, where there is one.
    status : {"measured", "failed"}
        Failed where no feature could be measured.
    reason : str
        Why, or which features could not be measured; else empty.
    """

    rows: list[Row] = field(default_factory=list)
    events: list[Row] = field(default_factory=list)
    profiles: list[tuple[str, Profile]] = field(default_factory=list)
    shapes: list[tuple[str, Shape]] = field(default_factory=list)
    failures: dict[str, str] = field(default_factory=dict)
    scale: Scale | None = None
    status: str = "measured"
    reason: str = ""

    @property
    def calls_attention(self) -> bool:
        """Whether a person should look: a failure, an event, a flag, or a verdict that is not conforming."""
        return bool(self.failures or self.events) or any(
            row["flags"] or row["verdict"] in ("undecided", "nonconforming") for row in self.rows
        )


def inspect_picture(picture: Picture, recipe: Recipe, captured_at: str = "") -> Inspection:
    """Measure every feature of a recipe in one picture.

    A feature that cannot be measured leaves withheld rows, so that nothing passes in silence.

    Parameters
    ----------
    picture : Picture
        As read.
    recipe : Recipe
        What to measure.
    captured_at : str, optional
        When the picture was taken, RFC 3339; tells whether the scale was still valid. Default: now.

    Returns
    -------
    Inspection
        Rows, events, profiles, shapes, and the reasons of what failed.

    Raises
    ------
    PictureError
        When the picture carries no usable scale, or its corrections do not fit it.
    """
    height, width = picture.pixels.shape[:2]
    scale = recipe.scale_for(picture.hint_um_per_px, (width, height), picture.hint_origin)
    doubt = recipe.scale_flags(captured_at)
    image, saturated = linear_light(
        picture.pixels,
        picture.full_scale,
        gamma=recipe.correct.gamma,
        channel=recipe.images.channel,
        **corrections(recipe),
    )
    sight = Sight(
        image=image, saturated=saturated, scale=scale, na=recipe.optics.na, wavelength_um=recipe.optics.wavelength_um
    )
    result = Inspection(scale=scale)
    for options in recipe.features:
        measured = _measured(sight, options, result.failures)
        result.rows.extend(_row(reading, options, recipe, doubt) for reading in measured.readings)
        result.events.extend(_event_row(event, options, recipe, scale) for event in measured.events)
        result.profiles.extend((options.name, profile) for profile in measured.profiles)
        result.shapes.extend((options.name, shape) for shape in [*_region_shape(options, scale), *measured.shapes])
    if not result.failures:
        return result
    reason = "; ".join(f"{name}: {why}" for name, why in result.failures.items())
    failed = len(result.failures) == len(recipe.features)
    return replace(result, status="failed" if failed else "measured", reason=reason)


def corrections(recipe: Recipe) -> dict[str, NDArray[Any]]:
    """Read the pictures that a recipe corrects by.

    Parameters
    ----------
    recipe : Recipe
        It names them.

    Returns
    -------
    dict of str to ndarray
        ``dark`` and ``flat``, as far as there are.

    Raises
    ------
    RecipeError
        When one cannot be read.
    """
    roles = {"dark": "dark", "flat": "flat_field"}
    return {name: _pixels(recipe.files[role]) for name, role in roles.items() if role in recipe.files}


@lru_cache(maxsize=2)  # the same for every picture of a run
def _pixels(path: Path) -> NDArray[Any]:
    try:
        return read_picture(Found(path, path.name)).pixels
    except PictureError as error:
        msg = f"{path}, named in the recipe's [correct], cannot be used: {error}"
        raise RecipeError(msg) from error


def failed_inspection(recipe: Recipe, reason: str) -> Inspection:
    """Return what a picture leaves that could not be measured at all: withheld rows for all that has limits.

    Parameters
    ----------
    recipe : Recipe
        What should have been measured.
    reason : str
        Why it was not.

    Returns
    -------
    Inspection
        Status ``failed``.
    """
    rows = [
        _row(reading, options, recipe, Flag.NONE)
        for options in recipe.features
        for reading in _all_withheld(options, Flag.OUTSIDE_VALIDITY, recipe.length_unit)
    ]
    return Inspection(rows=rows, status="failed", reason=reason)


def _measured(sight: Sight, options: FeatureOptions, failures: dict[str, str]) -> Measured:
    """Measure one feature; withhold readings wherever a limit would find none."""
    unit = sight.scale.unit
    kind = KINDS[options.kind]
    try:
        _check_region(options, sight)
        measured = kind.measure(sight, options)
    except FeatureError as error:
        failures[options.name] = str(error)
        none_found = error.flags == Flag.COUNT_DIFFERS
        return Measured(
            readings=_all_withheld(options, error.flags, unit, error.count),
            shapes=kind.missing(options, set(), [], sight) if none_found else [],
        )
    given = {(reading.item, reading.quantity): None for reading in measured.readings}
    items = {item for item, _ in given}
    missing = [
        _withheld(item, quantity, options, Flag.OUTSIDE_VALIDITY if item in {ALL, *items} else Flag.COUNT_DIFFERS, unit)
        for item, quantity in _promised(options, list(given))
        if (item, quantity) not in given
    ]
    shapes = [*measured.shapes, *kind.missing(options, items, measured.shapes, sight)]
    return replace(measured, readings=[*measured.readings, *missing], shapes=shapes)


def _expected(options: FeatureOptions) -> dict[tuple[str, str], None]:
    """Return item and quantity of every reading that the recipe's limits wait for, in order."""
    expected = KINDS[options.kind].expected_items(options)
    return {(item, name): None for item, names in expected.items() for name in names if name in options.limits}


def _promised(options: FeatureOptions, given: list[tuple[str, str]]) -> dict[tuple[str, str], None]:
    """Return item and quantity of every reading that there must be once something was measured.

    Items that the recipe does not name are known once they are found: what one of a sort has, all of it must have.
    A term of the whole feature is only missed where no item has it.
    """
    by_item = {quantity for item, quantity in given if item != ALL}
    promised = {
        (item, quantity): None for item, quantity in _expected(options) if item != ALL or quantity not in by_item
    }
    for quantity in options.limits:
        sorts = {_sort(item) for item, name in given if name == quantity}
        promised |= {(item, quantity): None for item, _ in given if _sort(item) in sorts}
    return promised


def _sort(item: str) -> str:
    return ALL if item == ALL else ".." if ".." in item else "one"


def _withheld(item: str, quantity: str, options: FeatureOptions, flags: Flag, length_unit: str) -> Reading:
    unit = CATALOGUE[options.kind][quantity].unit(length_unit)
    return Reading(item=item, quantity=quantity, value=None, unit=unit, flags=flags)


def _all_withheld(options: FeatureOptions, flags: Flag, unit: str, count: int | None = None) -> list[Reading]:
    """Withhold all that limits wait for, and say how many items there are, if that is known."""
    name = KINDS[options.kind].count
    counted = _withheld(ALL, name, options, flags, unit)
    if count is not None:
        counted = replace(counted, value=float(count))
    waited = [
        _withheld(item, quantity, options, flags, unit) for item, quantity in _expected(options) if quantity != name
    ]
    return [*waited, counted]


def _check_region(options: FeatureOptions, sight: Sight) -> None:
    if options.region is None:
        return
    height, width = sight.image.shape
    x, y, w, h = options.region
    (left, top), (right, bottom) = sight.scale.to_px([(x, y), (x + w, y + h)])
    # Half a pixel of grace either way, for a region counted from the corner of the first pixel.
    if min(left, top) >= -1 and right <= width and bottom <= height:
        return
    unit = sight.scale.unit.strip("{}")
    covers = sight.scale.to_length([width, height])
    outside = right <= 0 or bottom <= 0 or left >= width or top >= height
    msg = (
        f"its region from ({x:g}, {y:g}) to ({x + w:g}, {y + h:g}) {unit} lies "
        f"{'outside' if outside else 'partly outside'} the picture, which covers {covers[0]:g} x {covers[1]:g} {unit} "
        f"({width} x {height} px); correct region or scale in the recipe"
    )
    raise FeatureError(msg)


def _region_shape(options: FeatureOptions, scale: Scale) -> list[Shape]:
    if options.region is None:
        return []
    x, y, w, h = options.region
    corners = [(x, y), (x + w, y), (x + w, y + h), (x, y + h), (x, y)]
    return [Shape(item=ALL, role="region", points_px=scale.to_px(corners))]


def _row(reading: Reading, options: FeatureOptions, recipe: Recipe, doubt: Flag) -> Row:
    """Return a reading's row; flags stay flags until they are written."""
    limits = recipe.limits_for(options, reading.quantity)
    lower, target, upper = (limits.lower, limits.target, limits.upper) if limits else (None, None, None)
    is_count = CATALOGUE[options.kind][reading.quantity].dimension == "count"
    flags = reading.flags | doubt
    u = reading.u
    return {
        "feature": options.name,
        "kind": options.kind,
        "item": reading.item,
        "quantity": reading.quantity,
        "value": reading.value,
        "unit": reading.unit,
        "u": u,
        "u_noise": reading.u_noise,
        "u_sampling": reading.u_sampling,
        "u_common": reading.u_common,
        "expanded_u": None if u is None else expanded(u, reading.dof),
        "dof": None if u is None else reading.dof,
        "lower": lower,
        "target": target,
        "upper": upper,
        "verdict": judge(is_count, reading.value, u, flags, lower, upper),
        "flags": flags,
        "eval_length_um": reading.eval_length,
        "sampling_um": reading.sampling,
    }


def _event_row(event: Event, options: FeatureOptions, recipe: Recipe, scale: Scale) -> Row:
    """Return an event's row, with its place along and across the web where the recipe says how it runs."""
    x, y = (float(length) for length in scale.to_length([event.x_px, event.y_px]))
    along = {"+x": x, "-x": -x, "+y": y, "-y": -y}
    return {
        "feature": options.name,
        "item": event.item,
        "event": event.event,
        "x_px": event.x_px,
        "y_px": event.y_px,
        "x": x,
        "y": y,
        "md": along[recipe.web.machine_direction] if recipe.web else None,
        "cd": along[recipe.web.cross_direction] if recipe.web else None,
        "size": event.size,
        "area": event.area,
        "unit": scale.unit,
    }
