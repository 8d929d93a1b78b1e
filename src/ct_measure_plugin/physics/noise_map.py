"""Local noise over an image, and the noise level that most of it has."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.local_sd import LocalSd, checked_window
from ct_measure_plugin.physics.noise_mode import Bins, Mode, chi_factor, mode_of
from ct_measure_plugin.physics.plane_stack import checked_inside, checked_planes, checked_positions
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Picture, Quantity, Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]
    Whole = NDArray[np.intp]

__all__ = ["NoiseMap", "noise_map"]

#: Blocks along each side of the image, over which the uncertainty is judged.
BLOCKS = 8

#: Images of so many rows enter the histogram with every second one: neighbouring windows share nine
#: tenths of their pixels and tell the same.
MANY_ROWS = 256

#: Sets of blocks drawn for the uncertainty of a single slice; they fix it to 11 %.
SLICE_DRAWS = 40

#: Fewer windows have no histogram to speak of; fewer than these are cautioned.
FEWEST, FEW = 400, 2000

#: The bins are chosen by the first slice with so many windows.
FEWEST_OF_A_SLICE = 50


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NoiseMap(Result):
    """Local SDs and their most frequent value.

    Attributes
    ----------
    global_noise : Quantity
        Mode of the histogram of local SDs.
    noise_sd : Quantity
        The SD of which that is the mode: the mode of a window's SD is low by √((ν − 1)/ν).
    windows : Quantity
        Number of windows in the histogram.
    window : Quantity
        Side of a window, mm.
    map_position : Quantity
        z of the slice that `sd_map` shows, mm.
    histogram : Curve
        Share of windows against local SD.
    noise_along_z : Curve
        Mode slice by slice, of the slices with enough windows.
    sd_map : Picture
        Local SD of the slice with the most windows; 0 where there is none.
    """

    global_noise: Quantity
    noise_sd: Quantity
    windows: Quantity
    window: Quantity
    map_position: Quantity
    histogram: Curve
    noise_along_z: Curve
    sd_map: Picture


def noise_map(
    image: ArrayLike,
    *,
    spacing_mm: tuple[float, float],
    z_mm: Sequence[float] | None = None,
    inside: ArrayLike | None = None,
    window_px: int = 11,
    range_hu: tuple[float, float] = (-50.0, 100.0),
    unit: str = "HU",
) -> NoiseMap | NotMeasured:
    """Return the local noise of an image that need not be uniform.

    Parameters
    ----------
    image : array, shape (ny, nx) or (nz, ny, nx)
        Slices.
    spacing_mm : (float, float)
        dy and dx.
    z_mm : sequence of float, optional
        Position of each slice; by default 0, 1, 2 and so on.
    inside : array of bool, shape (ny, nx), optional
        Where to look; a window counts if it lies wholly inside.
    window_px : int
        Side of the square windows, odd.
    range_hu : (float, float)
        A window counts if its mean lies within: by default water and soft tissue. The pixels' own
        values do not matter, so that strong noise is not cut off.
    unit : str
        Of the values.

    Returns
    -------
    NoiseMap or NotMeasured
        NotMeasured if fewer than 400 windows count.

    Raises
    ------
    ArgumentError
        On misuse.

    Notes
    -----
    Windows across structure have larger SDs; they form the histogram's upper tail and leave its
    mode, the global noise level, alone (O. Christianson et al., AJR 205 (2015) W463; details from
    memory). It is comparable between images only for equal windows and equal kernels.

    Examples
    --------
    >>> image = np.random.default_rng(1).normal(40, 12, (256, 256))
    >>> image[:, 128:] += 200
    >>> found = noise_map(image, spacing_mm=(0.5, 0.5))
    >>> bool(abs(found.noise_sd.value - 12) < 0.2), str(found.window)
    (True, '5.5 mm')
    """
    planes = checked_planes(image, spacing_mm)
    z = checked_positions(z_mm, len(planes))
    checked_window(window_px, planes.shape)
    low, high = (float(v) for v in range_hu)
    if not low < high:
        raise ArgumentError("range_hu", "must rise", range_hu)
    allowed = _allowed(planes, inside, window_px)
    tally = _Tally(allowed, window_px, (low, high))
    for k in range(len(planes)):
        tally.add(k, np.asarray(planes[k]))
    if tally.bins is None and tally.total >= FEWEST:
        return NotMeasured("the windows hold no noise", "choose slices that were not made up")
    if tally.bins is None or tally.total < FEWEST:
        return NotMeasured(
            f"{tally.total} windows of {window_px} pixels lie in material of {low:g} to"
            f" {high:g} {unit}; at least {FEWEST} are needed",
            "take another range of CT numbers, smaller windows, or more slices",
        )
    return _assembled(tally, tally.bins, spacing_mm, z, unit)


def _allowed(planes: NDArray[np.generic], inside: ArrayLike | None, window_px: int) -> Flags:
    """Return the pixels around which a window lies wholly inside."""
    shape = planes.shape[1:]
    mask = np.ones(shape, dtype=bool) if inside is None else checked_inside(inside, shape)
    found: Flags = ndimage.minimum_filter(mask, window_px, mode="constant", cval=0)
    return found


def _level(plane: NDArray[np.generic], low: float, high: float) -> float:
    """Return a whole number near the tissue's level, so that whole CT numbers lose nothing."""
    some = np.asarray(plane[::8, ::8], dtype=float)
    within = some[(some >= low) & (some <= high)]
    return float(np.rint(np.median(within))) if within.size else (low + high) / 2


class _Tally:
    """Histograms of local SDs by block and by slice, and the map of the fullest slice."""

    def __init__(self, allowed: Flags, window_px: int, range_hu: tuple[float, float]) -> None:
        self.window_px, self.range = window_px, range_hu
        self.work = LocalSd((allowed.shape[0], allowed.shape[1]), window_px)
        self.good, self.low = np.empty(allowed.shape, bool), np.empty(allowed.shape, bool)
        self.step = 2 if len(allowed) >= MANY_ROWS else 1
        self.place = np.empty(allowed[:: self.step].shape, np.intp)
        rows, columns = (np.minimum(np.arange(n) * BLOCKS // n, BLOCKS - 1) for n in allowed.shape)
        self.allowed = allowed
        self.block = (rows[:, None] * BLOCKS + columns[None, :]).astype(np.intp)
        self.offset = self.block
        self.bins: Bins | None = None
        self.blocks = np.zeros((0, 0))
        self.slices: dict[int, Floats] = {}
        self.total = 0
        self.fullest = 0
        self.best = 0
        self.map = np.zeros(allowed.shape, dtype=np.float32)

    def add(self, k: int, plane: NDArray[np.generic]) -> None:
        """Count one slice."""
        low, high = self.range
        mean, sd = self.work.of(plane, _level(plane, low, high))
        good = self.good
        np.greater_equal(mean, low, out=self.low)
        np.less_equal(mean, high, out=good)
        np.logical_and(good, self.low, out=good)
        np.logical_and(good, self.allowed, out=good)
        windows = int(np.count_nonzero(good))
        self.total += windows
        if self.bins is None:
            middle = float(np.median(sd[good])) if windows >= FEWEST_OF_A_SLICE else 0.0
            if middle <= 0:
                return  # a slice without windows, or without noise, tells nothing of the bins
            self.bins = Bins.around(middle)
            self.blocks = np.zeros((BLOCKS * BLOCKS, self.bins.count))
            self.offset = self.block * (self.bins.count + 2)
        if windows > self.fullest:
            self.fullest, self.best = windows, k
            self.map = np.where(good, sd, np.float32(0.0))
        counted = self._counted(sd, self.bins)
        self.blocks += counted
        self.slices[k] = counted

    def _counted(self, sd: NDArray[np.float32], bins: Bins) -> Floats:
        """Return the histogram of each block, shape (blocks, bins); it uses `sd` up.

        What is not to be counted goes into a bin before the first, what is too large into one
        behind the last.
        """
        some = sd[:: self.step]
        some *= np.float32(1.0 / bins.width)
        some += np.float32(1.0)
        np.minimum(some, np.float32(bins.count + 1), out=some)
        np.copyto(some, np.float32(0.0), where=~self.good[:: self.step])  # a product keeps NaN
        np.copyto(self.place, some, casting="unsafe")
        self.place += self.offset[:: self.step]
        shape = (BLOCKS * BLOCKS, bins.count + 2)
        counted = np.bincount(self.place.ravel(), minlength=shape[0] * shape[1])
        return counted.reshape(shape)[:, 1:-1].astype(float)


def _assembled(
    tally: _Tally, bins: Bins, spacing_mm: tuple[float, float], z: Floats, unit: str
) -> NoiseMap:
    used = tally.blocks.sum(axis=1) > 0
    mode = mode_of(tally.blocks[used], bins)
    factor = chi_factor(mode.value, mode.lower_sd)
    share = mode.smooth / tally.blocks.sum()
    along = [
        (z[k], mode_of(counts[counts.sum(axis=1) > 0], bins, SLICE_DRAWS))
        for k, counts in tally.slices.items()
        if counts.sum() * tally.step >= FEWEST
    ]
    return NoiseMap(
        global_noise=Quantity(mode.value, unit, mode.doubt),
        noise_sd=Quantity(mode.value / factor, unit, mode.doubt / factor),
        windows=Quantity(float(tally.total), "", 0.0),
        window=Quantity(tally.window_px * max(spacing_mm), "mm", 0.0),
        map_position=Quantity(float(z[tally.best]), "mm", 0.0),
        histogram=Curve(bins.middle, share, None, "local SD", unit, "share of windows", ""),
        noise_along_z=Curve(
            np.array([p for p, _ in along]),
            np.array([m.value for _, m in along]),
            np.array([m.doubt for _, m in along]),
            "z",
            "mm",
            "noise",
            unit,
        ),
        sd_map=Picture(tally.map.astype(float), spacing_mm, ("y", "x"), ("mm", "mm"), unit),
        cautions=_cautions(tally.total, mode, unit),
    )


def _cautions(windows: int, mode: Mode, unit: str) -> tuple[Caution, ...]:
    notes = []
    if windows < FEW:
        notes.append(
            Caution(
                "few-windows",
                f"The noise level rests on {windows} windows; {FEW} or more are better.",
                "Take more slices, or a wider range of CT numbers.",
            )
        )
    if mode.second is not None:
        notes.append(
            Caution(
                "several-noise-levels",
                f"The histogram has another peak at {mode.second:.3g} {unit}: two materials, or"
                " two parts of different noise.",
                "Narrow the range of CT numbers, or measure the parts one by one.",
            )
        )
    return tuple(notes)
