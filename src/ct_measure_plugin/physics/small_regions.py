"""The standard error of a small region's mean: exact likelihoods under a prior fit for CT.

A region of a few hundred pixels shows little of its noise spectrum, but it does show whether
neighbours share their noise. Every spectrum of a short list gives pixels, and means of blocks of
them, a covariance matrix. How well it explains the differences between the blocks, and those
between the pixels of small tiles (restricted likelihoods, free of the mean and, with Jeffreys'
prior, of the level), times its prior, is its weight. Each spectrum leaves the mean with a Student
distribution; the standard error is the half-width of the central 95 % of their mixture over 1.96,
so that what the pixels cannot decide is paid for once and stays bounded.
"""

from __future__ import annotations

import math
from functools import lru_cache
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from scipy import fft, special

from ct_measure_plugin.physics.noise_blocks import (
    FLOOR,
    REACH,
    TILE,
    block_correlation,
    block_size,
    log_prior,
    pixel_correlation,
    tile_forms,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["SmallDoubt", "doubt_of_few"]

#: Blocks a slice that are looked for: of one slice, of many slices together, and at least.
BLOCKS, ALL_BLOCKS, LEAST_BLOCKS = 72, 144, 24

#: Fewer blocks than this, where pixels were joined, say nothing.
TOO_FEW = 16

#: Contrasts within tiles that may vote: more would weigh how well the list's shapes fit.
VOTES = 300.0

#: Share of the evidence that counts, and of the degrees of freedom: blocks and tiles share their
#: noise, and no spectrum of the list is the true one. Chosen with the prior.
BELIEF, FREEDOM = 0.6, 0.32


class SmallDoubt(NamedTuple):
    """Squared standard error, independent samples, reach in finer pixels, degrees of freedom."""

    variance_of_mean: float
    power_samples: float
    reach: float
    freedom: float


class _Blocks(NamedTuple):
    """What one slice's blocks and the spectra give before any value is seen."""

    full: NDArray[np.bool_]  # (block rows, block columns)
    inverse: Floats  # (spectra, n, n) of the covariance with its floor
    rows: Floats  # (spectra, n) its row sums
    ones: Floats  # (spectra,) its sum
    trace: Floats  # (spectra,)
    bent: Floats  # (spectra,) squares of the row sums
    log_determinant: Floats  # (spectra,)


@lru_cache(maxsize=32)
def _blocks(
    mask: bytes, shape: tuple[int, int], block: tuple[int, int], stretch: tuple[float, float]
) -> _Blocks:
    inside = np.frombuffer(mask, bool).reshape(shape)
    full: NDArray[np.bool_] = np.asarray(_in_blocks(inside, block).all(axis=(1, 3)))
    row, column = np.nonzero(full)
    table = block_correlation(stretch, block)
    lags = (
        np.minimum(np.abs(np.subtract.outer(at, at)), size - 1)
        for at, size in ((row, table.shape[1]), (column, table.shape[2]))
    )
    covariance = table[:, *lags] / table[:, :1, :1] + FLOOR * np.eye(len(row))
    inverse: Floats = np.linalg.inv(covariance).astype(float)
    rows = inverse.sum(axis=2)
    return _Blocks(
        full,
        inverse,
        rows,
        rows.sum(axis=1),
        np.trace(inverse, axis1=1, axis2=2),
        np.sum(rows**2, axis=1),
        np.linalg.slogdet(covariance)[1],
    )


def _in_blocks(plane: NDArray[np.generic], block: tuple[int, int]) -> NDArray[np.generic]:
    """Return a plane cut into blocks, padded with 0, shape (rows, block, columns, block)."""
    ny, nx = (-(-n // b) for n, b in zip(plane.shape, block, strict=True))
    padded = np.zeros((ny * block[0], nx * block[1]), plane.dtype)
    padded[: plane.shape[0], : plane.shape[1]] = plane
    return padded.reshape(ny, block[0], nx, block[1])


def doubt_of_few(
    residual: Floats, cover: Floats, stretch: tuple[float, float], shared: tuple[float, float]
) -> SmallDoubt | None:
    """Return the doubt of the mean of few pixels a slice.

    Parameters
    ----------
    residual, cover : ndarray, shape (nz, ny, nx)
        Values less their weighted mean, and weights; 0 outside the region.
    stretch : (float, float)
        Row and column step over the finer one.
    shared : (float, float)
        Factors by which correlation between slices raises the variance of the mean and lowers the
        number of independent samples.

    Returns
    -------
    SmallDoubt or None
        None for a region too narrow for blocks of its pixels, or whose blocks are all equal.

    Examples
    --------
    >>> noise = np.random.default_rng(1).normal(0, 10, (1, 6, 6))
    >>> found = doubt_of_few(noise - noise.mean(), np.ones((1, 6, 6)), (1.0, 1.0), (1.0, 1.0))
    >>> 1.2 < found.variance_of_mean**0.5 < 2.2  # 10/6 = 1.7
    True
    """
    residual, cover, stretch = _turned(residual, cover, stretch)
    inside = cover > 0
    counts = np.count_nonzero(inside, axis=(1, 2))
    slices = int(np.count_nonzero(counts)) / shared[1]
    most = min(max(int(ALL_BLOCKS / slices), LEAST_BLOCKS), BLOCKS)
    block = block_size(int(counts.max()), stretch, most)
    stretch = round(stretch[0], 6), round(stretch[1], 6)
    seen = _seen(residual, inside, block, stretch)
    if seen.blocks < (2 if block == (1, 1) else TOO_FEW):
        return None
    variance, power = _of_the_mean(cover, stretch)
    unit = block_correlation(stretch, block)[:, 0, 0]
    tiles = None if block == (1, 1) else _tiles(residual, inside, VOTES * shared[1])
    evidence = _evidence(seen, unit, tiles, stretch)
    share = log_prior() + evidence * (BELIEF / shared[1])
    share = np.exp(share - share.max())
    share /= share.sum()
    freedom = max(FREEDOM * (seen.blocks - 1) / shared[1], 1.0)
    level = seen.level / (seen.blocks - 1) / unit
    scale = np.sqrt(level * np.maximum(variance, 0.0) * shared[0])
    half = _half_width(share, scale, freedom)
    return SmallDoubt(
        float((half / special.ndtri(0.975)) ** 2),
        max(1 / float(share @ power) / shared[1], 1.0),
        _reach(share, stretch, cover.shape[1:]),
        freedom,
    )


def _turned(
    residual: Floats, cover: Floats, stretch: tuple[float, float]
) -> tuple[Floats, Floats, tuple[float, float]]:
    """Return a region turned and mirrored so that its greater squares lie down, then right.

    Blocks and tiles begin at a corner; so they begin at the same one however the image lies.
    """
    power = np.sum(residual**2, axis=0)
    rows, columns = (np.arange(n) - (n - 1) / 2 for n in power.shape)
    down = float(power.sum(axis=1) @ rows) * stretch[0]
    right = float(power.sum(axis=0) @ columns) * stretch[1]
    pair = [residual, cover]
    if down < 0:
        pair = [part[:, ::-1] for part in pair]
    if right < 0:
        pair = [part[:, :, ::-1] for part in pair]
    if abs(right) > abs(down):
        pair = [part.swapaxes(1, 2) for part in pair]
        stretch = stretch[1], stretch[0]
    return np.ascontiguousarray(pair[0]), np.ascontiguousarray(pair[1]), stretch


class _Seen(NamedTuple):
    """The blocks' restricted likelihood of each spectrum, slices together.

    `level` over the degrees of freedom, blocks - 1, is the variance of a block mean that the
    spectrum makes of the values.
    """

    blocks: int
    level: Floats
    log_determinant: Floats


def _seen(
    residual: Floats,
    inside: NDArray[np.bool_],
    block: tuple[int, int],
    stretch: tuple[float, float],
) -> _Seen:
    parts = []
    for plane, mask in zip(residual, inside, strict=True):
        if mask.any():
            own = _blocks(mask.tobytes(), mask.shape, block, stretch)
            x = _in_blocks(plane, block).mean(axis=(1, 3))[own.full].astype(float)
            if x.size:
                parts.append((own, x))
    everything = np.concatenate([np.zeros(0), *(x for _, x in parts)])
    quadratic, cross, ones, log_det, trace, bent = np.zeros((6, len(log_prior())))
    if len(everything) < 2 or np.ptp(everything) == 0:
        return _Seen(0, quadratic, log_det)
    middle = float(everything.mean())  # leaves the likelihood as it is, and saves digits
    for own, x in parts:
        quadratic += (own.inverse @ (x - middle)) @ (x - middle)
        cross += own.rows @ (x - middle)
        ones += own.ones
        trace += own.trace
        bent += own.bent
        log_det += own.log_determinant
    level = np.maximum(quadratic - cross**2 / ones, 0.0)
    level += FLOOR * float(everything.var(ddof=1)) * (trace - bent / ones)
    return _Seen(len(everything), level, log_det + np.log(ones))


class _TilesSeen(NamedTuple):
    """How many tiles count, the sum of their scatter matrices, and the variance of a pixel."""

    number: float
    scatter: Floats
    spread: float


def _evidence(
    seen: _Seen, unit: Floats, tiles: _TilesSeen | None, stretch: tuple[float, float]
) -> Floats:
    """Return each spectrum's log-likelihood, at the level that is best for blocks and tiles."""
    freedom = seen.blocks - 1.0
    level = seen.level / unit
    log_det = seen.log_determinant + freedom * np.log(unit)
    if tiles is not None:
        own = tile_forms(stretch)
        floor = tiles.number * FLOOR * tiles.spread
        level = level + own.forms @ tiles.scatter + floor * own.trace
        log_det = log_det + tiles.number * own.log_determinant
        freedom += tiles.number * (TILE * TILE - 1)
    found: Floats = -(log_det + freedom * np.log(level)) / 2
    return found


def _tiles(residual: Floats, inside: NDArray[np.bool_], votes: float) -> _TilesSeen | None:
    """Return the tiles within a region, half of each over the next, or None if there is none.

    They count as many as there are without overlap, and have no more contrasts than votes.
    """
    if min(inside.shape[1:]) < TILE:
        return None
    windows = np.lib.stride_tricks.sliding_window_view
    step, side = TILE // 2, (TILE, TILE)
    full = windows(inside, side, axis=(1, 2))[:, ::step, ::step].all(axis=(3, 4))
    x = windows(residual, side, axis=(1, 2))[:, ::step, ::step][full].reshape(-1, TILE * TILE)
    count, scatter = len(x), x.T @ x
    if not count:
        return None
    pixels = int(np.count_nonzero(inside))
    kept = min(count, pixels / TILE**2, votes / (TILE**2 - 1))
    spread = float(np.sum(residual**2)) / (pixels - 1)
    return _TilesSeen(kept, scatter.ravel() * (kept / count), spread)


def _of_the_mean(cover: Floats, stretch: tuple[float, float]) -> tuple[Floats, Floats]:
    """Return variance of the mean and sum of squared correlations over all pairs, by spectrum."""
    ny, nx = cover.shape[1:]
    size = tuple(fft.next_fast_len(2 * n, real=True) for n in (ny, nx))
    power = np.sum(np.abs(fft.rfft2(cover, size)) ** 2, axis=0)
    auto = fft.irfft2(power, size)
    pairs = auto[:ny, :nx].copy()  # lags of all four signs, folded into one quarter
    pairs[1:] += auto[: size[0] - ny : -1, :nx]
    right = auto[:ny, : size[1] - nx : -1].copy()
    right[1:] += auto[: size[0] - ny : -1, : size[1] - nx : -1]
    pairs[:, 1:] += right
    pairs = pairs[:REACH, :REACH].ravel() / float(cover.sum()) ** 2
    rho = pixel_correlation(stretch)[:, :ny, :nx].reshape(len(log_prior()), -1)
    return rho @ pairs, rho**2 @ pairs


def _reach(share: Floats, stretch: tuple[float, float], shape: tuple[int, ...]) -> float:
    """Return the longest lag within the region at which the mean correlation is over 0.1."""
    rho = np.tensordot(share, pixel_correlation(stretch)[:, : shape[0], : shape[1]], axes=1)
    row, column = np.nonzero(np.abs(rho) > 0.1)
    far = np.hypot(row * stretch[0], column * stretch[1])
    return float(far.max(initial=0.0))


def _half_width(share: Floats, scale: Floats, freedom: float) -> float:
    """Return the half-width of the central 95 % of a mixture of Student distributions."""
    kept = (share > 1e-4) & (scale > 0)
    share, scale = share[kept] / share[kept].sum(), scale[kept]
    factor = float(special.stdtrit(freedom, 0.975))
    low, high = factor * scale.min(), factor * scale.max()  # the widest member bounds it
    for _ in range(18):  # to a part in 10,000 of a range of 13
        middle = math.sqrt(low * high)
        if float(share @ special.stdtr(freedom, middle / scale)) < 0.975:
            low = middle
        else:
            high = middle
    return float(high)
