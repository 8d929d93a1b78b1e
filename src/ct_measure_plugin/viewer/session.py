"""What the docks of one viewer share, as evented state without Qt."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, ClassVar
from weakref import WeakKeyDictionary, ref

from psygnal import Signal

from ct_measure_plugin.viewer.layers import Asked, placement_of

if TYPE_CHECKING:
    from collections.abc import Iterable

    from ct_measure_plugin.viewer.layers import Placement

__all__ = ["MEASURED", "Session"]

#: What a setting's file is to hold -> the measurements whose answers would do.
MEASURED: dict[str, tuple[str, ...]] = {
    "noise spectrum": ("noise_power",),
    "MTF": ("edge_mtf", "disc_mtf", "wire_mtf"),
}


class Session:
    """The state that the docks of one viewer share.

    Get it with :meth:`of`; docks of one viewer get the same one, whichever way napari handed
    them the viewer.

    Attributes
    ----------
    viewer : ViewerModel
        The viewer itself, not a proxy of it.
    records : list
        Records made in this session, oldest first.
    logbook : object or None
        The open logbook; None while records live in memory only.

    Signals
    -------
    asked_changed(layer)
        Someone entered the spacing or the unit of a layer.
    answers_changed(name, answers)
        A measurement has new answers, shown in some dock.
    record_added(record)
        A record was kept.
    logbook_changed(logbook)
        Another logbook was opened.
    """

    asked_changed = Signal(object)
    answers_changed = Signal(str, tuple)
    record_added = Signal(object)
    logbook_changed = Signal(object)

    _of: ClassVar[WeakKeyDictionary[Any, Session]] = WeakKeyDictionary()

    def __init__(self, viewer: Any) -> None:
        self._viewer = ref(viewer)
        self._asked: WeakKeyDictionary[Any, Asked] = WeakKeyDictionary()
        self._placements: dict[int, Placement] = {}
        self._answers: dict[str, tuple[Any, ...]] = {}
        self.records: list[Any] = []
        self._logbook: Any = None
        viewer.layers.events.removed.connect(self._forget)

    @classmethod
    def of(cls, viewer: Any) -> Session:
        """Return the session of a viewer, made on first use; proxies are seen through."""
        real = getattr(viewer, "__wrapped__", viewer)
        if real not in cls._of:
            cls._of[real] = cls(real)
        return cls._of[real]

    @property
    def viewer(self) -> Any:
        """The viewer; None once it is gone."""
        return self._viewer()

    # --- layers ---------------------------------------------------------------------

    def images(self) -> tuple[Any, ...]:
        """Return the viewer's image layers that can hold CT numbers, topmost first."""
        from napari.layers import Image

        viewer = self.viewer
        found = () if viewer is None else reversed(list(viewer.layers))
        return tuple(one for one in found if isinstance(one, Image) and not one.rgb)

    def chosen_images(self) -> tuple[Any, ...]:
        """Return the image layers selected in the viewer; if none is, the topmost visible one."""
        viewer = self.viewer
        images = self.images()
        selected = tuple(one for one in images if one in viewer.layers.selection) if viewer else ()
        return selected or tuple(one for one in images if one.visible)[:1]

    def asked(self, layer: Any) -> Asked | None:
        """Return what was entered about a layer, None if nothing was."""
        return self._asked.get(layer)

    def answer(self, layer: Any, asked: Asked) -> None:
        """Remember what was entered about a layer and tell everyone."""
        if self._asked.get(layer) != asked:
            self._asked[layer] = asked
            self.asked_changed.emit(layer)

    def placement(self, layer: Any) -> Placement:
        """Return a layer's Volume and place, with what was entered about it.

        The same object as before, and so the same Volume, as long as nothing about it changed;
        another one as soon as anything did.

        Raises
        ------
        ArgumentError
            If the layer cannot be measured as it is, or something must be entered first.
        """
        viewer = self.viewer
        point = None if viewer is None else viewer.dims.point
        found = placement_of(layer, self.asked(layer), point=point)
        known = self._placements.get(id(layer))
        if known is not None and known.still_holds(found):
            return known
        if viewer is not None and layer in viewer.layers:  # whose removal is told, below
            self._placements[id(layer)] = found
        return found

    def _forget(self, event: Any) -> None:
        """Let go of a layer that was removed."""
        self._placements.pop(id(event.value), None)

    # --- answers and records --------------------------------------------------------

    @property
    def answers(self) -> dict[str, tuple[Any, ...]]:
        """The newest answers by measurement name; a copy."""
        return dict(self._answers)

    def show_answers(self, name: str, answers: Iterable[Any]) -> None:
        """Keep a measurement's newest answers and tell everyone."""
        self._answers.pop(name, None)
        self._answers[name] = tuple(answers)  # the newest stand last
        self.answers_changed.emit(name, self._answers[name])

    def offered(self, kind: str) -> Any:
        """Return the newest answer that would do for a setting's file of a kind, or None."""
        for name, answers in reversed(self._answers.items()):
            found = [one for one in answers if one] if name in MEASURED.get(kind, ()) else []
            if found:
                return found[0]
        return None

    def keep(self, record: Any) -> None:
        """Keep a record and tell everyone."""
        self.records.append(record)
        self.record_added.emit(record)

    @property
    def logbook(self) -> Any:
        """The open logbook, or None."""
        return self._logbook

    @logbook.setter
    def logbook(self, logbook: Any) -> None:
        if logbook is not self._logbook:
            self._logbook = logbook
            self.logbook_changed.emit(logbook)
