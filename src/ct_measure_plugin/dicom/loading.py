"""All slices into memory: read, rescaled in place, and looked at once while they are in cache."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from ct_measure_plugin.dicom.asking import stop_if_asked
from ct_measure_plugin.dicom.padding import PaddingFound, padding_in
from ct_measure_plugin.dicom.pixels import stored_into, stored_plane
from ct_measure_plugin.dicom.rescale import Rescale, apply_whole, rescale_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.dicom.asking import Cancel, Progress
    from ct_measure_plugin.dicom.facts import ImageFacts

__all__ = ["Loaded", "float_plane", "load_all", "whole_by_header"]

#: one reads while the other waits for the disk; from the cache of the system two are no faster
#: than one, and the decoders do not run side by side
_THREADS: Final = min(2, os.cpu_count() or 1)
_CHUNK: Final = 8


@dataclass(frozen=True, slots=True, eq=False)
class Loaded:
    """The pixels of a series.

    Attributes
    ----------
    values : ndarray of int16 or float32, shape (nz, ny, nx)
        CT numbers.
    padding : tuple of PaddingFound
        One a slice.
    inexact : int
        Slices whose pixel stream turned out to be lossy.
    """

    values: NDArray[Any]
    padding: tuple[PaddingFound, ...]
    inexact: int


class _NotWholeError(Exception):
    """A slice's CT numbers do not fit 16 bit integers."""


def whole_by_header(images: Sequence[ImageFacts]) -> bool:
    """Return True if the headers alone promise CT numbers that are exact in int16."""
    return all(
        image.layout.allocated <= 16 and rescale_of(image).fits_int16(*image.layout.limits)
        for image in images
    )


def load_all(
    images: Sequence[ImageFacts],
    *,
    hounsfield: bool,
    progress: Progress | None = None,
    cancel: Cancel | None = None,
) -> Loaded:
    """Read every slice; int16 if all CT numbers are exact in it, else float32.

    Raises
    ------
    SeriesError
        If a slice cannot be read.
    Cancelled
        If `cancel` said so.
    """
    possible = all(image.layout.allocated <= 16 and rescale_of(image).whole for image in images)
    if possible:
        try:
            return _load(images, np.dtype(np.int16), hounsfield, progress, cancel)
        except _NotWholeError:
            pass
    return _load(images, np.dtype(np.float32), hounsfield, progress, cancel)


def _load(
    images: Sequence[ImageFacts],
    dtype: np.dtype[Any],
    hounsfield: bool,
    progress: Progress | None,
    cancel: Cancel | None,
) -> Loaded:
    layout = images[0].layout
    values = np.empty((len(images), layout.rows, layout.columns), dtype)
    fill = _whole_slice if dtype == np.int16 else _float_slice

    def work(start: int) -> list[tuple[PaddingFound, bool]]:
        stop_if_asked(cancel)
        stop = min(start + _CHUNK, len(images))
        return [fill(images[k], values[k], hounsfield) for k in range(start, stop)]

    found: list[tuple[PaddingFound, bool]] = []
    with ThreadPoolExecutor(_THREADS) as pool:
        futures = [pool.submit(work, start) for start in range(0, len(images), _CHUNK)]
        try:
            for future in futures:
                found += future.result()
                if progress is not None:
                    progress(len(found), len(images))
        except BaseException:
            pool.shutdown(cancel_futures=True)
            raise
    return Loaded(values, tuple(one for one, _ in found), sum(inexact for _, inexact in found))


def _whole_slice(
    image: ImageFacts, target: NDArray[Any], hounsfield: bool
) -> tuple[PaddingFound, bool]:
    low, high, exact = stored_into(image, target)
    rescale = rescale_of(image)
    if not rescale.fits_int16(low, high):
        raise _NotWholeError
    apply_whole(target, rescale)
    low_hu, _ = rescale.of(low, high)
    return padding_in(image, target, low_hu, hounsfield=hounsfield), exact is False


def _float_slice(
    image: ImageFacts, target: NDArray[Any], hounsfield: bool
) -> tuple[PaddingFound, bool]:
    plane, exact = float_plane(image)
    target[...] = plane
    return padding_in(image, target, float(target.min()), hounsfield=hounsfield), exact is False


def float_plane(image: ImageFacts) -> tuple[NDArray[np.float32], bool | None]:
    """Return one slice's CT numbers as float32, and whether its stream is exact."""
    layout, rescale = image.layout, rescale_of(image)
    stored: NDArray[Any]
    if layout.allocated <= 16:
        cells = np.empty((layout.rows, layout.columns), np.int16)
        low, _, exact = stored_into(image, cells)
        stored = cells if layout.signed or low < 0 else cells.view(np.uint16)
    else:
        plane, exact = stored_plane(image)
        stored = plane.view(np.int32) if layout.signed else plane
    return _rescaled(stored, rescale), exact


def _rescaled(stored: NDArray[Any], rescale: Rescale) -> NDArray[np.float32]:
    exact = stored.astype(np.float64)
    exact *= rescale.slope
    exact += rescale.intercept
    return exact.astype(np.float32)
