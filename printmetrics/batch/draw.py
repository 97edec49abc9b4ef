"""The marked-up picture: edges, names, defects and readings, readable at a glance."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import cv2
import numpy as np

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from printmetrics.inspect import Inspection
    from printmetrics.scale import Scale

Colour = tuple[int, int, int]
Box = tuple[int, int, int, int]

LONGEST_PX = 2000  # a drawing's longer side: fits a screen, file below a megabyte
SHORTEST_PX = 900  # small pictures are enlarged, so that text stays legible beside them
PNG_BELOW_PX = 1_500_000
# Full colour resolution: halved, as by default, it smears the thin edges.
JPEG = [
    cv2.IMWRITE_JPEG_QUALITY, 90,
    cv2.IMWRITE_JPEG_SAMPLING_FACTOR, cv2.IMWRITE_JPEG_SAMPLING_FACTOR_444,
]  # fmt: skip
SHIFT = 6  # OpenCV draws at 1/64 px

WHITE: Colour = (255, 255, 255)
GREY: Colour = (185, 185, 185)
BAND: Colour = (38, 34, 32)
LEFT_OUT: Colour = (90, 240, 240)
REGION: Colour = (120, 120, 120)
# BGR. Blue, orange and magenta differ in lightness too, so they stay apart for colour-blind eyes and in grey print.
STYLE: dict[str, tuple[str, Colour]] = {
    "nonconforming": ("X", (200, 60, 255)),
    "undecided": ("?", (0, 165, 255)),
    "conforming": ("ok", (255, 165, 60)),
    "": ("", GREY),
}
WORST_FIRST = tuple(STYLE)
MOST_LISTED = 5
MOST_NAMED = 20


def draw_picture(image: NDArray[Any], inspection: Inspection, title: str) -> NDArray[np.uint8]:
    """Draw what was measured onto a copy of the picture.

    Parameters
    ----------
    image : ndarray, shape (M, N)
        The picture. [counts]
    inspection : Inspection
        What was measured in it.
    title : str
        Names of picture and recipe.

    Returns
    -------
    ndarray of uint8, shape (P, Q, 3)
        Blue, green, red.
    """
    height, width = image.shape[:2]
    longest = max(height, width)
    zoom = min(LONGEST_PX / longest, max(1.0, round(SHORTEST_PX / longest)))
    size = (max(1, round(width * zoom)), max(1, round(height * zoom)))
    how = cv2.INTER_AREA if zoom < 1 else cv2.INTER_NEAREST
    grey = _display_range(cv2.resize(image, size, interpolation=how))
    text = max(0.42, 0.42 * max(size) / 1000)
    labels = _labels(inspection, zoom, text)
    left, top, beside = _margins(labels, text, size[0])
    right = max(beside, round(1200 * text) - left - size[0])  # a narrow strip still gets a header one can read
    canvas = cv2.copyMakeBorder(
        cv2.cvtColor(grey, cv2.COLOR_GRAY2BGR), top, 4, left, right, cv2.BORDER_CONSTANT, value=BAND
    )
    place = _Place(zoom, left, top)
    _draw_shapes(canvas, inspection, place, text)
    _draw_labels(canvas, labels, place, text)
    header = _header(inspection, title, canvas.shape[1], text)
    footer = _footer(inspection, canvas.shape[1], zoom, text)
    return np.vstack([header, canvas, footer])


def encode(drawing: NDArray[np.uint8]) -> tuple[str, bytes]:
    """Encode a drawing: PNG where small, else JPEG.

    Parameters
    ----------
    drawing : ndarray of uint8, shape (P, Q, 3)
        From `draw_picture`.

    Returns
    -------
    str
        Suffix of the file.
    bytes
        Its content.
    """
    small = drawing.shape[0] * drawing.shape[1] < PNG_BELOW_PX
    suffix, how = (".png", []) if small else (".jpg", JPEG)
    return suffix, cv2.imencode(suffix, drawing, how)[1].tobytes()


@dataclass(frozen=True, slots=True)
class _Place:
    """Where a point of the picture lies on the canvas."""

    zoom: float
    left: int
    top: int

    def __call__(self, points_px: NDArray[np.float64]) -> NDArray[np.float64]:
        # Pixel centres are whole numbers in both, hence the halves.
        return (np.asarray(points_px, dtype=np.float64) + 0.5) * self.zoom - 0.5 + (self.left, self.top)


@dataclass(frozen=True, slots=True)
class _Label:
    """A line's name and width, to stand just before the line's start."""

    text: str
    colour: Colour
    rank: int
    upright: bool  # the line runs along +y
    turned: bool  # the text runs along the line, where neighbours leave no room for it across
    x: float  # the line's start on the zoomed picture
    y: float


def _display_range(image: NDArray[Any]) -> NDArray[np.uint8]:
    """Stretch to 8 bit between the picture's own dark and bright."""
    seen = image[np.isfinite(image)]
    low, high = np.percentile(seen, (0.2, 99.8)) if seen.size else (0.0, 1.0)
    gain = 235.0 / max(float(high - low), 1e-12)
    stretched = (np.nan_to_num(image.astype(np.float32), nan=float(low)) - low) * gain + 10
    return np.clip(stretched, 0, 255).astype(np.uint8)


def _ascii(text: str) -> str:
    """Replace what OpenCV's own font lacks."""
    return "".join(c if " " <= c <= "~" else "?" for c in text)


def _stroke(scale: float) -> int:
    return 2 if scale > 0.75 else 1  # noqa: PLR2004  (where a one-pixel stroke begins to look thin)


def _extent(text: str, scale: float) -> tuple[int, int]:
    """Return width and full line height of a text. [px]."""
    (width, height), base = cv2.getTextSize(_ascii(text), cv2.FONT_HERSHEY_SIMPLEX, scale, _stroke(scale))
    return int(width) + 4, int(height + base + 6 * scale)


def _write(canvas: NDArray[np.uint8], text: str, at: tuple[float, float], colour: Colour, scale: float) -> int:
    """Write at the left end of a line of text whose top is given; return where it ends. [px]."""
    thick = _stroke(scale)
    (width, height), _ = cv2.getTextSize(_ascii(text), cv2.FONT_HERSHEY_SIMPLEX, scale, thick)
    corner = (round(at[0]), round(at[1] + height + 3 * scale))
    cv2.putText(canvas, _ascii(text), corner, cv2.FONT_HERSHEY_SIMPLEX, scale, colour, thick, cv2.LINE_AA)
    return round(at[0]) + int(width)


def _polyline(canvas: NDArray[np.uint8], points: NDArray[np.float64], colour: Colour, thick: int) -> None:
    """Draw a polyline at sub-pixel positions; NaN rows break it."""
    good = np.asarray(np.isfinite(points).all(axis=1))
    cuts = np.flatnonzero(np.diff(good.astype(np.int8))) + 1
    runs = [run for run in np.split(np.arange(len(points)), cuts) if run.size and good[run[0]]]
    fixed = [np.round(points[run] * 2**SHIFT).astype(np.int32).reshape(-1, 1, 2) for run in runs]
    cv2.polylines(canvas, fixed, False, colour, thick, cv2.LINE_AA, SHIFT)  # noqa: FBT003  (OpenCV's is positional)


def _dashed(ends: NDArray[np.float64], dash: float) -> NDArray[np.float64]:
    """Return a straight line in dashes of about a length. [px]."""
    number = max(1, round(float(np.hypot(*(ends[1] - ends[0]))) / (2 * dash)))
    places = ends[0] + np.linspace(0, 1, 2 * number)[:, None] * (ends[1] - ends[0])
    return np.insert(places, np.arange(2, 2 * number, 2), np.nan, axis=0)


def _worst(rows: Sequence[dict[str, Any]]) -> str:
    """Return the worst verdict among rows."""
    verdicts = {row["verdict"] for row in rows}
    return next((verdict for verdict in WORST_FIRST if verdict in verdicts), "")


def _by_item(inspection: Inspection) -> dict[tuple[str, str], list[dict[str, Any]]]:
    items: dict[tuple[str, str], list[dict[str, Any]]] = {}
    for row in inspection.rows:
        items.setdefault((row["feature"], row["item"]), []).append(row)
    return items


def _draw_shapes(canvas: NDArray[np.uint8], inspection: Inspection, place: _Place, text: float) -> None:
    items = _by_item(inspection)
    thick = 2 if max(canvas.shape) > 1500 else 1  # noqa: PLR2004  (a hair line vanishes on a large drawing)
    for role in ("region", "edge", "left_out", "missing", "event"):
        for feature, shape in inspection.shapes:
            if shape.role.partition(":")[0] != role:
                continue
            verdict_colour = STYLE[_worst(items.get((feature, shape.item), []))][1]
            colour = {"region": REGION, "left_out": LEFT_OUT, "event": WHITE}.get(role, verdict_colour)
            points = place(shape.points_px)
            if role == "missing":
                points = _dashed(points, 12 * text / 0.42)
            if role in {"event", "missing"}:
                _polyline(canvas, points, (0, 0, 0), thick + 2)
            _polyline(canvas, points, colour, thick)
    taken: list[Box] = []
    largest = sorted(inspection.events, key=lambda event: -event["area"])[:MOST_NAMED]
    for event in largest:
        centre = place(np.array([event["x_px"], event["y_px"]]))
        _event_name(canvas, event, centre, text, taken)


def _event_name(
    canvas: NDArray[np.uint8], event: dict[str, Any], centre: NDArray[np.float64], scale: float, taken: list[Box]
) -> None:
    """Write an event's name in a box near it, where no other name stands; tied to it by a line if farther off."""
    label = f"{event['item']} {event['event']}"
    width, height = _extent(label, scale)
    away = 14 * scale / 0.42
    x, y = float(centre[0]), float(centre[1])
    choices = [
        (x + away, y - away - height), (x - away - width, y - away - height),
        (x + away, y + away), (x - away - width, y + away),
        (x + 3 * away, y - 3 * away - height), (x - 3 * away - width, y + 3 * away),
    ]  # fmt: skip
    for number, (left, top) in enumerate(choices):  # noqa: B007  (used after the loop)
        left = min(max(left, 2.0), max(2.0, canvas.shape[1] - width - 8.0))  # noqa: PLW2901
        top = min(max(top, 2.0), max(2.0, canvas.shape[0] - height - 4.0))  # noqa: PLW2901
        box = (int(left) - 2, int(top), int(left) + width + 4, int(top) + height)
        if not any(_overlap(box, other) for other in taken):
            break
    else:
        return
    taken.append(box)
    if number > 3:  # noqa: PLR2004  (the first four touch it)
        near = (min(max(x, box[0]), box[2]), min(max(y, box[1]), box[3]))
        for colour, thick in (((0, 0, 0), 3), (WHITE, 1)):
            _polyline(canvas, np.array([(x, y), near]), colour, thick)
    cv2.rectangle(canvas, box[:2], box[2:], (0, 0, 0), -1)
    _write(canvas, label, (box[0] + 3, box[1]), WHITE, scale)


def _overlap(a: Box, b: Box) -> bool:
    return a[0] < b[2] and b[0] < a[2] and a[1] < b[3] and b[1] < a[3]


def _labels(inspection: Inspection, zoom: float, text: float) -> list[_Label]:
    """Choose the lines' labels: those not conforming first, then as many as do not overlap."""
    items = _by_item(inspection)
    edges: dict[tuple[str, str], list[NDArray[np.float64]]] = {}
    for feature, shape in inspection.shapes:
        good = shape.points_px[np.isfinite(shape.points_px).all(axis=1)]
        if shape.role in {"edge", "missing"} and len(good):
            edges.setdefault((feature, shape.item), []).append(good)
    missing = {(feature, shape.item) for feature, shape in inspection.shapes if shape.role == "missing"}
    words = {key: f"{key[1]} missing" if key in missing else _label_words(key[1], items.get(key, [])) for key in edges}
    labels = []
    room = max((_extent(label, text)[0] for label in words.values()), default=0)
    for key, lines in edges.items():
        verdict = _worst(items.get(key, []))
        x, y = np.mean([line[0] for line in lines], axis=0)
        end = np.mean([line[-1] for line in lines], axis=0)
        upright = bool(abs(end[1] - y) > abs(end[0] - x))
        if (end[1] < y) if upright else (end[0] < x):
            x, y = end
        x, y = x * zoom, y * zoom
        if (y if upright else x) < room:  # the margin is near, and there the label hides nothing
            x, y = (x, 0.0) if upright else (0.0, y)
        rank, colour = WORST_FIRST.index(verdict), STYLE[verdict][1]
        labels.append(_Label(words[key], colour, rank, upright, turned=False, x=x, y=y))
    boxes = [_label_box(label, text) for label in labels]
    if any(_overlap(a, b) for number, a in enumerate(boxes) for b in boxes[:number]):
        labels = [replace(label, turned=label.upright) for label in labels]
    kept: list[_Label] = []
    for label in sorted(labels, key=lambda label: label.rank):
        box = _label_box(label, text)
        if not any(_overlap(box, _label_box(other, text)) for other in kept):
            kept.append(label)
    return kept


def _label_words(item: str, rows: list[dict[str, Any]]) -> str:
    """Return a line's name, its mean width with its sign, and what else is worse than that."""
    words = item
    judged = WORST_FIRST.index("conforming")
    for row in rows:
        if row["quantity"] == "width_mean" and row["value"] is not None:
            width = value_words(row["value"], row["expanded_u"], row["unit"])
            words = f"{words} {width} {STYLE[row['verdict']][0]}".rstrip()
            judged = min(judged, WORST_FIRST.index(row["verdict"]))
    # Of those equally bad a count says most in a word: open_count.
    bad = [(WORST_FIRST.index(row["verdict"]), row["unit"] != "1", row["quantity"]) for row in rows]
    rank, _, quantity = min(bad, default=(judged, False, ""))
    if rank < judged:
        words += f"{',' if words != item else ''} {STYLE[WORST_FIRST[rank]][0]} {quantity}"
    return words


def value_words(value: float, expanded_u: float | None, unit: str) -> str:
    """Return a value with its expanded uncertainty, for reading.

    Parameters
    ----------
    value : float
        The value.
    expanded_u : float or None
        Its expanded uncertainty, where known.
    unit : str
        UCUM.

    Returns
    -------
    str
        Rounded to two digits of the uncertainty, four digits without one.

    Examples
    --------
    >>> value_words(20.1234, 0.0521, "um")
    '20.123 +/- 0.052 um'
    """
    plain = {"{px}": "px", "{px2}": "px2", "1": ""}.get(unit, unit)
    if expanded_u is None or not 0 < expanded_u < math.inf:
        return f"{value:.4g} {plain}".rstrip()
    digits = max(0, 1 - math.floor(math.log10(expanded_u)))
    return f"{value:.{digits}f} +/- {expanded_u:.{digits}f} {plain}".rstrip()


def _label_box(label: _Label, text: float) -> Box:
    """Return the label's box on the zoomed picture: it ends where the line starts."""
    size = _extent(label.text, text)
    width, height = size[::-1] if label.turned else size
    gap = round(8 * text)
    left, top = label.x - gap - width, label.y - height / 2
    if label.upright:
        left, top = label.x - width / 2, label.y - gap - height
    return round(left), round(top), round(left) + width, round(top) + height


def _margins(labels: list[_Label], text: float, width: int) -> tuple[int, int, int]:
    """Return the room that labels need left of, above and right of a picture of that width. [px]."""
    boxes = [_label_box(label, text) for label in labels]
    left, top = (max([4, *(4 - box[axis] for box in boxes)]) for axis in (0, 1))
    return left, top, max([4, *(box[2] + 4 - width for box in boxes)])


def _draw_labels(canvas: NDArray[np.uint8], labels: list[_Label], place: _Place, text: float) -> None:
    for label in labels:
        box = _label_box(label, text)
        width, height = _extent(label.text, text)
        tag = np.full((height, width, 3), BAND, dtype=np.uint8)
        _write(tag, label.text, (0, 0), label.colour, text)
        tag = np.rot90(tag) if label.turned else tag
        x, y = max(0, box[0] + place.left), max(0, box[1] + place.top)
        into = canvas[y : y + tag.shape[0], x : x + tag.shape[1]]
        into[:] = tag[: into.shape[0], : into.shape[1]]


def _header(inspection: Inspection, title: str, width: int, text: float) -> NDArray[np.uint8]:
    """Return the band that says what, how many of each verdict, and what does not conform."""
    counts = {verdict: sum(row["verdict"] == verdict for row in inspection.rows) for verdict in WORST_FIRST}
    bad = [row for row in inspection.rows if row["verdict"] in {"nonconforming", "undecided"}]
    bad.sort(key=lambda row: WORST_FIRST.index(row["verdict"]))
    lines: list[list[tuple[str, Colour]]] = [[(title, WHITE)], []]
    for verdict in ("conforming", "undecided", "nonconforming"):
        sign, colour = STYLE[verdict]
        lines[1].append((f"{counts[verdict]} {verdict} ({sign})", colour if counts[verdict] else GREY))
    some = f" ({MOST_NAMED} largest named)" if len(inspection.events) > MOST_NAMED else ""
    lines[1].append((f"defects: {len(inspection.events)}{some}", WHITE if inspection.events else GREY))
    for feature, reason in inspection.failures.items():
        lines += [[(piece, STYLE["undecided"][1])] for piece in _wrapped(f"{feature}: {reason}", width, text)]
    lines += [[(_row_words(row), STYLE[row["verdict"]][1])] for row in bad[:MOST_LISTED]]
    if len(bad) > MOST_LISTED:
        lines.append([(f"and {len(bad) - MOST_LISTED} more: see measurements.csv", GREY)])
    high = _extent("Xg", text)[1]
    band = np.full((high * len(lines) + 8, width, 3), BAND, dtype=np.uint8)
    for number, parts in enumerate(lines):
        x = 6
        for words, colour in parts:
            x = _write(band, _fitted(words, width - x - 4, text), (x, 4 + number * high), colour, text) + high
    return band


def _row_words(row: dict[str, Any]) -> str:
    """Return one reading that does not conform, with its limits or its flags."""
    sign, _ = STYLE[row["verdict"]]
    value = "withheld" if row["value"] is None else value_words(row["value"], row["expanded_u"], row["unit"])
    ends = [f"{word} {row[word]:g}" for word in ("lower", "upper") if row[word] is not None]
    flags = f" [{row['flags'].words().replace(';', ', ')}]" if row["flags"] else ""
    return f"{sign} {row['feature']} {row['item']} {row['quantity']}: {value} ({', '.join(ends)}){flags}"


def _fitted(text: str, width: int, scale: float) -> str:
    """Shorten a text in its middle to a width. [px]."""
    text = _ascii(text)
    if _extent(text, scale)[0] <= width:
        return text
    keep = max(0, int(len(text) * width / _extent(text, scale)[0]) - 4)
    return text[: keep - keep // 2] + "..." + text[len(text) - keep // 2 :]


def _wrapped(text: str, width: int, scale: float) -> list[str]:
    """Break a text into lines of a width. [px]."""
    import textwrap  # noqa: PLC0415

    per_line = max(
        20, int(0.93 * len(text) * (width - 12) / max(1, _extent(text, scale)[0]))
    )  # letters differ in width
    return textwrap.wrap(text, per_line, max_lines=4, placeholder=" ...")


def _footer(inspection: Inspection, width: int, zoom: float, text: float) -> NDArray[np.uint8]:
    """Return the band with the scale bar and what the colours mean."""
    high = _extent("Xg", text)[1]
    band = np.full((high + 8, width, 3), BAND, dtype=np.uint8)
    x = _scale_bar(band, inspection.scale, zoom, text, width // 4) if inspection.scale is not None else 6
    key = [(f"{sign} {verdict}", colour) for verdict, (sign, colour) in STYLE.items() if verdict]
    for words, colour in [*key, ("no limits", GREY), ("left out", LEFT_OUT)]:
        if x + high + _extent(words, text)[0] < width:
            x = _write(band, words, (x + high, 4), colour, text)
    return band


def _scale_bar(band: NDArray[np.uint8], scale: Scale, zoom: float, text: float, longest: int) -> int:
    """Draw a bar of 1, 2 or 5 times a power of ten; return where its words end. [px]."""
    per_px = scale.x / zoom
    decade = 10.0 ** math.floor(math.log10(longest * per_px))
    length = max(step * decade for step in (1, 2, 5) if step * decade <= longest * per_px)
    end, middle = 8 + length / per_px, band.shape[0] / 2
    _polyline(band, np.array([(8.0, middle), (end, middle)]), WHITE, 3)
    return _write(band, value_words(length, None, scale.unit), (end + 8, 4), WHITE, text)
