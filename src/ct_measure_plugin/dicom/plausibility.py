"""Do the CT numbers look like CT numbers? Signs of a wrong sign type or a wrong intercept."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from ct_measure_plugin.dicom.padding import IMPOSSIBLE_HU
from ct_measure_plugin.physics.results import Caution

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.dicom.padding import PaddingFound

__all__ = ["Sample", "implausible", "observed_limits", "sample_of"]

#: metal on an extended scale stays below 20 000 HU in all but single pixels
_FAR_HU: Final = 20_000
#: the ends of the common 12 bit scale, stored + 1024
_COMMON_LIMITS: Final = (-1024.0, 3071.0)
#: share of pixels at one value that means saturation
_PILED_UP: Final = 0.001
#: share of pixels that makes a peak of the histogram
_PEAK: Final = 0.05
_REMEDY: Final = "Check sign and rescale of the files against a region of known material."


@dataclass(frozen=True, slots=True, eq=False)
class Sample:
    """Pixels of a few slices, padding left out."""

    values: NDArray[Any]

    def share(self, low: float, high: float) -> float:
        """Return the fraction of pixels in a closed range."""
        if self.values.size == 0:
            return 0.0
        inside = (self.values >= low) & (self.values <= high)
        return float(np.count_nonzero(inside)) / self.values.size


def sample_of(planes: Sequence[tuple[NDArray[Any], PaddingFound]]) -> Sample:
    """Return every fourth pixel of every fourth row, without padding.

    Where padding was only guessed from its value, no more than one fill value is left out: numbers
    that are too low throughout must not hide themselves.
    """
    parts = []
    for plane, padding in planes:
        thin = plane[::4, ::4].ravel()
        if padding.undeclared:
            parts.append(_without_fill(thin))
        else:
            parts.append(thin[~((thin >= padding.low) & (thin <= padding.high))])
    return Sample(np.concatenate(parts) if parts else np.empty(0))


def _without_fill(values: NDArray[Any]) -> NDArray[Any]:
    low = values[values <= IMPOSSIBLE_HU]
    if low.size == 0:
        return values
    found, counts = np.unique(low, return_counts=True)
    commonest = int(np.argmax(counts))
    if 2 * counts[commonest] < low.size:
        return values
    kept: NDArray[Any] = values[values != found[commonest]]
    return kept


def implausible(sample: Sample) -> Caution | None:
    """Return a caution if the sampled HU cannot be right, else None.

    Examples
    --------
    >>> print(implausible(Sample(np.full(100, 31_000))).text)
    100 % of the sampled pixels lie beyond ±20000 HU.
    """
    if sample.values.size < 16:
        return None
    far = sample.share(_FAR_HU, np.inf) + sample.share(-np.inf, -_FAR_HU)
    if far > 0.2:
        text = f"{100 * far:.0f} % of the sampled pixels lie beyond ±{_FAR_HU} HU."
        return Caution("implausible-hu", text, _REMEDY)
    if _shifted(sample, +1024):
        return _shift_caution("above", 1024)
    if _shifted(sample, -1024):
        return _shift_caution("below", 1024)
    return None


def _shift_caution(where: str, by: int) -> Caution:
    text = f"Air and water seem to lie {by} HU {where} their CT numbers."
    return Caution("implausible-hu", text, _REMEDY)


def _shifted(sample: Sample, shift: int) -> bool:
    """Return True if air and water both stand `shift` away from where they belong."""
    air = sample.share(-1080 + shift, -920 + shift)
    water = sample.share(-100 + shift, 120 + shift)
    true_air = sample.share(-1100, -800) if shift > 0 else 0.0
    beyond = sample.share(-np.inf, -200) if shift > 0 else sample.share(-800, np.inf)
    return air > _PEAK and water > _PEAK and true_air < 0.002 and beyond < 0.02


def observed_limits(
    sample: Sample, representable: tuple[float, float] | None
) -> tuple[float, float] | None:
    """Narrow the representable range where the pixels pile up at an end of the common scale.

    Scanners often limit to −1024 … 3071 although the cells would hold more.
    """
    if representable is None or sample.values.size == 0:
        return representable
    low, high = representable
    for limit, extreme in zip(_COMMON_LIMITS, (np.min, np.max), strict=True):
        if float(extreme(sample.values)) == limit and sample.share(limit, limit) >= _PILED_UP:
            if limit < 0:
                low = max(low, limit)
            else:
                high = min(high, limit)
    return low, high
