"""The dock of region statistics: a live table of whatever is drawn."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from magicgui.widgets import create_widget
from qtpy.QtCore import QTimer
from qtpy.QtWidgets import QFormLayout, QHBoxLayout, QLabel, QPushButton, QWidget

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.measurements import find, measure_each
from ct_measure_plugin.physics.results import NotMeasured, Result
from ct_measure_plugin.viewer.docks.dock import Dock
from ct_measure_plugin.viewer.docks.form import SettingsForm
from ct_measure_plugin.viewer.docks.keeping import KeepingButtons
from ct_measure_plugin.viewer.docks.layer_questions import LayerQuestions
from ct_measure_plugin.viewer.docks.region_table import RegionTable, Row, TableModel
from ct_measure_plugin.viewer.shapes import Drawn, drawn_on, new_regions_layer, rename, repair

if TYPE_CHECKING:
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["RegionStatisticsDock"]

_NAME = "region_statistics"
_LAYER_EVENTS = ("set_data", "data", "features", "highlight")

#: Answers kept for regions that have not moved; a drag then measures one region, not all.
_KEPT_ANSWERS = 512


class RegionStatisticsDock(Dock):
    """Statistics of every shape on a Shapes layer, followed while it is dragged."""

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)
        self._measurement = find(_NAME)
        self._bound: Any = None
        self._drawn: tuple[Drawn, ...] = ()
        self._volume: Volume | None = None
        self._memory: dict[tuple[Any, ...], Result | NotMeasured] = {}
        self._linking = False
        self._build()
        self.listen(self.viewer.dims.events.point, self.kick)
        self.listen(self.session.asked_changed, self._forget)
        self.reset_choices()

    # --- building -------------------------------------------------------------------

    def _build(self) -> None:
        self._image: Any = create_widget(annotation="napari.layers.Image", label="Image")
        self._shapes: Any = create_widget(annotation="napari.layers.Shapes", label="Regions")
        self.body.addLayout(self._choices())
        self.questions = LayerQuestions(self.session, self)
        self.questions.answered.connect(self._forget)
        self.body.addWidget(self.questions)
        self.form = SettingsForm(self._measurement.settings_type)
        self.form.changed.connect(self._forget)
        self.body.addWidget(self.form.native)
        self.model = TableModel(self._measurement.columns, self)
        self.table = RegionTable(self.model, self)
        self.model.renamed.connect(self._rename)
        self.table.selectionModel().selectionChanged.connect(self._row_chosen)
        self.body.addWidget(self.table, stretch=1)
        self.message = QLabel()
        self.message.setWordWrap(True)
        self.message.setAccessibleName("Cautions of the chosen region")
        self.body.addWidget(self.message)
        self.keeping = KeepingButtons(self.session, self._question, self)
        self.keeping.copy.connect(self._copy)
        self.body.addWidget(self.keeping)

    def _choices(self) -> QFormLayout:
        rows = QFormLayout()
        for combo in (self._image, self._shapes):
            combo.changed.connect(self._rebind)
            combo.native.setAccessibleName(combo.label)
        self._draw = QPushButton("Draw")
        self._draw.setToolTip("Add a Shapes layer on the image and draw an ellipse")
        self._draw.clicked.connect(self._start_drawing)
        line = QHBoxLayout()
        line.addWidget(self._shapes.native, stretch=1)
        line.addWidget(self._draw)
        image = QLabel("Image")
        image.setBuddy(self._image.native)
        regions = QLabel("Regions")
        regions.setBuddy(self._shapes.native)
        rows.addRow(image, self._image.native)
        holder = QWidget()
        line.setContentsMargins(0, 0, 0, 0)
        holder.setLayout(line)
        rows.addRow(regions, holder)
        return rows

    # --- following the viewer -------------------------------------------------------

    def reset_choices(self, event: Any = None) -> None:
        """Look at the layers again; napari calls it whenever the layer list changes."""
        self._image.reset_choices(event)
        self._shapes.reset_choices(event)
        self._rebind()

    def choose(self, image: Any = None, shapes: Any = None) -> None:
        """Measure the regions of one layer on another."""
        if image is not None:
            self._image.value = image
        if shapes is not None:
            self._shapes.value = shapes
        self._rebind()

    def _rebind(self, *_: Any) -> None:
        shapes = self._shapes.value
        if shapes is not self._bound:
            for name in _LAYER_EVENTS:
                if self._bound is not None:
                    self.unlisten(self._bound.events[name], self._layer_changed)
                if shapes is not None:
                    self.listen(shapes.events[name], self._layer_changed)
            self._bound = shapes
        self.questions.ask(self._image.value)
        self._forget()

    def _layer_changed(self, event: Any = None) -> None:
        if getattr(event, "type", "") == "highlight":
            self._shape_chosen()
            return
        if self._bound is not None and len(self._bound.features) != self._bound.nshapes:
            QTimer.singleShot(0, self._repair)
        self.kick()

    def _repair(self) -> None:
        # a shape that is being drawn has its row of features only when it is finished
        if self._bound is not None and not getattr(self._bound, "_is_creating", False):
            repair(self._bound)

    def _forget(self, *_: Any) -> None:
        self._memory.clear()
        self.kick()

    # --- measuring and showing ------------------------------------------------------

    def refresh(self) -> None:
        """Measure what is drawn and show it."""
        rows, said = self._rows()
        if self.model.show(rows):
            self.table.fit_columns()
        self.keeping.setEnabled(bool(rows))
        self.session.show_answers(_NAME, tuple(row.answer for row in rows))
        self._say(said)

    def _rows(self) -> tuple[tuple[Row, ...], str]:
        image, shapes = self._image.value, self._shapes.value
        self._drawn, self._volume = (), None
        if image is None:
            return (), "Open an image first."
        if shapes is None or not shapes.nshapes:
            return (), "Press Draw, or choose a Shapes layer that holds regions."
        try:
            placement = self.session.placement(image)
        except CtMeasureError as error:
            return (), str(error)
        self._volume = placement.volume
        self._drawn = drawn_on(shapes, placement, self.viewer.dims.point)
        return tuple(Row(one.name, self._answer(one)) for one in self._drawn), ""

    def _answer(self, drawn: Drawn) -> Result | NotMeasured:
        if drawn.region is None or self._volume is None:
            return NotMeasured(drawn.problem, "draw it again")
        key = (id(self._volume.hu), self._volume.spacing_mm, self._volume.unit, drawn.region)
        if key not in self._memory:
            if len(self._memory) >= _KEPT_ANSWERS:
                self._memory.clear()
            [found] = measure_each(_NAME, self._volume, drawn.region, settings=self.form.settings)
            self._memory[key] = found
        return self._memory[key]

    def _say(self, said: str) -> None:
        chosen = self.table.chosen() or ([0] if len(self.model.rows) == 1 else [])
        lines = [said] if said else []
        for i in chosen[:1]:
            answer = self.model.rows[i].answer
            if isinstance(answer, NotMeasured):
                lines.append(str(answer))
            lines += [f"{c.kind.level.capitalize()}: {c}" for c in dict.fromkeys(answer.cautions)]
        self.message.setText("\n".join(lines))
        self.message.setVisible(bool(lines))

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme."""
        self.message.setStyleSheet(f"color: {colours.text};")
        self.table.recolour(colours)

    # --- the table and the shapes, linked both ways ---------------------------------

    def _row_chosen(self, *_: Any) -> None:
        if self._linking or self._bound is None:
            return
        chosen = self.table.chosen()
        self._linking = True
        try:
            self._bound.selected_data = {i for i in chosen if i < self._bound.nshapes}
            if chosen and chosen[0] < len(self._drawn):
                self._bring_into_view(self._drawn[chosen[0]].region)
        finally:
            self._linking = False
        self._say("")

    def _bring_into_view(self, region: Region | None) -> None:
        if region is None or not isinstance(region.z_mm, float):
            return
        placement = self.session.placement(self._image.value)
        world = placement.world_of((region.z_mm, *placement.volume.origin_mm[1:]))
        if placement.layer.ndim > 2 and self._bound.ndim > 2:
            self.viewer.dims.set_point(self.viewer.dims.ndim - 3, world[-3])

    def _shape_chosen(self) -> None:
        if self._linking or self._bound is None:
            return
        chosen = sorted(i for i in self._bound.selected_data if i < self.model.rowCount())
        if chosen == self.table.chosen():
            return
        self._linking = True
        try:
            self.table.clearSelection()
            for i in chosen[:1]:
                self.table.selectRow(i)
        finally:
            self._linking = False
        self._say("")

    def _rename(self, row: int, name: str) -> None:
        if self._bound is not None and row < self._bound.nshapes:
            rename(self._bound, row, name)

    # --- doing ----------------------------------------------------------------------

    def _start_drawing(self) -> None:
        image = self._image.value
        if image is None:
            return
        if self._shapes.value is None:
            layer = new_regions_layer(self.viewer, image)
            self.reset_choices()
            self._shapes.value = layer
        self.viewer.layers.selection.active = self._shapes.value
        self._shapes.value.mode = "add_ellipse"

    def _question(self) -> tuple[Any, ...]:
        """Return what the records are made of: name, volume, regions and settings."""
        regions = tuple(one.region for one in self._drawn if one.region is not None)
        return _NAME, self._volume, regions, self.form.settings

    def _copy(self) -> None:
        from qtpy.QtWidgets import QApplication

        QApplication.clipboard().setText(self.model.as_text())
