"""Images whose MTF is known: edges, discs and wires through kernels given by their MTF.

Everything is a transform of the MTF evaluated at the pixel centres, so nothing is interpolated,
rasterised or convolved on a grid:

    edge    E(d) = 1/2 + ∫ M(f) sin(2πfd) / (πf) df            (0 to infinity)
    disc    D(r) = 2πR ∫ M(f) J1(2πRf) J0(2πfr) df             (Hankel transform)
    wire    the disc of the wire's radius
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import numpy as np
from scipy import fft, integrate, interpolate, optimize, special

__all__ = [
    "EDGE",
    "GAUSS",
    "HANN",
    "KERNELS",
    "Kernel",
    "bars",
    "disc_image",
    "edge_image",
    "noise",
]


@dataclass(frozen=True)
class Kernel:
    """A rotationally symmetric kernel by its MTF; `limit` is where it has died out, in mm⁻¹."""

    name: str
    mtf: Callable[[np.ndarray], np.ndarray]
    limit: float

    def level(self, value: float) -> float:
        """The frequency at which the MTF falls through a value, by root finding."""
        grid = np.linspace(0, self.limit, 4001)
        above = np.flatnonzero(self.mtf(grid) >= value)[-1]
        return float(
            optimize.brentq(lambda f: float(self.mtf(f)) - value, grid[above], grid[above + 1])
        )

    def scaled(self, factor: float) -> Kernel:
        """The same kernel with all its frequencies multiplied."""
        return Kernel(self.name, lambda f: self.mtf(np.asarray(f) / factor), self.limit * factor)


def _gauss(f):
    return np.exp(-2 * (np.pi * 0.6 * np.asarray(f, float)) ** 2)


def _hann(f, cutoff=0.8):
    f = np.asarray(f, float)
    return np.where(f < cutoff, 0.5 + 0.5 * np.cos(np.pi * np.minimum(f / cutoff, 1)), 0.0)


def _edge(f):
    f = np.asarray(f, float)
    return _hann(f, 1.0) * (1 + 6.0 * f**2)


#: f50 = 0.187391 / 0.6 mm
GAUSS = Kernel("gauss", _gauss, 1.5)
#: a raised cosine that ends at 0.8 mm⁻¹; f50 = 0.4 mm⁻¹
HANN = Kernel("hann", _hann, 0.8)
#: enhances edges: its MTF rises to about 1.2 and its edge overshoots
EDGE = Kernel("edge", _edge, 1.0)
KERNELS = (GAUSS, HANN, EDGE)


@cache
def _nodes(limit: float, count: int) -> tuple[np.ndarray, np.ndarray]:
    """Gauss-Legendre nodes and weights, in panels, on 0 to limit."""
    x, w = np.polynomial.legendre.leggauss(16)
    panels = np.linspace(0, limit, count // 16 + 1)
    half = np.diff(panels)[:, None] / 2
    return (panels[:-1, None] + half * (x + 1)).ravel(), (half * w).ravel()


def edge_response(kernel: Kernel, d: np.ndarray) -> np.ndarray:
    """E(d), from 0 to 1, by quadrature on a fine table and a cubic spline through it."""
    reach = float(np.abs(d).max()) + 0.1
    f, w = _nodes(kernel.limit, 16 * math.ceil(4 + reach * kernel.limit))
    table = np.arange(0, reach + 0.05, 0.01 / kernel.limit)
    amplitude = w * kernel.mtf(f) / (np.pi * f)
    values = np.concatenate(
        [np.sin(2 * np.pi * np.outer(part, f)) @ amplitude for part in np.array_split(table, 8)]
    )
    spline = interpolate.CubicSpline(table, values)
    return 0.5 + np.sign(d) * spline(np.abs(d))


def edge_image(
    kernel: Kernel,
    *,
    shape=(64, 64),
    spacing=(0.5, 0.5),
    angle=4.0,
    shift=0.0,
    contrast=100.0,
    low=0.0,
) -> np.ndarray:
    """A straight edge whose line makes `angle` degrees with the rows' normal."""
    y = (np.arange(shape[0]) - (shape[0] - 1) / 2) * spacing[0]
    x = (np.arange(shape[1]) - (shape[1] - 1) / 2) * spacing[1]
    a = math.radians(angle)
    d = math.cos(a) * x[None, :] + math.sin(a) * y[:, None] - shift
    return low + contrast * edge_response(kernel, d)


def disc_profile(kernel: Kernel, radius: float, r: np.ndarray) -> np.ndarray:
    """The blurred disc of height 1 at distances r from its centre."""
    reach = float(r.max()) + radius
    f, w = _nodes(kernel.limit, 16 * math.ceil(4 + reach * kernel.limit))
    amplitude = 2 * np.pi * radius * w * kernel.mtf(f) * special.j1(2 * np.pi * radius * f)
    table = np.arange(0, float(r.max()) + 0.05, 0.01 / kernel.limit)
    values = np.concatenate(
        [special.j0(2 * np.pi * np.outer(part, f)) @ amplitude for part in np.array_split(table, 8)]
    )
    return interpolate.CubicSpline(table, values)(r)


def disc_image(
    kernel: Kernel,
    radius: float,
    *,
    shape=(96, 96),
    spacing=(0.5, 0.5),
    center=(0.11, -0.07),
    contrast=100.0,
    low=0.0,
) -> np.ndarray:
    """A disc; `center` is its offset (y, x) in mm from the middle of the image."""
    y = (np.arange(shape[0]) - (shape[0] - 1) / 2) * spacing[0] - center[0]
    x = (np.arange(shape[1]) - (shape[1] - 1) / 2) * spacing[1] - center[1]
    return low + contrast * disc_profile(kernel, radius, np.hypot(y[:, None], x[None, :]))


def bars(
    kernel, frequency, *, angle=8.0, shape=(80, 120), spacing=(0.25, 0.25), phase=0.3, height=200.0
):
    """Square bars from -height/2 to height/2: 4/π Σ sin(2πkfu)/k over odd k, through the MTF."""
    y, x = np.mgrid[: shape[0], : shape[1]].astype(float)
    turn = np.radians(angle)
    u = np.cos(turn) * x * spacing[1] + np.sin(turn) * y * spacing[0]
    total = np.zeros(shape)
    for k in range(1, 200, 2):
        if k * frequency > kernel.limit:
            break
        gain = float(kernel.mtf(k * frequency))
        total += gain * np.sin(2 * np.pi * (k * frequency * u + k * phase)) / k
    return height / 2 * 4 / np.pi * total


def noise(rng, shape, spacing, sd: float, kernel: Kernel | None = None) -> np.ndarray:
    """White noise, or with a kernel the noise of filtered backprojection: S ∝ f M(f)².

    The coloured field is cut from a periodic one twice as large, so opposite sides are unrelated.
    """
    if kernel is None:
        return rng.normal(0, sd, shape)
    big = tuple(2 * n for n in shape)
    fy, fx = fft.fftfreq(big[0], spacing[0]), fft.fftfreq(big[1], spacing[1])
    f = np.hypot(fy[:, None], fx[None, :])
    gain = np.sqrt(f) * kernel.mtf(f)
    gain *= math.sqrt(gain.size / np.sum(gain**2))
    field = fft.ifft2(gain * fft.fft2(rng.normal(0, sd, big))).real
    return field[: shape[0], : shape[1]]


def check_edge_response() -> float:
    """The largest difference between the table and adaptive quadrature (used by a test)."""
    worst = 0.0
    for kernel in KERNELS:
        for d in (-2.3, -0.31, 0.7, 4.0):
            direct, _ = integrate.quad(
                lambda f, d=d, k=kernel: float(k.mtf(f)) * 2 * d * np.sinc(2 * f * d),
                0,
                kernel.limit,
                limit=200,
            )
            worst = max(worst, abs(0.5 + direct - float(edge_response(kernel, np.array([d]))[0])))
    return worst
