"""Where a stack of slices lies: order, gaps, tilt, and the way to patient millimetres.

Everything comes from Image Position and Image Orientation (Patient); with X and Y the direction
cosines of a row and a column, n = X × Y, and S the position of a slice (PS3.3, C.7.6.2.1.1):

    P = S + X · dx · column + Y · dy · row,     z = S · n.

File names, instance numbers, Slice Location and Spacing Between Slices decide nothing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.dicom.facts import ImageFacts

    FloatArray = NDArray[np.float64]

__all__ = ["SAME_PLACE_MM", "Frame", "StackGeometry", "frame_of", "stack_geometry"]

#: two slices nearer than this share a position; positions are written to 0.001 mm or finer
SAME_PLACE_MM: Final = 0.01
#: direction cosines are written with as few as two decimals; worse is no orientation at all
COSINE_TOLERANCE: Final = 0.01
#: below this the lean is rounding of the positions (0.1° over 30 mm is 0.05 mm)
TILT_THRESHOLD_DEG: Final = 0.1
#: a whole tilt tag is commonly rounded to 0.5°
TILT_TAG_TOLERANCE_DEG: Final = 0.5


@dataclass(frozen=True, slots=True)
class Frame:
    """Unit vectors of a slice in LPS.

    Attributes
    ----------
    x, y, n : ndarray, shape (3,)
        Along a row, along a column, and X × Y.
    """

    x: FloatArray
    y: FloatArray
    n: FloatArray


def frame_of(orientation: Sequence[float] | None) -> Frame | None:
    """Return the unit vectors of six direction cosines, or None if they are none.

    Cosines that are unit and at right angles to within 0.01 are made exactly so.

    Examples
    --------
    >>> frame = frame_of((1, 0, 0, 0, -1, 0))
    >>> frame.n.tolist()
    [0.0, 0.0, -1.0]
    >>> frame_of((1, 0, 0, 1, 0, 0)) is None
    True
    """
    if orientation is None or len(orientation) != 6:
        return None
    x = np.array(orientation[:3], dtype=float)
    y = np.array(orientation[3:], dtype=float)
    if not np.all(np.abs([*x, *y]) <= 2):
        return None
    lengths = np.hypot.reduce(x), np.hypot.reduce(y)
    if any(abs(length - 1) > COSINE_TOLERANCE for length in lengths):
        return None
    if abs(float(x @ y)) > COSINE_TOLERANCE:
        return None
    x = x / lengths[0]
    y = y - (x @ y) * x
    y = y / np.hypot.reduce(y)
    return Frame(x, y, np.cross(x, y))


@dataclass(frozen=True, slots=True, eq=False)
class StackGeometry:
    """The grid of an ordered stack.

    Attributes
    ----------
    frame : Frame
        Its unit vectors.
    z_mm : ndarray, shape (nz,)
        Positions along the normal, increasing.
    spacing_mm : (float, float, float)
        dz, dy, dx.
    dz_known : bool
        False for a single slice, whose dz is its thickness.
    origin_mm : (float, float, float)
        z, y, x of voxel (0, 0, 0) in the image frame.
    affine_lps : ndarray, shape (4, 4)
        Index (z, y, x, 1) to LPS millimetres (x, y, z, 1).
    tilt_deg : float
        Angle between stacking direction and normal.
    missing : int
        Slices that the gaps leave room for.
    even : bool
        True if no gap differs from dz by more than 0.01 mm or 1 %.
    aside_mm : float
        How far slices lie beside the straight line from the first to the last.
    """

    frame: Frame
    z_mm: FloatArray
    spacing_mm: tuple[float, float, float]
    dz_known: bool
    origin_mm: tuple[float, float, float]
    affine_lps: FloatArray
    tilt_deg: float
    missing: int
    even: bool
    aside_mm: float

    @property
    def direction_lps(self) -> FloatArray:
        """Rows: unit vectors of the image frame's z, y and x in LPS."""
        return np.stack([self.frame.n, self.frame.y, self.frame.x])


def stack_geometry(images: Sequence[ImageFacts], frame: Frame) -> StackGeometry:
    """Return the geometry of images that are ordered along the normal of `frame`."""
    places: FloatArray = np.array([image.position for image in images], dtype=float)
    z = places @ frame.n
    dy, dx = images[0].pixel_spacing or (1.0, 1.0)
    gaps = np.diff(z)
    if gaps.size:
        dz, even, missing = _spacing(gaps)
        step = _stacking_step(places, z, dz)
    else:
        dz = images[0].acquisition.slice_thickness_mm or 1.0
        even, missing, step = True, 0, dz * frame.n
    lean = step - (step @ frame.n) * frame.n
    tilt = math.degrees(math.atan2(float(np.hypot.reduce(lean)), float(step @ frame.n)))
    affine: FloatArray = np.eye(4)
    affine[:3, 0], affine[:3, 1], affine[:3, 2] = step, frame.y * dy, frame.x * dx
    affine[:3, 3] = places[0]
    first: Any = places[0]
    return StackGeometry(
        frame=frame,
        z_mm=z,
        spacing_mm=(float(dz), dy, dx),
        dz_known=bool(gaps.size),
        origin_mm=(float(first @ frame.n), float(first @ frame.y), float(first @ frame.x)),
        affine_lps=affine,
        tilt_deg=tilt if tilt > TILT_THRESHOLD_DEG else 0.0,
        missing=missing,
        even=even,
        aside_mm=_aside(places, z, step / dz),
    )


def _spacing(gaps: FloatArray) -> tuple[float, bool, int]:
    """Return dz, whether the gaps are even, and how many slices they leave room for.

    dz is the mean of even gaps and the lower median of uneven ones.
    """
    middle = float(np.sort(gaps)[(gaps.size - 1) // 2])
    tolerance = max(0.01, 0.01 * middle)
    if np.all(np.abs(gaps - middle) <= tolerance):
        return float(np.mean(gaps)), True, 0
    multiples = np.rint(gaps / middle)
    wide = multiples >= 2
    # a gap is a hole if it is a whole number of steps; each step may be off by the tolerance
    holes = wide & (np.abs(gaps - multiples * middle) <= tolerance * multiples)
    return middle, False, int(np.sum(multiples[holes] - 1))


def _aside(places: FloatArray, z: FloatArray, slope: FloatArray) -> float:
    """Return the largest distance of a slice from the straight line through the first."""
    line = places[0] + np.outer(z - z[0], slope)
    return float(np.max(np.hypot.reduce(places - line, axis=1)))


def _stacking_step(places: FloatArray, z: FloatArray, dz: float) -> FloatArray:
    """Return the vector from one slice's first voxel to the next one's, its normal part dz."""
    whole = places[-1] - places[0]
    step: FloatArray = whole * (dz / (z[-1] - z[0]))
    return step
