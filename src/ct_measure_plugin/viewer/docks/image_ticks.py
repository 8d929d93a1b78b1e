"""The image layers of the viewer as a list to tick."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QSignalBlocker, QSize, Qt, Signal
from qtpy.QtWidgets import QListWidget, QListWidgetItem, QWidget

if TYPE_CHECKING:
    from ct_measure_plugin.viewer.session import Session

__all__ = ["ImageTicks"]

#: Pixels of a row.
_ROW = 20


class ImageTicks(QListWidget):
    """The image layers, those to be measured ticked.

    Parameters
    ----------
    session : Session
        Whose viewer's images are offered.
    rows : int
        Rows shown before the list scrolls.
    numbered : bool, optional
        True numbers the ticked images where they are several: the first is what others are
        compared with.

    Signals
    -------
    ticked()
        The user ticked or unticked an image.
    """

    ticked = Signal()

    def __init__(
        self,
        session: Session,
        rows: int,
        *,
        numbered: bool = False,
        parent: QWidget | None = None,
    ) -> None:
        super().__init__(parent)
        self._session = session
        self._rows, self._numbered = rows, numbered
        self._images: list[Any] = []
        self._wanted: list[Any] = []
        self.setAccessibleName("Image layers to measure")
        self.itemChanged.connect(self._changed)

    @property
    def offered(self) -> tuple[Any, ...]:
        """The image layers, from the top of the list."""
        return tuple(self._images)

    @property
    def chosen(self) -> tuple[Any, ...]:
        """The image layers ticked: as they were if numbered, else in the order of the list."""
        if self._numbered:
            return tuple(one for one in self._wanted if _holds(self._images, one))
        return tuple(one for one in self._images if _holds(self._wanted, one))

    def look(self) -> None:
        """Look for the viewer's images again; ticks stay, and there is one at least."""
        self._images = list(self._session.images())
        self._wanted = [one for one in self._wanted if _holds(self._images, one)]
        if not self._wanted and self._images:
            self._wanted = list(self._session.chosen_images()[:1]) or self._images[:1]

    def tick(self, images: tuple[Any, ...]) -> None:
        """Tick these images only."""
        self._wanted = list(images)

    def fill(self) -> None:
        """Write the list anew without telling anyone."""
        blocker = QSignalBlocker(self)
        self.clear()
        for layer in self._images:
            place = next((i for i, one in enumerate(self._wanted, 1) if one is layer), 0)
            several = self._numbered and place and len(self._wanted) > 1
            item = QListWidgetItem(f"{place}: {layer.name}" if several else layer.name)
            item.setFlags(Qt.ItemFlag.ItemIsEnabled | Qt.ItemFlag.ItemIsUserCheckable)
            item.setCheckState(Qt.CheckState.Checked if place else Qt.CheckState.Unchecked)
            item.setToolTip(layer.name)
            item.setSizeHint(QSize(0, _ROW))
            self.addItem(item)
        self.setFixedHeight(min(max(len(self._images), 1), self._rows) * _ROW + 4)
        del blocker

    def _changed(self, item: QListWidgetItem) -> None:
        layer = self._images[self.row(item)]
        self._wanted = [one for one in self._wanted if one is not layer]
        if item.checkState() == Qt.CheckState.Checked:
            self._wanted.append(layer)
        self.ticked.emit()


def _holds(layers: list[Any], wanted: Any) -> bool:
    return any(one is wanted for one in layers)
