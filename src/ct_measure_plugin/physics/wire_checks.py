"""Whether a wire or bead can be measured, and what a reader must know of it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.edge_checks import other_objects
from ct_measure_plugin.physics.results import Caution, NotMeasured, Quantity

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.wire_trace import WireTrace
    from ct_measure_plugin.physics.wire_transform import Section

    Floats = NDArray[np.float64]

__all__ = ["WireFacts", "background_slope", "folded_levels", "wire_cautions", "wire_refusal"]

#: Radius of what is transformed in FWHM: refused and cautioned below.
SHORT_REACH, FAIR_REACH = 1.7, 3.0

#: Height of the spot over the noise, times the root of the slices: refused and cautioned below.
LEAST_SIGNAL, FAIR_SIGNAL = 8.0, 25.0

#: Fewest pixels a FWHM from which rings can be told apart, shapes be fitted and a height be read,
#: where all slices show the spot at one place of the pixel grid.
LEAST_FOR_RINGS, LEAST_FOR_FIT, FAIR_FOR_FIT = 2.9, 1.8, 2.2

#: Pixels by which a wire moves through the slices, less than which they show it at one place.
ONE_PLACE = 0.25

#: Rise of the background across what is transformed, in heights, that is cautioned; and how many of
#: its standard errors in white noise it has to stand out by.
MOST_RISE, STANDS_OUT = 0.03, 5.0

#: Share of a level that folded spectrum may make up: refused and cautioned beyond.
MOST_FOLDED, FAIR_FOLDED = 0.1, 0.02


@dataclass(frozen=True, slots=True, eq=False)
class WireFacts:
    """What was found of a wire before its transform.

    Attributes
    ----------
    trace : WireTrace
        Where it lies.
    sections : list of Section
        Its cross-sections.
    noise : float
        SD of the pixels of the background.
    folded : float
        Share of the folded spectrum that is left, 0 to 1.
    pixel : float
        The larger pixel spacing, mm.
    slope, slope_error : float
        Slope of the background that was taken out, values a mm, and its error in white noise.
    """

    trace: WireTrace
    sections: list[Section]
    noise: float
    folded: float
    pixel: float
    slope: float = 0.0
    slope_error: float = 0.0

    @property
    def fwhm(self) -> float:
        """FWHM of the best Gaussian spot, mm."""
        return 2.3548 * self.trace.sigma

    @property
    def signal(self) -> float:
        """Height over noise times the root of the number of slices."""
        height = float(np.median(np.abs(self.trace.heights)))
        return height / self.noise * math.sqrt(len(self.sections)) if self.noise > 0 else math.inf

    def coarser(self, least: float) -> bool:
        """Tell whether a spot seen at one place of the grid has fewer pixels a FWHM than these."""
        moved = self.trace.shift * (len(self.sections) - 1)
        return moved < ONE_PLACE * self.pixel and self.fwhm < least * self.pixel

    def folding(self, frequency: float) -> float:
        """Return about how much of the spectrum beyond Nyquist is folded back to a frequency.

        A Gaussian of the spot's width; the mean over directions meets about half of it.
        """
        mirror = max(1 / self.pixel - frequency, 0.0)
        return 0.5 * self.folded * math.exp(-2 * (math.pi * self.trace.sigma * mirror) ** 2)


def background_slope(stack: Floats, sections: list[Section]) -> tuple[float, float]:
    """Return the slope of the background about a wire, and its error in white noise.

    Parameters
    ----------
    stack : ndarray, shape (nz, ny, nx)
        Slices, their background still in them.
    sections : list of Section
        Of the same slices.
    """
    mixes, errors = [], []
    for plane, section in zip(stack, sections, strict=True):
        columns, values = section.planes[:, section.outside].T, plane[section.outside]
        mix = np.linalg.lstsq(columns, values, rcond=None)[0]
        mixes.append(mix[1:])
        spread = float(np.std(values - columns @ mix))
        errors.append(spread / math.sqrt(float(np.sum(columns[:, 1:] ** 2)) / 2))
    slope = np.mean(mixes, axis=0)
    return float(np.hypot(*slope)), float(np.mean(errors)) / math.sqrt(len(errors))


def wire_refusal(
    stack: Floats,
    facts: WireFacts,
    limits: tuple[float, float] | None,
    diameter: float | None,
    method: str,
) -> NotMeasured | None:
    """Return why the wire cannot be measured, or None."""
    clipped = _clipped(stack, facts, limits)
    if clipped is not None:
        return clipped
    if facts.signal < LEAST_SIGNAL:
        return NotMeasured(
            f"the wire stands out {facts.signal:.2g} times the noise; {LEAST_SIGNAL:g} are needed",
            "take more slices, or a denser wire",
        )
    reach = facts.sections[0].reach
    if reach < SHORT_REACH * facts.fwhm:
        return NotMeasured(
            f"only {reach:.2g} mm about the wire lie clear of the border of the box;"
            f" {SHORT_REACH * facts.fwhm:.2g} mm ({SHORT_REACH:g} FWHM) are needed",
            "centre the box on the wire, or draw it larger",
        )
    if diameter is not None and diameter > 1.1 * facts.fwhm:
        return NotMeasured(
            f"a wire of {diameter:g} mm is thicker than the resolution, about {facts.fwhm:.2g} mm",
            "use a thinner wire, or measure it as a disc",
        )
    share = _others(facts)
    if share > 0.1:
        return NotMeasured(
            f"something else lies in the box: {100 * share:.0f} % of the wire's height",
            "draw the box around the wire alone",
        )
    least = {"rings": LEAST_FOR_RINGS, "fitted": LEAST_FOR_FIT}.get(method, 0.0)
    if facts.coarser(least):
        return NotMeasured(
            f"the spot is {facts.fwhm / facts.pixel:.2g} pixels wide; at one place of the pixel"
            f" grid the method '{method}' needs {least:g}",
            "take several slices of a tilted wire, or smaller pixels",
        )
    return None


def _clipped(
    stack: Floats, facts: WireFacts, limits: tuple[float, float] | None
) -> NotMeasured | None:
    parts = [p[s.radius <= facts.fwhm] for p, s in zip(stack, facts.sections, strict=True)]
    core = np.concatenate(parts)
    top = core.max() if np.median(facts.trace.heights) > 0 else core.min()
    count = int(np.count_nonzero(core == top))
    saturated = limits is not None and bool(((core <= limits[0]) | (core >= limits[1])).any())
    # noisy values repeat their extreme once by chance, whole numbers perhaps twice
    noisy = facts.noise > 1e-3 * float(np.median(np.abs(facts.trace.heights)))
    if saturated or (noisy and count > 2 * len(stack) + 2):
        return NotMeasured(
            "values at the wire stand at the end of the stored range: they are clipped",
            "reconstruct with an extended CT-number range, or use a less dense wire",
        )
    return None


def _others(facts: WireFacts) -> float:
    """Return how far blocks beyond three FWHM depart from the background, relative to the wire."""
    height = float(np.median(np.abs(facts.trace.heights)))
    mean = np.mean([s.value for s in facts.sections], axis=0)
    far = np.all([s.radius > 3 * facts.fwhm for s in facts.sections], axis=0)
    return other_objects(np.where(far, mean, 0.0), height, far)


def folded_levels(
    facts: WireFacts, numbers: dict[str, object], levels: dict[str, float]
) -> list[Caution]:
    """Refuse levels that lie in the folded spectrum, and caution those that may."""
    worst = 0.0
    for name, level in levels.items():
        found = numbers.get(name)
        if not isinstance(found, Quantity):
            continue
        share = facts.folding(found.value) / level
        if share > MOST_FOLDED:
            numbers[name] = NotMeasured(
                f"the pixels of {facts.pixel:g} mm fold the spectrum back on the {100 * level:g} %"
                " level",
                "reconstruct with smaller pixels, or take slices of a tilted wire",
            )
        else:
            worst = max(worst, share)
    if worst <= FAIR_FOLDED:
        return []
    return [
        Caution(
            "aliasing",
            f"Spectrum from beyond the pixels' Nyquist frequency may make up {100 * worst:.0f} % of"
            " a level.",
            "Reconstruct with smaller pixels, or take slices of a tilted wire.",
        )
    ]


def wire_cautions(
    facts: WireFacts, diameter: float | None, thickness: float | None, method: str
) -> list[Caution]:
    """Return what a reader must know; the slices' thickness is given in gaps."""
    found = []
    if facts.coarser(FAIR_FOR_FIT) and not (method != "fitted" and facts.coarser(LEAST_FOR_FIT)):
        what = "f10, width and height" if method == "fitted" else "width and height"
        found.append(
            Caution(
                "aliasing",
                f"The spot is only {facts.fwhm / facts.pixel:.1f} pixels wide, at one place of the"
                f" pixel grid; {what} may be off by two percent.",
                "Take several slices of a tilted wire, or smaller pixels.",
            )
        )
    if facts.signal < FAIR_SIGNAL:
        found.append(
            Caution(
                "low-contrast",
                f"The wire stands out {facts.signal:.2g} times the noise, over all slices.",
                "Look at the uncertainties; take more slices.",
            )
        )
    reach = facts.sections[0].reach
    if reach < FAIR_REACH * facts.fwhm:
        found.append(
            Caution(
                "tail-truncation",
                f"Only {reach / facts.fwhm:.1f} FWHM about the wire are transformed: tails of the"
                " point spread function may be cut off.",
                "Draw the box larger.",
            )
        )
    share = _others(facts)
    if share > 0.03:
        found.append(
            Caution(
                "another-object",
                f"Parts of the box depart from the background by {100 * share:.1f} % of the wire's"
                " height.",
                "Draw the box around the wire alone.",
            )
        )
    height = float(np.median(np.abs(facts.trace.heights)))
    rise, error = 2 * reach * facts.slope, 2 * reach * facts.slope_error
    if rise > max(MOST_RISE * height, STANDS_OUT * error):
        found.append(
            Caution(
                "background-gradient",
                f"The background rises by {100 * rise / height:.1f} % of the wire's height across"
                " what is transformed; a plane was taken out.",
                "Look for cupping, or a neighbour.",
            )
        )
    if diameter is None:
        found.append(
            Caution(
                "object-size-unknown",
                "The wire's own diameter was not given; it lowers the MTF.",
                "Enter the diameter.",
            )
        )
    elif diameter > 0:
        found.append(Caution("object-size", f"The diameter of {diameter:g} mm was divided out."))
    blur = facts.trace.shift * (thickness or 0.0)
    if blur > 0.2 * facts.fwhm:
        found.append(
            Caution(
                "leaning-object",
                f"The wire moves by {blur:.2g} mm within each slice, which blurs it along its"
                " lean.",
                "Tilt the wire less.",
            )
        )
    return found
