"""Mean, scatter and course of a line against certified values of the NIST Statistical Reference Datasets."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pytest

from printmetrics.measure.lines.geometry import slope_of, straighten
from printmetrics.measure.lines.line import _sd

if TYPE_CHECKING:
    from numpy.typing import NDArray

DATA = Path(__file__).parents[2] / "data" / "nist_strd"


def column(name: str, header: int) -> NDArray[np.float64]:
    return np.loadtxt(DATA / name, skiprows=header)


# Source: NIST StRD, univariate, NumAcc1 to NumAcc4: certified mean and standard deviation stand in each file (exact).
# NumAcc3 and NumAcc4 differ in the eighth and ninth digit only, so double precision leaves fewer digits of the sd.
@pytest.mark.parametrize(
    ("name", "mean", "sd", "digits"),
    [
        ("NUMACC1.DAT", 10000002.0, 1.0, 1e-14),
        ("NUMACC2.DAT", 1.2, 0.1, 1e-13),
        ("NUMACC3.DAT", 1000000.2, 0.1, 1e-8),
        ("NUMACC4.DAT", 10000000.2, 0.1, 1e-7),
    ],
)
def test_mean_and_sd_match_strd_univariate(name: str, mean: float, sd: float, digits: float) -> None:
    values = column(name, 60)
    rows = np.arange(len(values), dtype=np.float64)
    points = np.stack([np.column_stack([rows, np.zeros_like(rows)]), np.column_stack([rows, values])])
    width = straighten(points, 0.0, 1.0).width
    assert width.mean() == pytest.approx(mean, rel=1e-14)
    assert _sd(width, line_removed=False) == pytest.approx(sd, rel=digits)


# Source: NIST StRD, linear regression, Norris: B1 = 1.00211681802045, residual sd 0.884796396144373 (certified).
def test_course_and_scatter_about_it_match_strd_norris() -> None:
    y, x = column("Norris.dat", 60).T
    points = np.stack([np.column_stack([x, y])] * 2)
    slope = slope_of(points)
    assert slope == pytest.approx(1.00211681802045, rel=1e-13)
    rest = y - slope * x
    assert np.sqrt(((rest - rest.mean()) ** 2).sum() / (len(x) - 2)) == pytest.approx(0.884796396144373, rel=1e-11)


# Independent code: LAPACK's least squares on the same column, rows as abscissa.
def test_scatter_about_the_best_line_matches_least_squares() -> None:
    y = column("Norris.dat", 60)[:, 0]
    rows = np.arange(len(y), dtype=np.float64)
    _, squares, _, _ = np.linalg.lstsq(np.column_stack([np.ones_like(rows), rows]), y, rcond=None)
    assert _sd(y, line_removed=True) == pytest.approx(np.sqrt(squares[0] / (len(y) - 2)), rel=1e-12)
