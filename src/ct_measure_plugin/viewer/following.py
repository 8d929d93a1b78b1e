"""Measuring that keeps up with a drag: one job at a time, and of those that wait only the newest.

:class:`~ct_measure_plugin.viewer.tasks.Latest` stops a job for a newer one. Asked thirty times a
second for something that takes longer, it would never answer. Here the running job ends, its
answer is shown, and the newest question comes next; those asked between are never begun.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from psygnal import Signal

from ct_measure_plugin.viewer.tasks import Latest

if TYPE_CHECKING:
    from collections.abc import Callable

    from ct_measure_plugin.viewer.tasks import Work

__all__ = ["Following"]


class Following:
    """Runs jobs in the background, one after the other; answers come in the order of questions.

    Signals
    -------
    answered(value)
        A job's result, in the main thread.
    failed(error)
        A job raised a CtMeasureError.
    progressed(done, total)
        How far the running job is.
    busy_changed(busy)
        Work began or ended.
    """

    answered = Signal(object)
    failed = Signal(object)
    progressed = Signal(int, int)
    busy_changed = Signal(bool)

    def __init__(self, title: str) -> None:
        self._latest = Latest(title)
        self._latest.answered.connect(self.answered.emit)
        self._latest.failed.connect(self.failed.emit)
        self._latest.progressed.connect(self.progressed.emit)
        self._latest.busy_changed.connect(self._on_busy)
        self._waiting: Callable[[Work], Any] | None = None
        self._told_busy = False

    @property
    def busy(self) -> bool:
        """True while a job runs or waits."""
        return self._latest.busy

    def start(self, job: Callable[[Work], Any]) -> None:
        """Run a job as soon as the present one has ended; one that waited is forgotten."""
        if self._latest.busy:
            self._waiting = job
        else:
            self._latest.start(job)

    def cancel(self) -> None:
        """Forget what waits, stop what runs, and drop its answer if it still comes."""
        self._waiting = None
        self._latest.cancel()

    def _on_busy(self, busy: bool) -> None:
        waiting, self._waiting = self._waiting, None
        if not busy and waiting is not None:
            self._latest.start(waiting)
        elif busy != self._told_busy:
            self._told_busy = busy
            self.busy_changed.emit(busy)
