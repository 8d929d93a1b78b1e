"""The standard deviation of the pixels in a window around every pixel."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Singles = NDArray[np.float32]

__all__ = ["LocalSd", "checked_window", "local_mean_and_sd", "local_sd"]


def local_sd(image: ArrayLike, *, window_px: int = 11) -> Singles:
    """Return the local SD of every slice, to be shown beside the image.

    Parameters
    ----------
    image : array, shape (ny, nx) or (nz, ny, nx)
        Values.
    window_px : int
        Side of the square window, odd; sample SD (n − 1) within the slice.

    Returns
    -------
    ndarray of float32, shape of the image
        NaN where the window leaves the image.

    Raises
    ------
    ArgumentError
        On misuse.

    Examples
    --------
    >>> image = np.random.default_rng(1).normal(40, 12, (64, 64))
    >>> found = local_sd(image, window_px=9)
    >>> bool(abs(np.nanmedian(found) - 12) < 0.3), int(np.isnan(found).sum())
    (True, 960)
    """
    data = np.asarray(image)
    if data.ndim not in (2, 3) or data.dtype.kind not in "iuf":
        raise ArgumentError("image", "must have shape (ny, nx) or (nz, ny, nx)", data.shape)
    checked_window(window_px, data.shape)
    found = np.full(data.shape, np.nan, dtype=np.float32)
    half = window_px // 2
    inner = np.s_[half : data.shape[-2] - half, half : data.shape[-1] - half]
    work = LocalSd((data.shape[-2], data.shape[-1]), window_px)
    for index in np.ndindex(data.shape[:-2]):
        found[index][inner] = work.of(data[index], 0.0)[1][inner]
    return found


def checked_window(window_px: int, shape: tuple[int, ...]) -> None:
    """Raise ArgumentError unless a window is odd, at least 3, and fits."""
    if window_px % 2 != 1 or not 3 <= window_px <= min(shape[-2:]):
        raise ArgumentError("window_px", f"must be odd, from 3 to {min(shape[-2:])}", window_px)


def local_mean_and_sd(
    plane: NDArray[np.generic], window_px: int, level: float = 0.0
) -> tuple[Singles, Singles]:
    """Return mean and sample SD over a window around each pixel, each of shape (ny, nx).

    Parameters
    ----------
    plane : ndarray, shape (ny, nx)
        Values; reflected beyond the border.
    window_px : int
        Side of the window.
    level : float
        Subtracted before squaring: near the tissue's mean it keeps single precision exact enough
        (its rounding is 6e-8 of the squared distance from the level).
    """
    return LocalSd((plane.shape[0], plane.shape[1]), window_px).of(plane, level)


class LocalSd:
    """Mean and SD of one slice after another, in memory that is used again."""

    def __init__(self, shape: tuple[int, int], window_px: int) -> None:
        self.window_px = window_px
        self._values, self._mean, self._sd = (np.empty(shape, np.float32) for _ in range(3))

    def of(self, plane: NDArray[np.generic], level: float) -> tuple[Singles, Singles]:
        """Return mean and SD as `local_mean_and_sd` does; the next call overwrites them.

        Windows that hold a value that is not finite have a mean and SD of NaN.
        """
        x, mean, sd = self._values, self._mean, self._sd
        np.subtract(plane, np.float32(level), out=x, casting="unsafe")
        holes = _holes(x) if plane.dtype.kind == "f" else None
        if holes is not None:  # a running sum would carry NaN on to the end of the line
            x[holes] = 0.0
        ndimage.uniform_filter(x, self.window_px, output=mean)
        np.multiply(x, x, out=x)
        ndimage.uniform_filter(x, self.window_px, output=sd)
        np.multiply(mean, mean, out=x)
        np.subtract(sd, x, out=sd)
        n = float(self.window_px**2)
        np.multiply(sd, np.float32(n / (n - 1.0)), out=sd)
        np.maximum(sd, np.float32(0.0), out=sd)
        np.sqrt(sd, out=sd)
        np.add(mean, np.float32(level), out=mean)
        if holes is not None:
            touched = ndimage.maximum_filter(holes, self.window_px)
            mean[touched] = sd[touched] = np.nan
        return mean, sd


def _holes(x: Singles) -> NDArray[np.bool_] | None:
    """Return where there is no finite value; None if there is one everywhere."""
    finite = np.isfinite(x)
    return None if finite.all() else ~finite
