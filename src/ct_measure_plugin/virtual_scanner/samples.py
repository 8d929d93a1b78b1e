"""The sample volumes: small series of one invented phantom, with their recipes.

They live in ``sample_volumes/`` at the top of the source tree and inside the installed package.
:func:`folder` finds them, :func:`remake` makes them again, byte for byte.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING

from ct_measure_plugin.errors import NoSeriesError, UnknownNameError
from ct_measure_plugin.virtual_scanner.bench_phantom import SECTIONS, bench_phantom, slice_centres
from ct_measure_plugin.virtual_scanner.detector import Detector
from ct_measure_plugin.virtual_scanner.geometry import ParallelBeam
from ct_measure_plugin.virtual_scanner.kernels import Kernel
from ct_measure_plugin.virtual_scanner.recipe import Recipe
from ct_measure_plugin.virtual_scanner.reconstruction import Grid
from ct_measure_plugin.virtual_scanner.scanner import simulate
from ct_measure_plugin.virtual_scanner.slice_profile import SliceProfile
from ct_measure_plugin.virtual_scanner.spectrum import monoenergetic, tube_spectrum

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable

    from ct_measure_plugin.virtual_scanner.scanner import Memory
    from ct_measure_plugin.virtual_scanner.writer import Labels

__all__ = ["RING_ERRORS", "Sample", "catalogue", "folder", "labels", "names", "remake", "sample"]

STUDY = "Spindle stack on the virtual scanner"
LAB = "Quillmere Test Bench (invented)"
PHANTOM_ID = "SPINDLE-STACK-1"

#: Channel -> gain error of the series with rings. Channel c makes a ring of radius
#: |c − 129.5| · 0.5 mm.
RING_ERRORS = ((150, 0.010), (174, -0.008), (206, 0.012))


@dataclass(frozen=True, slots=True)
class Sample:
    """A sample volume.

    Attributes
    ----------
    name : str
        Its folder's name.
    title : str
        For menus.
    purpose : str
        One sentence: what it is there to show.
    recipe : Recipe
        What it follows from.
    enhanced : bool
        True for one Enhanced CT file, False for a file a slice.
    """

    name: str
    title: str
    purpose: str
    recipe: Recipe
    enhanced: bool = False


def _whole_stack() -> tuple[float, ...]:
    return tuple(z for section in SECTIONS for z in slice_centres(section))


def _standard() -> Recipe:
    return Recipe(
        phantom=bench_phantom(),
        geometry=ParallelBeam(views=721, channels=260, pitch_mm=0.5, arc_deg=360),
        spectrum=monoenergetic(70.0),
        detector=Detector(quanta_per_mm2=150_000.0),
        kernel=Kernel("hann", 1.0),
        grid=Grid(matrix=256, fov_mm=128.0),
        profile=SliceProfile("rectangular", 2.5),
        positions_mm=_whole_stack(),
        calibration_path_mm=100.0,
        seed=11,
    )


def _standard_family(base: Recipe) -> tuple[Sample, ...]:
    low = replace(base.detector, dose=0.25)
    return (
        Sample("standard", "Standard kernel", "The reference: every section, full dose.", base),
        Sample(
            "sharp",
            "Sharp kernel, same raw data",
            "The same raw data through an edge-enhancing kernel whose MTF exceeds 1.",
            replace(base, kernel=Kernel("enhancing", 1.0)),
        ),
        Sample(
            "low-dose",
            "Standard kernel, quarter dose",
            "A quarter of the quanta: twice the noise.",
            replace(base, detector=low, seed=12),
        ),
        Sample(
            "repeat",
            "Standard kernel, repeat scan",
            "The reference again with new noise, for subtraction and repeatability.",
            replace(base, seed=13),
        ),
    )


def _special_family(base: Recipe) -> tuple[Sample, ...]:
    uniform = slice_centres("uniform")
    thin = slice_centres("fine", step_mm=0.5, margin_mm=2.0)
    return (
        Sample(
            "rings",
            "Uniform section with rings",
            "Three detector channels have drifted since the air calibration.",
            replace(
                base,
                detector=replace(base.detector, gain_errors=RING_ERRORS),
                positions_mm=uniform,
                seed=14,
            ),
        ),
        Sample(
            "cup",
            "Uniform section with a beam-hardening cup",
            "A tube spectrum without beam-hardening correction.",
            replace(
                base,
                spectrum=tube_spectrum(100.0, aluminium_mm=3.0),
                correction="none",
                positions_mm=uniform,
                seed=15,
            ),
        ),
        Sample(
            "thin-steps",
            "Wire, beads and ramps in steps of 0.5 mm",
            "Overlapping slices for the slice profile: a trapezoid 2.5 mm wide.",
            replace(
                base,
                profile=SliceProfile("trapezoid", 2.5, penumbra=0.4),
                positions_mm=thin,
                seed=16,
            ),
        ),
        Sample(
            "enhanced",
            "Uniform section as one Enhanced CT file",
            "The first slices of the reference with new noise, in multi-frame form.",
            replace(base, positions_mm=uniform[:4], seed=17),
            enhanced=True,
        ),
    )


@cache
def catalogue() -> dict[str, Sample]:
    """Return the samples by name.

    >>> list(catalogue())
    ['standard', 'sharp', 'low-dose', 'repeat', 'rings', 'cup', 'thin-steps', 'enhanced']
    """
    base = _standard()
    found = {}
    for item in (*_standard_family(base), *_special_family(base)):
        titled = replace(item.recipe, title=f"SIMULATED {item.title}")
        found[item.name] = replace(item, recipe=titled)
    return found


def names() -> tuple[str, ...]:
    """Return the names of the samples, in the order of menus."""
    return tuple(catalogue())


def sample(name: str) -> Sample:
    """Return a sample by name.

    Raises
    ------
    UnknownNameError
        If there is none of that name; the message lists those there are.

    >>> sample("repeat").title
    'Standard kernel, repeat scan'
    """
    try:
        return catalogue()[name]
    except KeyError:
        raise UnknownNameError("sample volume", name, names()) from None


def labels(name: str) -> Labels:
    """Return what a sample's header says beyond its recipe."""
    from ct_measure_plugin.virtual_scanner.writer import Labels

    return Labels(
        study=STUDY,
        series_number=names().index(sample(name).name) + 1,
        phantom_id=PHANTOM_ID,
        lab=LAB,
    )


def _root() -> Path:
    """Return where the samples are: in the installed package, else at the top of the source."""
    package = Path(__file__).resolve().parents[1]
    installed = package / "sample_volumes"
    return installed if installed.is_dir() else package.parents[1] / "sample_volumes"


def folder(name: str | None = None) -> Path:
    """Return the folder of a sample, or the one that holds them all.

    Raises
    ------
    UnknownNameError
        If there is no sample of that name.
    NoSeriesError
        If its files are not there.

    >>> folder("standard").name
    'standard'
    """
    path = _root() if name is None else _root() / sample(name).name
    if not path.is_dir():
        raise NoSeriesError(
            "the sample volumes are not installed; make them with "
            "'ct-measure simulate --samples FOLDER'"
        )
    return path


def remake(
    target: Path,
    wanted: Iterable[str] | None = None,
    *,
    progress: Callable[[int, int], object] | None = None,
    cancel: Callable[[], bool] | None = None,
) -> tuple[Path, ...]:
    """Make samples again, each in a folder of its name; with all of them, their truth table.

    Parameters
    ----------
    target : Path
        Folder to hold them.
    wanted : iterable of str, optional
        Their names; all by default.
    progress : callable, optional
        Called with (slices done, slices in all).
    cancel : callable, optional
        Asked before each slice; True stops the work.

    Returns
    -------
    tuple of Path
        The files written.

    Raises
    ------
    UnknownNameError
        If there is no sample of a name.
    Cancelled
        If `cancel` answered True; series already written stay.
    """
    from ct_measure_plugin.virtual_scanner.sample_table import truth_table
    from ct_measure_plugin.virtual_scanner.writer import write_enhanced, write_series

    everything = wanted is None
    chosen = [sample(name) for name in (names() if wanted is None else wanted)]
    in_all = sum(len(item.recipe.positions_mm) for item in chosen)
    done = 0
    memory: Memory = {}
    paths: list[Path] = []
    for item in chosen:
        before = done

        def report(here: int, _of: int, before: int = before) -> None:
            if progress is not None:
                progress(before + here, in_all)

        volume = simulate(item.recipe, progress=report, cancel=cancel, memory=memory)
        done += len(item.recipe.positions_mm)
        home = Path(target) / item.name
        marks = labels(item.name)
        if item.enhanced:
            paths.append(write_enhanced(volume, item.recipe, home / "frames.dcm", labels=marks))
        else:
            paths.extend(write_series(volume, item.recipe, home, labels=marks))
    if everything:
        page = Path(target) / "README.md"
        page.write_bytes(truth_table().encode())
        paths.append(page)
    return tuple(paths)
