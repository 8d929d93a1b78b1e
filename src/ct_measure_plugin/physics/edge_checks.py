"""Whether a box with an edge can be measured, and what a reader must know of it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.physics.results import Caution, NotMeasured

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.edge_bins import EdgeBins
    from ct_measure_plugin.physics.edge_line import EdgeLine

    Floats = NDArray[np.float64]

__all__ = ["EdgeFacts", "clipped", "edge_cautions", "edge_refusal", "other_objects"]

#: Least tilt from the pixel grid; 1.5° is asked for, and found to within its uncertainty.
LEAST_TILT = 1.45

#: Plateaus shorter than this many FWHM are refused, shorter than the second cautioned.
SHORT_PLATEAU, FAIR_PLATEAU = 2.0, 4.0

#: A bend of the edge beyond this share of the FWHM blurs it visibly (f50 -0.5 % and more).
MOST_SAGITTA = 0.15

#: Contrast to noise times the root of the samples a bin: refused and cautioned below.
POOR_SIGNAL = {"conventional": (10.0, 25.0), "fitted": (5.0, 15.0)}


@dataclass(frozen=True, slots=True, eq=False)
class EdgeFacts:
    """What was found of the edge before its spread function is measured."""

    values: Floats
    spacing_mm: tuple[float, float]
    line: EdgeLine
    fwhm: float
    reach: tuple[float, float]
    dense: EdgeBins
    contrast: float
    noise: float
    slope: float

    @property
    def tilt(self) -> float:
        """Degrees between the edge and the nearer pixel axis."""
        turned = math.degrees(self.line.angle) % 90.0
        return min(turned, 90.0 - turned)

    @property
    def samples(self) -> float:
        """Pixels in a tenth of a pixel of distance."""
        return float(np.median(self.dense.count)) if len(self.dense.count) else 0.0

    def bin_width(self) -> float:
        """Return the conventional bin: a tenth of a pixel, or as wide as the sampling needs."""
        pixel = max(self.spacing_mm)
        width = pixel / 10
        if self.samples < 5:
            width = min(width * 5 / max(self.samples, 0.1), pixel / 4)
        gap = self.dense.largest_gap(3 * self.fwhm)
        return gap * 1.0001 if gap > 1.5 * width else width


def edge_refusal(
    facts: EdgeFacts,
    method: str,
    limits: tuple[float, float] | None,
    stack: Floats | None = None,
) -> NotMeasured | None:
    """Return why the edge cannot be measured, or None; `stack` holds the slices not averaged."""
    refusal = clipped(
        facts.values if stack is None else stack, facts.line.distance, facts.fwhm, limits
    )
    if refusal is not None:
        return refusal
    for check in (_contrast, _tilt, _plateaus, _straight, _alone, _sampling):
        refusal = check(facts, method)
        if refusal is not None:
            return refusal
    return None


def _contrast(facts: EdgeFacts, method: str) -> NotMeasured | None:
    if not facts.contrast > 0:
        return NotMeasured("no edge was found in the box", "draw it across an edge")
    if facts.noise <= 0:
        return None
    signal = facts.contrast / facts.noise * math.sqrt(max(facts.samples, 1.0))
    least = POOR_SIGNAL[method][0]
    if signal < least:
        return NotMeasured(
            f"the contrast is too low: {facts.contrast:.3g} over a noise of {facts.noise:.3g},"
            f" {signal:.1f} with the samples a bin; at least {least:g} is needed",
            "measure a stronger contrast, a longer edge, or average more slices",
        )
    return None


def clipped(
    pixels: Floats, distance: Floats, fwhm: float, limits: tuple[float, float] | None
) -> NotMeasured | None:
    """Return that pixels, shape (…, ny, nx), are clipped, or None; `distance` is the edge's."""
    if limits is not None:
        count = int(np.count_nonzero((pixels <= limits[0]) | (pixels >= limits[1])))
        if count > 1e-3 * pixels.size:
            return NotMeasured(
                f"{count} pixels stand at the end of the stored range and are clipped",
                "reconstruct with an extended CT-number range",
            )
    # unknown limits: many equal extremes on a noisy plateau
    sides = (pixels[..., distance > fwhm], pixels[..., distance < -fwhm])
    extremes = {"highest": pixels.max(), "lowest": pixels.min()}
    noisy = max(float(side.std()) if side.size else 0.0 for side in sides) > 3.0
    for side in sides:
        for name, extreme in extremes.items():
            share = float(np.mean(side == extreme)) if side.size else 0.0
            # whole numbers of SD 3 or more put less than 2 % of a plateau on its extreme
            if share > 0.1 and noisy:
                return NotMeasured(
                    f"{100 * share:.0f} % of one plateau stand at the {name} value: it is clipped",
                    "reconstruct with an extended CT-number range",
                )
    return None


def _tilt(facts: EdgeFacts, _: str) -> NotMeasured | None:
    if facts.tilt < LEAST_TILT:
        return NotMeasured(
            f"the edge leans {facts.tilt:.2g}° from the pixel grid; at least 1.5° is needed",
            "turn the phantom by a few degrees",
        )
    return None


def _plateaus(facts: EdgeFacts, _: str) -> NotMeasured | None:
    least = min(facts.reach)
    if least < SHORT_PLATEAU * facts.fwhm:
        return NotMeasured(
            f"the edge leaves the box: one plateau is {max(least, 0.0):.2g} mm long,"
            f" {SHORT_PLATEAU * facts.fwhm:.2g} mm (2 FWHM) are needed",
            "centre the box on the edge or draw it larger",
        )
    if facts.line.length < 3 * facts.fwhm:
        return NotMeasured(
            f"only {facts.line.length:.2g} mm of edge lie in the box", "draw it along the edge"
        )
    return None


def _straight(facts: EdgeFacts, _: str) -> NotMeasured | None:
    bend, doubt = abs(facts.line.sagitta), facts.line.sagitta_doubt
    if bend > MOST_SAGITTA * facts.fwhm + 3 * doubt:
        return NotMeasured(
            f"the edge is curved: it bends by {bend:.2g} mm over the box",
            "draw a shorter box, or measure it as a circular edge",
        )
    return None


def other_objects(
    residual: Floats, contrast: float, used: NDArray[np.bool_] | None = None
) -> float:
    """Return the largest mean residual of blocks of 6 by 6 pixels, relative to the contrast.

    0 where it is within the scatter of all blocks (eight robust SDs). `used` leaves blocks out
    that are not wholly within it.
    """
    ny, nx = (n // 6 * 6 for n in residual.shape)
    if ny < 12 or nx < 12:
        return 0.0
    blocks = _blocks(residual[:ny, :nx]).mean(axis=(1, 3)).ravel()
    if used is not None:
        blocks = blocks[_blocks(used[:ny, :nx]).all(axis=(1, 3)).ravel()]
    if len(blocks) < 4:
        return 0.0
    spread = 1.4826 * float(np.median(np.abs(blocks - np.median(blocks))))
    largest = float(np.abs(blocks).max())
    return largest / contrast if largest > 8 * spread else 0.0


def _blocks(image: NDArray[Any]) -> NDArray[Any]:
    ny, nx = image.shape
    return image.reshape(ny // 6, 6, nx // 6, 6)


def _alone(facts: EdgeFacts, _: str) -> NotMeasured | None:
    share = other_objects(facts.line.residual, facts.contrast)
    if share > 0.1:
        return NotMeasured(
            f"something else lies in the box: it departs from one straight edge by"
            f" {100 * share:.0f} % of the contrast",
            "draw the box around the edge alone",
        )
    return None


def _sampling(facts: EdgeFacts, method: str) -> NotMeasured | None:
    gap = facts.dense.largest_gap(3 * facts.fwhm)
    share = 0.45 if method == "fitted" else 0.2
    if gap > share * facts.fwhm:
        return NotMeasured(
            f"the samples across the edge lie up to {gap:.2g} mm apart;"
            f" {share * facts.fwhm:.2g} mm are needed",
            "turn the edge by some degrees, or draw a longer box",
        )
    return None


def edge_cautions(facts: EdgeFacts) -> list[Caution]:
    """Return what a reader must know."""
    found = []
    if facts.noise > 0:
        signal = facts.contrast / facts.noise * math.sqrt(max(facts.samples, 1.0))
        if signal < POOR_SIGNAL["conventional"][1]:
            found.append(
                Caution(
                    "low-contrast",
                    f"Contrast to noise is {facts.contrast / facts.noise:.2g},"
                    f" {signal:.2g} with the samples a bin.",
                    "Look at the uncertainties; average more slices.",
                )
            )
    if min(facts.reach) < FAIR_PLATEAU * facts.fwhm:
        found.append(
            Caution(
                "tail-truncation",
                f"One plateau is only {min(facts.reach) / facts.fwhm:.1f} FWHM long: tails of the"
                " line spread function may be cut off.",
                "Draw the box larger.",
            )
        )
    rise = abs(facts.slope) * 10 * facts.fwhm
    if rise > 0.03 * facts.contrast:
        found.append(
            Caution(
                "background-gradient",
                f"The plateaus slope by {100 * rise / facts.contrast:.1f} % of the contrast over"
                " ten FWHM; the slope was taken out.",
                "Look for cupping, or a neighbour.",
            )
        )
    share = other_objects(facts.line.residual, facts.contrast)
    if share > 0.03:
        found.append(
            Caution(
                "another-object",
                f"Parts of the box depart from a straight edge by {100 * share:.1f} % of the"
                " contrast.",
                "Draw the box around the edge alone.",
            )
        )
    return found
