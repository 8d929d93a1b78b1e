"""The HU window dock: what grey stands for which CT number, for one layer or for all.

It sets contrast limits, and a colour map where a sigmoid asks for one. It never changes data.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtCore import Qt
from qtpy.QtGui import QKeySequence, QShortcut
from qtpy.QtWidgets import (
    QComboBox,
    QDoubleSpinBox,
    QFormLayout,
    QGroupBox,
    QHBoxLayout,
    QLabel,
    QPushButton,
    QVBoxLayout,
)

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.physics.windowing import window_of_spread
from ct_measure_plugin.viewer.docks.dock import Dock
from ct_measure_plugin.viewer.docks.window_controls import WindowControls, number
from ct_measure_plugin.viewer.docks.window_presets import WindowPresets
from ct_measure_plugin.viewer.layers import is_ct, own_volume
from ct_measure_plugin.viewer.presets import PresetShelf
from ct_measure_plugin.viewer.region_spread import NoRegion, spread_of_region
from ct_measure_plugin.viewer.shown_window import show_window, shown_window

if TYPE_CHECKING:
    import napari.viewer

    from ct_measure_plugin.physics.windowing import WindowFunction

__all__ = ["WindowDock"]

SELECTED, ALL_CT = "Selected image layers", "All CT layers"

#: Layers this far apart, in HU, are said to differ.
_SAME = 0.05

_SHORTCUTS = 9


class WindowDock(Dock):
    """Centre, width and function of the display window; presets; a window from a region.

    Parameters
    ----------
    viewer : napari.viewer.Viewer
        Where the layers are.
    """

    def __init__(self, viewer: napari.viewer.Viewer) -> None:
        super().__init__(viewer)
        self._linear: WindowFunction = "LINEAR"
        self._followed: tuple[Any, ...] = ()
        self.controls = WindowControls(self)
        self.controls.edited.connect(self.apply)
        self.presets = WindowPresets(PresetShelf(), self)
        self.presets.picked.connect(self.apply)
        self.presets.told.connect(self.tell)
        self._add_targets()
        self._add_window()
        self._add_presets()
        self._add_region()
        self.status = _wrapped("")
        self.status.setAccessibleName("What happened")
        self.body.addWidget(self.status)
        self.tell(self.presets.shelf.problem)
        self._add_shortcuts()
        self.listen(self.viewer.layers.selection.events.changed, self.kick)
        self.listen(self.session.asked_changed, self.kick)

    # --- building -------------------------------------------------------------------

    def _add_targets(self) -> None:
        self.targets = QComboBox(self)
        self.targets.setAccessibleName("Layers to window")
        self.targets.addItems([SELECTED, ALL_CT])
        self.targets.setToolTip("The layers selected in the layer list, or all CT layers at once.")
        self.targets.currentIndexChanged.connect(self.kick)
        self.which = _wrapped("")
        self.which.setAccessibleName("Layers concerned")
        form = QFormLayout()
        form.addRow("&Apply to", self.targets)
        self.body.addLayout(form)
        self.body.addWidget(self.which)

    def _add_window(self) -> None:
        self.mapping = _wrapped("")
        self.mapping.setAccessibleName("How the window is shown")
        self._window_box = box = QGroupBox("Window", self)
        inside = QVBoxLayout(box)
        inside.addWidget(self.controls)
        inside.addWidget(self.mapping)
        self.body.addWidget(box)

    def _add_presets(self) -> None:
        self._preset_box = box = QGroupBox("Presets", self)
        inside = QVBoxLayout(box)
        inside.addWidget(self.presets)
        self.body.addWidget(box, 1)

    def _add_region(self) -> None:
        self.spread = QDoubleSpinBox(self)
        self.spread.setAccessibleName("Standard deviations either side of the mean")
        self.spread.setRange(0.5, 20.0)
        self.spread.setSingleStep(0.5)
        self.spread.setDecimals(1)
        self.spread.setValue(3.0)
        self.spread.setSuffix(" SD")
        self.from_region = QPushButton("From a region")
        self.from_region.setToolTip(
            "Spread the greys over the mean ± so many SD of the selected region."
        )
        self.from_region.clicked.connect(self.window_from_region)
        row = QHBoxLayout()
        label = QLabel("&Mean ±")
        label.setBuddy(self.spread)
        row.addWidget(label)
        row.addWidget(self.spread)
        row.addWidget(self.from_region, 1)
        self.body.addLayout(row)

    def _add_shortcuts(self) -> None:
        """Ctrl+Alt+1 to 9 pick the first presets of the list, while the dock is there."""
        for digit in range(1, _SHORTCUTS + 1):
            keys = QShortcut(QKeySequence(f"Ctrl+Alt+{digit}"), self)
            keys.setContext(Qt.ShortcutContext.WindowShortcut)
            keys.setProperty("place", digit - 1)
            keys.activated.connect(self._pick)

    def _pick(self) -> None:
        """Pick the preset whose keys were pressed; no closure, which would keep a closed dock."""
        self._pick_at(int(self.sender().property("place")))

    def _pick_at(self, place: int) -> None:
        names = self.presets.names()
        if place < len(names):
            self.presets.pick(names[place])

    # --- what it does ---------------------------------------------------------------

    def layers(self) -> tuple[Any, ...]:
        """Return the layers that the window is for, topmost first."""
        if self.targets.currentText() == ALL_CT:
            return tuple(one for one in self.session.images() if self._holds_hu(one))
        return self.session.chosen_images()

    def _holds_hu(self, layer: Any) -> bool:
        asked = self.session.asked(layer)
        return is_ct(layer) or (asked is not None and asked.unit == "HU")

    def apply(self, centre: float, width: float, function: str) -> None:
        """Show a window on the layers it is for."""
        layers = self.layers()
        if not layers:
            self.tell("There is no image layer to window.")
            return
        if function != "SIGMOID":
            self._linear = "LINEAR_EXACT" if function == "LINEAR_EXACT" else "LINEAR"
        try:
            for layer in layers:
                show_window(layer, centre, width, function)  # type: ignore[arg-type]
        except CtMeasureError as error:
            self.tell(str(error))
            return
        self.tell("")
        self.refresh_now()

    def window_from_region(self) -> None:
        """Spread the greys over mean ± k SD of the selected region."""
        layers = self.layers()
        if not layers:
            self.tell("There is no image layer to window.")
            return
        try:
            found = spread_of_region(self.session, layers[0])
        except CtMeasureError as error:
            self.tell(str(error))
            return
        if isinstance(found, NoRegion):
            self.tell(found.reason)
            return
        centre, width = window_of_spread(found.mean.value, found.sd.value, k=self.spread.value())
        self.apply(centre, width, self.controls.present()[2])
        self.tell(f"{found.name}: mean {found.mean}, SD {found.sd}.")

    def tell(self, text: str) -> None:
        """Show a sentence at the foot of the dock; "" hides it."""
        self.status.setText(text)
        self.status.setVisible(bool(text))

    # --- what it shows --------------------------------------------------------------

    def refresh(self) -> None:
        """Show the window of the layers concerned, whoever set it."""
        layers = self.layers()
        self._follow(layers)
        for box in (self._window_box, self._preset_box, self.from_region, self.spread):
            box.setEnabled(bool(layers))
        self.which.setText(_names(layers) or "No image layer yet: open a CT series.")
        if not layers:
            self.mapping.setText("")
            return
        first = layers[0]
        window = shown_window(first, self._linear)
        volume = own_volume(first)
        unit = volume.unit if volume is not None else "HU" if self._holds_hu(first) else ""
        self.controls.show_window(window.centre, window.width, window.function, unit)
        self.presets.show_present(window.centre, window.width, window.function)
        self.presets.show_header_windows(volume.windows if volume is not None else ())
        self.mapping.setText(self._mapping_text(first, window.function, unit, layers))

    def _mapping_text(self, first: Any, function: str, unit: str, layers: tuple[Any, ...]) -> str:
        low, high = (float(limit) for limit in first.contrast_limits)
        ends = f"{number(low)} to {number(high)} {unit}".strip()
        if function == "SIGMOID":
            text = f"Contrast limits {ends}; the curve is in the colour map."
        else:
            text = f"Contrast limits {ends}: black to white."
        if float(first.gamma) != 1.0:
            text += f" Gamma {float(first.gamma):.2g} bends the greys between."
        if any(not _same(first, one) for one in layers[1:]):
            text += " The layers differ; this is the first one's window."
        return text

    def _follow(self, layers: tuple[Any, ...]) -> None:
        """Listen to the layers concerned, and no longer to others."""
        if [id(one) for one in layers] == [id(one) for one in self._followed]:
            return
        for layer in self._followed:
            for emitter in _emitters(layer):
                self.unlisten(emitter, self.kick)
        for layer in layers:
            for emitter in _emitters(layer):
                self.listen(emitter, self.kick)
        self._followed = layers


def _emitters(layer: Any) -> tuple[Any, ...]:
    events = layer.events
    return events.contrast_limits, events.colormap, events.gamma, events.name, events.metadata


def _same(one: Any, other: Any) -> bool:
    pairs = zip(one.contrast_limits, other.contrast_limits, strict=True)
    return all(abs(float(a) - float(b)) < _SAME for a, b in pairs)


def _names(layers: tuple[Any, ...]) -> str:
    names = [str(layer.name) for layer in layers]
    shown = ", ".join(names[:3])
    return shown + (f" and {len(names) - 3} more" if len(names) > 3 else "")


def _wrapped(text: str) -> QLabel:
    label = QLabel(text)
    label.setWordWrap(True)
    label.setTextFormat(Qt.TextFormat.PlainText)  # layer names are text, never markup
    return label
