"""The one registry of caution codes.

A :class:`~ct_measure_plugin.physics.results.Caution` may carry only a code that is listed
here, and each code has a section of the same name on the page ``docs/cautions.md``, where it
is explained at length. A test holds both.

To add one: a line below, a section in the page.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

__all__ = ["KINDS", "CautionKind"]

Level = Literal["note", "warning"]


@dataclass(frozen=True, slots=True)
class CautionKind:
    """What a caution code stands for.

    Attributes
    ----------
    title : str
        A few words, shown as its heading.
    level : {"note", "warning"}
        A note says how a number is to be read; a warning says that it may mislead.
    """

    title: str
    level: Level

    page: str = "cautions.md"


def _note(title: str) -> CautionKind:
    return CautionKind(title, "note")


def _warning(title: str) -> CautionKind:
    return CautionKind(title, "warning")


#: code -> kind. Codes are lower-case words joined by hyphens and never change their meaning.
KINDS: dict[str, CautionKind] = {
    # --- the series -----------------------------------------------------------------
    "lossy-compression": _warning("Lossy compressed pixels"),
    "uneven-spacing": _warning("Slices are not evenly spaced"),
    "missing-slice": _warning("A slice is missing"),
    "duplicate-slice": _warning("Two images at one position"),
    "gantry-tilt": _warning("Slices lean against their stacking direction"),
    "tilt-tag-disagrees": _note("Gantry tilt tag disagrees with the orientation"),
    "oblique": _note("Slices lie oblique in the patient"),
    "mixed-thickness": _warning("Slice thickness changes within the series"),
    "spacing-tag-wrong": _note("A spacing tag contradicts the positions"),
    "padding": _note("Padding pixels are masked"),
    "padding-undeclared": _warning("Fill outside the reconstruction is not declared"),
    "padding-mistyped": _note("Padding value is stored with the wrong sign type"),
    "not-hu": _warning("Values are not in HU"),
    "hu-assumed": _warning("HU were assumed"),
    "spacing-assumed": _warning("Pixel size was entered by hand"),
    "implausible-hu": _warning("HU look wrong"),
    "headerless-file": _note("DICOM file without preamble or file meta"),
    "missing-geometry": _warning("Position or orientation is missing"),
    "unreadable-files": _warning("Files that could not be read"),
    "split-series": _note("One series UID holds several volumes"),
    "simulated": _note("Simulated data"),
    "segments-overlap": _warning("Segments overlap"),
    "segmentation-outside": _warning("Part of the segmentation lies outside the volume"),
    # --- the region -----------------------------------------------------------------
    "clipped-values": _warning("Values at the end of the stored range"),
    "padding-excluded": _warning("Padding inside the region was left out"),
    "outside-image": _warning("The region reaches outside the image"),
    "threshold": _note("Only a range of values counts"),
    "labels-resampled": _note("The label map has another grid"),
    "regions-overlap": _warning("Object and background share pixels"),
    "unlike-sizes": _note("Object and background differ in size"),
    "few-pixels": _warning("Few pixels"),
    "not-finite": _warning("Pixels without a finite value were left out"),
    # --- the numbers ----------------------------------------------------------------
    "no-uncertainty": _note("A number without a stated uncertainty"),
    "correlated-noise": _note("Noise correlation estimated from the region"),
    "spectrum-used": _note("The standard error is from a measured noise spectrum"),
    "spectrum-not-used": _warning("The noise spectrum does not fit the pixels"),
    "spectrum-of-other-noise": _warning("The noise spectrum is that of other noise"),
    "independence-assumed": _note("Independent pixels were assumed"),
    "independent-images": _note("Two images were taken as independent"),
    "few-independent-samples": _warning("Few independent samples"),
    # --- resolution -----------------------------------------------------------------
    "aliasing": _warning("The image is aliased"),
    "noise-floor": _warning("A level of the MTF lies in the noise"),
    "low-contrast": _warning("Low contrast to noise"),
    "tail-truncation": _warning("Tails of the spread function may be cut off"),
    "background-gradient": _warning("The background slopes"),
    "another-object": _warning("Something else lies in the box"),
    "object-size": _note("The size of the object was divided out"),
    "object-size-unknown": _note("The size of the object was not given"),
    "small-radius": _warning("The circle is small for the blur"),
    "walled-object": _note("The cylinder has a wall"),
    "leaning-object": _warning("The object leans through the slices"),
    "coarse-sampling": _warning("Few samples across the width"),
    "profile-shape": _warning("No known shape fits the profile"),
    "resampled-profile": _note("A profile between pixels is interpolated"),
    "slanted-average": _warning("The profile is averaged across a slanted edge"),
    "turn-within-width": _warning("The path turns within the edge or peak"),
    "place-left-out": _warning("A place could not be measured"),
    # --- noise ----------------------------------------------------------------------
    "few-patches": _warning("Few patches"),
    "nonstationary-noise": _warning("The noise is not the same everywhere"),
    "patches-share-noise": _note("Patches overlap or lie in correlated slices"),
    "trend-removed": _note("Detrending took part of the variance"),
    "repeat-difference": _note("Repeat scans were subtracted"),
    "slice-difference": _note("Neighbouring slices were subtracted"),
    "peak-at-end": _note("The spectrum peaks at the end of its range"),
    "signal-beyond": _warning("Part of the signal lies beyond what was measured"),
    "no-transfer": _warning("No MTF was given for the task"),
    "patches-small": _warning("Patches small for the texture"),
    "few-windows": _warning("Few windows"),
    "several-noise-levels": _warning("More than one noise level"),
    # --- a cylinder of one material --------------------------------------------------
    "slices-left-out": _warning("Slices do not show the cylinder"),
    "rings-found": _warning("Rings stand out of the noise"),
    # --- the CT-number scale --------------------------------------------------------
    "rod-reads-as-another": _warning("A rod reads as another material"),
    "one-energy-fails": _warning("No single energy describes the rods"),
    "one-rod-decides": _note("One rod decides the line"),
    "scale-off": _warning("The HU scale is off"),
    "rod-left-out": _warning("A rod was left out"),
    "rod-uneven": _warning("A rod's CT number changes from its middle to its border"),
    "rod-placed": _note("A rod was placed by the layout"),
    "layout-scale": _warning("Distances differ from the layout's"),
    "beam-disagrees": _warning("Rods and beam quality disagree about the energy"),
    "beam-unknown": _note("No energy from the beam's quality"),
    "mu-scale": _note("Attenuation converted from HU at one energy"),
}
