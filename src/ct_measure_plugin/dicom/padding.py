"""Pixels that mean "no data here": declared by the header, or given away by an impossible value."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from ct_measure_plugin.dicom.rescale import rescale_of
from ct_measure_plugin.physics.results import Caution

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.dicom.facts import ImageFacts

__all__ = [
    "IMPOSSIBLE_HU",
    "NO_PADDING",
    "PaddingFound",
    "padding_cautions",
    "padding_in",
    "padding_unseen",
]

#: no matter attenuates less than vacuum (−1000 HU); noise and streaks reach a few hundred below
IMPOSSIBLE_HU: Final = -1500.0
#: a declared value above this is a possible CT number of something in the image
POSSIBLE_HU: Final = -1000.0


@dataclass(frozen=True, slots=True)
class PaddingFound:
    """The padding of one slice.

    Attributes
    ----------
    low, high : float
        Closed range of CT numbers that are padding; NaN for none.
    declared, undeclared : bool
        Whether such pixels were found, by rule of the header and without it.
    doubted : float or None
        A declared value that is a possible CT number and was not masked.
    """

    low: float
    high: float
    declared: bool = False
    undeclared: bool = False
    doubted: float | None = None


NO_PADDING: Final = PaddingFound(math.nan, math.nan)


def padding_in(
    image: ImageFacts, plane: NDArray[Any], low_hu: float, *, hounsfield: bool
) -> PaddingFound:
    """Return the padding of a slice whose CT numbers are known.

    Parameters
    ----------
    image : ImageFacts
        Its header's facts.
    plane : ndarray, shape (rows, columns)
        Its CT numbers.
    low_hu : float
        The lowest of them.
    hounsfield : bool
        Whether they are HU; only then is a value known to be impossible.
    """
    declared = None
    doubted = None
    if image.padding is not None:
        low, high = rescale_of(image).of(*image.padding)
        if low_hu <= high and bool(np.any((plane >= low) & (plane <= high))):
            if hounsfield and high > POSSIBLE_HU and not _at_a_corner(plane, low, high):
                doubted = high
            else:
                declared = (low, high)
    if not hounsfield or low_hu > IMPOSSIBLE_HU:
        if declared is None:
            return NO_PADDING if doubted is None else PaddingFound(*_NONE, doubted=doubted)
        return PaddingFound(*declared, declared=True, doubted=doubted)
    outside = declared is None or low_hu < declared[0] or _others_below(plane, declared)
    top = IMPOSSIBLE_HU
    if declared is not None:
        if not outside:
            return PaddingFound(*declared, declared=True, doubted=doubted)
        top = max(top, declared[1])
    return PaddingFound(-math.inf, top, declared is not None, undeclared=True, doubted=doubted)


_NONE: Final = (math.nan, math.nan)


def padding_unseen(image: ImageFacts, *, hounsfield: bool) -> PaddingFound:
    """Return the padding rule of a slice that is not decoded yet."""
    declared = None if image.padding is None else rescale_of(image).of(*image.padding)
    if not hounsfield:
        return NO_PADDING if declared is None else PaddingFound(*declared)
    if declared is not None and declared[1] > POSSIBLE_HU:
        return PaddingFound(-math.inf, IMPOSSIBLE_HU, doubted=declared[1])
    top = IMPOSSIBLE_HU if declared is None else max(IMPOSSIBLE_HU, declared[1])
    return PaddingFound(-math.inf, top)


def _at_a_corner(plane: NDArray[Any], low: float, high: float) -> bool:
    corners = plane[[0, 0, -1, -1], [0, -1, 0, -1]]
    return bool(np.any((corners >= low) & (corners <= high)))


def _others_below(plane: NDArray[Any], declared: tuple[float, float]) -> bool:
    """Return True if there are impossible values that the declared range leaves out."""
    low, high = declared
    return bool(np.any((plane <= IMPOSSIBLE_HU) & ((plane < low) | (plane > high))))


def padding_cautions(
    found: Sequence[PaddingFound], images: Sequence[ImageFacts], unit: str
) -> list[Caution]:
    """Return what a reader must know about the padding of a series."""
    cautions = []
    declared = sum(one.declared for one in found)
    undeclared = sum(one.undeclared for one in found)
    doubted = [one.doubted for one in found if one.doubted is not None]
    if declared or doubted:
        text = f"Padding declared in the header is masked on {declared} of {len(found)} slices."
        if doubted:
            text = (
                f"The declared padding value of {doubted[0]:g} {unit} is a possible CT number "
                f"and is not masked on {len(doubted)} of {len(found)} slices."
            )
        cautions.append(Caution("padding", text))
    if undeclared:
        cautions.append(
            Caution(
                "padding-undeclared",
                f"Values of {IMPOSSIBLE_HU:g} HU or less on {undeclared} of {len(found)} slices "
                "are no CT numbers and are masked.",
                "Keep regions inside the reconstructed circle.",
            )
        )
    if any(image.padding_mistyped for image in images):
        cautions.append(
            Caution(
                "padding-mistyped",
                "The padding value has the wrong sign type and was read with that of the pixels.",
            )
        )
    return cautions
