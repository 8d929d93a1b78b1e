"""Buttons that carry regions and labels out and in: region file, DICOM segmentation and report."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtCore import Signal
from qtpy.QtWidgets import QCheckBox, QFileDialog, QVBoxLayout, QWidget

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.viewer.docks.fields import beside, button
from ct_measure_plugin.viewer.region_source import LabelSource

if TYPE_CHECKING:
    from collections.abc import Callable

    from ct_measure_plugin.viewer.placement import Placement
    from ct_measure_plugin.viewer.region_acts import RegionActs
    from ct_measure_plugin.viewer.region_board import RegionBoard

    Do = Callable[[Callable[[RegionActs, list[int]], Any]], bool]

__all__ = ["RegionFiles"]

_REGIONS = "Regions (*.regions.json *.json)"
_DICOM = "DICOM (*.dcm);;All files (*)"


class RegionFiles(QWidget):
    """Open and save.

    Parameters
    ----------
    do : callable
        Given something to do with the acts and the chosen regions, does it and tells whether it
        could.
    board : RegionBoard
        What is shown.
    viewer : ViewerModel
        Where it is shown.

    Signals
    -------
    told(text)
        What a reader must know about what was opened or saved.
    opened(layer)
        A layer was added.
    """

    told = Signal(str)
    opened = Signal(object)

    def __init__(
        self, do: Do, board: RegionBoard, viewer: Any, parent: QWidget | None = None
    ) -> None:
        super().__init__(parent)
        self._do = do
        self._board = board
        self._viewer = viewer
        lines = QVBoxLayout(self)
        lines.setContentsMargins(0, 0, 0, 0)
        self.anonymous = QCheckBox("No patient in DICOM files")
        self.anonymous.setToolTip(
            "A DICOM object repeats patient and study of its images, unless this is ticked."
        )
        for row in (
            (
                button("Open regions…", "Draw the regions of a region file", self._ask_regions),
                button("Save regions…", "Write the regions to a file", self._ask_save_regions),
            ),
            (
                button(
                    "Open labels…",
                    "Open a DICOM segmentation as labels",
                    self._ask_segmentation,
                ),
                button(
                    "Save labels…",
                    "Write the labels as a DICOM segmentation of the image's series",
                    self._ask_save_segmentation,
                ),
            ),
            (
                button(
                    "Save DICOM report…",
                    "Write the numbers as a DICOM structured report of the image's series",
                    self._ask_report,
                ),
            ),
        ):
            lines.addWidget(beside(*row))
        lines.addWidget(self.anonymous)

    # --- with a path; for programs and tests ----------------------------------------

    def open_regions(self, path: str) -> bool:
        """Draw the regions of a file."""
        from ct_measure_plugin.viewer.region_exchange import open_regions

        def act(acts: RegionActs, _chosen: list[int]) -> None:
            count, remark = open_regions(acts, self._board, self._viewer, path)
            self.told.emit(f"{count} regions opened. {remark}".strip())

        return self._do(act)

    def save_regions(self, path: str) -> bool:
        """Write the regions to a file."""
        from ct_measure_plugin.viewer.region_exchange import save_regions

        return self._save(lambda: save_regions(self._board, path))

    def open_segmentation(self, path: str) -> bool:
        """Open a DICOM segmentation as a Labels layer."""
        from ct_measure_plugin.viewer.region_exchange import open_segmentation

        def act(_acts: RegionActs, _chosen: list[int]) -> None:
            layer, remark = open_segmentation(path, self._placement(), self._viewer)
            self.opened.emit(layer)
            self.told.emit(remark)

        return self._do(act)

    def save_segmentation(self, path: str) -> bool:
        """Write the labels as a DICOM segmentation."""
        from ct_measure_plugin.viewer.region_exchange import save_segmentation

        def save() -> Any:
            source = self._board.source
            if not isinstance(source, LabelSource):
                raise ArgumentError(
                    "regions", "must be labels; paint the regions as labels", "none"
                )
            return save_segmentation(
                source.layer,
                self._placement(),
                self._viewer.dims.point,
                path,
                anonymous=self.anonymous.isChecked(),
            )

        return self._save(save)

    def save_report(self, path: str) -> bool:
        """Write the numbers as a DICOM structured report."""
        from ct_measure_plugin.viewer.region_exchange import save_report

        return self._save(
            lambda: save_report(self._board, path, anonymous=self.anonymous.isChecked())
        )

    # --- inside ---------------------------------------------------------------------

    def _placement(self) -> Placement:
        placement = self._board.placement()
        if placement is None:
            raise ArgumentError("image", "must be chosen first", None)
        return placement

    def _save(self, save: Callable[[], Any]) -> bool:
        def act(_acts: RegionActs, _chosen: list[int]) -> None:
            self._board.look()  # complete, not what a drag has left open
            self.told.emit(f"Written to {save().name}.")

        return self._do(act)

    def _ask_regions(self) -> None:
        self._with(
            QFileDialog.getOpenFileName(self, "Open regions", "", _REGIONS)[0], "open_regions"
        )

    def _ask_save_regions(self) -> None:
        name = "drawn.regions.json"
        path = QFileDialog.getSaveFileName(self, "Save regions", name, _REGIONS)[0]
        self._with(path, "save_regions")

    def _ask_segmentation(self) -> None:
        path = QFileDialog.getOpenFileName(self, "Open segmentation", "", _DICOM)[0]
        self._with(path, "open_segmentation")

    def _ask_save_segmentation(self) -> None:
        name = "segmentation.dcm"
        path = QFileDialog.getSaveFileName(self, "Save segmentation", name, _DICOM)[0]
        self._with(path, "save_segmentation")

    def _ask_report(self) -> None:
        path = QFileDialog.getSaveFileName(self, "Save DICOM report", "report.dcm", _DICOM)[0]
        self._with(path, "save_report")

    def _with(self, path: str, name: str) -> None:
        if path:
            getattr(self, name)(path)
