"""The cautions that a series' headers give reason for, before any pixel is decoded."""

from __future__ import annotations

from typing import TYPE_CHECKING, Final

import numpy as np

from ct_measure_plugin.dicom.geometry import TILT_TAG_TOLERANCE_DEG
from ct_measure_plugin.dicom.rescale import unit_of
from ct_measure_plugin.dicom.syntaxes import SYNTAXES
from ct_measure_plugin.physics.results import Caution

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.dicom.facts import ImageFacts
    from ct_measure_plugin.dicom.geometry import StackGeometry
    from ct_measure_plugin.dicom.grouping import Stack

__all__ = ["encoding_names", "header_cautions", "lossy_caution"]

#: an axis-aligned normal written with three decimals is true to 0.06°
_OBLIQUE_DEG: Final = 0.5
#: positions are written to 0.001 mm or finer; a tenth of a millimetre is no rounding
_ASIDE_MM: Final = 0.1
#: methods in use accept 0.5 % between diameter / matrix and pixel spacing
_DIAMETER_TOLERANCE: Final = 0.005


def header_cautions(stack: Stack, geometry: StackGeometry | None) -> list[Caution]:
    """Return the cautions of one stack.

    Parameters
    ----------
    stack : Stack
        The ordered images.
    geometry : StackGeometry or None
        Their geometry; None if position or orientation is missing.
    """
    images = stack.images
    cautions = [*_encoding(images), *_unit(images), *_identity(stack)]
    if any(image.simulated for image in images):
        cautions.append(
            Caution("simulated", "The header says that the image was simulated, not acquired.")
        )
    if geometry is None:
        cautions.append(
            Caution(
                "missing-geometry",
                "Position or orientation of the slice is missing; it stands alone.",
                "Measure in the plane only.",
            )
        )
    else:
        cautions += [*_gaps(geometry), *_lean(images, geometry), *_tags(images, geometry)]
    if images[0].spacing_from_diameter:
        cautions.append(
            Caution(
                "missing-geometry",
                "Pixel spacing is missing; reconstruction diameter over matrix stands in for it.",
                "Check a known length in the image.",
            )
        )
    return cautions


def lossy_caution(count: int, total: int) -> Caution:
    """Return the caution of lossy pixels."""
    return Caution(
        "lossy-compression",
        f"{count} of {total} slices were compressed with loss; noise and resolution are altered.",
        "Export the series again without lossy compression.",
    )


def _encoding(images: Sequence[ImageFacts]) -> list[Caution]:
    cautions = []
    lossy = sum(image.lossy for image in images)
    if lossy:
        cautions.append(lossy_caution(lossy, len(images)))
    bare = sum(image.headerless for image in images)
    if bare:
        cautions.append(
            Caution(
                "headerless-file",
                f"{bare} of {len(images)} slices lack the file's preamble or transfer syntax; "
                "it was found from the bytes.",
            )
        )
    return cautions


def _unit(images: Sequence[ImageFacts]) -> list[Caution]:
    unit = unit_of(images[0])
    if unit != "HU":
        return [
            Caution(
                "not-hu",
                f"The values are {unit}, not HU.",
                "Measure only what does not need HU.",
            )
        ]
    lacking = sum(image.slope is None or image.intercept is None for image in images)
    if lacking:
        return [
            Caution(
                "hu-assumed",
                f"Slope or intercept is missing on {lacking} of {len(images)} slices; 1 and 0 "
                "stand in for them.",
                "Check the CT number of air or water.",
            )
        ]
    return []


def _identity(stack: Stack) -> list[Caution]:
    cautions = []
    if stack.copies or stack.rivals:
        parts = []
        if stack.copies:
            parts.append(f"{_counted(stack.copies)} of the same object")
        if stack.rivals:
            parts.append(f"{_counted(stack.rivals)} of another object at the same position")
        cautions.append(
            Caution(
                "duplicate-slice",
                f"Left out: {' and '.join(parts)}.",
                "Remove from the folder what does not belong there.",
            )
        )
    if stack.split_by:
        cautions.append(
            Caution(
                "split-series",
                f"The series holds several volumes; this one is told apart by {stack.split_by}.",
            )
        )
    return cautions


def _counted(number: int) -> str:
    return "1 image" if number == 1 else f"{number} images"


def _gaps(geometry: StackGeometry) -> list[Caution]:
    cautions = []
    if geometry.aside_mm > _ASIDE_MM:
        cautions.append(
            Caution(
                "uneven-spacing",
                f"Slices lie up to {geometry.aside_mm:.3g} mm beside their stacking direction.",
                "Measure in the plane; the patient frame holds for the first slice.",
            )
        )
    if geometry.even:
        return cautions
    gaps = geometry.z_mm[1:] - geometry.z_mm[:-1]
    cautions += [
        Caution(
            "uneven-spacing",
            f"The distance between slices runs from {gaps.min():.4g} to {gaps.max():.4g} mm.",
            "Measure in the plane; through-plane measurements need even spacing.",
        )
    ]
    if geometry.missing:
        cautions.append(
            Caution(
                "missing-slice",
                f"The gaps leave room for {geometry.missing} more "
                f"{'slice' if geometry.missing == 1 else 'slices'} of {geometry.spacing_mm[0]:.4g} "
                "mm.",
                "Export the series again, complete.",
            )
        )
    return cautions


def _lean(images: Sequence[ImageFacts], geometry: StackGeometry) -> list[Caution]:
    cautions = []
    tilt = geometry.tilt_deg
    if tilt:
        cautions.append(
            Caution(
                "gantry-tilt",
                f"The slices lean by {tilt:.2f}° against their stacking direction.",
                "Measure in the plane; through-plane lengths follow the normal.",
            )
        )
    axis_angle = float(np.degrees(np.arccos(min(1.0, float(np.max(np.abs(geometry.frame.n)))))))
    if not tilt and axis_angle > _OBLIQUE_DEG:
        cautions.append(
            Caution("oblique", f"The slices lie {axis_angle:.1f}° off the patient's axes.")
        )
    tag = images[0].tilt_tag
    # one slice alone cannot show a lean
    if tag is not None and geometry.dz_known and abs(abs(tag) - tilt) > TILT_TAG_TOLERANCE_DEG:
        cautions.append(
            Caution(
                "tilt-tag-disagrees",
                f"The gantry tilt tag says {tag:g}°, positions and orientation say {tilt:.2f}°; "
                "these are believed.",
            )
        )
    return cautions


def _tags(images: Sequence[ImageFacts], geometry: StackGeometry) -> list[Caution]:
    """Compare what tags say of spacing and thickness with what the positions say."""
    cautions = []
    thicknesses = sorted(
        {t for t in (image.acquisition.slice_thickness_mm for image in images) if t is not None}
    )
    if len(thicknesses) > 1 and thicknesses[-1] - thicknesses[0] > 0.01:
        cautions.append(
            Caution(
                "mixed-thickness",
                f"Slice thickness runs from {thicknesses[0]:g} to {thicknesses[-1]:g} mm.",
                "Measure slices of one thickness.",
            )
        )
    dz = geometry.spacing_mm[0]
    said = {image.spacing_between for image in images} - {None}
    wrong = [s for s in said if s is not None and abs(s - dz) > max(0.01, 0.01 * dz)]
    if wrong and geometry.dz_known:
        cautions.append(
            Caution(
                "spacing-tag-wrong",
                f"The spacing tag says {wrong[0]:g} mm, the positions {dz:.4g} mm; these are "
                "believed.",
            )
        )
    cautions += _diameter(images[0])
    return cautions


def _diameter(image: ImageFacts) -> list[Caution]:
    diameter = image.acquisition.reconstruction_diameter_mm
    layout = image.layout
    if diameter is None or image.pixel_spacing is None or layout.rows != layout.columns:
        return []
    implied = diameter / layout.columns
    dx = image.pixel_spacing[1]
    if abs(implied / dx - 1) <= _DIAMETER_TOLERANCE:
        return []
    return [
        Caution(
            "spacing-tag-wrong",
            f"Reconstruction diameter over matrix is {implied:.4g} mm, pixel spacing {dx:.4g} mm; "
            "pixel spacing is believed.",
        )
    ]


def encoding_names(images: Sequence[ImageFacts]) -> str:
    """Return the names of the pixel encodings that need decoding, ``""`` for plain pixels."""
    names = {SYNTAXES[i.syntax_uid].name for i in images if SYNTAXES[i.syntax_uid].encapsulated}
    return ", ".join(sorted(names))
