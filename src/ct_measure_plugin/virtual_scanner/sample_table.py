"""The truth table of the sample volumes, as Markdown, from the recipes that made them."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.virtual_scanner import bench_phantom as bench
from ct_measure_plugin.virtual_scanner.phantom import WATER
from ct_measure_plugin.virtual_scanner.samples import LAB, RING_ERRORS, Sample, catalogue, sample
from ct_measure_plugin.virtual_scanner.truth import Truth

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from numpy.typing import NDArray

__all__ = ["truth_table"]

_HEAD = f"""# Sample volumes

**SIMULATED. No object was scanned.** Small CT series of one phantom, made by the virtual scanner
of this package, so that everything measured in them can be held against a known answer. The
phantom and the lab, "{LAB}", do not exist. Research and quality-control
use only; not for patients.

This page is made by the same recipes as the series. One command makes page and series again,
byte for byte:

    ct-measure simulate --samples FOLDER

The bytes depend on the recipes alone as far as arithmetic allows. They were compared on one
machine; on another, a different FFT or maths library may in principle move single pixels by
1 HU. A test remakes one series and compares every byte.

Positions are in mm about the isocentre: z along the slices, y down the image, x to the right, as
in ImagePositionPatient. Pixels are 0.5 mm wide, 256 by 256; the grid's centre is the isocentre,
between four pixels. Parallel beam, 721 views over 360 degrees, channels of 0.5 mm.
"""

_BOUNDS = """## How far the truth goes

- CT numbers: of the mean over a region well inside a piece (less than two thirds of its radius),
  within the bound listed, plus the noise of that mean.
- f50, f10 and f2: of the system's MTF near the isocentre, within 0.01 of the MTF's value at 0. The
  detector under-samples a thin wire or bead: in a single direction its spectrum may differ from
  the MTF by the folding that `Truth.folding` gives; averaged over directions most of it cancels.
- Noise: of single pixels, within 3 % at the centre and 4 % off it, where texture is no longer the
  same in all directions; each ring of the NPS within 10 % up to 0.9 mm⁻¹. In the sections with
  inserts there is a little more or less of it, as they are denser or lighter than water. Slices
  are independent, overlapping ones too.
- Every slice averages line integrals, not transmissions, along z.
- Pixels hold whole HU, so a variance of 1/12 HU² is theirs.
"""


def _table(head: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    lines = [head, ["---"] * len(head), *rows]
    return "\n".join("| " + " | ".join(line) + " |" for line in lines) + "\n"


def _place(centre_mm: Sequence[float]) -> str:
    return ", ".join(f"{value:.1f}" for value in centre_mm)


def _hu(truth: Truth, insert: bench.Insert) -> str:
    return f"{truth.hu(insert.material):.1f} ± {truth.hu_bound(insert.material):.1f}"


def _series_row(number: int, item: Sample) -> list[str]:
    recipe = item.recipe
    low, high = recipe.positions_mm[0], recipe.positions_mm[-1]
    return [
        f"{number}. `{item.name}`",
        item.purpose,
        f"{len(recipe.positions_mm)} from z {low:g} to {high:g}",
        f"{recipe.kernel.label.lower()} mm⁻¹",
        f"{recipe.detector.dose:g}",
    ]


def _series() -> str:
    head = (
        "series",
        "what it shows",
        "slices",
        "kernel",
        "dose",
    )
    rows = [_series_row(number + 1, item) for number, item in enumerate(catalogue().values())]
    note = (
        "\nAll but `cup` are scanned at one energy, 70 keV, so that CT numbers are exact. "
        "`sharp` and `standard` are reconstructions of the same raw data. Slices are 2.5 mm "
        "thick with a rectangular profile; in `thin-steps` the profile is a trapezoid of 2.5 mm "
        "full width at half maximum whose sides are 1 mm wide.\n"
    )
    return "## Series\n\n" + _table(head, rows) + note


def _spectra_row(item: Sample) -> list[str]:
    truth = Truth(item.recipe)
    f = np.linspace(0.0, 1.0, 4001)
    mtf, power = truth.mtf(f), truth.nps(f)
    highest = int(mtf.argmax())
    crest = f"{mtf[highest]:.3f} at {f[highest]:.3f}" if highest else "1 at 0"
    return [
        f"`{item.name}`",
        *(f"{truth.frequency_at(level):.4f}" for level in (0.5, 0.1, 0.02)),
        crest,
        *(f"{truth.noise_sd((0.0, x)):.2f}" for x in (0.0, 20.0, 40.0)),
        f"{power.max():.3g} at {f[power.argmax()]:.3f}",
        f"{np.sum(f * power) / np.sum(power):.3f}",
    ]


def _spectra() -> str:
    head = (
        "series",
        "f50",
        "f10",
        "f2",
        "largest MTF",
        "SD at the centre",
        "SD at 20 mm",
        "SD at 40 mm",
        "largest NPS",
        "mean frequency",
    )
    note = (
        "\nFrequencies in mm⁻¹, SD in HU, NPS in HU² mm² at the centre. The NPS is the mean over "
        "directions; its mean frequency is ∫ f S df / ∫ S df from 0 to 1 mm⁻¹.\n"
    )
    rows = [_spectra_row(item) for item in catalogue().values()]
    return "## Resolution and noise\n\n" + _table(head, rows) + note


def _sections() -> str:
    contents = {
        "uniform": "water",
        "edges": "four blocks with slanted edges",
        "rods": "eight rods of as many materials",
        "faint": "six low-contrast discs",
        "fine": "a tilted wire, three beads, two opposed ramps",
    }
    rows = [
        [name, f"{low:g} to {high:g}", contents[name]]
        for name, (low, high) in bench.SECTIONS.items()
    ]
    text = f"The body is a water cylinder of {2 * bench.CYLINDER_MM:g} mm diameter about z.\n\n"
    return "## Sections\n\n" + text + _table(("section", "z", "holds"), rows)


def _inserts(truth: Truth) -> str:
    blocks = [
        [i.material.name, _place(i.centre_mm), f"{i.size_mm:g}", f"{i.lean_deg:g}", _hu(truth, i)]
        for i in bench.edge_blocks()
    ]
    rods = [
        [i.material.name, _formula(i), _place(i.centre_mm), f"{i.size_mm:g}", _hu(truth, i)]
        for i in bench.material_rods()
    ]
    discs = [[_place(i.centre_mm), f"{i.size_mm:g}", _hu(truth, i)] for i in bench.faint_discs()]
    return "\n".join(
        [
            "## Edges: square blocks\n",
            _table(("material", "centre y, x", "side", "lean, °", "HU at 70 keV"), blocks),
            "Lean: of the edges to the pixel grid, counter-clockwise on the screen.\n",
            "## Rods\n",
            _table(("material", "formula, g/cm³", "centre y, x", "diameter", "HU"), rods),
            f"Water reads {truth.hu(WATER):.1f} ± {truth.hu_bound(WATER):.1f} HU.\n",
            "## Faint discs: water of a changed density\n",
            _table(("centre y, x", "diameter", "HU"), discs),
        ]
    )


def _formula(insert: bench.Insert) -> str:
    made_of = insert.material.composition
    name = made_of if isinstance(made_of, str) else "dry air"
    return f"{name}, {insert.material.density_g_cm3:g}"


def _fine() -> str:
    wire, *beads, first, second = (part.solid for part in bench.fine_parts())
    middle = wire.at(50.0)
    assert middle is not None  # noqa: S101 - the wire runs through z 50
    lines = [
        "## Fine details\n",
        (
            f"- Copper wire, {bench.WIRE_DIAMETER_MM:g} mm thick, through z 50 at y, x "
            f"{_place(middle.centre_mm)}; it leans {bench.WIRE_TILT_DEG:g}° from z towards 40° "
            "counter-clockwise from +x."
        ),
        f"- Copper beads, {bench.BEAD_DIAMETER_MM:g} mm in diameter, at z, y, x "
        + "; ".join(_place(place) for place in bench.BEADS_MM)
        + f" ({len(beads)} of them).",
    ]
    for strip, side in ((first, "+x"), (second, "−x")):
        cut = strip.at(50.0)
        assert cut is not None  # noqa: S101 - the ramps run through z 50
        lines.append(
            f"- Aluminium ramp, {bench.RAMP_THICKNESS_MM:g} mm thick and 10 mm wide, at "
            f"{bench.RAMP_DEG:g}° to the scan plane, climbing towards {side}, through z 50 at "
            f"y, x {_place(cut.centre_mm)}: a length s in the slice stands for "
            f"{np.tan(np.radians(bench.RAMP_DEG)):.4f} s along z."
        )
    return "\n".join(lines) + "\n"


def _faults() -> str:
    rings = Truth(sample("rings").recipe)
    rows = []
    for channel, error in RING_ERRORS:
        radius = abs(channel - 129.5) * 0.5
        near = np.linspace(radius - 1.0, radius + 1.0, 401)
        values = rings.rings(near)
        peak = values[np.argmax(np.abs(values))]
        place, amplitude = _strongest_ring(rings, near)
        rows.append(
            [
                f"{radius:.2f}",
                f"{100 * error:+.1f} %",
                f"{peak:+.1f}",
                f"{place:.2f}",
                f"{amplitude:+.1f}",
            ]
        )
    cup = Truth(sample("cup").recipe)
    radii = (0.0, 20.0, 40.0, 50.0)
    depth = [[f"{r:g}", f"{v:.1f}"] for r, v in zip(radii, cup.water_cup(radii, 58.0), strict=True)]
    return "\n".join(
        [
            "## Rings (`rings`)\n",
            (
                "A reading is spread along its ray, so that a channel's ring is strongest a little "
                "outside of the circle that its rays touch. Amplitude: mean over a pixel (0.5 mm) "
                "across the ring, less that of four pixels on either side.\n"
            ),
            _table(
                (
                    "radius of the channel, mm",
                    "gain error",
                    "largest value of the ring, HU",
                    "radius of the largest amplitude, mm",
                    "amplitude, HU",
                ),
                rows,
            ),
            "## Cup (`cup`)\n",
            (
                f"Spectrum: {sample('cup').recipe.spectrum.name}, no correction; effective "
                f"energy {cup.effective_energy:.1f} keV.\n"
            ),
            _table(("distance from the axis", "HU, noise aside"), depth),
        ]
    )


def _strongest_ring(truth: Truth, near: NDArray[np.float64]) -> tuple[float, float]:
    """Return where a ring's mean over a pixel less its surroundings is largest, and that."""
    pixel = 0.5
    across = np.linspace(-0.5, 0.5, 41)

    def mean(low: float, high: float) -> NDArray[np.float64]:
        r = near[:, None] + (low + high) / 2 + (high - low) * across
        found: NDArray[np.float64] = truth.rings(r.ravel()).reshape(r.shape).mean(axis=1)
        return found

    half, far = 0.5 * pixel, 4.5 * pixel
    amplitude = mean(-half, half) - (mean(-far, -half) + mean(half, far)) / 2
    k = int(np.argmax(np.abs(amplitude)))
    return float(near[k]), float(amplitude[k])


def truth_table() -> str:
    """Return the page ``sample_volumes/README.md``."""
    truth = Truth(sample("standard").recipe)
    parts = [
        _HEAD,
        _series(),
        _spectra(),
        _BOUNDS,
        _sections(),
        _inserts(truth),
        _fine(),
        _faults(),
    ]
    return "\n".join(parts)
