"""The Volume: CT numbers on a grid whose millimetres, orientation and faults are known."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.results import Caution

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["Acquisition", "HeaderWindow", "Source", "Volume"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Acquisition:
    """How one slice was made, as far as its header says; nothing here identifies a person."""

    kvp: float | None = None
    tube_current_ma: float | None = None
    exposure_mas: float | None = None
    exposure_time_ms: float | None = None
    ctdi_vol_mgy: float | None = None
    slice_thickness_mm: float | None = None
    kernel: str = ""
    reconstruction_diameter_mm: float | None = None
    isocentre_mm: tuple[float, float, float] | None = None
    acquisition_number: int | None = None


@dataclass(frozen=True, slots=True)
class HeaderWindow:
    """A display window that the series' header offers; it never changes data.

    Attributes
    ----------
    centre, width : float
        In the Volume's unit, as the header gives them.
    explanation : str
        What the header calls it; may be empty.
    function : {"LINEAR", "LINEAR_EXACT", "SIGMOID"}
        How centre and width are meant (DICOM PS3.3, C.11.2.1.2).
    """

    centre: float
    width: float
    explanation: str = ""
    function: Literal["LINEAR", "LINEAR_EXACT", "SIGMOID"] = "LINEAR"


@dataclass(frozen=True, slots=True, kw_only=True)
class Source:
    """Where a Volume came from, in words that may leave the house.

    Attributes
    ----------
    title : str
        What people call it: a series description free of names, a layer's name, a file name.
    series_digest : str
        A salted-free SHA-256 of the series UID (hexadecimal), or "" for a plain array.
    content_digest : str
        A SHA-256 over shape, spacing and values; "" until someone computes it.
    spacing_source : str
        "DICOM positions", "napari layer", "entered by hand", …
    """

    title: str = ""
    series_digest: str = ""
    content_digest: str = ""
    spacing_source: str = "argument"


@dataclass(frozen=True, slots=True, eq=False)
class Volume:
    """CT numbers with their geometry, acquisition facts and cautions.

    Parameters
    ----------
    hu : array, shape (nz, ny, nx)
        CT numbers; int16 where they are whole, float otherwise. A 2-D array becomes one slice. A
        dask array with one chunk a slice stays lazy.
    spacing_mm : (float, float, float)
        dz, dy, dx: distance between slices, rows and columns.
    origin_mm : (float, float, float)
        z, y, x of the centre of voxel (0, 0, 0) in the image frame.
    slice_positions_mm : ndarray, shape (nz,), optional
        z of every slice centre, increasing; by default evenly spaced from the origin.
    affine_lps : ndarray, shape (4, 4), optional
        Voxel index (z, y, x, 1) to patient millimetres (x, y, z, 1), LPS: +x to the patient's
        left, +y to the back, +z to the head. None where no patient frame is known.
    direction_lps : ndarray, shape (3, 3), optional
        Rows: unit vectors of the image frame's z, y and x in LPS.
    tilt_deg : float
        Angle between the stacking direction and the slice normal.
    unit : str
        "HU", or what the header calls the rescaled unit.
    padding_hu : ndarray, shape (nz, 2), optional
        Per slice the closed range of values that mean "no data here"; NaN for none.
    representable_hu : (float, float), optional
        Lowest and highest value the encoding can hold: values there are saturated.
    acquisition : tuple of Acquisition
        One a slice, or empty.
    cautions : tuple of Caution
        Faults found on reading; they travel into every result.
    source : Source
        Provenance.
    windows : tuple of HeaderWindow
        The display windows the header offers.
    patient_position : str
        "HFS", "FFP", …: how the patient lay, as the header says; the affine already holds it.

    Examples
    --------
    >>> volume = Volume(np.zeros((5, 64, 64), np.int16), spacing_mm=(2.0, 0.5, 0.5))
    >>> volume.shape, volume.evenly_spaced
    ((5, 64, 64), True)
    >>> volume.nearest_slice(4.9)
    2
    """

    hu: Any
    spacing_mm: tuple[float, float, float]
    origin_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)
    slice_positions_mm: NDArray[np.float64] | None = None
    affine_lps: NDArray[np.float64] | None = None
    direction_lps: NDArray[np.float64] | None = None
    tilt_deg: float = 0.0
    unit: str = "HU"
    padding_hu: NDArray[np.float64] | None = None
    representable_hu: tuple[float, float] | None = None
    acquisition: tuple[Acquisition, ...] = ()
    cautions: tuple[Caution, ...] = ()
    source: Source = field(default_factory=Source)
    windows: tuple[HeaderWindow, ...] = ()
    patient_position: str = ""

    def __post_init__(self) -> None:
        values = self.hu if hasattr(self.hu, "ndim") else np.asarray(self.hu)
        if values.ndim == 2:
            values = values[None]
        if values.ndim != 3 or 0 in values.shape:
            raise ArgumentError("hu", "must have shape (nz, ny, nx), none of them 0", values.shape)
        if values.dtype.kind not in "iuf":
            raise ArgumentError("hu", "must hold real numbers", str(values.dtype))
        object.__setattr__(self, "hu", values)
        spacing = tuple(float(step) for step in self.spacing_mm)
        if len(spacing) == 2:
            spacing = (1.0, *spacing)
        if len(spacing) != 3 or not all(math.isfinite(s) and s > 0 for s in spacing):
            raise ArgumentError(
                "spacing_mm", "must be (dz, dy, dx), each greater than 0", self.spacing_mm
            )
        object.__setattr__(self, "spacing_mm", spacing)
        positions = self.slice_positions_mm
        if positions is None:
            positions = self.origin_mm[0] + spacing[0] * np.arange(values.shape[0])
        positions = np.asarray(positions, dtype=float)
        if positions.shape != (values.shape[0],) or not bool(np.all(np.diff(positions) > 0)):
            raise ArgumentError(
                "slice_positions_mm",
                f"must hold {values.shape[0]} increasing positions",
                positions,
            )
        object.__setattr__(self, "slice_positions_mm", positions)

    @property
    def shape(self) -> tuple[int, int, int]:
        """Numbers of slices, rows and columns."""
        nz, ny, nx = self.hu.shape
        return int(nz), int(ny), int(nx)

    @property
    def positions_mm(self) -> NDArray[np.float64]:
        """The z of every slice centre, shape (nz,)."""
        assert self.slice_positions_mm is not None  # noqa: S101 - set in __post_init__
        return self.slice_positions_mm

    @property
    def is_hu(self) -> bool:
        """True if the values are Hounsfield units."""
        return self.unit == "HU"

    @property
    def evenly_spaced(self) -> bool:
        """True if no gap differs from dz by more than 0.01 mm or 1 %, whichever is larger."""
        gaps = np.diff(self.positions_mm)
        dz = self.spacing_mm[0]
        return bool(np.all(np.abs(gaps - dz) <= max(0.01, 0.01 * dz)))

    def nearest_slice(self, z_mm: float) -> int:
        """Return the index of the slice whose centre is nearest to a position.

        Raises
        ------
        ArgumentError
            If the position lies more than half a slice gap outside the volume.
        """
        positions = self.positions_mm
        index = int(np.argmin(np.abs(positions - z_mm)))
        inside = positions[0] <= z_mm <= positions[-1]
        if not inside and abs(positions[index] - z_mm) > self.spacing_mm[0] * 0.5 + 1e-6:
            raise ArgumentError(
                "z_mm", f"must lie within {positions[0]:g} to {positions[-1]:g} mm", z_mm
            )
        return index

    def plane(self, index: int) -> NDArray[Any]:
        """Return one slice as an in-memory array, shape (ny, nx)."""
        return np.asarray(self.hu[index])

    def padding(self, index: int, plane: NDArray[Any] | None = None) -> NDArray[np.bool_] | None:
        """Return where a slice holds padding, shape (ny, nx), or None if it holds none by rule.

        Parameters
        ----------
        index : int
            The slice.
        plane : ndarray, optional
            Its values, or any part of them, if the caller has them already.
        """
        if self.padding_hu is None:
            return None
        low, high = self.padding_hu[index]
        if math.isnan(low):
            return None
        values = self.plane(index) if plane is None else plane
        inside: NDArray[np.bool_] = (values >= low) & (values <= high)
        return inside
