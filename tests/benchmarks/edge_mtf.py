"""How well and how fast an edge's MTF is measured: the figures of docs/validation.md.

``python tests/benchmarks/edge_mtf.py bias`` gives the bias without noise over angles and pixel
sizes; ``noise [repeats]`` the scatter, bias and coverage in noise beside the Cramér-Rao bound;
``bound`` the bound with more of the shape unknown; ``speed`` times against plain numpy transforms
in the same run.

The bound is the Cramér-Rao bound of an edge whose shape is known but for its width (for the
Gaussian kernel: the Gaussian model), with level, step, position and angle free, in the very noise
that was drawn; relative to the frequency it is the same for f50 and f10. No unbiased estimate that
knows the shape scatters less; one that has to find the shape too cannot reach it.
"""

from __future__ import annotations

import sys
import time
from functools import cache
from pathlib import Path

import numpy as np
from scipy import linalg

sys.path.insert(0, str(Path(__file__).parents[1] / "physics"))
from truth_images import GAUSS, KERNELS, Kernel, edge_image, edge_response, noise

from ct_measure_plugin.physics.edge_mtf import edge_mtf
from ct_measure_plugin.physics.results import Quantity

SPACING = (0.5, 0.5)
METHODS = ("fitted", "conventional")
ANGLES = (1.5, 2, 3, 4, 6, 9, 14, 20, 27, 31, 36, 40, 43)
PIXELS = (0.3, 0.4, 0.5, 0.6, 0.7)


def levels(found) -> list[float]:
    """f50, its uncertainty, f10, its uncertainty; NaN for what was not measured."""
    row = []
    for name in ("f50", "f10"):
        q = getattr(found, name) if found else None
        row += [q.value, q.uncertainty] if isinstance(q, Quantity) else [np.nan, np.nan]
    return row


def bias() -> None:
    """The largest bias of f50 and f10 over angles and positions, kernel by pixel size."""
    print("largest |bias| in percent without noise: f50, f10 (of how many edges)")
    for kernel in KERNELS:
        for method in METHODS:
            cells = []
            for pixel in PIXELS:
                off = []
                for angle in ANGLES:
                    for shift in (0.0, 0.13):
                        size = 96 if angle < 2 else 64
                        image = edge_image(
                            kernel,
                            angle=angle,
                            spacing=(pixel, pixel),
                            shape=(size, size),
                            shift=shift,
                        )
                        row = levels(edge_mtf(image, spacing_mm=(pixel, pixel), method=method))
                        off.append((row[0] / kernel.level(0.5) - 1, row[2] / kernel.level(0.1) - 1))
                worst = 100 * np.nanmax(np.abs(off), axis=0)
                count = int(np.isfinite(np.array(off)[:, 1]).sum())
                cells.append(f"{pixel}: {worst[0]:.2f} {worst[1]:.2f} ({count})")
            print(f"  {kernel.name:6} {method:12} {'  '.join(cells)}", flush=True)


@cache
def covariance(kernel: Kernel | None, size: int) -> np.ndarray:
    """The pixels' covariance for noise of SD 1, from the spectrum that `noise` draws from."""
    if kernel is None:
        return np.eye(size * size)
    big = 2 * size
    f = np.fft.fftfreq(big, SPACING[0])
    radius = np.hypot(f[:, None], f[None, :])
    gain = radius * kernel.mtf(radius) ** 2
    auto = np.fft.ifft2(gain).real
    auto /= auto[0, 0]
    index = np.arange(size)
    lag = (index[:, None] - index[None, :]) % big
    return auto[lag[:, None, :, None], lag[None, :, None, :]].reshape(size * size, -1)


def bound(
    kernel: Kernel, colour: Kernel | None, cnr: float, size: int = 64, unknown: int = 1
) -> float:
    """The least relative scatter of f50 for an edge of known shape and unknown width.

    More unknown numbers are factors 1 + a_k f^(2k) of the MTF.
    """
    y = (np.arange(size) - (size - 1) / 2) * SPACING[0]
    turn = np.radians(4.0)
    d = (np.cos(turn) * y[None, :] + np.sin(turn) * y[:, None]).ravel()
    t = (np.cos(turn) * y[:, None] - np.sin(turn) * y[None, :]).ravel()
    edge = edge_response(kernel, d)
    line = (edge_response(kernel, d + 1e-3) - edge_response(kernel, d - 1e-3)) / 2e-3
    at, slope = kernel.level(0.5), 1e-4
    slope = float(kernel.mtf(at + slope) - kernel.mtf(at - slope)) / (2 * slope)
    columns, moves = [line * d], [-at * slope]  # of f50's MTF by each number
    for k in range(1, unknown):
        shaped = Kernel("", lambda f, k=k: kernel.mtf(f) * (f / at) ** (2 * k), kernel.limit)
        columns.append(edge_response(shaped, d) - 0.5)
        moves.append(0.5)
    columns = np.stack([*columns, np.ones_like(d), edge, line, line * t])
    cov = covariance(colour, size) + 1e-6 * np.eye(size * size)
    information = columns @ linalg.cho_solve(linalg.cho_factor(cov), columns.T)
    spread = np.linalg.inv(information)[:unknown, :unknown]
    gain = np.array(moves) / (at * slope)
    return float(np.sqrt(gain @ spread @ gain)) / cnr


def bounds() -> None:
    """The bound of f50 at a contrast to noise of 20 for one to three unknown numbers of shape.

    Not for the Gaussian kernel, of which f² times the MTF is the derivative by the width.
    """
    for kernel in KERNELS[1:]:
        for colour in (None, kernel):
            cells = [100 * bound(kernel, colour, 20.0, unknown=n) for n in (1, 2, 3)]
            print(kernel.name, "coloured" if colour else "white", np.round(cells, 2), flush=True)


def in_noise(repeats: int) -> None:
    """RMS errors, ratios, bias and coverage at two contrasts to noise."""
    print(f"{repeats} boxes of 64 × 64 pixels of 0.5 mm, 4°, a cell")
    print(
        "kernel noise CNR | RMS f50 fitted, conventional, ratio | f10 ditto | bias f50, f10 |"
        " 95 % intervals f50, f10 | bound f50 | measured f50, f10"
    )
    for kernel in KERNELS:
        for coloured in (False, True):
            colour = kernel if coloured else None
            least = bound(kernel, colour, 1.0)
            for cnr in (20.0, 10.0):
                cell(kernel, colour, cnr, repeats, least / cnr)


def cell(kernel: Kernel, colour: Kernel | None, cnr: float, repeats: int, least: float) -> None:
    """One line of the table."""
    rng = np.random.default_rng(2024)
    rows = {m: [] for m in METHODS}
    for _ in range(repeats):
        image = edge_image(kernel, shift=rng.uniform(-0.5, 0.5))
        image = image + noise(rng, image.shape, SPACING, 100 / cnr, colour)
        for method in METHODS:
            rows[method].append(levels(edge_mtf(image, spacing_mm=SPACING, method=method)))
    found = {m: np.array(r) for m, r in rows.items()}
    truth = np.array([kernel.level(0.5), kernel.level(0.1)])
    error = {m: 100 * (r[:, ::2] / truth - 1) for m, r in found.items()}
    both = np.isfinite(error["fitted"]) & np.isfinite(error["conventional"])
    rms = {m: np.sqrt([np.mean(e[both[:, i], i] ** 2) for i in (0, 1)]) for m, e in error.items()}
    ratio = rms["fitted"] / rms["conventional"]
    fit = found["fitted"]
    inside = np.abs(fit[:, ::2] - truth) < 1.96 * fit[:, 1::2]
    covered = [100 * inside[np.isfinite(fit[:, 2 * i]), i].mean() for i in (0, 1)]
    bias_of = np.nanmean(error["fitted"], axis=0)
    share = 100 * np.isfinite(fit[:, ::2]).mean(axis=0)
    print(
        f"{kernel.name:6} {'coloured' if colour else 'white':8} {cnr:3.0f} |"
        f" {rms['fitted'][0]:5.2f} {rms['conventional'][0]:5.2f} {ratio[0]:4.2f} |"
        f" {rms['fitted'][1]:5.2f} {rms['conventional'][1]:6.2f} {ratio[1]:4.2f} |"
        f" {bias_of[0]:+5.2f} {bias_of[1]:+5.2f} | {covered[0]:4.1f} {covered[1]:4.1f} |"
        f" {100 * least:5.2f} | {share[0]:3.0f} {share[1]:3.0f}",
        flush=True,
    )


def speed() -> None:
    """One box of 128 × 128, and 1,000 boxes of 64 × 64, as ratios to plain transforms."""
    rng = np.random.default_rng(1)
    for size, count in ((128, 200), (64, 1000)):
        images = [
            edge_image(GAUSS, shape=(size, size), shift=s) + rng.normal(0, 5, (size, size))
            for s in rng.uniform(-0.5, 0.5, 20)
        ]
        for method in METHODS:
            edge_mtf(images[0], spacing_mm=SPACING, method=method)
            taken, worked, plain = np.empty((3, count))
            for i in range(count):
                start = time.perf_counter()
                np.abs(np.fft.fft2(images[i % 20]))
                plain[i] = time.perf_counter() - start
                start, cpu = time.perf_counter(), time.process_time()
                edge_mtf(images[i % 20], spacing_mm=SPACING, method=method)
                taken[i] = time.perf_counter() - start
                worked[i] = time.process_time() - cpu
            print(
                f"{size} × {size} {method:12}: least {1e3 * taken.min():.1f} ms,"
                f" median {1e3 * np.median(taken):.1f} ms,"
                f" p95 {1e3 * np.percentile(taken, 95):.1f} ms (processor's own"
                f" {1e3 * np.percentile(worked, 95):.1f} ms); {count} boxes"
                f" {taken.sum() / plain.sum():.0f} × as long as {count} numpy transforms,"
                f" the quickest {taken.min() / plain.min():.0f} ×",
                flush=True,
            )


if __name__ == "__main__":
    task = sys.argv[1] if len(sys.argv) > 1 else "bias"
    if task == "noise":
        in_noise(int(sys.argv[2]) if len(sys.argv) > 2 else 400)
    else:
        {"bias": bias, "bound": bounds, "speed": speed}[task]()
