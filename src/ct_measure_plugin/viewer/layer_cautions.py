"""What a number measured on a layer of another reader must say about it."""

from __future__ import annotations

from ct_measure_plugin.physics.results import Caution

__all__ = ["spacing_caution", "tilt_caution", "unit_caution"]


def spacing_caution(spacing: tuple[float, float, float]) -> Caution:
    """Return the caution that the pixel size was entered by hand."""
    dz, dy, dx = spacing
    return Caution(
        "spacing-assumed",
        f"The layer is in pixels; {dz:g} × {dy:g} × {dx:g} mm (z, y, x) was entered by hand.",
        "Check the pixel size against the scan's own data.",
    )


def tilt_caution(tilt: float) -> Caution:
    """Return the caution that the slices lean."""
    return Caution(
        "gantry-tilt",
        f"The layer's slices lean by {tilt:.1f}° against their stacking direction.",
        "Measure in the plane only, or reformat without tilt.",
    )


def unit_caution(unit: str) -> Caution:
    """Return the caution that the unit of the values was assumed."""
    if unit == "HU":
        return Caution(
            "hu-assumed",
            "The layer does not say what its values are; HU were assumed.",
            "Open the DICOM series itself, or enter the unit.",
        )
    said = f"in '{unit}'" if unit else "of no known unit"
    return Caution("not-hu", f"The values were said to be {said}.", "Measure HU on a CT series.")
