"""The scan itself: from a recipe to a Volume."""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple, TypeAlias

import numpy as np

from ct_measure_plugin.errors import Cancelled
from ct_measure_plugin.physics.results import Caution
from ct_measure_plugin.physics.volume import Acquisition, Source, Volume
from ct_measure_plugin.virtual_scanner.detector import read_out
from ct_measure_plugin.virtual_scanner.projector import projection
from ct_measure_plugin.virtual_scanner.reconstruction import reconstruct

if TYPE_CHECKING:
    from collections.abc import Callable, Hashable

    from numpy.typing import NDArray

    from ct_measure_plugin.virtual_scanner.recipe import Recipe

    FloatArray = NDArray[np.float64]

    Memory: TypeAlias = dict[Hashable, FloatArray]

__all__ = ["Slice", "ideal_projection", "measured_projection", "simulate", "simulate_slice"]

#: Range of stored values: int16.
LOWEST_HU, HIGHEST_HU = -32768, 32767
#: Projections kept between the slices of one series, where the caller keeps none.
KEPT = 4


class Slice(NamedTuple):
    """One slice: CT numbers (matrix, matrix) in HU, and how many readings were starved."""

    hu: FloatArray
    starved: int


def ideal_projection(recipe: Recipe, z_mm: float, memory: Memory | None = None) -> FloatArray:
    """Return the noise-free readings of a slice, shape (views, channels).

    Parameters
    ----------
    recipe : Recipe
        Phantom and scan.
    z_mm : float
        Where.
    memory : dict, optional
        Readings already made, by what they depend on: slices that see the same thing, and scans
        that differ in noise or reconstruction only, share them.
    """
    cuts = recipe.phantom.cuts(recipe.profile, z_mm)
    key = (recipe.geometry, recipe.spectrum, cuts)
    found = None if memory is None else memory.get(key)
    if found is None:
        found = projection(recipe.geometry, cuts, recipe.spectrum)
        found.setflags(write=False)
        if memory is not None:
            memory[key] = found
    return found


def measured_projection(
    recipe: Recipe, index: int, memory: Memory | None = None
) -> tuple[FloatArray, int]:
    """Return the corrected readings of slice `index`, and how many were starved.

    The noise depends on the recipe's seed and on the slice's index, nothing else.
    """
    ideal = ideal_projection(recipe, recipe.positions_mm[index], memory)
    rng = np.random.Generator(np.random.PCG64(np.random.SeedSequence([recipe.seed, index])))
    reading = read_out(
        ideal,
        recipe.detector,
        recipe.geometry,
        thickness_mm=recipe.profile.width_mm,
        rng=rng,
    )
    return recipe.calibration.correct(reading.line_integral), reading.starved


def simulate_slice(
    recipe: Recipe, index: int, *, memory: Memory | None = None, workers: int = 2
) -> Slice:
    """Return one slice of a recipe, not rounded.

    Examples
    --------
    >>> from ct_measure_plugin.virtual_scanner import Part, Phantom, Recipe, WATER, disc_rod
    >>> from ct_measure_plugin.virtual_scanner import Grid, ParallelBeam
    >>> recipe = Recipe(
    ...     phantom=Phantom((Part(disc_rod((0.0, 0.0), 20.0), WATER),)),
    ...     geometry=ParallelBeam(views=90, channels=101),
    ...     grid=Grid(matrix=51, fov_mm=51.0),
    ... )
    >>> bool(abs(simulate_slice(recipe, 0).hu[25, 25]) < 0.5)
    True
    """
    values, starved = measured_projection(recipe, index, memory)
    mu = reconstruct(values, recipe.geometry, recipe.kernel, recipe.grid, workers=workers)
    return Slice(recipe.calibration.to_hu(mu), starved)


def _acquisition(recipe: Recipe) -> Acquisition:
    return Acquisition(
        kvp=recipe.spectrum.kvp,
        slice_thickness_mm=recipe.profile.width_mm,
        kernel=recipe.kernel.label,
        reconstruction_diameter_mm=recipe.grid.fov_mm,
        isocentre_mm=(0.0, 0.0, 0.0),
        acquisition_number=1,
    )


def simulate(
    recipe: Recipe,
    *,
    progress: Callable[[int, int], object] | None = None,
    cancel: Callable[[], bool] | None = None,
    memory: Memory | None = None,
    workers: int = 2,
) -> Volume:
    """Scan and reconstruct a series.

    Parameters
    ----------
    recipe : Recipe
        Phantom, scan and reconstruction.
    progress : callable, optional
        Called with (slices done, slices in all) after each slice.
    cancel : callable, optional
        Asked before each slice; True stops the work.
    memory : dict, optional
        Shared between calls, it saves the projections of scans that differ in noise or
        reconstruction only; it grows by a projection for every slice that sees something new.
    workers : int
        Threads of the backprojection.

    Returns
    -------
    Volume
        CT numbers rounded to whole HU (int16), with the caution "simulated".

    Raises
    ------
    Cancelled
        If `cancel` answered True.

    Notes
    -----
    Rounding adds a variance of 1/12 HU². The image frame is the scanner's: z, y, x about the
    isocentre.
    """
    kept: Memory = {} if memory is None else memory
    count = len(recipe.positions_mm)
    hu = np.empty((count, recipe.grid.matrix, recipe.grid.matrix), np.int16)
    for index in range(count):
        if cancel is not None and cancel():
            raise Cancelled("the simulation was stopped")
        found = simulate_slice(recipe, index, memory=kept, workers=workers)
        if memory is None and len(kept) > KEPT:
            kept.pop(next(iter(kept)))
        hu[index] = np.clip(np.rint(found.hu), LOWEST_HU, HIGHEST_HU)
        if progress is not None:
            progress(index + 1, count)
    return Volume(
        hu,
        spacing_mm=recipe.spacing_mm,
        origin_mm=(
            recipe.positions_mm[0],
            float(recipe.grid.axis_mm(0)[0]),
            float(recipe.grid.axis_mm(1)[0]),
        ),
        slice_positions_mm=np.asarray(recipe.positions_mm),
        acquisition=(_acquisition(recipe),) * count,
        cautions=(Caution("simulated", "These data were simulated; no object was scanned."),),
        source=Source(title=recipe.title, spacing_source="simulation"),
    )
