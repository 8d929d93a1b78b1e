"""Which image layers are measured, with the regions of which layer, and what to draw with."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QSignalBlocker, Qt, Signal
from qtpy.QtWidgets import (
    QComboBox,
    QFormLayout,
    QHBoxLayout,
    QLabel,
    QMenu,
    QPushButton,
    QWidget,
)

from ct_measure_plugin.viewer.docks.dock import narrow
from ct_measure_plugin.viewer.docks.image_ticks import ImageTicks
from ct_measure_plugin.viewer.region_source import kinds

if TYPE_CHECKING:
    from ct_measure_plugin.viewer.session import Session

__all__ = ["RegionChoice"]

#: What can be drawn: words, the kind of layer, and napari's mode.
TOOLS = (
    ("Ellipse (hold Shift for a circle)", "shapes", "add_ellipse"),
    ("Rectangle", "shapes", "add_rectangle"),
    ("Polygon", "shapes", "add_polygon"),
    ("Freehand outline", "shapes", "add_polygon_lasso"),
    ("Line, as wide as its edge", "shapes", "add_line"),
    ("Points with a diameter", "points", "add"),
    ("Paint labels", "labels", "paint"),
)

#: Rows of the list of images before it scrolls.
_ROWS = 3


class RegionChoice(QWidget):
    """The choice of layers.

    Signals
    -------
    changed()
        Something else was chosen.
    draw_asked(kind, mode)
        Someone wants to draw: on which kind of layer, in which of napari's modes.
    """

    changed = Signal()
    draw_asked = Signal(str, str)

    def __init__(self, session: Session, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._session = session
        self._layers: list[Any] = []
        form = QFormLayout(self)
        form.setContentsMargins(0, 0, 0, 0)
        form.setFieldGrowthPolicy(QFormLayout.FieldGrowthPolicy.AllNonFixedFieldsGrow)
        self.images = ImageTicks(session, _ROWS, numbered=True)
        self.images.setToolTip(
            "Tick several to measure the same regions on each. Differences are to the first ticked."
        )
        self.images.ticked.connect(self._ticked)
        self.regions = QComboBox()
        narrow(self.regions)
        self.regions.setAccessibleName("Layer of regions")
        self.regions.setToolTip("Shapes, Labels or Points")
        self.regions.currentIndexChanged.connect(lambda _index: self.changed.emit())
        self.draw = QPushButton("Draw")
        self.draw.setToolTip("Draw a region; a layer for it is added if there is none")
        self.draw.setMenu(self._tools())
        holder = QWidget()
        line = QHBoxLayout(holder)
        line.setContentsMargins(0, 0, 0, 0)
        line.addWidget(self.regions, 1)
        line.addWidget(self.draw)
        for text, field, buddy in (
            ("&Images", self.images, self.images),
            ("&Regions", holder, self.regions),
        ):
            label = QLabel(text)
            label.setBuddy(buddy)
            form.addRow(label, field)

    def _tools(self) -> QMenu:
        menu = QMenu(self.draw)
        menu.setAccessibleName("What to draw")
        for words, kind, mode in TOOLS:
            menu.addAction(words).triggered.connect(
                lambda _checked=False, k=kind, m=mode: self.draw_asked.emit(k, m)
            )
        return menu

    # --- to be asked ----------------------------------------------------------------

    def chosen_images(self) -> tuple[Any, ...]:
        """Return the image layers ticked, in the order in which they were."""
        return self.images.chosen

    def chosen_layer(self) -> Any:
        """Return the layer of regions, or None."""
        index = self.regions.currentIndex()
        return self._layers[index] if 0 <= index < len(self._layers) else None

    # --- to be told -----------------------------------------------------------------

    def look(self) -> None:
        """Look at the viewer's layers again; what was chosen stays chosen."""
        viewer = self._session.viewer
        layers = () if viewer is None else tuple(viewer.layers)
        before, region = self.chosen_images(), self.chosen_layer()
        self.images.look()
        self._layers = [one for one in reversed(layers) if isinstance(one, kinds())]
        self._fill(region)
        after = self.chosen_images()
        same = len(before) == len(after) and all(a is b for a, b in zip(before, after, strict=True))
        if not same or region is not self.chosen_layer():
            self.changed.emit()

    def choose(self, images: tuple[Any, ...] = (), regions: Any = None) -> None:
        """Choose layers; for programs and tests."""
        if images:
            self.images.tick(images)
        self._fill(self.chosen_layer() if regions is None else regions)
        self.changed.emit()

    def choose_layer(self, layer: Any) -> None:
        """Choose a layer of regions, such as one just opened."""
        self.choose(regions=layer)

    # --- inside ---------------------------------------------------------------------

    def _fill(self, region: Any) -> None:
        """Write the lists anew without telling anyone."""
        self.images.fill()
        blocker = QSignalBlocker(self.regions)
        self.regions.clear()
        for layer in self._layers:
            self.regions.addItem(layer.name)
            tip = f"{layer.name}: {type(layer).__name__.lower()}"
            self.regions.setItemData(self.regions.count() - 1, tip, Qt.ItemDataRole.ToolTipRole)
        place = next((i for i, one in enumerate(self._layers) if one is region), 0)
        self.regions.setCurrentIndex(place if self._layers else -1)
        del blocker

    def _ticked(self) -> None:
        self._fill(self.chosen_layer())
        self.changed.emit()
