"""From what is chosen and drawn to questions, and from questions to answers; no Qt.

A dock makes :class:`Question` objects in the main thread, one an image layer, each complete: a
Volume, regions in mm, settings. They are answered in another thread, which touches no layer.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from ct_measure_plugin.measurements import find
from ct_measure_plugin.measurements.one_thread import one_thread
from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.regions import Disc, Ellipse, Region
from ct_measure_plugin.physics.results import NotMeasured, Result
from ct_measure_plugin.viewer.drawn import Drawn
from ct_measure_plugin.viewer.shapes import drawn_on

if TYPE_CHECKING:
    from ct_measure_plugin.measurements import RegionNeed, Settings
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.viewer.layers import Placement

__all__ = ["Answer", "Extent", "Memory", "Question", "fitted", "question_of", "regions_for"]


@dataclass(frozen=True, slots=True)
class Extent:
    """Which slices a drawn region stands for.

    Attributes
    ----------
    around : int or None
        So many slices either side of the one it is drawn on, 0 for that one alone; None for every
        slice.
    """

    around: int | None = 0

    def over(self, region: Region, volume: Volume) -> Region:
        """Return a region with its slices; one that says itself over which keeps them."""
        if region.kind == "mask" or not isinstance(region.z_mm, float):
            return region
        if self.around is None:
            return replace(region, z_mm=None)
        own = slices_of(region, volume)
        if not self.around or not own:
            return region
        last = volume.shape[0] - 1
        low, high = max(own[0] - self.around, 0), min(own[-1] + self.around, last)
        positions = volume.positions_mm
        return replace(region, z_mm=(float(positions[low]), float(positions[high])))


@dataclass(frozen=True, slots=True)
class Question:
    """What is asked of one image layer.

    Attributes
    ----------
    name : str
        The measurement's.
    title : str
        What people call the layer.
    volume : Volume
        What to measure on; compared by identity.
    regions : tuple of Region
        Where.
    settings : Settings
        Complete.
    """

    name: str
    title: str
    volume: Volume
    regions: tuple[Region, ...]
    settings: Settings

    def parts(self) -> tuple[tuple[Region, ...], ...]:
        """Return the regions of each answer: one by one, or all together."""
        if find(self.name).regions.together or not self.regions:
            return (self.regions,)
        return tuple((region,) for region in self.regions)


@dataclass(frozen=True, slots=True, eq=False)
class Answer:
    """What was found, with what a dock needs to show it.

    Attributes
    ----------
    measurement : str
        Its name.
    label : str
        Region and layer, in words.
    result : Result or NotMeasured
        What was found.
    marks : tuple of Region
        What was found, to be drawn over the image.
    layer : int
        Which of the questions it answers.
    """

    measurement: str
    label: str
    result: Result | NotMeasured
    marks: tuple[Region, ...] = ()
    layer: int = 0


class Memory:
    """Answers known already, so that a drag measures the one region that moved."""

    def __init__(self) -> None:
        self._known: dict[tuple[Any, ...], tuple[Result | NotMeasured, tuple[Region, ...]]] = {}

    def answer(self, questions: Sequence[Question]) -> tuple[Answer, ...]:
        """Return the answers, region by region; what is not asked for any more is forgotten."""
        before, self._known = self._known, {}
        found = []
        for place, question in enumerate(questions):
            for regions in question.parts():
                key = (question.name, question.settings, question.volume, regions)
                known = before.get(key) or _measured(question, regions)
                self._known[key] = known
                label = _label(question, regions, alone=len(questions) == 1)
                found.append(Answer(question.name, label, *known, place))
        return tuple(found)

    def forget(self) -> None:
        """Measure everything anew next time."""
        self._known = {}


def _measured(
    question: Question, regions: tuple[Region, ...]
) -> tuple[Result | NotMeasured, tuple[Region, ...]]:
    measurement = find(question.name)
    measurement.check_regions(regions)
    with one_thread():
        found = measurement.measure(question.volume, regions, question.settings)
    return found, measurement.marks(question.volume, regions, question.settings, found)


def _label(question: Question, regions: tuple[Region, ...], *, alone: bool) -> str:
    names = [region.name for region in regions]
    where = ", ".join(names[:3]) + (f" and {len(names) - 3} more" if len(names) > 3 else "")
    if alone:
        return where or question.title
    return f"{question.title}: {where}" if where and len(question.parts()) > 1 else question.title


def question_of(
    name: str, title: str, volume: Volume, regions: Sequence[Region], settings: Settings
) -> Question | NotMeasured:
    """Return the question, or why it cannot be asked yet."""
    need = find(name).regions
    if len(regions) < need.at_least:
        return NotMeasured(_lacking(need, len(regions)), f"draw {_kinds(need.kinds)}")
    return Question(name, title, volume, tuple(regions), settings)


def _lacking(need: RegionNeed, have: int) -> str:
    if not have:
        return "there is no region yet"
    return f"there are {have} regions; at least {need.at_least} are needed"


def regions_for(
    name: str, layer: Any, placement: Placement, point: Sequence[float], extent: Extent
) -> tuple[tuple[Region, ...], str]:
    """Return the regions that a layer's shapes are for a measurement, and what was left out.

    Parameters
    ----------
    name : str
        The measurement's.
    layer : napari.layers.Shapes or None
        Where they are drawn.
    placement : Placement
        The image layer measured.
    point : sequence of float
        Where the viewer stands.
    extent : Extent
        Which slices they stand for.
    """
    if layer is None:
        return (), ""
    need = find(name).regions
    drawn = [fitted(one, need) for one in drawn_on(layer, placement, point)]
    regions = [extent.over(one.region, placement.volume) for one in drawn if one.region is not None]
    left_out = [f"{one.name}: {one.problem}." for one in drawn if one.region is None]
    if len(left_out) > 2:
        return tuple(regions), f"{len(left_out)} shapes are left out; {left_out[0]}"
    return tuple(regions), " ".join(left_out)


def fitted(drawn: Drawn, need: RegionNeed) -> Drawn:
    """Return a drawn region as the kind that a measurement takes.

    A hand-drawn ellipse becomes the disc of its area where only discs are taken; for anything
    else that does not fit, the problem says so.
    """
    region = drawn.region
    if region is None or region.kind in need.kinds:
        return drawn
    if isinstance(region, Ellipse) and "disc" in need.kinds:
        a, b = region.radii_mm
        disc = Disc(region.center_mm, (a * b) ** 0.5, z_mm=region.z_mm, name=region.name)
        return replace(drawn, region=disc)
    return replace(drawn, region=None, problem=f"it is a {region.kind}, not {_kinds(need.kinds)}")


def _kinds(kinds: Sequence[str]) -> str:
    words = [{"box": "a rectangle", "segment": "a line"}.get(one, f"a {one}") for one in kinds]
    words = [f"an{word[1:]}" if word[2] in "aeiou" else word for word in words if word != "a mask"]
    return " or ".join(words) if len(words) < 3 else ", ".join(words[:-1]) + f" or {words[-1]}"
