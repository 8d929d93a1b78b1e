"""Buttons that keep what a dock shows: copy, export, record, report; the same in every dock."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import Signal
from qtpy.QtWidgets import QFileDialog, QHBoxLayout, QPushButton, QWidget

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.measurements import find
from ct_measure_plugin.records import Logbook, write_csv, write_json
from ct_measure_plugin.run import run_measurement
from ct_measure_plugin.viewer.docks.weakly import weakly
from ct_measure_plugin.viewer.tasks import run_here

if TYPE_CHECKING:
    from ct_measure_plugin.records import Record
    from ct_measure_plugin.viewer.session import Session
    from ct_measure_plugin.viewer.tasks import Work

__all__ = ["KeepingButtons"]


class KeepingButtons(QWidget):
    """Copy, export, record and report.

    Parameters
    ----------
    session : Session
        The viewer's session.
    question : callable
        Returns measurement name, Volume, regions and settings as the dock shows them now; a list of
        such where the dock measures several layers. Records are made from these, so that what is
        kept is what a script would find.
    """

    copy = Signal()

    def __init__(
        self,
        session: Session,
        question: Callable[[], tuple[Any, ...] | list[tuple[Any, ...]]],
        parent: QWidget | None = None,
    ) -> None:
        super().__init__(parent)
        self._session = session
        self._question = weakly(question, [])
        line = QHBoxLayout(self)
        line.setContentsMargins(0, 0, 0, 0)
        line.setSpacing(4)
        for text, tip, slot in (
            ("Copy", "Copy the table to the clipboard", self._copy),
            ("Export…", "Write the records as CSV or JSON", self._export),
            ("Record", "Add the records to the logbook", self._record),
            ("Report…", "Write a one-page HTML report", self._report),
        ):
            button = QPushButton(text)
            button.setToolTip(tip)
            button.clicked.connect(slot)
            line.addWidget(button)

    def records(self) -> tuple[Record, ...]:
        """Make the records of what is shown, while the window stays alive."""
        asked = self._question()
        questions = [one for one in (asked if isinstance(asked, list) else [asked]) if _whole(one)]
        if not questions:
            return ()

        def job(work: Work) -> tuple[Record, ...]:
            found: list[Record] = []
            for place, (name, volume, regions, settings) in enumerate(questions):
                work.stop_if_asked()
                work.progress(place, len(questions))
                found += run_measurement(name, volume, regions, settings)
            return tuple(found)

        return run_here(job, "Making records")

    def export_to(self, path: str | Path) -> Path:
        """Write the records; the suffix decides between CSV and JSON."""
        write = write_json if Path(path).suffix.lower() == ".json" else write_csv
        return write(self.records(), path)

    def report_to(self, path: str | Path) -> Path:
        """Write the report."""
        from ct_measure_plugin.report import write_report

        return write_report(self.records(), path)

    def record_in(self, logbook: Logbook) -> int:
        """Add the records to a logbook; return how many."""
        records = self.records()
        count = logbook.add(records)
        for record in records:
            self._session.keep(record)
        return count

    # --- the buttons ----------------------------------------------------------------

    def _copy(self, *_: Any) -> None:
        self.copy.emit()

    def _export(self, *_: Any) -> None:
        path, _ = QFileDialog.getSaveFileName(
            self, "Export records", "records.csv", "Table (*.csv);;Records (*.json)"
        )
        if path:
            self._tell(lambda: f"Exported to {self.export_to(path).name}")

    def _report(self, *_: Any) -> None:
        path, _ = QFileDialog.getSaveFileName(self, "Report", "report.html", "Page (*.html)")
        if path:
            self._tell(lambda: f"Report written to {self.report_to(path).name}")

    def _record(self, *_: Any) -> None:
        def act() -> str:
            if self._session.logbook is None:
                self._session.logbook = Logbook()
            return f"{self.record_in(self._session.logbook)} added to the logbook"

        self._tell(act)

    def _tell(self, act: Callable[[], str]) -> None:
        from napari.utils.notifications import show_error, show_info

        try:
            show_info(act())
        except CtMeasureError as error:
            show_error(str(error))
        except OSError as error:
            show_error(f"The file cannot be written: {error.strerror}")


def _whole(question: tuple[Any, ...]) -> bool:
    """Tell whether there is something to measure: a Volume, and as many regions as it takes."""
    name, volume, regions, _ = question
    return volume is not None and len(regions) >= find(name).regions.at_least
