"""The noise power spectrum of a set of patches, with what is uncertain about it."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import detrend as trends
from ct_measure_plugin.physics import patch_faults as faults
from ct_measure_plugin.physics.patch_differences import FEWEST_PATCHES, subtracted
from ct_measure_plugin.physics.patch_spectra import WINDOWS, Window
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.spectrum_assembly import SpectrumTask
from ct_measure_plugin.physics.spectrum_result import NoisePower

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    Whole = NDArray[np.intp]

__all__ = ["NoisePower", "noise_power"]

#: Shorter sides leave hardly a frequency that detrending does not touch.
SHORTEST_SIDE = 8


def noise_power(
    patches: ArrayLike,
    *,
    spacing_mm: tuple[float, ...],
    detrend: trends.Detrend = "quadratic",
    window: Window = "hann",
    corners: ArrayLike | None = None,
    repeats: Sequence[ArrayLike] = (),
    padding: int = 1,
    unit: str = "HU",
) -> NoisePower | NotMeasured:
    """Return the noise power spectrum of patches of an image or a volume.

    Parameters
    ----------
    patches : array, shape (n, ny, nx) or (n, nz, ny, nx)
        CT numbers of equal patches of uniform material.
    spacing_mm : tuple of float
        (dy, dx), or (dz, dy, dx) for deep patches.
    detrend : {"none", "mean", "plane", "quadratic", "repeat", "slices"}
        What is taken out of each patch: a polynomial, or what repeat scans or neighbouring slices
        share (their difference, with its factor put right, and then its mean).
    window : {"none", "hann", "hamming", "cosine"}
        Taper along each axis; the power it takes is given back.
    corners : array of int, shape (n, 3) or (n, 2), optional
        Slice, row and column of each patch's first pixel. They tell which patches share pixels or
        slices. Without them, overlaps are recognised by the pixels shared, and slices that are
        correlated by the patches' spectra in the order given.
    repeats : sequence of arrays of the patches' shape
        The same patches in further scans, for ``detrend="repeat"``.
    padding : int
        Length of the transform in patch lengths; more than 1 draws the curve finer and adds no
        knowledge.
    unit : str
        Unit of the values.

    Returns
    -------
    NoisePower or NotMeasured
        NotMeasured if the patches are too few, hold structure or clipped values, or their slices
        are too correlated for what is asked.

    Raises
    ------
    ArgumentError
        On misuse.

    Notes
    -----
    ``NPS(f) = dx dy / Σw² · ⟨|Σ w ΔI exp(−2πi f·x)|²⟩``, in unit² mm² (mm³ with dz), whose
    integral over all frequencies is the variance [1]_, [2]_. A ring's mean has a relative variance
    of twice the double sum of κ over the ring's bins (see `patch_independence`), ν = 2 over it
    degrees of freedom, and the stated uncertainty is the standard deviation of the true value given
    the measured one, S ν/(ν − 2) √(2/(ν − 4)), which is S √(2/ν) for large ν.

    Examples
    --------
    >>> noise = np.random.default_rng(1).normal(0, 10, (200, 64, 64))
    >>> found = noise_power(noise, spacing_mm=(0.5, 0.5))
    >>> bool(abs(found.radial.y[5:].mean() - 25.0) < 0.2)  # σ² dx dy
    True
    >>> found.radial.y_unit, found.spectrum.values.shape
    ('HU² mm²', (64, 64))

    References
    ----------
    .. [1] J. H. Siewerdsen, I. A. Cunningham, D. A. Jaffray, Med. Phys. 29 (2002) 2655.
    .. [2] S. J. Riederer, N. J. Pelc, D. A. Chesler, Phys. Med. Biol. 23 (1978) 446.
    """
    data = _checked(patches, spacing_mm, window, padding)
    if detrend not in trends.DETRENDS:
        raise ArgumentError("detrend", f"must be one of {', '.join(trends.DETRENDS)}", detrend)
    place = _corners(corners, data)
    for scan in (data, *map(np.asarray, repeats)):
        if len(scan) == 0:
            break
        if (fault := faults.bad_values(scan)) is not None:
            return fault
    taken = subtracted(data, place, repeats, detrend)
    if isinstance(taken, NotMeasured):
        return taken
    if len(taken.patches) < FEWEST_PATCHES:
        return NotMeasured(
            f"there are {len(taken.patches)} patches; at least {FEWEST_PATCHES} are needed",
            "lay more patches, in more slices, or smaller ones",
        )
    return SpectrumTask(taken, spacing_mm, detrend, window, padding, unit).result()


def _checked(
    patches: ArrayLike, spacing_mm: tuple[float, ...], window: str, padding: int
) -> NDArray[np.generic]:
    data = np.asarray(patches)
    if data.ndim not in (3, 4) or data.dtype.kind not in "iufb":
        raise ArgumentError("patches", "must have shape (n, ny, nx) or (n, nz, ny, nx)", data.shape)
    if data.dtype.kind == "b" or min(data.shape[-2:]) < SHORTEST_SIDE:
        raise ArgumentError(
            "patches", f"must be at least {SHORTEST_SIDE} pixels along each side", data.shape
        )
    if len(spacing_mm) != data.ndim - 1 or not all(0 < s < math.inf for s in spacing_mm):
        raise ArgumentError(
            "spacing_mm", f"must hold {data.ndim - 1} lengths greater than 0", spacing_mm
        )
    if window not in WINDOWS:
        raise ArgumentError("window", f"must be one of {', '.join(WINDOWS)}", window)
    if int(padding) != padding or not 1 <= padding <= 8:
        raise ArgumentError("padding", "must be a whole number from 1 to 8", padding)
    return data


def _corners(corners: ArrayLike | None, data: NDArray[np.generic]) -> Whole | None:
    if corners is None:
        return None
    place = np.asarray(corners)
    if place.ndim != 2 or place.shape[0] != len(data) or place.shape[1] not in (2, 3):
        raise ArgumentError(
            "corners", f"must have shape ({len(data)}, 3) or ({len(data)}, 2)", place.shape
        )
    if place.dtype.kind not in "iu":
        raise ArgumentError("corners", "must hold whole numbers", str(place.dtype))
    if place.shape[1] == 2:
        place = np.column_stack([np.zeros(len(place), int), place])
    return place.astype(np.intp)
