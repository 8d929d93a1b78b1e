"""The list of window presets: the series' own, by anatomy, for image quality, and one's own."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import Qt, Signal
from qtpy.QtWidgets import (
    QHBoxLayout,
    QHeaderView,
    QInputDialog,
    QLabel,
    QMessageBox,
    QPushButton,
    QTreeWidget,
    QTreeWidgetItem,
    QVBoxLayout,
    QWidget,
)

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.viewer.docks.window_controls import FUNCTION_NAMES, number
from ct_measure_plugin.viewer.presets import GROUPS, OWN, Preset, PresetShelf

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.volume import HeaderWindow
    from ct_measure_plugin.physics.windowing import WindowFunction

__all__ = ["WindowPresets"]

HEADER = "From the series' header"
_ROLE = Qt.ItemDataRole.UserRole


class WindowPresets(QWidget):
    """A tree of presets with buttons to save and remove one's own.

    Signals
    -------
    picked(centre, width, function)
        A preset was clicked, or Enter pressed on it.
    told(text)
        Something for the dock's status line.
    """

    picked = Signal(float, float, str)
    told = Signal(str)

    def __init__(self, shelf: PresetShelf, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.shelf = shelf
        self._windows: tuple[HeaderWindow, ...] = ()
        self._now: tuple[float, float, WindowFunction] = (0.0, 1.0, "LINEAR")
        self.tree = _tree()
        self.tree.itemClicked.connect(self._pick)
        self.tree.itemActivated.connect(self._pick)
        self.tree.currentItemChanged.connect(lambda *_: self._allow_removal())
        self.save_button = QPushButton("Save as…")
        self.save_button.setToolTip("Keep the present window as a preset of your own.")
        self.save_button.clicked.connect(self.ask_and_save)
        self.remove_button = QPushButton("Remove")
        self.remove_button.clicked.connect(self._remove)
        note = QLabel("Common practice, not a standard.")
        note.setWordWrap(True)
        note.setToolTip("Presets are starting points. Save your own under the same name.")
        self._lay_out(note)
        self.rebuild()

    def _lay_out(self, note: QLabel) -> None:
        layout = QVBoxLayout(self)
        layout.setContentsMargins(0, 0, 0, 0)
        layout.setSpacing(4)
        layout.addWidget(self.tree, 1)
        layout.addWidget(note)
        buttons = QHBoxLayout()
        buttons.addWidget(self.save_button)
        buttons.addWidget(self.remove_button)
        layout.addLayout(buttons)

    # --- what it shows --------------------------------------------------------------

    def show_header_windows(self, windows: Sequence[HeaderWindow]) -> None:
        """Offer the windows of a series' header."""
        if tuple(windows) != self._windows:
            self._windows = tuple(windows)
            self.rebuild()

    def show_present(self, centre: float, width: float, function: WindowFunction) -> None:
        """Say what the present window is, for saving it."""
        self._now = (centre, width, function)

    def rebuild(self) -> None:
        """Fill the tree anew; groups stay as the user folded them."""
        folded = self._folded()
        self.tree.clear()
        if self._windows:
            self._add_group(HEADER, [_of_header(n, w) for n, w in enumerate(self._windows, 1)])
        presets = self.shelf.all()
        for group in GROUPS:
            members = [one for one in presets if one.group == group]
            if members:
                self._add_group(group, members)
        for index in range(self.tree.topLevelItemCount()):
            item = self.tree.topLevelItem(index)
            item.setExpanded(not folded.get(item.text(0), False))
        self._allow_removal()

    def names(self) -> list[str]:
        """Return the names of all presets shown, in order."""
        return [item.text(0) for item in self._leaves()]

    def _folded(self) -> dict[str, bool]:
        count = self.tree.topLevelItemCount()
        items = [self.tree.topLevelItem(index) for index in range(count)]
        return {item.text(0): not item.isExpanded() for item in items}

    def _leaves(self) -> list[QTreeWidgetItem]:
        found = []
        for index in range(self.tree.topLevelItemCount()):
            group = self.tree.topLevelItem(index)
            found += [group.child(k) for k in range(group.childCount())]
        return found

    def _add_group(self, title: str, members: Sequence[Preset]) -> None:
        group = QTreeWidgetItem(self.tree, [title])
        group.setFirstColumnSpanned(True)
        group.setFlags(Qt.ItemFlag.ItemIsEnabled)
        for preset in members:
            item = QTreeWidgetItem(
                group, [preset.name, number(preset.centre), number(preset.width)]
            )
            item.setData(0, _ROLE, preset)
            for column in (1, 2):
                item.setTextAlignment(column, Qt.AlignmentFlag.AlignRight)
            own = self.shelf.is_own(preset.name) and title != HEADER
            item.setToolTip(0, _tip(preset, own=own))

    # --- what it does ---------------------------------------------------------------

    def pick(self, name: str) -> None:
        """Use a preset by name, as a click on it does."""
        for item in self._leaves():
            if item.text(0) == name:
                self.tree.setCurrentItem(item)
                self._pick(item)
                return

    def _pick(self, item: QTreeWidgetItem, _column: int = 0) -> None:
        preset = item.data(0, _ROLE)
        if isinstance(preset, Preset):
            self.picked.emit(preset.centre, preset.width, preset.function)

    def _chosen(self) -> Preset | None:
        item = self.tree.currentItem()
        preset = None if item is None else item.data(0, _ROLE)
        return preset if isinstance(preset, Preset) else None

    def _allow_removal(self) -> None:
        chosen = self._chosen()
        own = chosen is not None and self.shelf.is_own(chosen.name)
        comes_back = own and chosen is not None and chosen.group != OWN
        self.remove_button.setEnabled(own)
        self.remove_button.setText("Restore" if comes_back else "Remove")
        self.remove_button.setToolTip(
            "Bring back the preset that came along."
            if comes_back
            else "Forget this preset of your own."
        )

    def ask_and_save(self) -> None:
        """Ask for a name and keep the present window under it."""
        chosen = self._chosen()
        first = chosen.name if chosen is not None and self.shelf.is_own(chosen.name) else ""
        name, agreed = QInputDialog.getText(self, "Save window", "Name of the preset:", text=first)
        name = name.strip()
        if not agreed or not name:
            return
        if any(one.name == name for one in self.shelf.all()) and not self._may_replace(name):
            return
        self.save(name)

    def _may_replace(self, name: str) -> bool:
        answer = QMessageBox.question(
            self, "Save window", f"Replace '{name}'? One that came along can be restored later."
        )
        return bool(answer == QMessageBox.StandardButton.Yes)

    def save(self, name: str) -> None:
        """Keep the present window under a name."""
        centre, width, function = self._now
        try:
            self.shelf.save(Preset(name, round(centre, 2), round(width, 2), OWN, function))
        except ArgumentError as error:
            self.told.emit(str(error))
            return
        except OSError as error:
            self.told.emit(f"The preset could not be saved: {error.strerror or 'no access'}.")
            return
        self.rebuild()
        self.told.emit(f"Saved '{name}'.")

    def _remove(self) -> None:
        chosen = self._chosen()
        if chosen is None:
            return
        try:
            self.shelf.remove(chosen.name)
        except OSError as error:
            self.told.emit(f"The preset could not be removed: {error.strerror or 'no access'}.")
        self.rebuild()


def _tree() -> QTreeWidget:
    tree = QTreeWidget()
    tree.setAccessibleName("Window presets")
    tree.setHeaderLabels(["Preset", "Centre", "Width"])
    tree.setRootIsDecorated(True)
    tree.setIndentation(14)
    tree.setUniformRowHeights(True)
    tree.setMinimumHeight(170)
    header = tree.header()
    header.setStretchLastSection(False)
    header.setSectionResizeMode(0, QHeaderView.ResizeMode.Stretch)
    for column in (1, 2):
        header.setSectionResizeMode(column, QHeaderView.ResizeMode.ResizeToContents)
    return tree


def _of_header(number: int, window: HeaderWindow) -> Preset:
    name = window.explanation.strip()[:50] or f"Window {number}"
    return Preset(name, window.centre, window.width, HEADER, window.function)


def _tip(preset: Preset, *, own: bool) -> str:
    lines = [
        f"Centre {number(preset.centre)}, width {number(preset.width)}",
        FUNCTION_NAMES[preset.function],
    ]
    if preset.note:
        lines.append(preset.note)
    if own:
        lines.append("Your own.")
    return "\n".join(lines)
