"""Covariances of blocks of pixels and of small tiles under a short list of noise spectra.

Blocks are means of full rectangles of pixels on a lattice: they keep the low frequencies, which
decide how far a region's mean can be trusted, in few numbers. Tiles are squares of single pixels:
they keep the shape of the spectrum above. What both have for covariances depends on nothing but
the pixel's proportions, so it is made once.
"""

from __future__ import annotations

import math
from functools import cache, lru_cache
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from scipy import fft

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = [
    "FLOOR",
    "REACH",
    "TILE",
    "Tiles",
    "block_correlation",
    "block_size",
    "log_prior",
    "pixel_correlation",
    "tile_forms",
]

#: Roll-off lengths s in pixels. A Gaussian filter of σ pixels has s = 2πσ, so level spectra
#: exp(-(s f)²) reach from noise white to the eye to a filter of 2.5 px. Ramps f exp(-(s f)³) end
#: where their peak is at 0.12 cycles per pixel: a longer one looks like a smoothed field to a
#: region smaller than its waves. Lifted ramps (s f + 0.25) exp(-(s f)³) have the part that pixel
#: sampling folds back to f = 0 (Kijewski and Judy 1987), tailed spectra (1 + (s f)²)^(-3/2) the
#: blobs and long tails of noise that was denoised.
LENGTHS = np.geomspace(1.5, 16.0, 20)
LONGEST_RAMP = 12.1

#: Shares of the variance that are white in mixtures with smooth noise.
MIXTURES = (0.1, 0.3)
LIFT = 0.25

#: Knots (s, logarithm of the prior weight) of each shape, and the prior of white noise. They are a
#: choice, made so that the interval covers white, smoothed and ramp-filtered noise alike. Some of
#: the spectra that the coverage tests draw are members of this list, others lie between or beside.
SHAPES = {
    "level": ((1.5, -1.5), (2.5, -0.4), (4.4, 1.1), (6.3, 0.5), (9.4, 0.3), (12.6, 2.3), (16, 3.8)),
    "ramp": ((1.5, 2.6), (2.5, 2.8), (4.0, 1.9), (6.0, -1.6), (12.0, -1.6)),
    "lifted": ((1.5, 0.0), (6.0, 0.0)),
    "tailed": ((3.0, 0.0), (16.0, 0.0)),
    "mixed 0.1": ((4.0, -1.2), (16.0, -1.2)),
    "mixed 0.3": ((4.0, -1.2), (16.0, -1.2)),
}
WHITE = 0.3

#: White floor added to models and data alike, in units of the variance: keeps combinations of
#: pixels that hold next to no noise from outvoting the others when no spectrum fits exactly.
FLOOR = 0.002

#: Lags in pixels up to which a correlation is followed, and the grid of frequencies behind it.
REACH = 48
GRID = 192

#: Side of a tile in pixels.
TILE = 6


@cache
def _kinds() -> tuple[tuple[str, float], ...]:
    """Return shape and roll-off length of every spectrum but white noise."""
    every = [float(s) for s in LENGTHS]
    ramps = [s for s in every if s <= LONGEST_RAMP]
    lengths = {
        "level": every,
        "ramp": ramps,
        "lifted": [s for s in ramps if s < 6.1][1::2],
        "tailed": every[6::3],
    }
    lengths |= {f"mixed {share}": every[7::2] for share in MIXTURES}
    return tuple((shape, s) for shape, own in lengths.items() for s in own)


@cache
def log_prior() -> Floats:
    """Return the logarithm of each spectrum's prior weight, white noise first.

    >>> round(float(np.exp(log_prior()).sum()), 6)
    1.0
    """
    weights = []
    for shape, s in _kinds():
        at, value = np.array(SHAPES[shape]).T
        weights.append(math.exp(np.interp(math.log(s), np.log(at), value)))
    share = np.array(weights) / np.sum(weights) * (1 - WHITE)
    prior: Floats = np.log(np.concatenate([[WHITE], share]))
    return prior


def _spectrum(shape: str, f: Floats) -> Floats:
    """Return a spectrum at frequencies in units of 1/s."""
    if shape == "tailed":
        found: Floats = (1 + f**2) ** -1.5
    elif shape == "level" or shape.startswith("mixed"):
        found = np.exp(-(f**2))
    else:
        found = (f + LIFT * (shape == "lifted")) * np.exp(-(f**3))
    return found


@lru_cache(maxsize=8)
def pixel_correlation(stretch: tuple[float, float]) -> Floats:
    """Return the correlation of pixels by lag, shape (spectra, REACH, REACH).

    Parameters
    ----------
    stretch : (float, float)
        Row and column step over the finer one. The spectra are cut off where the pixels resolve
        nothing, row by row and column by column.

    Examples
    --------
    >>> found = pixel_correlation((1.0, 1.0))
    >>> found[0, 0, :3].round(12).tolist()  # white noise
    [1.0, 0.0, 0.0]
    """
    f = np.hypot(fft.fftfreq(GRID)[:, None] / stretch[0], fft.rfftfreq(GRID) / stretch[1])
    found = [np.zeros((REACH, REACH))]
    found[0][0, 0] = 1.0
    for shape, s in _kinds():
        lag = fft.irfft2(_spectrum(shape, s * f), (GRID, GRID))[:REACH, :REACH]
        lag = lag / lag[0, 0]
        if shape.startswith("mixed"):
            share = float(shape.split()[1])
            lag = (1 - share) * lag
            lag[0, 0] += share
        found.append(lag)
    return np.array(found)


def block_size(pixels: int, stretch: tuple[float, float], most: int) -> tuple[int, int]:
    """Return rows and columns of the blocks that make about `most` of so many pixels.

    >>> block_size(500, (1.0, 1.0), 72), block_size(60, (1.0, 1.0), 72)
    ((2, 4), (1, 1))
    """
    each = math.ceil(pixels / most)
    rows = max(1, int(math.sqrt(each * stretch[1] / stretch[0])))
    return rows, math.ceil(each / rows)


@lru_cache(maxsize=64)
def block_correlation(stretch: tuple[float, float], block: tuple[int, int]) -> Floats:
    """Return the covariance of block means by lag in blocks, shape (spectra, rows, columns).

    The variance of a pixel is 1. The last row and column are 0 and stand for all longer lags.

    >>> float(block_correlation((1.0, 1.0), (2, 3))[0, 0, 0].round(12)) == round(1 / 6, 12)
    True
    """
    found = pixel_correlation(stretch)
    for axis, side in ((1, block[0]), (2, block[1])):
        lags = np.arange((REACH - side) // side + 1) * side
        shifts = range(1 - side, side)
        parts = [(side - abs(k)) / side**2 * np.take(found, np.abs(lags + k), axis) for k in shifts]
        found = np.sum(parts, axis=0)
    return np.pad(found, ((0, 0), (0, 1), (0, 1)))


class Tiles(NamedTuple):
    """What the contrasts within one tile of independent level and mean say of each spectrum.

    Attributes
    ----------
    forms : ndarray, shape (spectra, TILE⁴)
        Quadratic form of the restricted likelihood, flattened.
    log_determinant, trace : ndarray, shape (spectra,)
    """

    forms: Floats
    log_determinant: Floats
    trace: Floats


@lru_cache(maxsize=8)
def tile_forms(stretch: tuple[float, float]) -> Tiles:
    """Return the forms of a tile whose mean is left free.

    >>> found = tile_forms((1.0, 1.0))
    >>> round(float(found.trace[0]), 2)  # 35 contrasts of white noise, each over 1.002
    34.93
    """
    row, column = np.divmod(np.arange(TILE * TILE), TILE)
    lags = np.abs(np.subtract.outer(row, row)), np.abs(np.subtract.outer(column, column))
    covariance = pixel_correlation(stretch)[:, lags[0], lags[1]] + FLOOR * np.eye(TILE * TILE)
    inverse = np.linalg.inv(covariance)
    sums = inverse.sum(axis=2)
    ones = sums.sum(axis=1)
    forms = inverse - sums[:, :, None] * sums[:, None, :] / ones[:, None, None]
    return Tiles(
        forms.reshape(len(forms), -1),
        np.linalg.slogdet(covariance)[1] + np.log(ones),
        np.trace(forms, axis1=1, axis2=2),
    )
