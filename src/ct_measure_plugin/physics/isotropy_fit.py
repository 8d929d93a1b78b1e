"""1 / f50² by direction and distance: the linear model of blur, and which terms can be told."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["AT_CENTER", "Fit", "fit_places"]

#: Terms are left out from this condition index of the scaled columns (Belsley et al. 1980).
MOST_CONDITION = 30.0

#: Places nearer to the isocentre than this have no radial direction, mm.
AT_CENTER = 1.0


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """1 / f50² = A + B cos 2φ + C sin 2φ + r² (P + Q cos 2ψ); terms that were left out are 0.

    Attributes
    ----------
    mix : ndarray, shape (5,)
        A, B, C, P, Q.
    covariance : ndarray, shape (5, 5)
        Of these.
    has_direction, has_distance, has_facing : bool
        Whether B and C, P, and Q were fitted.
    """

    mix: Floats
    covariance: Floats
    has_direction: bool
    has_distance: bool
    has_facing: bool

    @staticmethod
    def level(r: float, facing_deg: float | None = None) -> Floats:
        """Return the row at a distance, mean over directions or at an angle to the radius."""
        cos = 0.0 if facing_deg is None else math.cos(2 * math.radians(facing_deg))
        return np.array([1.0, 0.0, 0.0, r * r, r * r * cos])

    @staticmethod
    def ring(direction_deg: Floats) -> Floats:
        """Return the rows of directions at the isocentre, shape (n, 5)."""
        turn = 2 * np.radians(direction_deg)
        zero = np.zeros_like(turn)
        return np.stack([zero + 1, np.cos(turn), np.sin(turn), zero, zero], axis=1)


def fit_places(
    f50: Floats,
    doubt: Floats,
    direction_deg: Floats,
    distance_mm: Floats,
    facing_deg: Floats,
    half_width_deg: Floats,
) -> Fit:
    """Return the weighted least-squares fit with the terms that the places can tell apart.

    Terms are tried in their order: direction, distance, angle to the radius. One that leaves no
    degree of freedom, or hardly differs from those before, is left out.
    """
    turn, wide = 2 * np.radians(direction_deg), 2 * np.radians(half_width_deg)
    share = np.sinc(wide / math.pi)  # of a cosine that a mean over a sector keeps
    square = distance_mm**2
    off = distance_mm > AT_CENTER
    facing = np.where(off, share * np.cos(2 * np.radians(facing_deg)), 0.0)
    columns = np.stack(
        [
            np.ones_like(f50),
            share * np.cos(turn),
            share * np.sin(turn),
            square,
            square * facing,
        ],
        axis=1,
    )
    scale = f50**3 / (2 * doubt)  # one over the uncertainty of 1 / f50²
    used = [0]
    for group in ([1, 2], [3], [4]):
        if group == [4] and 3 not in used:
            continue
        if len(f50) > len(used) + len(group) and _condition(columns, used + group):
            used += group
    design = columns[:, used] * scale[:, None]
    inverse = np.linalg.pinv(design)
    mix = inverse @ (f50**-2 * scale)
    left = f50**-2 * scale - design @ mix
    free = len(f50) - len(used)
    excess = max(1.0, float(left @ left) / free) if free > 0 else 1.0
    full, spread = np.zeros(5), np.zeros((5, 5))
    full[used] = mix
    spread[np.ix_(used, used)] = excess * (inverse @ inverse.T)
    return Fit(full, spread, 1 in used, 3 in used, 4 in used)


def _condition(columns: Floats, used: list[int]) -> bool:
    part = columns[:, used]
    length = np.sqrt(np.sum(part**2, axis=0))
    if not (length > 0).all():
        return False
    return bool(np.linalg.cond(part / length) < MOST_CONDITION)
