"""Stored value → CT number, slice by slice: HU = slope · stored + intercept (PS3.3, C.11.1.1.2)."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from ct_measure_plugin.dicom.texts import known_unit

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.dicom.facts import ImageFacts

__all__ = ["Rescale", "apply_whole", "representable_of", "rescale_of", "unit_of"]

_INT16: Final = (-(1 << 15), (1 << 15) - 1)


@dataclass(frozen=True, slots=True)
class Rescale:
    """One slice's straight line from stored value to CT number."""

    slope: float
    intercept: float

    @property
    def whole(self) -> bool:
        """True if whole stored values give whole CT numbers."""
        return (
            self.slope.is_integer()
            and self.intercept.is_integer()
            and abs(self.slope) < 1 << 16
            and abs(self.intercept) < 1 << 31
        )

    def of(self, low: float, high: float) -> tuple[float, float]:
        """Return the CT numbers of a range of stored values, lowest first.

        Examples
        --------
        >>> Rescale(2.0, -1024.0).of(0, 200)
        (-1024.0, -624.0)
        >>> Rescale(-1.0, 0.0).of(0, 200)
        (-200.0, 0.0)
        """
        ends = self.slope * low + self.intercept, self.slope * high + self.intercept
        return min(ends), max(ends)

    def fits_int16(self, low: int, high: int) -> bool:
        """Return True if the CT numbers of a stored range are exact in 16 bit integers."""
        bottom, top = self.of(low, high)
        return self.whole and _INT16[0] <= bottom and top <= _INT16[1]


def rescale_of(image: ImageFacts) -> Rescale:
    """Return the image's own rescale; what the header lacks is 1 and 0."""
    slope = 1.0 if image.slope is None else image.slope
    return Rescale(slope, 0.0 if image.intercept is None else image.intercept)


def unit_of(image: ImageFacts) -> str:
    """Return the unit of an image's rescaled values.

    No Rescale Type means HU for a CT image (PS3.3, C.8.2.1.1.2); no rescale at all means that the
    numbers are whatever was stored.
    """
    if image.slope is None and image.intercept is None:
        return "stored values"
    if image.rescale_type in ("", "HU"):
        return "HU"
    return f"rescaled units ({known_unit(image.rescale_type) or 'unnamed'})"


def apply_whole(plane: NDArray[np.int16], rescale: Rescale) -> None:
    """Turn stored values into CT numbers in place, in 16 bit arithmetic.

    Only for what :meth:`Rescale.fits_int16` allows: arithmetic modulo 2¹⁶ is exact whenever its
    result fits, also for unsigned stored values above 32767.
    """
    if rescale.slope != 1:
        np.multiply(plane, _wrapped(rescale.slope), out=plane)
    if rescale.intercept != 0:
        np.add(plane, _wrapped(rescale.intercept), out=plane)


def _wrapped(number: float) -> np.int16:
    return np.int16((int(number) + (1 << 15)) % (1 << 16) - (1 << 15))


def representable_of(images: Sequence[ImageFacts]) -> tuple[float, float] | None:
    """Return the lowest and highest CT number the encoding can hold, None if slices differ."""
    limits: set[tuple[Any, ...]] = {rescale_of(image).of(*image.layout.limits) for image in images}
    return limits.pop() if len(limits) == 1 else None
