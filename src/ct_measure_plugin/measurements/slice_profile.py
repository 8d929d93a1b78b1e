"""The slice sensitivity profile from the bead, ramp or wire in each box."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar, Literal, cast

from pydantic import Field

from ct_measure_plugin.measurements.base import Measurement, RegionNeed, Settings, further_levels
from ct_measure_plugin.measurements.boxes import cut_box
from ct_measure_plugin.physics.regions import Disc
from ct_measure_plugin.physics.results import NotMeasured, Result
from ct_measure_plugin.physics.slice_profile import SliceProfile, slice_profile

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["MeasureSliceProfile", "SliceProfileSettings"]

#: Fewest pixels a side.
LEAST_PIXELS = 12

#: Slices that lean against their stacking direction by more than this do not see one place.
MOST_TILT_DEG = 0.1


class SliceProfileSettings(Settings):
    """Settings of the slice profile."""

    target: Literal["bead", "ramp", "wire"] = Field(
        "bead",
        description="bead: small and dense; ramp: a thin plate that climbs through the slices;"
        " wire: one that climbs at a small angle to them",
    )
    object_size_mm: float | None = Field(
        None,
        ge=0,
        title="Object size (mm)",
        description="diameter of the bead or wire, thickness of the ramp; taken out",
    )
    angle_deg: float | None = Field(
        None,
        ge=2,
        le=70,
        title="Angle (°)",
        description="angle between ramp or wire and the slices; found from them if not set",
    )
    climb_deg: float | None = Field(
        None,
        title="Climbs towards (°)",
        description="direction in the slice along which it climbs, counter-clockwise from +x;"
        " needed for a ramp on fewer than three slices",
    )
    in_plane_fwhm_mm: float | None = Field(
        None,
        ge=0,
        title="Resolution in the slice (mm)",
        description="full width at half maximum of the point spread within the slice, which widens"
        " the profile of a ramp or wire; taken out",
    )
    levels: tuple[float, ...] = further_levels("MTF along z")


class MeasureSliceProfile(Measurement):
    """Slice sensitivity profile, its widths, and the MTF along z."""

    name: ClassVar[str] = "slice_profile"
    title: ClassVar[str] = "Slice profile"
    summary: ClassVar[str] = "Slice sensitivity profile and resolution along z."
    settings_type: ClassVar[type[Settings]] = SliceProfileSettings
    result_type: ClassVar[type[Result]] = SliceProfile
    regions: ClassVar[RegionNeed] = RegionNeed(("box", "disc"))
    columns: ClassVar[tuple[str, ...]] = ("fwhm", "fwtm", "equivalent_width", "f50", "angle")

    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> SliceProfile | NotMeasured:
        """Measure the object in one region through all its slices."""
        wanted = cast("SliceProfileSettings", settings)
        if abs(volume.tilt_deg) > MOST_TILT_DEG:
            return NotMeasured(
                f"the slices lean by {volume.tilt_deg:.1f}° against their stacking direction",
                "scan without gantry tilt",
                volume.cautions,
            )
        box = cut_box(volume, regions[0], least=LEAST_PIXELS)
        if isinstance(box, NotMeasured):
            return box
        if volume.representable_hu is not None:
            low, high = volume.representable_hu
            if bool(((box.values <= low) | (box.values >= high)).any()):
                return NotMeasured(
                    "values of the box stand at the end of the stored range: they are clipped",
                    "reconstruct with an extended CT-number range, or use a smaller bead",
                    box.cautions,
                )
        found = box.told(
            slice_profile(
                box.values,
                spacing_mm=volume.spacing_mm[1:],
                positions_mm=volume.positions_mm[box.slices],
                target=wanted.target,
                object_size_mm=wanted.object_size_mm,
                angle_deg=wanted.angle_deg,
                climb_deg=wanted.climb_deg,
                in_plane_fwhm_mm=wanted.in_plane_fwhm_mm,
                unit=volume.unit,
                levels=wanted.levels,
            )
        )
        if isinstance(found, NotMeasured):
            return found
        return replace(found, center_mm=box.shifted(found.center_mm))

    def marks(
        self,
        volume: Volume,
        regions: Sequence[Region],
        settings: Settings,  # noqa: ARG002
        answer: Result | NotMeasured,
    ) -> tuple[Region, ...]:
        """Return a small disc where the bead lies, or the ramp crosses the middle slice."""
        if not isinstance(answer, SliceProfile):
            return ()
        radius = 2 * max(volume.spacing_mm[1:])
        return (Disc(answer.center_mm, radius, z_mm=regions[0].z_mm, name=regions[0].name),)
