"""What every measurement is: a name, settings, regions, and one method."""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, ClassVar

from pydantic import BaseModel, ConfigDict, Field

from ct_measure_plugin.errors import RegionError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.results import NotMeasured, Quantity, Result
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["Measurement", "RegionNeed", "Settings", "further_levels"]


class Settings(BaseModel):
    """Parent of all settings: frozen, complete, and strict about unknown names.

    A field's type makes its control in the form, its description the tooltip and the command's
    help.
    """

    model_config = ConfigDict(frozen=True, extra="forbid")


def further_levels(curve: str = "MTF") -> Any:
    """Return the field of a setting that asks for the frequencies of more levels of a curve."""
    return Field(
        (),
        title="Further levels",
        description=f"levels of the {curve} between 0 and 1, besides 50, 10 and 2 %, whose"
        " frequencies are wanted",
    )


@dataclass(frozen=True, slots=True)
class RegionNeed:
    """Which regions a measurement takes.

    Attributes
    ----------
    kinds : tuple of str
        Kinds it accepts: AREAS, BODIES, or some of them.
    at_least : int
        How many it needs.
    together : bool
        True if it takes all regions as one set and gives one result; False if it measures each
        region by itself.
    thresholds : bool
        True if a region's own range of values counts; False if it is refused.
    """

    kinds: tuple[str, ...]
    at_least: int = 1
    together: bool = False
    thresholds: bool = False


#: Kinds that enclose pixels on a slice, and these with the kinds that only a stack of slices has.
AREAS = ("disc", "ellipse", "box", "polygon", "segment", "path", "mask")
BODIES = (*AREAS, "ellipsoid")


class Measurement(ABC):
    """One kind of measurement.

    Subclasses set the class attributes and implement :meth:`measure`.

    Attributes
    ----------
    name : str
        The public name, the same as the physics function's.
    title : str
        What docks, tables and reports call it.
    summary : str
        One sentence.
    settings_type : type of Settings
        Its settings.
    result_type : type of Result
        What it answers; a record is rebuilt from it.
    regions : RegionNeed
        The regions it takes.
    columns : tuple of str
        Quantities worth a column in a narrow table, in order.
    lists : tuple of str
        Curves that are lists of a few asked-for numbers, to be read beside the columns.
    """

    name: ClassVar[str]
    title: ClassVar[str]
    summary: ClassVar[str]
    settings_type: ClassVar[type[Settings]]
    result_type: ClassVar[type[Result]]
    regions: ClassVar[RegionNeed]
    columns: ClassVar[tuple[str, ...]]
    lists: ClassVar[tuple[str, ...]] = ()

    @abstractmethod
    def measure(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> Result | NotMeasured:
        """Measure the regions on the volume: one region, or all where `regions.together` is set."""

    def marks(
        self,
        volume: Volume,  # noqa: ARG002 - overridden where there is something to draw
        regions: Sequence[Region],  # noqa: ARG002
        settings: Settings,  # noqa: ARG002
        answer: Result | NotMeasured,  # noqa: ARG002
    ) -> tuple[Region, ...]:
        """Return what was found, or where was looked, as regions to draw over the image.

        In the image frame, like the regions asked for: the edge that was found, a fitted circle,
        the patches. Nothing by default.
        """
        return ()

    def glance(
        self, volume: Volume, regions: Sequence[Region], settings: Settings
    ) -> Result | NotMeasured:
        """Measure what can be told while a region moves: the same numbers, perhaps fewer of them.

        A measurement that is slow beside the screen's 30 pictures a second overrides this with a
        part of its answer that leaves out uncertainties and says so; the others measure in full.
        """
        return self.measure(volume, regions, settings)

    def paired(
        self,
        first: Volume,  # noqa: ARG002 - overridden where pixels can be paired
        second: Volume,  # noqa: ARG002
        regions: Sequence[Region],  # noqa: ARG002
        settings: Settings,  # noqa: ARG002
    ) -> dict[str, Quantity]:
        """Return differences, second less first, known better from the pixels of both volumes.

        Asked only of volumes with their voxels at the same places; by field name, with the
        uncertainty left when what both volumes share has cancelled.
        """
        return {}

    def check_regions(self, regions: Sequence[Region]) -> None:
        """Raise RegionError if the regions are not what this measurement takes."""
        if len(regions) < self.regions.at_least:
            raise RegionError(
                "regions",
                f"must hold at least {self.regions.at_least} for {self.name}",
                len(regions),
            )
        for region in regions:
            if region.kind not in self.regions.kinds:
                raise RegionError(
                    "regions", f"must be of kind {', '.join(self.regions.kinds)}", region.kind
                )
            if region.values is not None and not self.regions.thresholds:
                raise RegionError("values", f"must be left out for {self.name}", region.values)
