"""The scale refuses what cannot be one, and turns pixels into lengths and back."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from printmetrics.errors import ScaleError
from printmetrics.scale import Scale

BAD = [0.0, -0.5, math.nan, math.inf]


@pytest.mark.parametrize("axis", ["x", "y"])
@pytest.mark.parametrize("value", BAD)
def test_a_scale_that_is_not_positive_is_refused_with_the_remedy(axis: str, value: float) -> None:
    with pytest.raises(
        ScaleError, match=rf"um_per_px \({axis}\) must be a positive number, got .*; measure it on a ruler"
    ):
        Scale(**{"x": 0.5, "y": 0.5, "u_relative": 0.0, axis: value})


@pytest.mark.parametrize("u", [-1e-9, math.nan, math.inf])
def test_an_impossible_uncertainty_is_refused(u: float) -> None:
    with pytest.raises(ScaleError, match="standard uncertainty must be zero or more"):
        Scale(x=0.5, y=0.5, u_relative=u)


def test_scale_and_uncertainty_have_no_defaults() -> None:
    with pytest.raises(TypeError, match="u_relative"):
        Scale(x=0.5, y=0.5)


def test_an_unknown_scale_leaves_pixels_as_they_are() -> None:
    scale = Scale.pixels()
    assert (scale.x, scale.y, scale.u_relative, scale.unit) == (1.0, 1.0, 0.0, "{px}")


# Truth: a circle of one pixel area keeps its area under the geometric mean.
def test_the_mean_keeps_areas() -> None:
    assert Scale(x=0.5, y=0.125, u_relative=0.0).mean == 0.25


def test_each_axis_has_its_own_scale() -> None:
    lengths = Scale(x=0.5, y=0.25, u_relative=0.0).to_length([[2, 4], [0, 0]])
    np.testing.assert_array_equal(lengths, [[1.0, 1.0], [0.0, 0.0]])


@given(x=st.floats(1e-3, 1e3), y=st.floats(1e-3, 1e3), point=st.tuples(st.floats(-1e4, 1e4), st.floats(-1e4, 1e4)))
def test_there_and_back_is_where_one_was(x: float, y: float, point: tuple[float, float]) -> None:
    scale = Scale(x=x, y=y, u_relative=0.0)
    np.testing.assert_allclose(scale.to_px(scale.to_length(point)), point, rtol=1e-12, atol=1e-300)
