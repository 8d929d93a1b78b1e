"""Slices with blocks, rods and wires whose Gaussian blur is exact, so that f50 is known."""

from __future__ import annotations

import math

import numpy as np
from scipy.special import ndtr
from truth_images import GAUSS, disc_profile

__all__ = ["F50", "SIGMA", "add_block", "add_rod", "add_wire", "grid", "water"]

#: The blur's SD in mm, that of ``truth_images.GAUSS``, and its f50 (methods: 0.187391 / SD).
SIGMA = 0.6
F50 = 0.187391 / SIGMA


def water(shape=(160, 160), noise=0.0, seed=1) -> np.ndarray:
    """A uniform slice of 0 HU with white noise."""
    return np.random.default_rng(seed).normal(0.0, noise, shape) if noise else np.zeros(shape)


def grid(image, spacing=(0.5, 0.5)) -> tuple[np.ndarray, np.ndarray]:
    """The y and x of pixel centres in mm from the first one."""
    y, x = np.mgrid[: image.shape[0], : image.shape[1]]
    return y * spacing[0], x * spacing[1]


def add_block(image, center, side, lean, contrast, spacing=(0.5, 0.5)) -> None:
    """Add a square block; a Gaussian blurs each pair of its edges by itself."""
    y, x = grid(image, spacing)
    turn = math.radians(lean)
    u = math.cos(turn) * (x - center[1]) + math.sin(turn) * (y - center[0])
    v = math.cos(turn) * (y - center[0]) - math.sin(turn) * (x - center[1])
    half = side / 2
    inside = [ndtr((d + half) / SIGMA) - ndtr((d - half) / SIGMA) for d in (u, v)]
    image += contrast * inside[0] * inside[1]


def add_rod(image, center, radius, contrast, spacing=(0.5, 0.5)) -> None:
    """Add a rod by its exact Hankel transform."""
    y, x = grid(image, spacing)
    away = np.hypot(y - center[0], x - center[1])
    near = away < radius + 10 * SIGMA
    image[near] += contrast * disc_profile(GAUSS, radius, away[near])


def add_wire(image, center, peak, spacing=(0.5, 0.5)) -> None:
    """Add the spot of a wire without thickness."""
    y, x = grid(image, spacing)
    image += peak * np.exp(-((y - center[0]) ** 2 + (x - center[1]) ** 2) / (2 * SIGMA**2))
