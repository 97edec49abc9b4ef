"""How well the fitted process tells the mean, the roughness and the noise of simulated edges.

Run on request: ``python tests/benchmarks/roughness_study.py [runs per case]``. The simulation shares only the
closed form of the spectrum with what it judges.
"""

from __future__ import annotations

import itertools
import sys
import time
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft
from scipy.stats import t as student

from printmetrics.analysis.process import bin_kernel, palasantzas_psd
from printmetrics.analysis.roughness import Record, amplitude_filter, fit_spectra, u_mean, unbiased_sd

if TYPE_CHECKING:
    from collections.abc import Iterable

    from numpy.typing import NDArray


def simulate(
    rng: np.random.Generator,
    runs: int,
    n: int,
    xi: float,
    hurst: float,
    *,
    blur: float = 0.0,
    sigma: float = 1.0,
    steps: int = 1,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return true and blurred records with `steps` samples a unit length, cut out of a longer periodic one.

    The power beyond the grid's Nyquist frequency is folded back where there is no blur, so the record is exact there;
    with blur that power is left out of the blurred record, where the blur has removed it.
    """
    size = fft.next_fast_len(int(n + 25 * xi) * steps, real=True)
    f = np.fft.rfftfreq(size, 1.0 / steps)
    folded = sum(palasantzas_psd(f + zone * steps, sigma, xi, hurst) for zone in range(-12, 13))
    wave = rng.standard_normal((runs, f.size)) + 1j * rng.standard_normal((runs, f.size))
    wave *= np.sqrt(folded * size * steps / 2.0)
    wave[:, 0] = wave[:, 0].real * np.sqrt(2.0)
    true = fft.irfft(wave, size)[:, : n * steps : steps]
    if blur == 0.0:
        return true, true
    seen = np.sqrt(palasantzas_psd(f, sigma, xi, hurst) / folded) * np.exp(-2.0 * (np.pi * blur * f) ** 2)
    return true, fft.irfft(wave * seen, size)[:, : n * steps : steps]


def coverage(runs: int, title: str, cases: Iterable[tuple[float, tuple[int, float], float, float]], seed: int) -> None:
    """Print how often mean +- t u covers the process mean."""
    rng = np.random.default_rng(seed)
    print(f"\nCoverage of the process mean by 95 % intervals, {title}, {runs} runs a case; median dof; u over true")
    print(f"{'H':>5} {'L/xi':>5} {'noise':>6} {'blur/xi':>7} {'cover %':>8} {'dof':>6} {'u/true':>7}")
    table = []
    for hurst, (ratio, xi), noise, blur in cases:
        n = int(ratio * xi)
        _, seen = simulate(rng, runs, n, xi, hurst, blur=blur * xi)
        seen = seen + noise * rng.standard_normal(seen.shape)
        found = []
        records = [Record(data=row, step=1.0, blur=blur * xi, noise_expected=noise) for row in seen]
        for row, process in zip(seen, fit_spectra(records), strict=True):
            u, dof = u_mean(process, n)
            u = np.hypot(u, process.noise / np.sqrt(n))
            found.append((abs(row.mean()) < student.ppf(0.975, dof) * u, dof, u))
        cover, dof, u = np.array(found).T
        true = np.sqrt(np.mean(seen.mean(axis=1) ** 2))
        table.append((hurst, ratio, noise, blur, cover.mean()))
        print(
            f"{hurst:5} {ratio:5} {noise:6} {blur:7} {100 * cover.mean():8.1f} "
            f"{np.median(dof):6.1f} {np.median(u) / true:7.2f}"
        )
    cells = np.array(table)
    for column, name in enumerate(("H", "L/xi", "noise", "blur/xi")):
        means = ((v, 100 * cells[cells[:, column] == v, 4].mean()) for v in np.unique(cells[:, column]))
        print(f"by {name}:", "  ".join(f"{v:g}: {mean:.1f}" for v, mean in means))
    print(f"pooled over {runs * len(cells)} runs: {100 * cells[:, 4].mean():.2f} %")


def straightened(row: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return a record without its best line."""
    place = np.arange(row.size)
    good = np.isfinite(row)
    return row - np.polyval(np.polyfit(place[good], row[good], 1), place)


def bias(runs: int, *, line: bool = False, missing: float = 0.0, n: int = 2000) -> None:
    """Print sd, noise and extremes over the truth."""
    rng = np.random.default_rng(7)
    kind = "Edge about its line" if line else "Width about its mean"
    print(f"\n{kind}, {100 * missing:g} % missing, {runs} runs a case")
    print("    H    xi  xi/b  noise | sd/true    +-  rms z raw/true noise/true | filter: sd/true  min-min  error/u")
    for hurst, (xi, blur), noise in itertools.product(
        (0.3, 0.5, 0.75, 1.0), ((20.0, 2.0), (10.0, 1.0), (20.0, 4.0)), (0.1, 0.3, 1.0)
    ):
        true, seen = simulate(rng, runs, n, xi, hurst, blur=blur, steps=4)
        seen = seen + noise * rng.standard_normal(seen.shape)
        reach = round(2.0 * blur)
        window = np.convolve(np.ones(reach), [0.5, 0.5]) / reach
        inner = slice(reach, -reach)
        found = []
        for full, row in zip(true, seen, strict=True):
            while np.isnan(row).mean() < missing:
                start = rng.integers(0, n - 30)
                row[start : start + rng.integers(5, 30)] = np.nan
            sharp = straightened(full) if line else full
            given = straightened(row) if line else row
            record = Record(data=given, step=1.0, blur=blur, noise_expected=noise, line_removed=line)
            process = fit_spectra([record])[0]
            rough = unbiased_sd(given, process)
            filtered, u = amplitude_filter(given, process, average_over=reach)
            local = np.convolve(sharp, window, "same")[inner]
            filtered = filtered[inner]
            local = np.where(np.isnan(filtered), np.nan, local)
            found.append(
                (
                    rough.sd / sharp.std(),
                    (rough.sd - sharp.std()) / rough.u_noise,
                    rough.raw / sharp.std(),
                    process.noise / noise,
                    np.nanstd(filtered) / np.nanstd(local),
                    np.nanmin(filtered) - np.nanmin(local),
                    np.nanstd(filtered - local) / u,
                )
            )
        found = np.array(found)
        sd, _, raw, floor, spread, least, error = found.mean(axis=0)
        z = np.sqrt(np.mean(found[:, 1] ** 2))
        print(
            f"{hurst:5} {xi:5} {xi / blur:5} {noise:6} | {sd:7.3f} {found[:, 0].std() / np.sqrt(runs):5.3f} {z:6.2f} "
            f"{raw:8.3f} {floor:10.3f} | {spread:15.3f} {least:8.3f} {error:8.2f}"
        )


def straight(runs: int, n: int = 3000) -> None:
    """Print what is left of a straight line with edge noise 1."""
    rng = np.random.default_rng(8)
    found = []
    rows = rng.standard_normal((runs, n))
    fits = fit_spectra([Record(data=row, step=1.0, blur=2.0, noise_expected=1.0) for row in rows])
    for row, process in zip(rows, fits, strict=True):
        filtered, _ = amplitude_filter(row, process, average_over=5.0)
        found.append(
            (process.sigma, process.resolved, unbiased_sd(row, process).sd, filtered.std(), u_mean(process, n)[0])
        )
    sigma, resolved, sd, spread, u = np.mean(found, axis=0)
    print(
        f"\nStraight line, noise 1, n {n}: fitted sigma {sigma:.3f}, called resolved {100 * resolved:.0f} %, "
        f"sd {sd:.3f}, sd after filter {spread:.3f}, u_mean {u:.4f} beside the noise's {1 / np.sqrt(n):.4f}"
    )


def speed(runs: int, n: int = 3000) -> None:
    """Print milliseconds a call."""
    rng = np.random.default_rng(9)
    print("\nMilliseconds a call")
    for xi, noise in ((30.0, 0.1), (30.0, 1.0), (3.0, 0.3), (150.0, 0.3)):
        _, seen = simulate(rng, runs, n, xi, 0.5, blur=2.0)
        seen = seen + noise * rng.standard_normal(seen.shape)
        records = [Record(data=row, step=1.0, blur=2.0, noise_expected=noise) for row in seen]
        fit_spectra(records[:1])
        begin = time.perf_counter()
        processes = fit_spectra(records)
        fitted = time.perf_counter()
        for row, process in zip(seen, processes, strict=True):
            unbiased_sd(row, process)
        freed = time.perf_counter()
        for row, process in zip(seen, processes, strict=True):
            amplitude_filter(row, process, average_over=5.0)
        done = time.perf_counter()
        each = 1e3 / runs * np.diff([begin, fitted, freed, done])
        print(f"n {n}, xi {xi}, noise {noise}: fit {each[0]:.2f}, sd {each[1]:.2f}, filter {each[2]:.2f}")
    begin = time.perf_counter()
    bin_kernel.__wrapped__(n)
    print(f"once for each number of samples: {1e3 * (time.perf_counter() - begin):.0f}")


if __name__ == "__main__":
    RUNS = int(sys.argv[1]) if len(sys.argv) > 1 else 30
    speed(RUNS)
    straight(RUNS)
    lengths = ((20, 40.0), (50, 30.0), (100, 20.0), (400, 7.5))
    coverage(RUNS, "the grid", itertools.product((0.3, 0.5, 0.75, 1.0), lengths, (0.05, 0.3, 1.0), (0.0, 0.1)), 20)
    lengths = ((30, 25.0), (150, 12.0))
    coverage(RUNS, "off the grid", itertools.product((0.4, 0.6, 0.9), lengths, (0.15, 0.6), (0.05,)), 21)
    bias(RUNS)
    bias(RUNS, line=True)
    bias(RUNS, missing=0.05)
