"""Small invented pictures of printed lines, and a recipe for them."""

from __future__ import annotations

from typing import TYPE_CHECKING

import cv2
import numpy as np
import pytest

from printmetrics.synth import camera
from printmetrics.synth.scene import Line, Scene, render

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import NDArray

RECIPE = """\
schema = 1
name = "two lines"
version = "1"
[scale]
um_per_px = 0.5
u_um_per_px = 0.0005
[[feature]]
name = "bus"
kind = "lines"
ink = "bright"
direction = "vertical"
count = 2
[feature.limits]
width_mean = { lower = 8.0, upper = 12.0 }
line_count = { lower = 2, upper = 2 }
"""


def two_lines(seed: int = 1, width_um: float = 10.0) -> NDArray[np.uint8]:
    """Return a picture of two lines, 240 x 160 px at 0.5 um per px."""
    rng = np.random.default_rng(seed)
    lines = tuple(
        Line(offset=x, width=width_um / 0.5, edge_sd=0.3, correlation_length=6.0, exponent=0.7) for x in (-35.0, 35.0)
    )
    image, _ = render(Scene(shape=(240, 160), lines=lines, substrate=60.0, ink=180.0, blur=1.3), rng)
    image = camera.expose(image, rng, electrons_per_count=50.0, read_noise=0.5)
    return camera.to_codes(image, 8).astype(np.uint8)


@pytest.fixture(scope="session")
def png() -> bytes:
    """Bytes of a PNG file of two lines."""
    return bytes(cv2.imencode(".png", two_lines())[1])


@pytest.fixture
def folder(tmp_path: Path, png: bytes) -> Path:
    """Return a folder with two pictures, beside the recipe ``recipe.toml``."""
    (tmp_path / "recipe.toml").write_text(RECIPE)
    pictures = tmp_path / "pictures"
    pictures.mkdir()
    (pictures / "a.png").write_bytes(png)
    (pictures / "b.png").write_bytes(bytes(cv2.imencode(".png", two_lines(2))[1]))
    return pictures
