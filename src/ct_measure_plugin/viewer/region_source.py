"""One face for the layers that regions come from: Shapes, Points and Labels.

The dock asks what is drawn, selects and is told of selections, and reads and writes names, the
same way whatever the layer is.
"""

from __future__ import annotations

from contextlib import ExitStack, contextmanager
from typing import TYPE_CHECKING, Any, ClassVar

from psygnal import Signal

from ct_measure_plugin.viewer.answer_columns import with_answers, write_answers
from ct_measure_plugin.viewer.labels import LabelRegions
from ct_measure_plugin.viewer.points import points_on
from ct_measure_plugin.viewer.region_features import count_of, set_column
from ct_measure_plugin.viewer.shapes import drawn_on, repair

if TYPE_CHECKING:
    from collections.abc import Callable, Collection, Iterator, Mapping, Sequence

    from ct_measure_plugin.physics.results import NotMeasured, Result
    from ct_measure_plugin.viewer.drawn import Drawn
    from ct_measure_plugin.viewer.placement import Placement
    from ct_measure_plugin.viewer.tasks import Work

__all__ = ["LabelSource", "PointSource", "RegionSource", "ShapeSource", "kinds", "source_of"]


class Signals:
    """What a source tells of by itself.

    Signals
    -------
    changed()
        A look through the layer in the background has ended.
    """

    changed = Signal()


class RegionSource:
    """A layer that regions come from.

    Parameters
    ----------
    layer : napari layer
        Shapes, Points or Labels.
    viewer : ViewerModel
        Where it is shown.

    Attributes
    ----------
    events : tuple of str
        The layer's events after which what is drawn may differ.
    selection_event : str
        The one that tells of a selection.
    """

    events: ClassVar[tuple[str, ...]] = ("set_data", "data", "features")
    selection_event: ClassVar[str] = "highlight"

    def __init__(self, layer: Any, viewer: Any) -> None:
        self.layer = layer
        self.viewer = viewer
        self.looked_through = Signals()

    def note(self, event: Any) -> None:
        """Take note of one of the layer's events."""

    def drawn(
        self, placement: Placement, point: Sequence[float], *, wait: bool = False
    ) -> tuple[Drawn, ...]:
        """Return what is drawn, as regions of an image layer's Volume; complete if told to wait."""
        raise NotImplementedError

    @property
    def empty(self) -> bool:
        """True if nothing is drawn."""
        return not len(self.layer.data)

    @property
    def busy(self) -> bool:
        """True while the layer is looked through in the background."""
        return False

    @property
    def unfinished(self) -> bool:
        """True while a region is being drawn, which has no row of features yet."""
        return False

    def close(self) -> None:
        """Stop what runs in the background."""

    def mend(self) -> None:
        """Mend what napari leaves behind; call it outside the layer's own events."""

    # --- selections -----------------------------------------------------------------

    def selected(self) -> set[int]:
        """Return the indices of the regions selected in the viewer."""
        return {int(i) for i in self.layer.selected_data}

    def select(self, indices: Collection[int]) -> None:
        """Select regions in the viewer, so that they light up."""
        wanted = set(indices)
        if wanted and self.layer not in self.viewer.layers.selection:
            self.viewer.layers.selection.active = self.layer
        if self.selected() != wanted:
            self.layer.selected_data = wanted

    # --- features -------------------------------------------------------------------

    def write(self, column: str, values: Mapping[int, Any]) -> None:
        """Write names, classes and the like; by index."""
        set_column(self.layer, column, values)

    def write_answers(
        self, answers: Mapping[int, Result | NotMeasured], image: str, suffix: str = ""
    ) -> bool:
        """Write answers into the features; return whether anything changed."""
        return write_answers(self.layer, self._own(answers), image=image, suffix=suffix)

    def columns_job(
        self, parts: Sequence[tuple[Mapping[int, Result | NotMeasured], str, str]]
    ) -> Callable[[Work], Any]:
        """Return a job that puts answers into a copy of the features, for a thread.

        It returns the new features, or None if they say it already. A part is answers, image and
        suffix, as for :meth:`write_answers`.
        """
        features, keys = self.layer.features, self._keys()
        count = count_of(self.layer) if keys is None else 0
        own = [(self._own(answers), image, suffix) for answers, image, suffix in parts]

        def job(work: Work) -> Any:
            found = None
            for place, (answers, image, suffix) in enumerate(own):
                work.stop_if_asked()
                work.progress(place, len(own))
                now = features if found is None else found
                new = with_answers(now, answers, count=count, image=image, suffix=suffix, keys=keys)
                found = found if new is None else new
            return found

        return job

    def _keys(self) -> list[int] | None:
        """Return the labels of a Labels layer."""
        return None

    def _own(
        self, answers: Mapping[int, Result | NotMeasured]
    ) -> Mapping[int, Result | NotMeasured]:
        """Return the answers that belong to regions still there."""
        return answers


class ShapeSource(RegionSource):
    """The shapes of a Shapes layer."""

    events: ClassVar[tuple[str, ...]] = ("set_data", "data", "features", "edge_width")

    def drawn(
        self,
        placement: Placement,
        point: Sequence[float],
        *,
        wait: bool = False,  # noqa: ARG002
    ) -> tuple[Drawn, ...]:
        """Return every shape as a region."""
        return drawn_on(self.layer, placement, point)

    @property
    def empty(self) -> bool:
        """True if nothing is drawn."""
        return not self.layer.nshapes

    @property
    def unfinished(self) -> bool:
        """True while a shape is being drawn."""
        return bool(getattr(self.layer, "_is_creating", False))

    def mend(self) -> None:
        """Take away the row of features that a cancelled polygon leaves."""
        if not self.unfinished:
            repair(self.layer)


class PointSource(RegionSource):
    """The points of a Points layer, each a disc of its size."""

    events: ClassVar[tuple[str, ...]] = ("set_data", "data", "features", "size")

    def drawn(
        self,
        placement: Placement,
        point: Sequence[float],
        *,
        wait: bool = False,  # noqa: ARG002
    ) -> tuple[Drawn, ...]:
        """Return every point as a region."""
        return points_on(self.layer, placement, point)


class LabelSource(RegionSource):
    """The labels of a Labels layer; a region's index is its label."""

    events: ClassVar[tuple[str, ...]] = ("set_data", "data", "features", "labels_update", "paint")
    selection_event: ClassVar[str] = "selected_label"

    def __init__(self, layer: Any, viewer: Any) -> None:
        super().__init__(layer, viewer)
        self._by_image: dict[int, LabelRegions] = {}
        self._labels: list[int] = []

    def note(self, event: Any) -> None:
        """Take note of a stroke, an edit, a redraw or another array."""
        kind = getattr(event, "type", "")
        for regions in self._by_image.values():
            if kind == "labels_update":
                regions.stroke(event)
            elif kind == "paint":
                regions.painted(event)
            elif kind == "set_data":
                regions.refreshed(self.viewer.dims.point)
            elif kind == "data":
                regions.replaced()

    def drawn(
        self, placement: Placement, point: Sequence[float], *, wait: bool = False
    ) -> tuple[Drawn, ...]:
        """Return every label as a region; those known while the map is still looked through."""
        image = id(placement.layer)
        if image not in self._by_image:
            self._by_image[image] = regions = LabelRegions(self.layer)
            regions.changed.connect(self.looked_through.changed.emit)
        found = self._by_image[image].drawn(placement, point, wait=wait)
        self._labels = [one.index for one in found if one.index]
        return found

    @property
    def empty(self) -> bool:
        """False: whether anything is painted is only known once it was looked for."""
        return False

    @property
    def busy(self) -> bool:
        """True while the map is looked through in the background."""
        return any(regions.busy for regions in self._by_image.values())

    def close(self) -> None:
        """Stop what runs in the background."""
        for regions in self._by_image.values():
            regions.close()
        self._by_image.clear()

    def selected(self) -> set[int]:
        """Return the label that the brush would paint, if it is on the map."""
        label = int(self.layer.selected_label)
        return {label} if label in self._labels else set()

    def select(self, indices: Collection[int]) -> None:
        """Make a label the one to paint with."""
        wanted = sorted(indices)
        if not wanted:
            return
        if self.layer not in self.viewer.layers.selection:
            self.viewer.layers.selection.active = self.layer
        if int(self.layer.selected_label) != wanted[0]:
            with self._quietly():
                self.layer.selected_label = wanted[0]

    def show_alone(self, *, alone: bool) -> None:
        """Show the selected label alone, or all of them."""
        with self._quietly():
            self.layer.show_selected_label = alone

    @contextmanager
    def _quietly(self) -> Iterator[None]:
        """Change the layer's looks alone: no reason to look through it again."""
        with ExitStack() as stack:
            for regions in self._by_image.values():
                stack.enter_context(regions.quietly())
            yield

    def write(self, column: str, values: Mapping[int, Any]) -> None:
        """Write names, classes and the like; by label."""
        set_column(self.layer, column, values, keys=self._labels)

    def write_answers(
        self, answers: Mapping[int, Result | NotMeasured], image: str, suffix: str = ""
    ) -> bool:
        """Write answers into the features; return whether anything changed."""
        mine = self._own(answers)
        if not mine:
            return False
        return write_answers(self.layer, mine, image=image, suffix=suffix, keys=self._labels)

    def _keys(self) -> list[int] | None:
        return list(self._labels)

    def _own(
        self, answers: Mapping[int, Result | NotMeasured]
    ) -> Mapping[int, Result | NotMeasured]:
        known = set(self._labels)
        return {label: found for label, found in answers.items() if label in known}


def kinds() -> tuple[type, ...]:
    """Return the kinds of napari layers that regions come from."""
    from napari.layers import Labels, Points, Shapes

    return (Shapes, Labels, Points)


def source_of(layer: Any, viewer: Any) -> RegionSource:
    """Return the face of a layer.

    Raises
    ------
    TypeError
        If it is of none of :func:`kinds`.
    """
    from napari.layers import Labels, Points, Shapes

    for kind, face in ((Shapes, ShapeSource), (Labels, LabelSource), (Points, PointSource)):
        if isinstance(layer, kind):
            return face(layer, viewer)
    raise TypeError(type(layer).__name__)
