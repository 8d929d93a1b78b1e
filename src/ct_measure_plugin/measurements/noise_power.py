"""The noise power spectrum of patches laid out in the regions."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, ClassVar, Literal, cast

import numpy as np
from pydantic import Field

from ct_measure_plugin.measurements.base import AREAS, Measurement, RegionNeed, Settings
from ct_measure_plugin.physics.coverage import centres_inside, slices_of
from ct_measure_plugin.physics.noise_power import NoisePower, noise_power
from ct_measure_plugin.physics.patch_layout import lay_patches
from ct_measure_plugin.physics.regions import Box
from ct_measure_plugin.physics.results import NotMeasured, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

    Whole = NDArray[np.intp]

__all__ = ["MeasureNoisePower", "NoisePowerSettings", "patch_places"]


class NoisePowerSettings(Settings):
    """Settings of the noise power spectrum."""

    layout: Literal["grid", "ring", "by hand"] = Field(
        "grid",
        title="Patches",
        description="grid: rows and columns that fill each region; ring: on a circle about each"
        " region's middle, where the noise is alike; by hand: one patch in the middle of each"
        " region",
    )
    patch_px: int = Field(
        64, ge=8, le=512, title="Patch size (px)", description="pixels along a patch's side"
    )
    overlap: float = Field(
        0.5,
        ge=0.0,
        le=0.9,
        description="share of a side that neighbouring patches have in common; with a Hann window"
        " one half loses no data",
    )
    ring_radius_mm: float | None = Field(
        None,
        gt=0,
        title="Ring radius (mm)",
        description="distance of the ring's patches from the region's middle; empty: 0.6 of the"
        " region's radius",
    )
    slice_step: int = Field(
        1, ge=1, title="Slice step", description="use every n-th slice of the range"
    )
    depth: int = Field(
        1,
        ge=1,
        le=256,
        title="Patch depth (slices)",
        description="1: spectra of single slices; more: patches of so many slices and a spectrum"
        " in three dimensions",
    )
    detrend: Literal["none", "mean", "plane", "quadratic", "slices"] = Field(
        "quadratic",
        description="what is taken out of each patch: a polynomial, or what neighbouring slices"
        " share. For repeat scans subtract them first and take mean",
    )
    window: Literal["none", "hann", "hamming", "cosine"] = Field(
        "hann", description="taper of the patches against leakage; its power is given back"
    )
    padding: int = Field(
        1,
        ge=1,
        le=8,
        title="Zero padding",
        description="length of the transform in patch lengths: a finer curve, no more knowledge",
    )


@dataclass(frozen=True, slots=True)
class PatchPlaces:
    """Where the patches lie.

    Attributes
    ----------
    corners : ndarray of int, shape (n, 3)
        Slice, row and column of each first voxel.
    depth, side : int
        Slices, and rows and columns, of a patch.
    """

    corners: Whole
    depth: int
    side: int


def patch_places(
    volume: Volume, regions: Sequence[Region], settings: NoisePowerSettings
) -> PatchPlaces:
    """Return where the patches of a measurement lie; a dock draws them from this.

    A patch that several regions hold is counted once.
    """
    found: dict[tuple[int, int, int], None] = {}
    for region in regions:
        slices = slices_of(region, volume)[:: settings.slice_step]
        starts = slices if settings.depth == 1 else _stacks(slices, settings.depth)
        known: Whole | None = None
        for k in starts:
            if known is None or region.kind == "mask":
                known = _in_plane(volume, region, settings, k)
            for row, column in known.tolist():
                found[k, row, column] = None
    corners = np.asarray(list(found), dtype=np.intp).reshape(-1, 3)
    return PatchPlaces(corners, settings.depth, settings.patch_px)


def _stacks(slices: list[int], depth: int) -> list[int]:
    """Return the first slices of stacks that lie end to end and within the range."""
    if not slices:
        return []
    return list(range(slices[0], slices[-1] - depth + 2, depth))


def _in_plane(volume: Volume, region: Region, settings: NoisePowerSettings, k: int) -> Whole:
    cover = centres_inside(region, volume, k)
    size = settings.patch_px
    if settings.layout != "by hand":
        return lay_patches(
            cover,
            spacing_mm=volume.spacing_mm[1:],
            size_px=size,
            layout=settings.layout,
            overlap=settings.overlap,
            radius_mm=settings.ring_radius_mm,
        )
    if not cover.weights.any():
        return np.zeros((0, 2), dtype=np.intp)
    first = np.array([cover.rows.start, cover.columns.start])
    middle = np.argwhere(cover.weights > 0).mean(axis=0) + first
    corner = np.rint(middle - (size - 1) / 2).astype(np.intp)
    fits = np.all(corner >= 0) and np.all(corner + size <= volume.shape[1:])
    return corner[None] if fits else np.zeros((0, 2), dtype=np.intp)


class MeasureNoisePower(Measurement):
    """Noise power spectrum, radial mean, peak and mean frequency, SD."""

    name: ClassVar[str] = "noise_power"
    title: ClassVar[str] = "Noise power spectrum"
    summary: ClassVar[str] = "How much noise there is and of what texture, from uniform material."
    settings_type: ClassVar[type[Settings]] = NoisePowerSettings
    result_type: ClassVar[type[Result]] = NoisePower
    regions: ClassVar[RegionNeed] = RegionNeed(AREAS, together=True)
    columns: ClassVar[tuple[str, ...]] = (
        "sd",
        "pixel_sd",
        "peak_frequency",
        "mean_frequency",
        "patches",
        "independent_patches",
    )

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> NoisePower | NotMeasured:
        """Measure the patches of all regions as one set."""
        wanted = cast("NoisePowerSettings", settings)
        if (refusal := _unfit(volume, wanted)) is not None:
            return refusal
        places = patch_places(volume, regions, wanted)
        if not len(places.corners):
            return NotMeasured(
                f"no patch of {wanted.patch_px} × {wanted.patch_px} pixels fits into the regions",
                "draw them larger, or make the patches smaller",
                volume.cautions,
            )
        patches = _cut(volume, places)
        if isinstance(patches, NotMeasured):
            return patches
        deep = wanted.depth > 1
        found = noise_power(
            patches,
            spacing_mm=volume.spacing_mm if deep else volume.spacing_mm[1:],
            detrend=wanted.detrend,
            window=wanted.window,
            corners=places.corners,
            padding=wanted.padding,
            unit=volume.unit,
        )
        return replace(found, cautions=(*volume.cautions, *found.cautions))

    def marks(
        self,
        volume: Volume,
        regions: Sequence[Region],
        settings: Settings,
        answer: Result | NotMeasured,  # noqa: ARG002 - patches are laid before they are measured
    ) -> tuple[Region, ...]:
        """Return the patches as boxes, each on its slice or over its depth."""
        places = patch_places(volume, regions, cast("NoisePowerSettings", settings))
        return tuple(_outline(volume, places, corner) for corner in places.corners.tolist())


def _outline(volume: Volume, places: PatchPlaces, corner: list[int]) -> Box:
    """Return the square that a patch's pixels cover."""
    k, row, column = corner
    _, dy, dx = volume.spacing_mm
    _, y, x = volume.origin_mm
    half = (places.side - 1) / 2
    z = volume.positions_mm[k : k + places.depth]
    return Box(
        (y + (row + half) * dy, x + (column + half) * dx),
        (places.side * dy, places.side * dx),
        z_mm=float(z[0]) if len(z) == 1 else (float(z[0]), float(z[-1])),
    )


def _unfit(volume: Volume, settings: NoisePowerSettings) -> NotMeasured | None:
    """Refuse volumes whose pixels do not carry the noise any more."""
    codes = {caution.code for caution in volume.cautions}
    if "lossy-compression" in codes:
        return NotMeasured(
            "the pixels were compressed with loss, which removes noise",
            "use the series without lossy compression",
            volume.cautions,
        )
    if settings.depth > 1 and not volume.evenly_spaced:
        return NotMeasured(
            "the slices are not evenly spaced, so that frequencies along z have no meaning",
            "measure the spectra of single slices (depth 1)",
            volume.cautions,
        )
    return None


def _cut(volume: Volume, places: PatchPlaces) -> NDArray[np.generic] | NotMeasured:
    """Return the patches, shape (n, side, side) or (n, depth, side, side)."""
    depth, side = places.depth, places.side
    needed = sorted({int(k) + d for k in np.unique(places.corners[:, 0]) for d in range(depth)})
    found = np.empty((len(places.corners), depth, side, side), dtype=volume.hu.dtype)
    for k in needed:
        plane = volume.plane(k)
        padding = volume.padding(k, plane)
        for i in np.flatnonzero((places.corners[:, 0] <= k) & (k < places.corners[:, 0] + depth)):
            first, row, column = places.corners[i]
            window = np.s_[row : row + side, column : column + side]
            if padding is not None and padding[window].any():
                return NotMeasured(
                    f"a patch at row {row}, column {column} of slice {k} holds padding",
                    "draw the regions within the reconstructed circle",
                    volume.cautions,
                )
            found[i, k - first] = plane[window]
    if volume.representable_hu is not None:
        low, high = volume.representable_hu
        clipped = float(np.mean((found <= low) | (found >= high)))
        if clipped > 1e-3:  # a Gaussian's tail beyond 3 SD; more biases the variance
            return NotMeasured(
                f"{100 * clipped:.2g} % of the values stand at the end of the stored range",
                "reconstruct with an extended range of CT numbers, or measure elsewhere",
                volume.cautions,
            )
    return found if depth > 1 else found[:, 0]
