"""What to measure: the image layers, the regions, and over which slices."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QSignalBlocker, Signal
from qtpy.QtWidgets import (
    QComboBox,
    QFormLayout,
    QHBoxLayout,
    QLabel,
    QMenu,
    QPushButton,
    QSpinBox,
    QWidget,
)

from ct_measure_plugin.viewer.asking import Extent
from ct_measure_plugin.viewer.docks.dock import narrow
from ct_measure_plugin.viewer.docks.image_ticks import ImageTicks

if TYPE_CHECKING:
    from ct_measure_plugin.measurements import RegionNeed
    from ct_measure_plugin.viewer.session import Session

__all__ = ["ALL_SLICES", "Sources"]

#: napari's drawing mode for each kind of region that can be drawn, and what it is called.
_TOOLS = {
    "box": ("add_rectangle", "Rectangle"),
    "disc": ("add_ellipse", "Circle (hold Shift)"),
    "ellipse": ("add_ellipse", "Ellipse"),
    "polygon": ("add_polygon", "Polygon"),
    "segment": ("add_line", "Line"),
    "path": ("add_polyline", "Path"),
}

_DRAWN, _AROUND, ALL_SLICES = "As drawn", "Slices around it", "All slices"

#: Rows of the list of images before it scrolls.
_ROWS = 4


class Sources(QWidget):
    """The choice of layers and slices.

    Signals
    -------
    changed()
        Something else was chosen.
    draw_asked(mode)
        Someone wants to draw, in a napari drawing mode.
    """

    changed = Signal()
    draw_asked = Signal(str)

    def __init__(self, session: Session, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._session = session
        self._shapes: list[Any] = []
        self._build()

    # --- building -------------------------------------------------------------------

    def _build(self) -> None:
        form = QFormLayout(self)
        form.setContentsMargins(0, 0, 0, 0)
        form.setFieldGrowthPolicy(QFormLayout.FieldGrowthPolicy.AllNonFixedFieldsGrow)
        self.images = ImageTicks(self._session, _ROWS)
        self.images.setToolTip("Tick several to measure the same regions on each.")
        self.images.ticked.connect(self.changed)
        self.regions = QComboBox()
        self.regions.setAccessibleName("Layer of regions")
        narrow(self.regions)
        self.regions.currentIndexChanged.connect(self._emit)
        self.draw = QPushButton("Draw")
        self.draw.setToolTip("Draw a region; a layer for it is added if there is none.")
        self.draw.clicked.connect(self._draw_first)
        self.slices = QComboBox()
        self.slices.setAccessibleName("Slices")
        self.slices.addItems([_DRAWN, _AROUND, ALL_SLICES])
        self.slices.setToolTip("Regions that state their own slices keep them.")
        self.slices.currentIndexChanged.connect(self._slices_chosen)
        self.around = QSpinBox()
        self.around.setAccessibleName("Slices either side")
        self.around.setRange(1, 999)
        self.around.setPrefix("± ")
        self.around.setKeyboardTracking(False)
        self.around.valueChanged.connect(self._emit)
        self.around.hide()
        form.addRow(*_row("&Images", self.images))
        self._region_row = _beside(self.regions, self.draw)
        form.addRow(*_row("&Regions", self._region_row, self.regions))
        form.addRow(*_row("&Slices", _beside(self.slices, self.around), self.slices))
        self._form = form

    # --- to be asked ----------------------------------------------------------------

    def chosen_images(self) -> tuple[Any, ...]:
        """Return the image layers ticked, in the order of the list."""
        return self.images.chosen

    def chosen_regions(self) -> Any:
        """Return the Shapes layer, or None."""
        index = self.regions.currentIndex()
        return self._shapes[index] if 0 <= index < len(self._shapes) else None

    def extent(self) -> Extent:
        """Return the slices that drawn regions stand for."""
        text = self.slices.currentText()
        return Extent({_DRAWN: 0, _AROUND: self.around.value()}.get(text))

    # --- to be told -----------------------------------------------------------------

    def look(self) -> None:
        """Look at the viewer's layers again; what was chosen stays chosen."""
        from napari.layers import Shapes

        viewer = self._session.viewer
        layers = () if viewer is None else tuple(viewer.layers)
        before, region = self.chosen_images(), self.chosen_regions()
        self.images.look()
        self._shapes = [one for one in reversed(layers) if isinstance(one, Shapes)]
        self._fill(region)
        if [id(one) for one in before] != [id(one) for one in self.chosen_images()] or (
            region is not self.chosen_regions()
        ):
            self.changed.emit()

    def choose(self, images: tuple[Any, ...] = (), regions: Any = None) -> None:
        """Choose layers; for programs and tests."""
        if images:
            self.images.tick(images)
        self._fill(self.chosen_regions() if regions is None else regions)
        self.changed.emit()

    def offer(self, need: RegionNeed) -> None:
        """Offer the drawing tools that a measurement's regions are drawn with."""
        kinds = [kind for kind in need.kinds if kind in _TOOLS]
        menu = QMenu(self.draw)
        menu.setAccessibleName("What to draw")
        for kind in kinds:
            mode, text = _TOOLS[kind]
            menu.addAction(text).triggered.connect(
                lambda _checked=False, wanted=mode: self.draw_asked.emit(wanted)
            )
        self._first = _TOOLS[kinds[0]][0] if kinds else ""
        self.draw.setMenu(menu if len(kinds) > 1 else None)
        self._form.setRowVisible(self._region_row, bool(kinds))

    # --- inside ---------------------------------------------------------------------

    def _fill(self, region: Any) -> None:
        """Write the lists anew without telling anyone."""
        self.images.fill()
        blocker = QSignalBlocker(self.regions)
        self.regions.clear()
        for layer in self._shapes:
            self.regions.addItem(layer.name)
        place = next((i for i, one in enumerate(self._shapes) if one is region), 0)
        self.regions.setCurrentIndex(place if self._shapes else -1)
        deep = any(layer.ndim > 2 for layer in self.images.offered)
        self._form.setRowVisible(self.slices.parentWidget(), deep)
        del blocker

    def _slices_chosen(self, *_: Any) -> None:
        self.around.setVisible(self.slices.currentText() == _AROUND)
        self.changed.emit()

    def _draw_first(self, *_: Any) -> None:
        if self._first:
            self.draw_asked.emit(self._first)

    def _emit(self, *_: Any) -> None:
        self.changed.emit()

    _first = ""


def _beside(first: QWidget, second: QWidget) -> QWidget:
    holder = QWidget()
    line = QHBoxLayout(holder)
    line.setContentsMargins(0, 0, 0, 0)
    line.addWidget(first, 1)
    line.addWidget(second)
    return holder


def _row(text: str, field: QWidget, buddy: QWidget | None = None) -> tuple[QLabel, QWidget]:
    label = QLabel(text)
    label.setBuddy(field if buddy is None else buddy)
    return label, field
