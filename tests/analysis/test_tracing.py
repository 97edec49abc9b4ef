"""Lines traced row by row: truth from invented scenes whose edges are known."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

from printmetrics.analysis.edges import position_bound
from printmetrics.analysis.finding import find_direction, find_lines
from printmetrics.analysis.tracing import Trace, trace_lines
from printmetrics.synth import camera
from printmetrics.synth.scene import Line, Scene, Truth, render

if TYPE_CHECKING:
    from numpy.typing import NDArray


def traced(scene: Scene, cnr: float = 50.0) -> tuple[list[Trace], Truth, NDArray[np.float32]]:
    rng = np.random.default_rng(3)
    image, truth = render(scene, rng)
    pixels = camera.white_noise(image, abs(scene.ink - scene.substrate) / cnr, rng).astype(np.float32)
    lines = find_lines(pixels, find_direction(pixels, vertical=True).slope, bright=scene.ink > scene.substrate)
    traces = trace_lines(pixels, lines)
    assert all(trace is not None for trace in traces)
    return [trace for trace in traces if trace is not None], truth, pixels


def lines_at(*offsets: float, width: float = 20.0, **scene: float) -> Scene:
    lines = tuple(Line(offset=offset, width=width) for offset in offsets)
    return Scene(shape=(300, 200), lines=lines, **({"blur": 1.3} | scene))


def true_edges(truth: Truth, number: int, rows: int) -> NDArray[np.float64]:
    """Columns at which an edge crosses the middle of each row, blur along the line left out of account."""
    edges = []
    for side in ("left", "right"):
        x, y = truth.edge_points(number, side).T
        edges.append(np.interp(np.arange(rows), y, x))
    return np.array(edges)


@pytest.mark.parametrize("tilt", [0.0, 8.0])
@pytest.mark.parametrize("levels", [(50.0, 200.0), (200.0, 50.0)])
def test_each_row_reaches_the_bound(tilt: float, levels: tuple[float, float]) -> None:
    scene = lines_at(-40.0, 40.0, tilt_deg=tilt, substrate=levels[0], ink=levels[1])
    traces, truth, _ = traced(scene)
    across = np.cos(np.radians(tilt))
    for k, trace in enumerate(traces):
        error = (trace.edges - true_edges(truth, k, 300))[:, 5:-5]
        bound = position_bound(np.hypot(1.3, 1 / np.sqrt(12)) / across, 1.0, 1 / 50)
        assert np.isfinite(error).mean() > 0.98
        assert np.nanstd(error, axis=1) == pytest.approx(trace.u_row, rel=0.15)  # sd of 290: 4 %
        assert (np.nanstd(error, axis=1) < 1.1 * 1.1 * bound).all()  # 1.1 for 290 rows' own chance
        assert (np.abs(np.nanmean(error, axis=1)) < 4 * bound / np.sqrt(290)).all()


def test_trace_tells_levels_noise_and_blur() -> None:
    (trace,), _, _ = traced(lines_at(0.0))
    assert (trace.bare, trace.ink) == pytest.approx((50, 200), abs=0.5)
    assert trace.contrast == pytest.approx(150, abs=0.7)
    assert trace.noise == pytest.approx(3.0, rel=0.06)
    assert trace.blur == pytest.approx(np.hypot(1.3, 1 / np.sqrt(12)), rel=0.03)
    assert trace.width == pytest.approx(20.0, abs=0.03)
    assert trace.way.all()


# Truth: a space of 4 blurs between neighbours is the least promised; each one's light reaches the other.
@pytest.mark.parametrize(("width", "space"), [(20.0, 5.4), (8.0, 5.4), (20.0, 12.0)])
def test_close_neighbours_do_not_pull_each_other(width: float, space: float) -> None:
    pitch = width + space
    traces, _, _ = traced(lines_at(-pitch, 0.0, pitch, width=width))
    assert len(traces) == 3
    for trace in traces:
        u = np.sqrt(np.array([-1, 1]) @ trace.covariance @ np.array([-1, 1]))
        assert np.nanmean(trace.edges[1] - trace.edges[0]) == pytest.approx(width, abs=4 * u)
        assert u < 0.02


def test_narrow_line_takes_its_blur_from_a_wide_one() -> None:
    scene = Scene(shape=(300, 200), lines=(Line(offset=-50.0, width=30.0), Line(offset=20.0, width=4.5)), blur=1.3)
    traces, _, _ = traced(scene)
    narrow = traces[1]
    assert narrow.width == pytest.approx(4.5, abs=0.03)
    assert narrow.blur == pytest.approx(traces[0].blur.mean(), rel=1e-6)


def test_very_rough_edges_are_followed() -> None:
    rough = Line(offset=0.0, width=40.0, edge_sd=4.0, correlation_length=25.0, exponent=0.8)
    (trace,), truth, _ = traced(Scene(shape=(300, 200), lines=(rough,), blur=1.3))
    error = trace.edges - true_edges(truth, 0, 300)
    assert np.isfinite(error).mean() > 0.9
    assert np.nanmedian(np.abs(error)) < 0.15
    assert np.nanstd(true_edges(truth, 0, 300)[0]) > 2.0


def test_line_that_leaves_by_the_side_is_known_to() -> None:
    traces, _, _ = traced(lines_at(60.0, tilt_deg=20.0))
    assert not traces[0].way.all()
    assert traces[0].way.any()


def test_picture_is_not_written_to() -> None:
    image = render(lines_at(0.0), np.random.default_rng(1))[0].astype(np.float32)
    image.flags.writeable = False
    lines = find_lines(image, 0.0, bright=True)
    assert trace_lines(image, lines)[0] is not None
