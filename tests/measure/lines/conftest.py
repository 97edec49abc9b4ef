"""Invented pictures of printed lines, and what is read in them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest

from printmetrics.measure.lines import LinesOptions, measure_lines
from printmetrics.measure.sight import Sight
from printmetrics.scale import Scale
from printmetrics.synth import camera
from printmetrics.synth.scene import Line, Scene, Truth, render

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from printmetrics.flags import Flag
    from printmetrics.measure.readings import Event, Measured, Reading


@dataclass(frozen=True, slots=True, kw_only=True)
class Seen:
    """Readings of one picture, easy to look up."""

    measured: Measured

    @property
    def readings(self) -> dict[tuple[str, str], Reading]:
        return {(reading.item, reading.quantity): reading for reading in self.measured.readings}

    @property
    def events(self) -> list[Event]:
        return self.measured.events

    def reading(self, quantity: str, item: str = "L1") -> Reading:
        return self.readings[item, quantity]

    def value(self, quantity: str, item: str = "L1") -> float:
        value = self.readings[item, quantity].value
        assert value is not None
        return value

    def values(self, quantity: str) -> list[float]:
        return [r.value for r in self.measured.readings if r.quantity == quantity and r.value is not None]

    def flags(self, quantity: str = "width_mean", item: str = "L1") -> Flag:
        return self.readings[item, quantity].flags


def _take(scene: Scene, cnr: float = 50.0, seed: int = 1) -> tuple[NDArray[np.float32], Truth]:
    rng = np.random.default_rng(seed)
    image, truth = render(scene, rng)
    image = camera.white_noise(image, abs(scene.ink - scene.substrate) / cnr, rng)
    return image.astype(np.float32), truth


def _read(image: NDArray[Any], sight: dict[str, Any] | None = None, **options: Any) -> Seen:  # noqa: ANN401
    given = {"image": image, "saturated": None, "scale": Scale.pixels()} | (sight or {})
    recipe = LinesOptions(**({"name": "bus", "kind": "lines", "ink": "bright"} | options))
    return Seen(measured=measure_lines(Sight(**given), recipe))


def _lines(*offsets: float, shape: tuple[int, int] = (300, 200), width: float = 20.0, **more: Any) -> Scene:  # noqa: ANN401
    of_scene = {key: more.pop(key) for key in tuple(more) if key in Scene.__dataclass_fields__}
    lines = tuple(Line(offset=offset, width=width, **more) for offset in offsets)
    return Scene(shape=shape, lines=lines, **({"blur": 1.3} | of_scene))


@pytest.fixture(scope="session")
def take() -> Callable[..., tuple[NDArray[np.float32], Truth]]:
    """Take the picture of a scene: (scene, contrast-to-noise, seed) to (image, truth)."""
    return _take


@pytest.fixture(scope="session")
def read() -> Callable[..., Seen]:
    """Measure a picture: (image, what else is known of it, recipe keys) to readings."""
    return _read


@pytest.fixture(scope="session")
def lines() -> Callable[..., Scene]:
    """Make a scene of like lines from offsets, and keys of a line or a scene."""
    return _lines
