"""How good the measurement of lines is, on rendered scenes with known truth.

Run on request: ``python tests/benchmarks/lines_benchmark.py [--quick] [--only NAME ...]``. It prints Markdown tables.
Lengths are in pixels; `blur` is the optics' Gaussian, `s` the sigma with the pixel's aperture, sqrt(blur^2 + 1/12); CNR
is step over noise. "+-" is the standard error of a mean over scenes.
"""

# ruff: noqa: ANN401  (pictures of any type, options of any kind)

from __future__ import annotations

import argparse
import itertools
import math
import os
import sys
import zlib
from collections import Counter, defaultdict
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context
from pathlib import Path
from typing import TYPE_CHECKING, Any

import cv2
import numpy as np
from scipy.integrate import quad
from scipy.special import gamma, kv

sys.path.insert(0, str(Path(__file__).parent))

import skimage_lines

from printmetrics.errors import FeatureError
from printmetrics.measure.lines import LinesOptions, measure_lines
from printmetrics.measure.readings import Measured, Reading, expanded
from printmetrics.measure.sight import Sight
from printmetrics.scale import Scale
from printmetrics.synth import Defect, Line, Scene, camera, render

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Sequence

CONTRAST = 150.0
Task = tuple[Any, ...]


def effective(blur: float) -> float:
    """Sigma of blur and pixel aperture."""
    return math.hypot(blur, 1.0 / math.sqrt(12.0))


def bound(blur: float, cnr: float) -> float:
    """Cramer-Rao bound of one row's edge, levels and blur known: var = 2 sqrt(pi) s / CNR^2."""
    return math.sqrt(2.0 * math.sqrt(math.pi) * effective(blur)) / cnr


def generator(task: Task) -> np.random.Generator:
    """Source of chance of a task's own, so that cells of a table are independent."""
    return np.random.default_rng(zlib.crc32(repr(task).encode()))


def measure(image: Any, *, ink: str = "bright", **options: Any) -> Measured | None:
    """Measure in pixels; None where no line is found."""
    codes = image if image.dtype in (np.uint8, np.uint16) else image.astype(np.float32)
    sight = Sight(image=codes, saturated=None, scale=Scale.pixels())
    try:
        return measure_lines(sight, LinesOptions(name="lines", kind="lines", ink=ink, **options))
    except FeatureError:
        return None


def readings(measured: Measured | None) -> dict[tuple[str, str], Reading]:
    """Readings by item and quantity."""
    return {(r.item, r.quantity): r for r in measured.readings} if measured else {}


def table(title: str, head: Sequence[str], rows: Iterable[Sequence[Any]]) -> None:
    """Print a Markdown table."""
    print(f"\n**{title}**\n")
    print("| " + " | ".join(head) + " |\n|" + "---|" * len(head))
    for row in rows:
        print("| " + " | ".join(str(cell) for cell in row) + " |", flush=True)


def mean_and_error(values: Sequence[float]) -> tuple[float, float]:
    """Mean and its standard error."""
    v = np.asarray(values, float)
    return float(v.mean()), float(v.std(ddof=1) / math.sqrt(v.size))


def plus_minus(values: Sequence[float], digits: int = 4) -> str:
    """Mean +- standard error, as text."""
    if len(values) < 2:
        return "-"
    mean, error = mean_and_error(values)
    return f"{mean:.{digits}f} +- {error:.{digits}f}"


def share(part: float, whole: float) -> str:
    """Share in percent, as text."""
    return f"{100.0 * part / whole:.1f}" if whole else "-"


# --- 1: edges of straight lines against the bound -------------------------------------------------------------------


def edges_task(task: Task) -> Task:
    """Scatter, bias and rejected rows of three straight lines under several draws of noise."""
    blur, cnr, draws, _ = task
    rng = generator(task)
    gap = 60.0 if blur > 2 else 40.0
    widths = rng.uniform(30.0, 60.0, 3)
    total = widths.sum() + 2 * gap
    offsets = np.array([-total / 2 + widths[0] / 2, (widths[0] - widths[2]) / 2, total / 2 - widths[2] / 2])
    offsets += rng.uniform(-0.5, 0.5)
    tilt = rng.uniform(-2.0, 2.0)
    shape = (600, int(total + 100))
    lines = tuple(Line(offset=o, width=w) for o, w in zip(offsets, widths, strict=True))
    image, _ = render(Scene(shape=shape, lines=lines, blur=blur, tilt_deg=tilt), rng)
    squares, points, lost, bias, standard = 0.0, 0, 0, [], []
    tan, cos = math.tan(math.radians(tilt)), math.cos(math.radians(tilt))
    for _ in range(draws):
        measured = measure(camera.white_noise(image, CONTRAST / cnr, rng))
        found = readings(measured)
        if ("L3", "width_mean") not in found or ("L4", "width_mean") in found:
            lost += 6 * shape[0]
            continue
        edges = [s.points_px for s in measured.shapes if s.role == "edge"]
        for k, line in enumerate(lines):
            width = found[f"L{k + 1}", "width_mean"]
            bias.append(width.value - line.width)
            standard.append(width.u_noise)
            for side in (0, 1):
                x, y = edges[2 * k + side].T
                place = line.offset + (side - 0.5) * line.width
                off = x - ((shape[1] - 1) / 2 + place / cos - tan * (y - (shape[0] - 1) / 2))
                off = off[np.isfinite(off)]
                squares += np.sum((off - off.mean()) ** 2)
                points += off.size
                lost += shape[0] - off.size
    return squares, points, lost, bias, standard


def edges_table(pool: ProcessPoolExecutor, *, quick: bool) -> None:
    """Scatter over the bound, and bias of the mean width."""
    cells = list(itertools.product((0.8, 1.3, 2.0, 4.0), (5.0, 10.0, 50.0, 200.0)))
    scenes = {5.0: 24, 10.0: 16, 50.0: 6, 200.0: 6}
    tasks = [(b, c, 4, s) for b, c in cells for s in range(scenes[c] // (3 if quick else 1))]
    rows = []
    for (blur, cnr), parts in grouped(tasks, pool.map(edges_task, tasks, chunksize=2), 2).items():
        squares, points, lost = (sum(p[i] for p in parts) for i in range(3))
        bias = [b for p in parts for b in p[3]]
        standard = [b for p in parts for b in p[4]]
        rough = math.sqrt(squares / points)
        rows.append((
            blur, f"{cnr:g}", f"{bound(blur, cnr):.4f}", f"{rough / bound(blur, cnr):.3f}",
            share(lost, lost + points), plus_minus(bias, 5), f"{np.std(bias) / np.mean(standard):.2f}", len(bias),
        ))  # fmt: skip
    head = ("blur", "CNR", "bound", "scatter / bound", "rows lost %", "width bias", "its sd / u_noise", "lines")
    table("Edges of straight lines, 30 to 60 wide, 600 rows, within 2 degrees of the axis", head, rows)


def grouped(tasks: Sequence[Task], results: Iterable[Task], count: int) -> dict[Task, list[Task]]:
    """Results by the first figures of their task."""
    groups: dict[Task, list[Task]] = defaultdict(list)
    for task, result in zip(tasks, results, strict=True):
        groups[task[:count]].append(result)
    return groups


# --- 2: narrow lines, close neighbours -------------------------------------------------------------------------------


def narrow_task(task: Task) -> Task:
    """Bias of width or space of a narrow line, or of close neighbours."""
    case, ratio, blur, cnr, _ = task
    rng = generator(task)
    s = effective(blur)
    shift, size = rng.uniform(-0.5, 0.5), ratio * s
    if case == "line alone":
        lines = [(0.0, size)]
    elif case == "beside a wide line":
        lines = [(-50.0, 40.0), (30.0, size)]
    elif case == "space of wide lines":
        lines = [(-(size + 40) / 2, 40.0), ((size + 40) / 2, 40.0)]
    else:
        lines = [((k - 2) * 2 * size, size) for k in range(5)]
    shape = (600, int(2 * abs(lines[0][0]) + lines[0][1] + 90))
    scene = Scene(
        shape=shape, lines=tuple(Line(offset=o + shift, width=w) for o, w in lines), blur=blur,
        tilt_deg=rng.uniform(-1, 1),
    )  # fmt: skip
    image, _ = render(scene, rng)
    found = readings(measure(camera.white_noise(image, CONTRAST / cnr, rng)))
    out = []
    names = {"line alone": ["L1"], "beside a wide line": ["L2"], "space of wide lines": ["L1..L2"]}.get(case)
    for item in names or ["L2", "L3", "L4"]:
        reading = found.get((item, "space_mean" if ".." in item else "width_mean"))
        right_count = found and found["all", "line_count"].value == len(lines)
        if reading is None or reading.value is None or not right_count:
            out.append(None)
        else:
            full = expanded(reading.u, reading.dof)
            out.append((reading.value - size, full, reading.flags.words()))
    return tuple(out)


def narrow_table(pool: ProcessPoolExecutor, *, quick: bool) -> None:
    """Width of narrow lines, space of close ones."""
    cases = [(c, r) for c in ("line alone", "beside a wide line") for r in (2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 8.0, 12.0)]
    cases += [("space of wide lines", r) for r in (3.0, 4.0, 5.0, 6.0, 8.0)]
    cases += [("lines and spaces alike", r) for r in (3.0, 4.0, 5.0, 6.0, 8.0)]
    tasks = [
        (*c, b, cnr, s) for c in cases for b, cnr in ((0.8, 50.0), (2.0, 20.0), (2.0, 100.0))
        for s in range(5 if quick else 20)
    ]  # fmt: skip
    rows = []
    for key, parts in grouped(tasks, pool.map(narrow_task, tasks, chunksize=8), 4).items():
        every = [x for p in parts for x in p]
        good = [x for x in every if x is not None]
        flags = Counter(word for x in good for word in x[2].split(";") if word)
        rows.append((
            *(f"{k:g}" if isinstance(k, float) else k for k in key), share(len(every) - len(good), len(every)),
            plus_minus([x[0] for x in good]), share(sum(abs(x[0]) <= x[1] for x in good), len(good)),
            ", ".join(f"{w} {share(n, len(good))}" for w, n in flags.items()),
        ))  # fmt: skip
    head = ("scene", "size / s", "blur", "CNR", "not found %", "bias", "inside U %", "flags %")
    table("Narrow lines and close neighbours, straight", head, rows)


# --- 3: roughness ----------------------------------------------------------------------------------------------------


def rough_lines(rng: np.random.Generator, width: float, **process: Any) -> tuple[Line, Line]:
    """Two rough lines 50 px to either side of the middle."""
    shift = rng.uniform(-0.5, 0.5, 2)
    return Line(offset=-50.0 + shift[0], width=width, **process), Line(offset=50.0 + shift[1], width=width, **process)


def rough_task(task: Task) -> list[tuple[float, ...]]:
    """Roughness readings of two lines over their truth."""
    ratio, blur, sd, over_noise, hurst, tilt, _ = task
    rng = generator(task)
    xi = ratio * effective(blur)
    cnr = bound(blur, 1.0) * over_noise / sd
    rows = int(min(max(60 * xi, 800), 2000))
    lines = rough_lines(rng, 40.0, edge_sd=sd, correlation_length=xi, exponent=hurst)
    shape = (rows, 200 + int(rows * math.tan(math.radians(tilt))))
    image, truth = render(Scene(shape=shape, lines=lines, blur=blur, tilt_deg=tilt), rng)
    found = readings(measure(camera.white_noise(image, CONTRAST / cnr, rng)))
    out = []
    for k, line in enumerate(truth.lines):
        if (f"L{k + 1}", "lwr_3sigma") not in found:
            continue
        half = found[f"L{k + 1}", "length"].value / 2
        middle = sum(line.inside) / 2
        true = line.statistics(piece=(middle - half, middle + half) if tilt else None)

        def over(name: str, divisor: float, item: str = f"L{k + 1}") -> float:
            value = found[item, name].value
            return math.nan if value is None else value / divisor

        out.append((
            over("lwr_3sigma", 3 * true.width_sd), over("lwr_3sigma_raw", 3 * true.width_sd),
            over("ler_left_3sigma", 3 * true.left_sd), over("ler_right_3sigma", 3 * true.right_sd),
            over("edge_noise", bound(blur, cnr)), over("correlation_length", xi), over("roughness_exponent", hurst),
            over("lwr_3sigma_long", 3 * math.sqrt(2) * sd),
        ))  # fmt: skip
    return out


def roughness_table(pool: ProcessPoolExecutor, *, quick: bool) -> None:
    """Roughness over truth."""
    cells = [(r, 1.3, 0.5, n, 0.5, 0.0) for r in (5.0, 10.0, 20.0, 40.0) for n in (1.0, 3.0, 10.0)]
    cells += [(r, 1.3, 0.5, 3.0, h, 0.0) for h in (0.3, 0.75, 1.0) for r in (5.0, 10.0, 20.0)]
    cells += [(10.0, b, 0.5, 3.0, 0.5, 0.0) for b in (0.8, 2.0, 4.0)]
    cells += [(10.0, 1.3, sd, 10.0, 0.5, 0.0) for sd in (0.1, 1.0, 2.0, 4.0)]
    cells += [(10.0, 1.3, 0.5, 3.0, 0.5, t) for t in (5.0, 15.0, 29.0)]
    tasks = [(*c, s) for c in cells for s in range(10 if quick else 40)]
    rows = []
    for key, parts in grouped(tasks, pool.map(rough_task, tasks, chunksize=2), 6).items():
        values = np.array([x for p in parts for x in p])
        means = []
        for column in values.T:
            kept = column[np.isfinite(column)]
            means.append(plus_minus(kept, 3) if kept.size > values.shape[0] / 2 else "withheld")
        rows.append((*(f"{k:g}" for k in key), *means, len(values)))
    head = (
        "xi / s", "blur", "edge sd", "sd / noise", "H", "tilt", "lwr", "lwr raw", "ler left", "ler right",
        "edge_noise / bound", "xi", "H / true", "lwr long", "lines",
    )  # fmt: skip
    table("Roughness over that of the true edges (xi, H and lwr long: over the process's)", head, rows)


# --- 4: coverage -----------------------------------------------------------------------------------------------------


def correlation(lag: float, xi: float, hurst: float) -> float:
    """Correlation of the Palasantzas process: (z / 2)^H 2 K_H(z) / Gamma(H), z = lag / xi."""
    z = max(lag / xi, 1e-9)
    return float(2 ** (1 - hurst) / gamma(hurst) * z**hurst * kv(hurst, z))


def removed(length: float, xi: float, hurst: float) -> float:
    """Share of the variance that the mean over a length takes: 2 int (1 - u) rho(u L) du."""

    return (
        2.0
        * quad(lambda u: (1 - u) * correlation(u * length, xi, hurst), 0.0, min(1.0, 40 * xi / length), limit=200)[0]
    )


def coverage_scene(seed: int) -> dict[str, float]:
    """Draw a scene of the range the coverage is stated for."""
    rng = np.random.default_rng([7, seed])
    blur = float(rng.choice([0.8, 1.3, 2.0, 4.0]))
    xi = float(rng.choice([6.0, 12.0, 25.0, 50.0]))
    lengths = float(rng.choice([20.0, 30.0, 60.0, 120.0]))
    while not 200 <= lengths * xi <= 2000:
        xi, lengths = float(rng.choice([6.0, 12.0, 25.0, 50.0])), float(rng.choice([20.0, 30.0, 60.0, 120.0]))
    factors = {
        "blur": blur, "CNR": float(rng.choice([5.0, 10.0, 50.0, 200.0])), "xi": xi, "L / xi": lengths,
        "H": float(rng.choice([0.3, 0.5, 0.75, 1.0])), "sd": float(rng.choice([0.2, 0.5, 1.0, 2.0])),
        "rho": float(rng.choice([-0.5, 0.0, 0.5, 0.9])), "width": float(rng.choice([25.0, 40.0, 60.0])),
    }  # fmt: skip
    # How far an edge moves along a piece as long as the blur, over the blur: where it nears 1, blur is not linear.
    s = effective(blur)
    move = math.sqrt(2 * (1 - correlation(s, xi, factors["H"]))) * factors["sd"] / s
    factors["move"] = next(top for top in (0.1, 0.2, 0.4, 0.7, 3.0) if move <= top)
    return factors


def coverage_task(seed: int) -> list[tuple[dict[str, float], str, float, float, bool, bool, str]]:
    """Readings of one scene: factors, quantity, error to the piece and to the process, whether inside, flags."""
    factors = coverage_scene(seed)
    rng = np.random.default_rng([8, seed])
    process = {
        "edge_sd": factors["sd"], "correlation_length": factors["xi"], "exponent": factors["H"], "rho": factors["rho"]
    }  # fmt: skip
    lines = rough_lines(rng, factors["width"], **process)
    rows = int(factors["L / xi"] * factors["xi"])
    image, truth = render(Scene(shape=(rows, 240), lines=lines, blur=factors["blur"]), rng)
    neck = 4 * effective(factors["blur"])
    noisy = camera.white_noise(image, CONTRAST / factors["CNR"], rng)
    found = readings(measure(noisy, neck_length=neck, direction="vertical"))
    if not found or found["all", "line_count"].value != 2:
        return [(factors, "not found", math.nan, math.nan, False, False, "")]
    out = []
    kept = math.sqrt(1 - removed(rows, factors["xi"], factors["H"]))

    def note(item: str, name: str, piece: float | None, whole: float | None) -> None:
        reading = found[item, name]
        flags = reading.flags.words()
        if reading.value is None:
            out.append((factors, name, math.nan, math.nan, False, False, "withheld;" + flags))
            return
        to_piece = reading.value - piece if piece is not None else math.nan
        to_whole = reading.value - whole if whole is not None else math.nan
        if reading.u is None:
            out.append((factors, name, to_piece, to_whole, False, False, "no u;" + flags))
            return
        inside = abs(to_piece) <= 1.959964 * (reading.u_noise or 0.0)
        out.append(
            (factors, name, to_piece, to_whole, inside, abs(to_whole) <= expanded(reading.u, reading.dof), flags)
        )

    for k, line in enumerate(truth.lines):
        item, true = f"L{k + 1}", line.statistics(neck)
        var = line.line.width_sd**2
        note(item, "width_mean", true.width_mean, line.line.width)
        mean_inverse = (1 + var / line.line.width**2 + 3 * var**2 / line.line.width**4) / line.line.width
        note(item, "width_harmonic", true.width_harmonic, 1 / mean_inverse)
        note(item, "lwr_3sigma", 3 * true.width_sd, 3 * line.line.width_sd * kept)
        note(item, "lwr_3sigma_long", None, 3 * line.line.width_sd)
        note(item, "correlation_length", None, factors["xi"])
        note(item, "roughness_exponent", None, factors["H"])
        note(item, "edge_noise", bound(factors["blur"], factors["CNR"]), None)
        note(item, "edge_blur", effective(factors["blur"]), None)
        note(item, "ler_left_3sigma", 3 * true.left_sd, None)
        note(item, "ler_right_3sigma", 3 * true.right_sd, None)
        note(item, "width_min", true.width_min, None)
        note(item, "width_max", true.width_max, None)
        here = (line.along >= line.inside[0]) & (line.along <= line.inside[1])
        middle = (line.clean_left + line.clean_right)[here] / 2
        slope = np.polyfit(line.along[here], middle, 1)[0]
        note(item, "tilt", -math.degrees(math.atan(slope)), 0.0)
    one, two = truth.lines
    centres = [
        ((t.clean_left + t.clean_right)[(t.along >= t.inside[0]) & (t.along <= t.inside[1])] / 2).mean()
        for t in truth.lines
    ]
    note("L1..L2", "pitch", float(centres[1] - centres[0]), two.line.offset - one.line.offset)
    mean, least = truth.spaces(0, neck)
    process_space = two.line.offset - two.line.width / 2 - one.line.offset - one.line.width / 2
    note("L1..L2", "space_mean", mean, process_space)
    note("L1..L2", "space_min", least, None)
    return out


def coverage_table(pool: ProcessPoolExecutor, *, quick: bool) -> None:
    """Coverage of intervals, pooled and by factor."""
    seeds = range(240 if quick else 2000)
    every = [row for part in pool.map(coverage_task, seeds, chunksize=4) for row in part]
    by_name: dict[str, list[Any]] = defaultdict(list)
    for row in every:
        by_name[row[1]].append(row)
    rows = []
    for name, part in by_name.items():
        rated = [r for r in part if not r[6].startswith(("withheld", "no u")) and name != "not found"]
        piece = [r for r in rated if not math.isnan(r[2])]
        whole = [r for r in rated if not math.isnan(r[3])]
        flags = Counter(word for r in part for word in r[6].split(";") if word)
        rows.append((
            name, len(part), share(sum(r[4] for r in piece), len(piece)), share(sum(r[5] for r in whole), len(whole)),
            plus_minus([r[2] for r in piece]), plus_minus([r[3] for r in whole]),
            ", ".join(f"{w} {share(n, len(part))}" for w, n in flags.most_common()),
        ))  # fmt: skip
    head = (
        "quantity",
        "readings",
        "piece in 1.96 u_noise %",
        "process in U %",
        "error to piece",
        "to process",
        "flags %",
    )
    table(f"Coverage, pooled over {len(seeds)} scenes of two lines, L from 20 xi", head, rows)
    rows = []
    for name, at in (
        ("width_mean", 5), ("width_mean", 4), ("width_harmonic", 4), ("lwr_3sigma", 5), ("lwr_3sigma", 4),
        ("ler_left_3sigma", 4), ("width_min", 4), ("width_max", 4), ("space_min", 4), ("pitch", 5), ("space_mean", 5),
        ("tilt", 5), ("correlation_length", 5), ("lwr_3sigma_long", 5), ("roughness_exponent", 5),
    ):  # fmt: skip
        rated = [r for r in by_name[name] if not r[6].startswith(("withheld", "no u"))]
        cells = []
        for factor in ("blur", "CNR", "xi", "L / xi", "H", "sd", "rho", "width", "move"):
            levels = sorted({r[0][factor] for r in rated})
            parts = ([r[at] for r in rated if r[0][factor] == level] for level in levels)
            cells.append(", ".join(f"{v:g}: {share(sum(p), len(p))}" for v, p in zip(levels, parts, strict=True)))
        rows.append((f"{name}, {'process' if at == 5 else 'piece'}", *cells))
    table("The same by factor, %", ("interval", "blur", "CNR", "xi", "L / xi", "H", "sd", "rho", "width", "move"), rows)


# --- 5: other pictures -----------------------------------------------------------------------------------------------

HEAVY = ((0.85, 1.3), (0.15, 5.2))
Chain = "Callable[[np.ndarray, np.random.Generator], np.ndarray]"


def plain(image: Any, rng: np.random.Generator) -> Any:
    """White noise, CNR 50."""
    return camera.white_noise(image, 3.0, rng)


def coded(image: Any) -> Any:
    """Eight bit."""
    return camera.to_codes(image, 8)


PICTURES: dict[str, tuple[dict[str, Any], Callable[[Any, np.random.Generator], Any]]] = {
    "white noise": ({}, plain),
    "8 bit": ({}, lambda i, r: coded(plain(i, r))),
    "8 bit, CNR 5": ({}, lambda i, r: coded(camera.white_noise(i, 30.0, r))),
    "no noise, 8 bit": ({}, lambda i, _: coded(i)),
    "contrast 8 counts, no noise, 8 bit": ({"substrate": 50.3, "ink": 58.3}, lambda i, _: coded(i)),
    "heavy tails": ({"blur": HEAVY}, plain),
    "JPEG 95": ({}, lambda i, r: camera.jpeg(coded(plain(i, r)), 95)),
    "JPEG 90": ({}, lambda i, r: camera.jpeg(coded(plain(i, r)), 90)),
    "JPEG 75": ({}, lambda i, r: camera.jpeg(coded(plain(i, r)), 75)),
    "JPEG 75, CNR 10": ({}, lambda i, r: camera.jpeg(coded(camera.white_noise(i, 15.0, r)), 75)),
    "row noise 1 count": ({}, lambda i, r: camera.row_noise(plain(i, r), 1.0, r)),
    "row noise 3 counts": ({}, lambda i, r: camera.row_noise(plain(i, r), 3.0, r)),
    "row noise 10 counts": ({}, lambda i, r: camera.row_noise(plain(i, r), 10.0, r)),
    "column noise 3 counts": ({}, lambda i, r: camera.row_noise(plain(i, r).T, 3.0, r).T),
    "gamma 2.2": ({}, lambda i, r: coded(camera.encode_gamma(plain(i, r), 2.2, 255.0))),
    "gamma 1.2": ({}, lambda i, r: coded(camera.encode_gamma(plain(i, r), 1.2, 255.0))),
    "sharpened 0.3": ({}, lambda i, r: camera.sharpen(plain(i, r), 0.3, 1.5)),
    "sharpened 1.0": ({}, lambda i, r: camera.sharpen(plain(i, r), 1.0, 1.5)),
    "smoothed by 3 x 3": ({}, lambda i, r: cv2.blur(plain(i, r), (3, 3))),
    "light 10 % across": ({}, lambda i, r: plain(i * camera.light(i.shape, across=0.1), r)),
    "light 30 % across": ({}, lambda i, r: plain(i * camera.light(i.shape, across=0.3), r)),
    "light 30 % along": ({}, lambda i, r: plain(i * camera.light(i.shape, along=0.3), r)),
    "vignette 30 %": ({}, lambda i, r: plain(i * camera.light(i.shape, vignette=0.3), r)),
    "photons, 100 a count": ({}, lambda i, r: camera.expose(i, r, electrons_per_count=100.0, read_noise=0.5)),
    "photons, 2 a count": ({}, lambda i, r: camera.expose(i, r, electrons_per_count=2.0, read_noise=2.0)),
}


def picture_task(task: Task) -> list[tuple[Any, ...]]:
    """Width and roughness of two lines in one kind of picture."""
    name, direction, tilt, ink, rho, _ = task
    rng = generator(task)
    keys, take = PICTURES[name]
    scene_keys: dict[str, Any] = {"blur": 1.3, "substrate": 50.0, "ink": 200.0} | keys
    if ink == "dark":
        scene_keys |= {"substrate": scene_keys["ink"], "ink": scene_keys["substrate"]}
    lines = rough_lines(rng, 40.0, edge_sd=0.6, correlation_length=20.0, rho=rho)
    long, short = 1000, 200 + int(1000 * math.tan(math.radians(abs(tilt))))
    shape = (long, short) if direction == "vertical" else (short, long)
    scene = Scene(shape=shape, lines=lines, direction=direction, tilt_deg=tilt, **scene_keys)
    image, truth = render(scene, rng)
    measured = measure(take(image, rng), ink=ink)
    found = readings(measured)
    out = []
    if not found or found["all", "line_count"].value != 2:
        return [(None, None, None, None, None, None, "wrong count", 0)] * 2
    for k, line in enumerate(truth.lines):
        get = {q: r for (item, q), r in found.items() if item == f"L{k + 1}"}
        half, middle = get["length"].value / 2, sum(line.inside) / 2
        true = line.statistics(piece=(middle - half, middle + half) if tilt else None)
        width, lwr = get["width_mean"], get["lwr_3sigma"]
        error = width.value - true.width_mean
        full = math.hypot(width.u_noise, width.u_common)
        out.append((
            error, lwr.value - 3 * true.width_sd, lwr.value / (3 * true.width_sd) if true.width_sd else math.nan,
            abs(error) <= 1.96 * full, get["edge_blur"].value, get["tilt"].value - tilt, width.flags.words(),
            len(measured.events), lwr.flags.words(),
        ))  # fmt: skip
    return out


def pictures(pool: ProcessPoolExecutor, tasks: list[Task], title: str, head: tuple[str, ...], keys: list[int]) -> None:
    """Run and print a table of pictures."""
    rows = []
    for key, parts in grouped(tasks, pool.map(picture_task, tasks, chunksize=2), 5).items():
        every = [x for p in parts for x in p]
        good = [x for x in every if x[0] is not None]
        flags = Counter(word for x in every for word in set(f"{x[6]};{x[-1] if len(x) > 8 else ''}".split(";")) if word)
        rows.append((
            *(key[i] for i in keys), plus_minus([x[0] for x in good]), share(sum(x[3] for x in good), len(good)),
            plus_minus([x[2] for x in good], 3) if key[4] != 1.0 else plus_minus([x[1] for x in good], 3) + " px",
            plus_minus([x[4] for x in good], 3), f"{sum(x[7] for x in good) / 2:g}",
            ", ".join(f"{w} {share(n, len(every))}" for w, n in flags.most_common()), len(every),
        ))  # fmt: skip
    table(
        title,
        (*head, "width bias", "piece in u_noise, u_common %", "lwr / true", "edge_blur", "events", "flags %", "lines"),
        rows,
    )


def pictures_table(pool: ProcessPoolExecutor, *, quick: bool) -> None:
    """Other pictures than the model's; tilts, directions and inks."""
    scenes = range(6 if quick else 25)
    tasks: list[Task] = [
        (name, "vertical", 0.0, ink, 0.0, s) for name in PICTURES for ink in ("bright", "dark") for s in scenes
    ]
    pictures(pool, tasks, "Other pictures: blur 1.3, two lines 40 wide, edge sd 0.6, xi 20", ("picture", "ink"), [0, 3])
    scenes = range(4 if quick else 15)
    tasks = [
        ("white noise", d, sign * t, ink, rho, s)
        for d, t, ink, rho in itertools.product(
            ("vertical", "horizontal"), (0.0, 5.0, 15.0, 29.0), ("bright", "dark"), (0.0, 1.0)
        )
        for sign in ((1, -1) if t else (1,))
        for s in scenes
    ]  # fmt: skip
    tasks.sort(key=lambda t: t[:5])
    pictures(
        pool, tasks, "Tilt; rho 1 is pure wiggle, whose width roughness is none", ("direction", "tilt", "ink", "rho"),
        [1, 2, 3, 4],
    )  # fmt: skip


# --- 6: extremes of a straight line ----------------------------------------------------------------------------------


def straight_task(task: Task) -> list[tuple[float, ...]]:
    """Extremes of a straight line."""
    blur, cnr, rows, _ = task
    rng = generator(task)
    line = Line(offset=rng.uniform(-0.5, 0.5), width=20.0)
    image, _ = render(Scene(shape=(rows, 120), lines=(line,), blur=blur), rng)
    found = readings(measure(camera.white_noise(image, CONTRAST / cnr, rng)))
    names = ("width_min", "width_max", "width_harmonic", "width_mean", "lwr_3sigma", "lwr_3sigma_raw")
    if ("L1", "width_min") not in found or any(found["L1", name].value is None for name in names):
        return []
    least = found["L1", "width_min"]
    values = [found["L1", name].value - (20.0 if name.startswith("width") else 0.0) for name in names]
    return [(*values, abs(values[0]) <= 1.96 * (least.u_noise or 0.0))]


def straight_table(pool: ProcessPoolExecutor, *, quick: bool) -> None:
    """A straight line must not read thin."""
    cells = [(b, c, r) for b in (0.8, 1.3, 2.0, 4.0) for c in (5.0, 10.0, 50.0) for r in (300, 1500)]
    tasks = [(*c, s) for c in cells for s in range(10 if quick else 40)]
    rows = []
    for key, parts in grouped(tasks, pool.map(straight_task, tasks, chunksize=4), 3).items():
        good = np.array([x for p in parts for x in p])
        least = (
            f"{good[:, 0].mean():.3f}, sd {good[:, 0].std():.3f}, worst {good[:, 0].min():.2f}" if len(good) else "-"
        )
        most = f"{good[:, 1].mean():.3f}" if len(good) else "-"
        rest = (plus_minus(good[:, i], 4) for i in (2, 3, 4, 5)) if len(good) > 1 else ("-",) * 4
        rows.append((
            *(f"{k:g}" for k in key), least, most, *rest, share(good[:, 6].sum(), len(good)) if len(good) else "-",
            share(len(parts) - len(good), len(parts)),
        ))  # fmt: skip
    head = (
        "blur", "CNR", "rows", "width_min - 20", "width_max - 20", "harmonic - 20", "mean - 20", "lwr", "lwr raw",
        "min in 1.96 u_noise %", "not read %",
    )  # fmt: skip
    table("A straight line 20 wide", head, rows)


# --- 7: defects ------------------------------------------------------------------------------------------------------

DEFECTS: dict[str, list[dict[str, float]]] = {
    "open": [{"size": s} for s in (2, 4, 8, 20, 60)],
    "bridge": [{"size": s, "depth": s / 4} for s in (2, 4, 8, 20, 60)],
    "neck": [{"size": 20.0, "depth": d} for d in (3, 5, 8, 12, 20, 28)] + [{"size": 80.0, "depth": 10.0}],
    "bulge": [{"size": 20.0, "depth": d} for d in (3, 5, 8, 12, 20, 28)] + [{"size": 80.0, "depth": 10.0}],
    "void": [{"size": s} for s in (2, 3, 5, 8, 12, 18)],
    "satellite": [{"size": s, "offset": 30.0} for s in (2, 3, 5, 8, 12, 18)]
    + [{"size": 10.0, "offset": 19.0}, {"size": 10.0, "offset": 22.0}],
}


def defect_task(task: Task) -> tuple[Any, ...]:
    """Look for one defect in a rough scene of three lines 30 wide with spaces of 30."""
    event, number, blur, cnr, tilt, _ = task
    rng = generator(task)
    keys = DEFECTS[event][number]
    lines = tuple(Line(offset=o, width=30.0, edge_sd=0.6, correlation_length=15.0) for o in (-60.0, 0.0, 60.0))
    at = float(rng.uniform(-150, 150))
    defect = Defect(event=event, line=1, at=at, side="right", **keys)
    shape = (500, 240 + int(500 * math.tan(math.radians(tilt))))
    scene = Scene(shape=shape, lines=lines, defects=(defect,), blur=blur, tilt_deg=tilt)
    try:
        image, truth = render(scene, rng)
    except ValueError:
        return "not drawn", 0, math.nan, math.nan, math.nan, math.nan
    measured = measure(camera.white_noise(image, CONTRAST / cnr, rng))
    if measured is None or len({s.item for s in measured.shapes if s.role == "edge"}) != 3:
        return "lines wrong", 0, math.nan, math.nan, math.nan, math.nan
    true = truth.defects[0]
    near = sorted(
        (e for e in measured.events if math.hypot(e.x_px - true.x, e.y_px - true.y) < 15 + defect.size / 2),
        key=lambda e: math.hypot(e.x_px - true.x, e.y_px - true.y),
    )
    # A drop in a space belongs to both neighbours; one that touches its line is a bulge as well.
    names = ("satellite", "bulge") if event == "satellite" else (event,)
    named = [e for e in near if e.event in names and true.item.split("..")[0] in e.item.split("..")]
    outcome = "found" if named else f"as {near[0].event} {near[0].item}" if near else "missed"
    width = readings(measured)["L2", "width_mean"].value - truth.lines[1].statistics().width_mean
    extra = len(measured.events) - min(len(near), 1)
    if not named:
        return outcome, extra, math.nan, math.nan, math.nan, width
    best = named[0]
    away = math.hypot(best.x_px - true.x, best.y_px - true.y)
    return outcome, extra, away, best.size - true.size, best.area / true.area, width


def defects_table(pool: ProcessPoolExecutor, *, quick: bool) -> None:
    """Defects found, and invented."""
    tasks = [
        (event, number, blur, cnr, tilt, s)
        for event, sizes in DEFECTS.items() for number in range(len(sizes))
        for blur, cnr, tilt in ((1.3, 30.0, 0.0), (1.3, 30.0, 20.0), (2.0, 10.0, 0.0))
        for s in range(5 if quick else 20)
    ]  # fmt: skip
    rows = []
    for key, parts in grouped(tasks, pool.map(defect_task, tasks, chunksize=4), 5).items():
        outcomes = Counter(p[0] for p in parts)
        found = outcomes.pop("found", 0)
        missed = outcomes.pop("missed", 0)
        size = DEFECTS[key[0]][key[1]]
        rows.append((
            key[0], ", ".join(f"{k} {v:g}" for k, v in size.items()), *(f"{k:g}" for k in key[2:]), found, missed,
            ", ".join(f"{k}: {n}" for k, n in outcomes.most_common()), sum(p[1] for p in parts),
            *(f"{np.nanmedian([p[i] for p in parts]):.2f}" if found else "-" for i in (2, 3, 4)),
            plus_minus([p[5] for p in parts if not math.isnan(p[5])], 3),
        ))  # fmt: skip
    head = (
        "defect", "size", "blur", "CNR", "tilt", "found", "missed", "misnamed", "others", "median distance",
        "size - true", "area / true", "width_mean - clean piece",
    )  # fmt: skip
    table("Defects on the middle one of three rough lines, 30 wide, spaces 30", head, rows)


def clean_task(task: Task) -> tuple[int, str, int]:
    """Events invented in a clean scene."""
    sd, xi, hurst, blur, cnr, tilt, _ = task
    rng = generator(task)
    process = {"edge_sd": sd, "correlation_length": xi, "exponent": hurst}
    lines = tuple(Line(offset=o, width=30.0, **process) for o in (-60.0, 0.0, 60.0))
    shape = (800, 240 + int(800 * math.tan(math.radians(tilt))))
    image, _ = render(Scene(shape=shape, lines=lines, blur=blur, tilt_deg=tilt), rng)
    measured = measure(camera.white_noise(image, CONTRAST / cnr, rng))
    if measured is None:
        return 0, "nothing", 0
    lines_found = len({s.item for s in measured.shapes if s.role == "edge"})
    kinds = ";".join(e.event for e in measured.events)
    return len(measured.events), kinds, lines_found


def clean_table(pool: ProcessPoolExecutor, *, quick: bool) -> None:
    """Events in clean scenes."""
    cells = [
        (sd, xi, h, b, c, t)
        for sd, xi, h in (
            (0.3, 15.0, 0.5), (1.0, 15.0, 0.5), (2.0, 15.0, 0.5), (1.0, 5.0, 0.3), (2.0, 60.0, 0.75), (3.0, 60.0, 0.75)
        )
        for b, c, t in ((1.3, 50.0, 0.0), (1.3, 5.0, 0.0), (4.0, 10.0, 0.0), (1.3, 50.0, 25.0))
    ]  # fmt: skip
    tasks = [(*c, s) for c in cells for s in range(8 if quick else 34)]
    rows = []
    for key, parts in grouped(tasks, pool.map(clean_task, tasks, chunksize=4), 6).items():
        kinds = Counter(k for p in parts for k in p[1].split(";") if k)
        wrong = sum(p[2] != 3 for p in parts)
        rows.append((
            *(f"{k:g}" for k in key), f"{100 * sum(p[0] for p in parts) / len(parts):.0f}",
            ", ".join(f"{k} {n}" for k, n in kinds.items()), wrong, len(parts),
        ))  # fmt: skip
    head = (
        "edge sd",
        "xi",
        "H",
        "blur",
        "CNR",
        "tilt",
        "events in 100 scenes",
        "kinds",
        "scenes of wrong count",
        "scenes",
    )
    table("Events invented in clean scenes of three lines 30 wide, 800 rows", head, rows)


# --- 8: beside a plain scikit-image script ---------------------------------------------------------------------------


def rival_task(task: Task) -> list[tuple[float, ...]]:
    """Width error, and roughness over truth, of this package and of the plain script, on the same picture."""
    blur, cnr, sd, _ = task
    rng = generator(task)
    lines = rough_lines(rng, 40.0, edge_sd=sd, correlation_length=20.0)
    image, truth = render(Scene(shape=(800, 240), lines=lines, blur=blur), rng)
    image = camera.to_codes(camera.white_noise(image, CONTRAST / cnr, rng), 8)
    found = readings(measure(image))
    rival = skimage_lines.measure(image)
    if found["all", "line_count"].value != 2:
        return []
    out = []
    for k, line in enumerate(truth.lines):
        true = line.statistics()
        own = found[f"L{k + 1}", "width_mean"].value, found[f"L{k + 1}", "lwr_3sigma"].value
        theirs = (rival[k].mean(), 3 * rival[k].std()) if len(rival) == 2 else (math.nan, math.nan)
        scale = 3 * true.width_sd if true.width_sd > 0 else math.nan
        out.append(
            (own[0] - true.width_mean, own[1] / scale, theirs[0] - true.width_mean, theirs[1] / scale, len(rival))
        )
    return out


def rival_table(pool: ProcessPoolExecutor, *, quick: bool) -> None:
    """Beside the plain script."""
    cells = list(itertools.product((0.8, 1.3, 2.0, 4.0), (5.0, 10.0, 50.0), (0.6,)))
    tasks = [(*c, s) for c in cells for s in range(6 if quick else 25)]
    rows = []
    for key, parts in grouped(tasks, pool.map(rival_task, tasks, chunksize=2), 3).items():
        values = np.array([x for p in parts for x in p])
        right = values[np.isfinite(values[:, 2])]
        rows.append((
            *(f"{k:g}" for k in key), plus_minus(values[:, 0]), f"{values[:, 0].std():.4f}",
            plus_minus(values[:, 1], 3),
            plus_minus(right[:, 2]), f"{right[:, 2].std():.4f}" if len(right) else "-", plus_minus(right[:, 3], 3),
            share(len(values) - len(right), len(values)),
        ))  # fmt: skip
    head = (
        "blur", "CNR", "edge sd", "width bias", "its sd", "lwr / true", "script: width bias", "its sd", "lwr / true",
        "wrong count %",
    )  # fmt: skip
    table("Beside a plain scikit-image script on the same 8-bit picture (error to the piece's own width)", head, rows)


TABLES = {
    "edges": edges_table, "narrow": narrow_table, "roughness": roughness_table, "coverage": coverage_table,
    "pictures": pictures_table, "straight": straight_table, "defects": defects_table, "clean": clean_table,
    "rival": rival_table,
}  # fmt: skip


def _nice() -> None:
    os.nice(10)
    cv2.setNumThreads(1)


def main() -> None:
    """Run the tables asked for."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="fewer scenes")
    parser.add_argument("--only", nargs="+", choices=TABLES, default=list(TABLES), help="tables to run")
    parser.add_argument("--workers", type=int, default=2)
    chosen = parser.parse_args()
    os.environ |= dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"), "1")
    with ProcessPoolExecutor(chosen.workers, mp_context=get_context("spawn"), initializer=_nice) as pool:
        for name in chosen.only:
            TABLES[name](pool, quick=chosen.quick)


if __name__ == "__main__":
    main()
