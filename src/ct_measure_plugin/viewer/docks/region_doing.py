"""The buttons right below the list of regions: delete, undo, redo, columns."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtWidgets import QHBoxLayout, QWidget

from ct_measure_plugin.viewer.docks.fields import button

if TYPE_CHECKING:
    from collections.abc import Callable

    from ct_measure_plugin.viewer.docks.region_view import RegionView
    from ct_measure_plugin.viewer.region_acts import RegionActs
    from ct_measure_plugin.viewer.undo import Undo

    Do = Callable[[Callable[[RegionActs, list[int]], Any]], bool]

__all__ = ["RegionDoing"]


class RegionDoing(QWidget):
    """Buttons that say what they would undo.

    Parameters
    ----------
    do : callable
        Given something to do with the acts and the chosen regions, does it and tells whether it
        could.
    undo : Undo
        What was done.
    view : RegionView
        The list.
    """

    def __init__(self, do: Do, undo: Undo, view: RegionView, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._do = do
        self._undo = undo
        self._view = view
        self.delete_button = button("Delete", "Take away the chosen regions", self.delete)
        self.undo_button = button("Undo", "", lambda: do(lambda *_: undo.undo()))
        self.redo_button = button("Redo", "", lambda: do(lambda *_: undo.redo()))
        self.columns = button("Columns…", "Choose the columns of the list", self._offer_columns)
        line = QHBoxLayout(self)
        line.setContentsMargins(0, 0, 0, 0)
        line.setSpacing(4)
        for one in (self.delete_button, self.undo_button, self.redo_button, self.columns):
            line.addWidget(one)
        view.delete_asked.connect(self.delete)
        undo.changed.connect(self._name_them)
        self._name_them()

    def delete(self) -> None:
        """Take away the chosen regions."""
        if self._view.chosen():
            self._do(lambda acts, chosen: acts.delete(chosen))

    def _offer_columns(self) -> None:
        self._view.offer_columns(self.columns.mapToGlobal(self.columns.rect().bottomLeft()))

    def _name_them(self) -> None:
        undo = self._undo
        for one, words in ((self.undo_button, undo.next_undo), (self.redo_button, undo.next_redo)):
            one.setEnabled(bool(words))
            one.setToolTip(
                f"{one.text()}: {words}" if words else f"Nothing to {one.text().lower()}"
            )
