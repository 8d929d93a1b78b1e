"""A series larger than memory: a dask array of one chunk a slice, decoded when touched."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.dicom.loading import float_plane, whole_by_header
from ct_measure_plugin.dicom.pixels import stored_into
from ct_measure_plugin.dicom.rescale import apply_whole, rescale_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.dicom.facts import ImageFacts

__all__ = ["LazySlices", "lazy_array"]


class LazySlices:
    """Slices that are read when indexed; what a dask array takes its chunks from.

    Parameters
    ----------
    images : sequence of ImageFacts
        Ordered images of one plane size.
    """

    def __init__(self, images: Sequence[ImageFacts]) -> None:
        self._images = tuple(images)
        layout = self._images[0].layout
        self.shape = (len(self._images), layout.rows, layout.columns)
        self.dtype = np.dtype(np.int16 if whole_by_header(self._images) else np.float32)
        self.ndim = 3

    def plane(self, index: int) -> NDArray[Any]:
        """Return the CT numbers of one slice, shape (rows, columns).

        Raises
        ------
        SeriesError
            If it cannot be read.
        """
        image = self._images[index]
        if self.dtype != np.int16:
            return float_plane(image)[0]
        target = np.empty(self.shape[1:], np.int16)
        stored_into(image, target)
        apply_whole(target, rescale_of(image))
        return target

    def __getitem__(self, key: tuple[int | slice, ...]) -> NDArray[Any]:
        """Return part of the series; dask may ask for slices of an axis or for one index of it."""
        along, within = key[0], key[1:]
        picked = range(self.shape[0])[along]
        if isinstance(picked, int):
            part: NDArray[Any] = self.plane(picked)[within]
            return part
        if not picked:
            return np.empty((0, *self.shape[1:]), self.dtype)[(slice(None), *within)]
        return np.stack([self.plane(k)[within] for k in picked])


def lazy_array(images: Sequence[ImageFacts]) -> Any:
    """Return a dask array of the series' CT numbers, one chunk a slice."""
    import dask.array as da

    slices = LazySlices(images)
    chunks = (1, slices.shape[1], slices.shape[2])
    return da.from_array(  # type: ignore[no-untyped-call]
        slices, chunks=chunks, name=False, asarray=False, lock=False
    )
