"""Long work off the main thread: progress, cancel, and never a stale answer over a newer one.

A *job* is a function of one argument, its :class:`Work`: it reports how far it is, asks whether to
stop, and returns its result. It touches no layer, no widget and no viewer; the caller copies what
it needs beforehand.

>>> def job(work):
...     for step in range(3):
...         work.stop_if_asked()
...         work.progress(step + 1, 3)
...     return "done"
>>> run_here(job, "Counting")
'done'
"""

from __future__ import annotations

import io
import sys
import threading
from concurrent.futures import Future, ThreadPoolExecutor
from concurrent.futures import TimeoutError as StillRunning
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, TypeVar

from psygnal import Signal

from ct_measure_plugin.errors import Cancelled, CtMeasureError

if TYPE_CHECKING:
    from collections.abc import Callable, Generator

__all__ = ["Latest", "Work", "run_here"]

_T = TypeVar("_T")

#: Seconds between looks at a running job: often enough for a bar that moves, and for the window
#: to answer while it waits.
_LOOK_EVERY = 0.05


class Work:
    """What a job is given: the way to report, and to ask whether to go on."""

    def __init__(self) -> None:
        self._stop = threading.Event()
        self.done, self.total = 0, 0

    def progress(self, done: int, total: int) -> None:
        """Report how far the job is; pass it on as a ``progress=`` argument."""
        self.done, self.total = done, total

    def cancelled(self) -> bool:
        """Tell whether the job should stop; pass it on as a ``cancel=`` argument."""
        return self._stop.is_set()

    def stop_if_asked(self) -> None:
        """Raise Cancelled if the job should stop."""
        if self._stop.is_set():
            raise Cancelled("the work was stopped")

    def stop(self) -> None:
        """Ask the job to stop."""
        self._stop.set()


def run_here(job: Callable[[Work], _T], title: str) -> _T:
    """Run a job in a thread and wait for it, while the window stays alive.

    napari shows the progress with a cancel button in its activity list; without a window the
    progress goes to the terminal, if there is one.

    Raises
    ------
    Cancelled
        If someone pressed cancel.
    Exception
        Whatever the job raises.
    """
    work = Work()
    with ThreadPoolExecutor(1, "ct-measure") as pool, _Bar(title, work) as bar:
        future = pool.submit(job, work)
        try:
            while True:
                try:
                    return future.result(timeout=_LOOK_EVERY)
                except StillRunning:
                    if future.done():  # the job's own time-out, not ours
                        raise
                    bar.show()
        finally:
            work.stop()


class _Bar:
    """A progress bar in napari's activity list that follows a Work and can stop it."""

    def __init__(self, title: str, work: Work) -> None:
        from napari.utils import cancelable_progress

        terminal = sys.stderr if sys.stderr is not None and sys.stderr.isatty() else io.StringIO()
        self._work = work
        self._bar = cancelable_progress(total=0, desc=title, file=terminal, leave=False)

    def __enter__(self) -> _Bar:
        return self

    def __exit__(self, *_: object) -> None:
        self._bar.close()

    def show(self) -> None:
        """Bring the bar up to the work, and the work to a stop if the bar was cancelled."""
        if self._bar.is_canceled:
            self._work.stop()
        done, total = self._work.done, self._work.total
        if total != self._bar.total:
            self._bar.total = total
        self._bar.update(done - self._bar.n)


@dataclass(frozen=True, slots=True)
class _Outcome:
    """What a job came to: a value, or an error raised on purpose."""

    value: Any = None
    error: CtMeasureError | None = None


class Latest:
    """Runs jobs in the background, of which only the newest may answer.

    Starting a job cancels the one before; its answer, should it still come, is dropped. An error
    that the job raises on purpose goes to `failed`; any other goes to napari's notifications.

    Signals
    -------
    answered(value)
        The newest job's result, in the main thread.
    failed(error)
        The newest job raised a CtMeasureError; not sent for a job that was cancelled.
    progressed(done, total)
        How far the newest job is.
    busy_changed(busy)
        Work began or ended.
    """

    answered = Signal(object)
    failed = Signal(object)
    progressed = Signal(int, int)
    busy_changed = Signal(bool)

    def __init__(self, title: str) -> None:
        self._title = title
        self._newest = 0
        self._work: Work | None = None

    @property
    def busy(self) -> bool:
        """True while the newest job runs."""
        return self._work is not None

    def start(self, job: Callable[[Work], Any]) -> None:
        """Run a job; what ran before is cancelled and may no longer answer."""
        from napari.qt.threading import create_worker

        if self._work is not None:
            self._work.stop()
        was_busy = self.busy
        self._newest += 1
        number = self._newest
        self._work = work = Work()
        worker = create_worker(_steps, job, work, _start_thread=False)
        worker.yielded.connect(lambda at: self._progress(number, at))
        worker.returned.connect(lambda outcome: self._return(number, outcome))
        worker.errored.connect(lambda _error: self._finish(number))
        if not was_busy:
            self.busy_changed.emit(True)
        worker.start()

    def cancel(self) -> None:
        """Stop the work and drop its answer, if it still comes."""
        if self._work is not None:
            self._work.stop()
            self._newest += 1
            self._work = None
            self.busy_changed.emit(False)

    def _progress(self, number: int, at: tuple[int, int]) -> None:
        if number == self._newest:
            self.progressed.emit(*at)

    def _return(self, number: int, outcome: _Outcome) -> None:
        if number != self._newest:
            return
        self._finish(number)
        if outcome.error is None:
            self.answered.emit(outcome.value)
        elif not isinstance(outcome.error, Cancelled):
            self.failed.emit(outcome.error)

    def _finish(self, number: int) -> None:
        if number == self._newest and self._work is not None:
            self._work = None
            self.busy_changed.emit(False)


def _steps(job: Callable[[Work], Any], work: Work) -> Generator[tuple[int, int], None, _Outcome]:
    """Yield how far a job is whenever that changed; return its outcome."""
    with ThreadPoolExecutor(1, "ct-measure") as pool:
        future: Future[Any] = pool.submit(job, work)
        try:
            told = (0, 0)
            while True:
                try:
                    return _Outcome(future.result(timeout=_LOOK_EVERY))
                except CtMeasureError as error:
                    return _Outcome(error=error)
                except StillRunning:
                    if future.done():
                        raise
                    if (work.done, work.total) != told:
                        told = (work.done, work.total)
                        yield told
        finally:
            work.stop()
