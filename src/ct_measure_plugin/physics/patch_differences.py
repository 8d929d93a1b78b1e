"""Differences of repeat scans or of neighbouring slices, as patches with the noise of one."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import detrend as trends
from ct_measure_plugin.physics.patch_independence import neighbour_pairs
from ct_measure_plugin.physics.results import Caution, NotMeasured

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    Whole = NDArray[np.intp]

__all__ = ["FEWEST_PATCHES", "Taken", "subtracted"]

#: Fewer patches than this show neither whether the noise is stationary nor how sure the mean is.
FEWEST_PATCHES = 4

#: Correlation of neighbouring slices beyond which their difference holds too little of the noise.
HIGHEST_CORRELATION = 0.9


@dataclass(frozen=True, slots=True, eq=False)
class Taken:
    """Patches ready for the transform.

    Attributes
    ----------
    patches : ndarray, shape (n, …)
        The values.
    corners : ndarray of int, shape (n, 3), or None
        Where they lie.
    factor, factor_doubt : float
        What their spectrum is to be multiplied by, and its relative standard uncertainty.
    cautions : tuple of Caution
        What was done to them.
    """

    patches: NDArray[np.generic]
    corners: Whole | None
    factor: float = 1.0
    factor_doubt: float = 0.0
    cautions: tuple[Caution, ...] = ()


def subtracted(
    data: NDArray[np.generic],
    place: Whole | None,
    repeats: Sequence[ArrayLike],
    detrend: trends.Detrend,
) -> Taken | NotMeasured:
    """Return the patches, or their differences where these are asked for.

    Raises
    ------
    ArgumentError
        If repeats and `detrend` do not fit each other.
    """
    if detrend == "repeat":
        scans = [np.asarray(scan, dtype=float) for scan in (data, *repeats)]
        corners = None if place is None else np.concatenate([place] * max(len(scans) - 1, 1))
        if corners is not None:  # contrasts are independent: set apart in slices out of reach
            apart = 2 * (int(np.ptp(corners[:, 0])) + data.shape[1] + 1)
            corners[:, 0] += apart * (np.arange(len(corners)) // len(data))
        note = Caution(
            "repeat-difference",
            f"What {len(scans)} scans share was subtracted; the spectrum is that of one scan.",
            "It holds if they were taken at the same place and tube position.",
        )
        return Taken(trends.repeat_differences(scans), corners, cautions=(note,))
    if len(repeats):
        raise ArgumentError("repeats", "must be empty unless detrend is 'repeat'", len(repeats))
    if detrend == "slices":
        return _slice_differences(data, place)
    return Taken(data, place)


def _slice_differences(data: NDArray[np.generic], place: Whole | None) -> Taken | NotMeasured:
    if data.ndim == 4:
        raise ArgumentError("detrend", "must not be 'slices' for deep patches", "slices")
    if place is None:
        pairs = np.arange(len(data) // 2 * 2, dtype=np.intp).reshape(-1, 2)
    else:
        pairs = neighbour_pairs(place, 1)
        first = int(place[:, 0].min())
        pairs = pairs[(place[pairs[:, 0], 0] - first) % 2 == 0]
    if len(pairs) < FEWEST_PATCHES:
        return NotMeasured(
            f"there are {len(pairs)} pairs of patches in neighbouring slices; at least"
            f" {FEWEST_PATCHES} are needed",
            "measure more slices, without a step between them",
        )
    flat = data.reshape(len(data), -1).astype(float)
    basis = trends.polynomial_basis(data.shape[1:], 2)
    flat = flat - flat.mean(axis=1, keepdims=True)
    flat -= (flat @ basis.T) @ basis
    a, b = flat[pairs[:, 0]], flat[pairs[:, 1]]
    joint = np.einsum("ij,ij->i", a, b)
    power = (np.einsum("ij,ij->i", a, a) + np.einsum("ij,ij->i", b, b)) / 2
    rho = float(joint.sum() / power.sum())
    doubt = float(np.std(joint - rho * power, ddof=1) / math.sqrt(len(pairs)) / power.mean())
    if rho > HIGHEST_CORRELATION:
        return NotMeasured(
            f"neighbouring slices correlate by {rho:.2f}; their difference holds too little noise",
            "use a polynomial, a repeat scan, or slices that do not overlap",
        )
    rho = rho if abs(rho) > 3 * doubt else 0.0
    note = Caution(
        "slice-difference",
        f"Neighbouring slices were subtracted; they correlate by {rho:.2f}, and the spectrum was"
        f" divided by {1 - rho:.2f} for it.",
        "Where the correlation depends on frequency the shape is biased; a repeat scan is better.",
    )
    raw = data.astype(float)
    corners = None if place is None else place[pairs[:, 0]]
    return Taken(
        trends.neighbour_differences(raw, pairs), corners, 1 / (1 - rho), doubt / (1 - rho), (note,)
    )
