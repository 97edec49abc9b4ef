"""How fast the measurement of lines is: one thread, one process, beside decoding the same picture and a plain script.

Run on request: ``python tests/benchmarks/speed_benchmark.py [runs]``. The runs alternate, so that a busy machine slows
all alike.
"""

# ruff: noqa: PLC0415  (threads are set before anything heavy is imported; decoding alone needs none of it)

from __future__ import annotations

import os

os.environ |= dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"), "1")

import subprocess
import sys
import tempfile
import time
from functools import cache
from pathlib import Path
from typing import Any

import cv2
import numpy as np

SHAPE = (4000, 3000)
LINES = 12
RECIPE = """\
schema = 1
name = "speed"
[scale]
um_per_px = 0.5
u_um_per_px = 0.0005
[[feature]]
name = "bus"
kind = "lines"
ink = "bright"
"""


def write_picture(path: Path, *, rows: int = SHAPE[0], compression: int | None = None) -> None:
    """Render 12 rough lines, 8 bit, CNR 50; a writer that compresses harder makes a picture that decodes slower."""
    from printmetrics.synth import Line, Scene, camera, render

    rng = np.random.default_rng(5)
    pitch = SHAPE[1] / LINES
    lines = tuple(
        Line(offset=(k - (LINES - 1) / 2) * pitch, width=60.0, edge_sd=1.0, correlation_length=30.0)
        for k in range(LINES)
    )
    image, _ = render(Scene(shape=(rows, SHAPE[1]), lines=lines, blur=1.5), rng)
    options = [] if compression is None else [cv2.IMWRITE_PNG_COMPRESSION, compression]
    cv2.imwrite(str(path), camera.to_codes(camera.white_noise(image, 3.0, rng), 8), options)


@cache
def loaded(recipe_path: Path) -> Any:  # noqa: ANN401  (its type is imported late)
    """Read the recipe once, as a worker does."""
    from printmetrics.recipe import load_recipe

    return load_recipe(recipe_path)


def measure(path: Path, recipe_path: Path) -> int:
    """Read and inspect the picture; return the number of rows of the table."""
    from printmetrics.inspect import inspect_picture
    from printmetrics.io.pictures import Found, read_picture

    return len(inspect_picture(read_picture(Found(path, path.name)), loaded(recipe_path)).rows)


def script(path: Path) -> int:
    """Do the job plainly; return the number of lines."""
    sys.path.insert(0, str(Path(__file__).parent))
    import skimage_lines

    return len(skimage_lines.measure(cv2.imread(str(path), cv2.IMREAD_GRAYSCALE)))


def peak_mb(what: str, *paths: Path) -> float:
    """Peak memory of a fresh process that does one thing, less that of one which only imports. [MB]"""
    code = f"""
import sys; sys.path.insert(0, {str(Path(__file__).parent)!r})
from pathlib import Path
import speed_benchmark as s, cv2
from printmetrics.inspect import inspect_picture
from printmetrics.recipe import load_recipe
import scipy.interpolate, scipy.signal, skimage.measure
cv2.setNumThreads(1)
small, path, recipe = map(Path, {[str(p) for p in paths]!r})
s.measure(small, recipe); s.script(small)
def peak():
    # Not ru_maxrss: that begins with the parent's.
    return int(Path("/proc/self/status").read_text().split("VmHWM:")[1].split()[0])
idle = peak()
{what}
print((peak() - idle) / 1024)
"""
    return float(subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True).stdout)


def table(compression: int | None, runs: int) -> None:
    """Print times and memory for pictures of one writer."""
    with tempfile.TemporaryDirectory() as folder:
        path, small, recipe = Path(folder, "p.png"), Path(folder, "small.png"), Path(folder, "r.toml")
        write_picture(path, compression=compression)
        write_picture(small, rows=300)
        recipe.write_text(RECIPE)
        data = np.frombuffer(path.read_bytes(), np.uint8)
        jobs = {
            "decoding alone (cv2.imdecode)": lambda: cv2.imdecode(data, cv2.IMREAD_UNCHANGED).size,
            "read_picture + inspect_picture": lambda: measure(path, recipe),
            "plain scikit-image script": lambda: script(path),
        }
        times: dict[str, list[float]] = {name: [] for name in jobs}
        for run in range(runs + 1):
            for name, job in jobs.items():
                begin = time.perf_counter()
                job()
                if run:  # the first one warms up
                    times[name].append(time.perf_counter() - begin)
        decode = np.median(times["decoding alone (cv2.imdecode)"])
        writer = "as OpenCV writes it" if compression is None else f"compression {compression}"
        print(f"\n{SHAPE[1]} x {SHAPE[0]} px, {LINES} lines, PNG of {data.size / 1e6:.1f} MB {writer}, {runs} runs\n")
        print("| job | median s | least s | over decoding | peak memory over the picture |\n|---|---|---|---|---|")
        whats = ("s.cv2.imread(str(path), -1)", "s.measure(path, recipe)", "s.script(path)")
        for (name, spent), what in zip(times.items(), whats, strict=True):
            over = peak_mb(what, small, path, recipe) / (SHAPE[0] * SHAPE[1] / 2**20)
            median = np.median(spent)
            print(f"| {name} | {median:.3f} | {min(spent):.3f} | {median / decode:.2f} | {over:.1f} |", flush=True)


def main() -> None:
    """Print a table for each of two PNG writers."""
    cv2.setNumThreads(1)
    for compression in (None, 6):
        table(compression, int(sys.argv[1]) if len(sys.argv) > 1 else 7)


if __name__ == "__main__":
    main()
