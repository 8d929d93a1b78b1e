"""Pixels of a region out of a Volume: values, coverage, and what had to be left out."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.coverage import Rule, plane_coverage, reach_of, slices_of
from ct_measure_plugin.physics.regions import Mask
from ct_measure_plugin.physics.results import Caution, NotMeasured

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

    Floats = NDArray[np.float64]

__all__ = ["Gathered", "Lost", "gather", "gather_enough", "left_out", "shared"]

#: Fewer pixels than this are refused: a spread from so few tells nothing (common practice).
TOO_FEW_PIXELS = 9


@dataclass(frozen=True, slots=True, eq=False)
class Gathered:
    """A region's pixels.

    Attributes
    ----------
    values, weights : ndarray, shape (nz, h, w) or, for one slice, (h, w)
        CT numbers and coverage on the crop; weight 0 where a pixel was left out.
    slices : list of int
        Indices of the slices.
    spacing_mm : tuple of float
        Of the crop's axes.
    rows, columns : slice
        Where the crop lies in the image.
    cautions : tuple of Caution
        The volume's, and what was left out here.
    """

    values: Floats
    weights: Floats
    slices: list[int]
    spacing_mm: tuple[float, ...]
    rows: slice
    columns: slice
    cautions: tuple[Caution, ...]

    @property
    def stack(self) -> Floats:
        """The weights as a stack of slices, shape (nz, h, w)."""
        return self.weights if self.weights.ndim == 3 else self.weights[None]


def gather_enough(volume: Volume, region: Region, *, rule: Rule) -> Gathered | NotMeasured:
    """Return what :func:`gather` does, or NotMeasured if too few pixels have a spread to quote."""
    found = gather(volume, region, rule=rule)
    if isinstance(found, NotMeasured):
        return found
    inside = found.weights > 0
    count = int(np.count_nonzero(inside))
    usable = int(np.count_nonzero(inside & np.isfinite(found.values)))
    if usable >= TOO_FEW_PIXELS:
        return found
    if count >= TOO_FEW_PIXELS:
        some = usable or "none"
        return NotMeasured(
            f"{some} of the region's {count} pixels hold{'s' * (usable < 2)} a finite value; at"
            f" least {TOO_FEW_PIXELS} are needed",
            "measure where the image holds values, or look where the missing ones come from",
            found.cautions,
        )
    return NotMeasured(
        f"the region holds {count} pixel{'s' * (count != 1)}; at least {TOO_FEW_PIXELS} are needed",
        "draw it larger, or over more slices",
        found.cautions,
    )


def gather(volume: Volume, region: Region, *, rule: Rule = "area") -> Gathered | NotMeasured:
    """Return the pixels of a region; outside, padding and saturation left out and cautioned.

    So are the pixels beyond the region's own range of values, if it has one.

    NotMeasured if the region misses the volume or nothing is left.
    """
    deep = isinstance(region, Mask) and region.inside.ndim == 3 and len(region.inside) > 1
    if deep and not volume.evenly_spaced:
        return NotMeasured(
            "a mask over several slices has even ones, and the volume's are not",
            "measure slice by slice, or the whole map with label_statistics",
            volume.cautions,
        )
    slices = slices_of(region, volume, rule=rule)
    positions = volume.positions_mm
    covers = []
    for k in slices:
        cover = plane_coverage(
            region,
            volume.shape[1:],
            spacing_mm=volume.spacing_mm[1:],
            origin_mm=volume.origin_mm[1:],
            rule=rule,
            z_mm=float(positions[k]),
            slab_mm=volume.spacing_mm[0],
        )
        if cover.weights.any():
            covers.append((k, cover))
    if not covers:
        return NotMeasured("the region lies outside the volume", "move it onto the image")
    rows, columns = _union([c.rows for _, c in covers]), _union([c.columns for _, c in covers])
    shape = (len(covers), rows.stop - rows.start, columns.stop - columns.start)
    values, weights = np.zeros(shape), np.zeros(shape)
    padded = clipped = beyond = 0
    for i, (k, cover) in enumerate(covers):
        plane = np.asarray(volume.hu[k, rows, columns])
        values[i] = plane
        own = weights[i, _within(cover.rows, rows), _within(cover.columns, columns)]
        own[...] = cover.weights
        padding = volume.padding(k, plane)
        if padding is not None:
            padded += int(np.count_nonzero(padding & (weights[i] > 0)))
            weights[i][padding] = 0.0
        if region.values is not None:
            low, high = region.values
            other = ~((plane >= low) & (plane <= high)) & (weights[i] > 0)
            beyond += int(np.count_nonzero(other))
            weights[i][other] = 0.0
        if volume.representable_hu is not None:
            low, high = volume.representable_hu
            saturated = ((plane <= low) | (plane >= high)) & (weights[i] > 0)
            clipped += int(np.count_nonzero(saturated))
            weights[i][saturated] = 0.0
    lost = Lost(
        max(c.outside for _, c in covers), padded, clipped, beyond, int(np.count_nonzero(weights))
    )
    cautions = (*volume.cautions, *left_out(lost, region, volume))
    if not weights.any():
        return NotMeasured(*_nothing(lost, region), cautions)
    if len(covers) == 1:
        values, weights = values[0], weights[0]
        spacing: tuple[float, ...] = volume.spacing_mm[1:]
    else:
        spacing = volume.spacing_mm
    return Gathered(values, weights, [k for k, _ in covers], spacing, rows, columns, cautions)


def shared(one: Gathered, other: Gathered) -> float:
    """Return the weight of the pixels that two regions share, as a fraction of the smaller one."""
    height, width = (
        slice(max(a.start, b.start), min(a.stop, b.stop))
        for a, b in ((one.rows, other.rows), (one.columns, other.columns))
    )
    if height.start >= height.stop or width.start >= width.stop:
        return 0.0
    both = 0.0
    for i, k in enumerate(one.slices):
        if k in other.slices:
            mine = one.stack[i, _within(height, one.rows), _within(width, one.columns)]
            j = other.slices.index(k)
            theirs = other.stack[j, _within(height, other.rows), _within(width, other.columns)]
            both += float(np.minimum(mine, theirs).sum())
    return both / min(float(one.weights.sum()), float(other.weights.sum()))


def _union(spans: list[slice]) -> slice:
    return slice(min(s.start for s in spans), max(s.stop for s in spans))


def _within(inner: slice, outer: slice) -> slice:
    return slice(inner.start - outer.start, inner.stop - outer.start)


@dataclass(frozen=True, slots=True)
class Lost:
    """Share outside the image, and pixels left out as padding, saturated or beyond the range."""

    outside: float
    padded: int
    clipped: int
    beyond: int
    kept: int


def _nothing(lost: Lost, region: Region) -> tuple[str, str]:
    """Return why no pixel is left, and the remedy."""
    if lost.beyond and region.values is not None:
        low, high = region.values
        return f"no pixel of the region lies from {low:g} to {high:g}", "widen the range of values"
    only = "saturated pixels and padding" if lost.clipped else "padding"
    return f"the region holds only {only}", "move it onto the image"


def left_out(lost: Lost, region: Region, volume: Volume) -> list[Caution]:
    """Return the cautions that say what was left out of a region."""
    found = []
    if lost.outside > 0:
        found.append(
            Caution(
                "outside-image",
                f"{100 * lost.outside:.1f} % of the region lies outside the image and was left"
                " out.",
                "Move the region onto the image.",
            )
        )
    missing = _beyond_slices(region, volume)
    if missing > 0:
        found.append(
            Caution(
                "outside-image",
                f"The region reaches {missing:.1f} mm beyond the first or last slice; that part"
                " was left out.",
                "Move the region onto the image.",
            )
        )
    if lost.padded:
        found.append(
            Caution(
                "padding-excluded",
                f"{lost.padded} pixels of the region are padding and were left out.",
                "Keep the region within the reconstructed circle.",
            )
        )
    if lost.beyond and region.values is not None:
        low, high = region.values
        found.append(
            Caution(
                "threshold",
                f"Only values from {low:g} to {high:g} count: {lost.kept} of"
                f" {lost.kept + lost.beyond} pixels.",
            )
        )
    if lost.clipped:
        found.append(
            Caution(
                "clipped-values",
                f"{lost.clipped} of {lost.clipped + lost.kept} pixels stand at the end of the"
                " stored range and were left out; mean and SD are biased.",
                "Reconstruct with an extended CT-number range, or measure elsewhere.",
            )
        )
    return found


def _beyond_slices(region: Region, volume: Volume) -> float:
    """Return how far a region reaches beyond the slabs of the first and last slice, in mm."""
    reach = reach_of(region)
    if reach is None:
        return 0.0
    half = volume.spacing_mm[0] / 2
    first, last = float(volume.positions_mm[0]) - half, float(volume.positions_mm[-1]) + half
    missing = max(first - reach[0], reach[1] - last)
    return missing if missing > 1e-6 else 0.0
