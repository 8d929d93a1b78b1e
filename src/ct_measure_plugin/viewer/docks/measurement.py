"""A dock for any measurement: its form, regions and results follow from its types.

It knows none by name. A family's dock, such as the one of the MTF, names the measurements to choose
from; the dock of all measurements offers the whole catalogue.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, ClassVar

from qtpy.QtCore import QTimer
from qtpy.QtWidgets import QCheckBox, QComboBox, QFormLayout, QHBoxLayout, QLabel, QWidget

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.measurements import NAMES, find
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.viewer.asking import Memory, Question, question_of, regions_for
from ct_measure_plugin.viewer.docks.answers_view import AnswersView
from ct_measure_plugin.viewer.docks.busy_line import BusyLine
from ct_measure_plugin.viewer.docks.dock import Dock
from ct_measure_plugin.viewer.docks.fold import Fold
from ct_measure_plugin.viewer.docks.form import SettingsForm
from ct_measure_plugin.viewer.docks.headline import Headline
from ct_measure_plugin.viewer.docks.keeping import KeepingButtons
from ct_measure_plugin.viewer.docks.layer_questions import LayerQuestions
from ct_measure_plugin.viewer.docks.sources import Sources
from ct_measure_plugin.viewer.following import Following
from ct_measure_plugin.viewer.layers import questions_for, shows_slab
from ct_measure_plugin.viewer.marks import Marks
from ct_measure_plugin.viewer.pictures import add_picture
from ct_measure_plugin.viewer.shapes import new_regions_layer, repair

if TYPE_CHECKING:
    from ct_measure_plugin.measurements import Measurement
    from ct_measure_plugin.viewer.asking import Answer
    from ct_measure_plugin.viewer.theme import Colours

__all__ = ["MeasurementDock"]

_LAYER_EVENTS = ("set_data", "data", "features", "edge_width")

_SLAB = "The canvas shows several slices as one; single slices are measured."

#: Milliseconds of quiet before marks are drawn; napari's own redraw of a layer is not for a drag.
_MARKS_AFTER = 150


class MeasurementDock(Dock):
    """Measures what is drawn, live, with any of its measurements.

    A subclass names them and its title; names that the catalogue does not hold are left out.
    """

    title: ClassVar[str] = "Measurement"
    names: ClassVar[tuple[str, ...]] = NAMES

    def __init__(self, viewer: napari.viewer.Viewer) -> None:  # type: ignore[name-defined] # noqa: F821
        super().__init__(viewer)
        self._offered = tuple(name for name in self.names if name in NAMES)
        self._measurement: Measurement = find(self._offered[0])
        self._forms: dict[str, SettingsForm] = {}
        self._bound: Any = None
        self._asked: tuple[Question, ...] = ()
        self._shown: tuple[Answer, ...] = ()
        self._memory = Memory()
        self._following = Following(self.title)
        self._following.answered.connect(self._take)
        self._following.failed.connect(self._fail)
        self._marks = Marks(self.viewer, f"{self.title}: found")
        self._marks_timer = QTimer(self)
        self._marks_timer.setSingleShot(True)
        self._marks_timer.setInterval(_MARKS_AFTER)
        self._marks_timer.timeout.connect(self._draw_marks)
        self._build()
        self.listen(self.viewer.dims.events.point, self.kick)
        self.listen(self.session.asked_changed, self.kick)
        self.choose_measurement(self._offered[0])
        self.reset_choices()

    # --- building -------------------------------------------------------------------

    def _build(self) -> None:
        self.body.addWidget(self._chooser())
        self.sources = Sources(self.session, self)
        self.sources.changed.connect(self._rebind)
        self.sources.draw_asked.connect(self._start_drawing)
        self.body.addWidget(self.sources)
        self.questions = LayerQuestions(self.session, self)
        self.questions.answered.connect(self.kick)
        self.body.addWidget(self.questions)
        self._fold = Fold("Settings", self)
        self.body.addWidget(self._fold)
        self.busy = BusyLine(self._following, self)
        self.headline = Headline((), self)
        self.answers = AnswersView(self)
        self.answers.chosen.connect(self._tell)
        self.answers.picture_wanted.connect(self._open_picture)
        self.keeping = KeepingButtons(self.session, self._questions_kept, self)
        self.keeping.copy.connect(self._copy)
        for part in (self.headline, self.busy, self.answers, self.headline.cautions):
            self.body.addWidget(part)
        self.body.addWidget(self._ticks())
        self.body.addWidget(self.keeping)
        self.body.addStretch(1)

    def _chooser(self) -> QWidget:
        holder = QWidget(self)
        form = QFormLayout(holder)
        form.setContentsMargins(0, 0, 0, 0)
        self.which = QComboBox()
        self.which.setAccessibleName("Measurement")
        for name in self._offered:
            self.which.addItem(find(name).title, name)
        self.which.currentIndexChanged.connect(self._choose_at)
        label = QLabel("&Measure")
        label.setBuddy(self.which)
        form.addRow(label, self.which)
        holder.setVisible(len(self._offered) > 1)
        return holder

    def _ticks(self) -> QWidget:
        holder = QWidget(self)
        line = QHBoxLayout(holder)
        line.setContentsMargins(0, 0, 0, 0)
        self.all_numbers = QCheckBox("All numbers")
        self.all_numbers.setToolTip("Show every number of the result.")
        self.all_numbers.toggled.connect(self.headline.show_all)
        self.on_image = QCheckBox("Draw on the image")
        self.on_image.setToolTip("Draw what was found, or where was looked, over the image.")
        self.on_image.setChecked(True)
        self.on_image.toggled.connect(self._draw_marks)
        line.addWidget(self.all_numbers)
        line.addWidget(self.on_image)
        return holder

    # --- choosing -------------------------------------------------------------------

    @property
    def form(self) -> SettingsForm:
        """The form of the present measurement."""
        return self._forms[self._measurement.name]

    def _choose_at(self, index: int) -> None:
        self.choose_measurement(self.which.itemData(index))

    def choose_measurement(self, name: str) -> None:
        """Turn to another of the measurements offered."""
        self._following.cancel()
        self._asked, self._shown = (), ()
        self._measurement = measurement = find(name)
        self.which.setCurrentIndex(self.which.findData(name))
        self.which.setToolTip(measurement.summary)
        if name not in self._forms:
            self._forms[name] = form = SettingsForm(
                measurement.settings_type, offers=self.session.offered
            )
            form.changed.connect(self.kick)
            form.told.connect(self._tell)
            self._fold.add(form.native)
        for known, form in self._forms.items():
            form.native.setVisible(known == name)
        self._fold.setVisible(len(self.form) > 0)
        self.sources.offer(measurement.regions)
        self.headline.set_columns(measurement.columns)
        self.answers.set_columns(measurement.columns)
        self.kick()

    def choose(self, *images: Any, regions: Any = None) -> None:
        """Measure the regions of one layer on others; for programs and tests."""
        self.sources.choose(images, regions)

    # --- following the viewer -------------------------------------------------------

    def reset_choices(self, event: Any = None) -> None:
        """Look at the layers again; napari calls it whenever the layer list changes."""
        self.sources.look()
        super().reset_choices(event)

    def _rebind(self) -> None:
        shapes = self.sources.chosen_regions()
        if shapes is not self._bound:
            for name in _LAYER_EVENTS:
                if self._bound is not None:
                    self.unlisten(self._bound.events[name], self._layer_changed)
                if shapes is not None:
                    self.listen(shapes.events[name], self._layer_changed)
            self._bound = shapes
        images = self.sources.chosen_images()
        if not self.awake:  # other layers than those that the answers kept are about
            self._memory.forget()
        self.questions.ask(next((one for one in images if questions_for(one)), None))
        self.kick()

    def _layer_changed(self, _event: Any = None) -> None:
        if self._bound is not None and len(self._bound.features) != self._bound.nshapes:
            QTimer.singleShot(0, self._repair)
        self.kick()

    def _repair(self) -> None:
        # a shape that is being drawn has its row of features only when it is finished
        if self._bound is not None and not getattr(self._bound, "_is_creating", False):
            repair(self._bound)

    def pause(self) -> None:
        """Stop measuring, and take the marks away, while nobody looks."""
        self._following.cancel()
        self._asked = ()
        self._marks_timer.stop()
        self._marks.clear()

    # --- asking and showing ---------------------------------------------------------

    def refresh(self) -> None:
        """Ask, if there is something new to ask."""
        questions, said = self._ask()
        stale, self._said = said != self._said, said
        if questions == self._asked and questions:
            return
        if questions and stale:  # "there is no region yet" while one is measured
            self._tell()
        self._asked = questions
        if not questions:
            self._following.cancel()
            self._show(())
            return
        memory = self._memory
        self._following.start(lambda _work: (questions, memory.answer(questions)))

    def measure_now(self) -> None:
        """Ask and answer at once, in this thread; for programs and tests."""
        self._following.cancel()
        questions, self._said = self._ask()
        self._asked = questions
        self._show(self._memory.answer(questions))
        self._draw_marks()

    def _ask(self) -> tuple[tuple[Question, ...], str]:
        """Return what is to be measured, or nothing and why."""
        images = self.sources.chosen_images()
        if not images:
            return (), "Open an image first, or tick one."
        found, left_out = [], ""
        for image in images:
            try:
                placement = self.session.placement(image)
            except CtMeasureError as error:
                return (), f"{image.name}: {error}"
            regions, left_out = regions_for(
                self._measurement.name,
                self._regions_layer(),
                placement,
                self.viewer.dims.point,
                self.sources.extent(),
            )
            asked = question_of(
                self._measurement.name,
                image.name,
                placement.volume,
                regions,
                self.form.settings,
            )
            if isinstance(asked, NotMeasured):
                return (), left_out or f"{_sentence(asked.reason)} {_sentence(asked.remedy)}"
            found.append(asked)
        if any(shows_slab(image, self.viewer.dims) for image in images):
            left_out = f"{left_out} {_SLAB}".strip()
        return tuple(found), left_out

    def _regions_layer(self) -> Any:
        """Return the layer whose regions are measured, or None."""
        return self.sources.chosen_regions()

    def _take(self, value: tuple[tuple[Question, ...], tuple[Answer, ...]]) -> None:
        """Show answers that arrived, unless what they are about is gone."""
        questions, answers = value
        if self._asked and questions[0].name == self._measurement.name:
            self._show(answers)

    def _fail(self, error: CtMeasureError) -> None:
        self._said = str(error)
        self._show(())

    def _show(self, answers: tuple[Answer, ...]) -> None:
        self._shown = answers
        self.answers.show_answers(answers)
        self.keeping.setEnabled(bool(answers))
        self._tell()
        self.session.show_answers(self._measurement.name, tuple(one.result for one in answers))
        self._marks_timer.start()

    def _tell(self, *_: Any) -> None:
        said = [self._said] if self._said else []
        if self.form.problem:
            said.append(f"{self.form.problem}. The settings before are used.")
        chosen = self.answers.chosen_answer()
        label = chosen.label if chosen is not None and len(self.answers.answers()) > 1 else ""
        self.headline.show_answer(None if chosen is None else chosen.result, " ".join(said), label)

    _said = ""

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme."""
        self.headline.recolour(colours)
        self.answers.recolour(colours)

    # --- drawing --------------------------------------------------------------------

    def _draw_marks(self, *_: Any) -> None:
        images = self.sources.chosen_images()
        marks = [mark for one in self._shown if one.layer == 0 for mark in one.marks]
        if not (marks and images and self.on_image.isChecked()):
            self._marks.clear()
            return
        self._marks.show(marks, self.session.placement(images[0]))

    def _start_drawing(self, mode: str) -> None:
        images = self.sources.chosen_images()
        if not images:
            return
        layer = self.sources.chosen_regions()
        if layer is None:
            layer = new_regions_layer(self.viewer, images[0])
            self.sources.look()
            self.sources.choose(regions=layer)
        self.viewer.layers.selection.active = layer
        layer.mode = mode

    # --- keeping --------------------------------------------------------------------

    def _questions_kept(self) -> list[tuple[Any, ...]]:
        return [(one.name, one.volume, one.regions, one.settings) for one in self._asked]

    def _copy(self) -> None:
        from qtpy.QtWidgets import QApplication

        QApplication.clipboard().setText(self.answers.model.as_text())

    def _open_picture(self, picture: Any, name: str) -> None:
        add_picture(self.viewer, picture, f"{self._measurement.title}: {name}")


def _sentence(text: str) -> str:
    return f"{text[:1].upper()}{text[1:]}."
