"""The dock of region statistics: a live list of whatever is drawn, painted or typed."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtCore import Qt, QTimer, Signal

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.measurements import find
from ct_measure_plugin.viewer.docks.busy_line import BusyLine
from ct_measure_plugin.viewer.docks.dock import Dock
from ct_measure_plugin.viewer.docks.fold import Fold, folded
from ct_measure_plugin.viewer.docks.form import SettingsForm
from ct_measure_plugin.viewer.docks.keeping import KeepingButtons
from ct_measure_plugin.viewer.docks.layer_questions import LayerQuestions
from ct_measure_plugin.viewer.docks.pace import Pace
from ct_measure_plugin.viewer.docks.region_arranging import RegionArranging
from ct_measure_plugin.viewer.docks.region_choice import RegionChoice
from ct_measure_plugin.viewer.docks.region_doing import RegionDoing
from ct_measure_plugin.viewer.docks.region_files import RegionFiles
from ct_measure_plugin.viewer.docks.region_list import CLASS, CODE, RegionListModel, offered_by
from ct_measure_plugin.viewer.docks.region_notes import RegionNotes
from ct_measure_plugin.viewer.docks.region_plots import RegionPlots
from ct_measure_plugin.viewer.docks.region_typing import RegionTyping
from ct_measure_plugin.viewer.docks.region_view import RegionView
from ct_measure_plugin.viewer.docks.weakly import weakly
from ct_measure_plugin.viewer.layers import questions_for
from ct_measure_plugin.viewer.new_layers import layer_to_draw_on
from ct_measure_plugin.viewer.region_acts import RegionActs
from ct_measure_plugin.viewer.region_board import RegionBoard
from ct_measure_plugin.viewer.region_features import checked_code
from ct_measure_plugin.viewer.region_source import LabelSource, source_of
from ct_measure_plugin.viewer.view import bring_into_view

if TYPE_CHECKING:
    from collections.abc import Callable

    from qtpy.QtWidgets import QWidget

    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["RegionStatisticsDock"]

_NAME = "region_statistics"

#: Seconds of a tick in which regions are measured; the rest of at most 33 ms reads and paints.
_BUDGET = 0.018

#: Milliseconds of rest before answers go into the layer's features, and between looks at work in
#: the background.
_REST, _LOOK_AGAIN = 250, 300

#: Milliseconds between curves while something moves.
_CURVES = 100

#: Milliseconds for which a chosen label is shown alone, so that it is seen where it is.
_FLASH = 700


class RegionStatisticsDock(Dock):
    """Statistics of every region on a layer of shapes, labels or points, followed as it changes."""

    _at_once = Signal()

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)
        self._measurement = find(_NAME)
        self._told = ""
        self._pace = Pace()
        self._coming = False
        self._at_once.connect(self._tick, Qt.ConnectionType.QueuedConnection)
        self._images: tuple[Any, ...] = ()
        self.board = RegionBoard(self.session, _NAME)
        self.board.changed.connect(self.kick)
        self.acts = RegionActs(self.board, self.viewer)
        self._rest = self.single_shot(_REST, self._write_features)
        self._again = self.single_shot(_LOOK_AGAIN, self.kick)
        self._plot_soon = self.single_shot(_CURVES, self.show_chosen)
        self._flash = self.single_shot(_FLASH, self._end_flash)
        self._build()
        self.listen(self.viewer.dims.events.point, self.kick)
        self.listen(self.session.asked_changed, self._forget)
        self.reset_choices()

    # --- building -------------------------------------------------------------------

    def _build(self) -> None:
        self.choice = RegionChoice(self.session, self)
        self.choice.changed.connect(self._rebind)
        self.choice.draw_asked.connect(self.start_drawing)
        self.questions = LayerQuestions(self.session, self)
        self.questions.answered.connect(self._forget)
        self.model = RegionListModel(offered_by(self._measurement), self._measurement.columns, self)
        self.model.edited.connect(self._edited)
        self.view = RegionView(self.model, self)
        self.view.chosen_changed.connect(self._row_chosen)
        self._words = RegionNotes()
        self.message, self.notes = self._words.message, self._words.notes
        self.plots = RegionPlots(self)
        self.form = SettingsForm(self._measurement.settings_type, offers=self.session.offered)
        self.form.changed.connect(self.kick)
        do = weakly(self.do, otherwise=False)
        self.typing = RegionTyping(do, self.acts.here, self)
        self.arranging = RegionArranging(do, self.session, self)
        self.files = RegionFiles(do, self.board, self.viewer, self)
        self.files.told.connect(self._tell)
        self.files.opened.connect(self.choice.choose_layer)
        self.keeping = KeepingButtons(self.session, self.board.questions, self)
        self.keeping.copy.connect(self.view.copy)
        self.doing = RegionDoing(do, self.acts.undo, self.view, self)
        self.busy = BusyLine(self.board.answers.following, self, weakly(self._halt))
        above = (self.choice, self.questions, self.view, self.busy, self.doing, self.message)
        for part in (*above, *self._folds(), self.keeping):
            self.body.addWidget(part)
        self.body.setStretchFactor(self.view, 1)

    def _folds(self) -> list[Fold]:
        parts: dict[str, QWidget] = {
            "Histogram and slices": self.plots,
            "Notes": self.notes,
            "Add and edit by numbers": self.typing,
            "Arrange and copy": self.arranging,
            "Settings": self.form.native,
            "Files": self.files,
        }
        found = folded(parts, self)
        found[0].open(True)
        return found

    # --- following the viewer -------------------------------------------------------

    def reset_choices(self, event: Any = None) -> None:
        """Look at the layers again; napari calls it whenever the layer list changes."""
        self.choice.look()
        self.arranging.look()
        super().reset_choices(event)

    def choose(self, images: Any = (), regions: Any = None) -> None:
        """Measure the regions of one layer on image layers; for programs and tests."""
        chosen = tuple(images) if isinstance(images, list | tuple) else (images,)
        self.choice.choose(chosen, regions)

    def _rebind(self) -> None:
        layer, source = self.choice.chosen_layer(), self.board.source
        if layer is not (None if source is None else source.layer):
            if source is not None:
                for name in (*source.events, source.selection_event):
                    self.unlisten(source.layer.events[name], self._layer_changed)
                source.close()
            self.board.source = source = None if layer is None else source_of(layer, self.viewer)
            if source is not None:
                source.looked_through.changed.connect(self.kick)
                for name in (*source.events, source.selection_event):
                    self.listen(source.layer.events[name], self._layer_changed)
        images = self.choice.chosen_images()
        for image in self._images:
            self.unlisten(image.events.data, self._forget)
        for image in images:
            self.listen(image.events.data, self._forget)
        self._images = self.board.images = images
        self.questions.ask(next((one for one in images if questions_for(one)), None))
        self.kick()

    def _layer_changed(self, event: Any = None) -> None:
        source = self.board.source
        if source is None:
            return
        if getattr(event, "type", "") == source.selection_event:
            self._region_chosen()
            return
        source.note(event)
        if hasattr(source.layer, "nshapes") and len(source.layer.features) != source.layer.nshapes:
            QTimer.singleShot(0, source.mend)
        self.kick()

    def _forget(self, *_: Any) -> None:
        self.board.answers.forget()
        self.kick()

    def pause(self) -> None:
        """Stop what runs while nobody looks."""
        self._rest.stop()
        self._again.stop()
        self._plot_soon.stop()
        self.board.stop()

    def _halt(self, *_: Any) -> None:
        self.board.answers.halt()
        self._tell("Stopped. The next change measures what is left.")

    # --- measuring and showing ------------------------------------------------------

    def refresh(self) -> None:
        """Measure what is drawn, all of it, and show it."""
        self._look(None)

    def follow(self) -> None:
        """Measure and show what can be within a tick; the rest comes with the next ones."""
        self._stale = False
        self._pace.begin()
        left = self._look(_BUDGET)
        self._pace.end()
        if left:
            self.kick()
        elif self.board.busy:
            self._again.start()

    def kick(self, *_: Any) -> None:
        """Ask for a look: after a rest at once, before napari draws; else as soon as may be."""
        self._stale = True
        if not self.awake or self._coming or self._timer.isActive():
            return
        wait = self._pace.wait()
        if wait:
            self._timer.start(wait)
        else:
            self._coming = True
            self._at_once.emit()  # queued before any repaint: those come last

    def _tick(self) -> None:
        self._coming = False
        if self.awake and self._stale:
            self.follow()
            if self._frame is None or self._frame.isFloating():
                self.view.viewport().repaint()  # numbers need not wait for the canvas

    def _look(self, seconds: float | None) -> int:
        self.board.settings = self.form.settings
        first = {*self.view.chosen(), *self.view.in_sight()}
        left = self.board.look(first, seconds)
        chosen = self.view.chosen()
        if self.model.show(self.board.rows):
            self.view.fit_columns()
            self.view.choose(chosen)
        self.keeping.setEnabled(bool(self.board.rows))
        self.session.show_answers(_NAME, tuple(row.answer for row in self.board.rows))
        self._region_chosen()
        self.show_chosen(moving=seconds is not None)
        self._rest.start()
        return left

    def _write_features(self) -> None:
        if not self.board.write_features() and not all(row.complete for row in self.board.rows):
            self._rest.start()

    def show_chosen(self, *, moving: bool = False) -> None:
        """Show the curves of the chosen regions and what to know about the first of them."""
        chosen = set(self.view.chosen())
        alone = len({row.index for row in self.board.rows}) == 1
        rows = [row for row in self.board.rows if row.index in chosen or alone]
        if not moving:
            self.plots.show_rows(rows)
        elif not self._plot_soon.isActive():
            self._plot_soon.start()  # ten curves a second are live enough; numbers come first
        source = self.board.source
        busy = "Looking through the labels…" if source is not None and source.busy else ""
        problem = self.form.problem and f"{self.form.problem}. The settings before are used."
        self._words.show(
            (self.board.said, busy, self._told, problem), rows[0].answer if rows else None
        )

    def _tell(self, text: str) -> None:
        self._told = text
        self.show_chosen()

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme."""
        self._words.recolour(colours)
        self.view.recolour(colours)
        self.plots.recolour(colours)

    # --- list and layer, linked both ways -------------------------------------------

    def _row_chosen(self) -> None:
        source, chosen = self.board.source, self.view.chosen()
        if source is None:
            return
        source.select(chosen)
        region = self.board.region(chosen[0]) if chosen else None
        if region is not None:
            bring_into_view(self.viewer, region, self.session.placement(self._images[0]))
            self._fill_fields(chosen[0])
            if isinstance(source, LabelSource):
                source.show_alone(alone=True)
                self._flash.start()
        self._told = ""
        self.show_chosen()

    def _fill_fields(self, index: int) -> None:
        outlined = not isinstance(self.board.source, LabelSource)
        slices = self.acts.slices_of(index) if outlined else None
        self.typing.show_region(self.board.region(index), slices)

    def _end_flash(self) -> None:
        if isinstance(self.board.source, LabelSource):
            self.board.source.show_alone(alone=False)

    def _region_chosen(self) -> None:
        """Follow what was selected in the viewer."""
        source = self.board.source
        if source is None:
            return
        selected = source.selected()
        if selected == set(self.view.chosen()) or not self.model.rows:
            return
        self.view.choose(selected)
        if selected:
            self._fill_fields(min(selected))
        self.show_chosen()

    def _edited(self, column: str, index: int, text: str) -> None:
        chosen = self.view.chosen()
        indices = chosen if column in (CLASS, CODE) and index in chosen else [index]

        def act(*_: Any) -> None:
            value = checked_code(text) if column == CODE else text
            if self.board.source is not None:
                self.board.source.write(column, dict.fromkeys(indices, value))

        self.do(act)

    # --- doing ----------------------------------------------------------------------

    def do(self, act: Callable[[RegionActs, list[int]], Any]) -> bool:
        """Do something to the chosen regions; a refusal is told below the list.

        Returns whether it was done.
        """
        self._told, refused = "", ""
        try:
            act(self.acts, self.view.chosen())
        except CtMeasureError as error:
            refused = str(error)
        except OSError as error:
            refused = f"The file cannot be used: {error.strerror}."
        self._tell(refused or self._told)
        self.kick()
        return not refused

    def start_drawing(self, kind: str = "shapes", mode: str = "add_ellipse") -> None:
        """Choose a layer of a kind to draw on, made if there is none, and the tool."""
        if not self._images:
            self._tell("Open an image first.")
            return
        layer = layer_to_draw_on(self.viewer, self._images[0], kind, self.choice.chosen_layer())
        self.choice.look()
        self.choose(regions=layer)
        self.viewer.layers.selection.active = layer
        layer.mode = mode
