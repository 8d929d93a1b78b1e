"""Long work: progress, cancel, and answers that come too late."""

from __future__ import annotations

import threading

import pytest

from ct_measure_plugin.errors import Cancelled, SeriesError
from ct_measure_plugin.viewer.tasks import Latest, Work, run_here


@pytest.fixture
def latest(qtbot):
    made = Latest("Testing")
    made.heard = []
    made.answered.connect(made.heard.append)
    made.failed.connect(made.heard.append)
    yield made
    made.cancel()


def test_an_answer_arrives_in_the_main_thread(latest, qtbot):
    where = []
    latest.answered.connect(lambda _value: where.append(threading.current_thread()))
    latest.start(lambda _work: threading.current_thread())
    qtbot.waitUntil(lambda: len(latest.heard) == 1, timeout=3000)
    assert where == [threading.main_thread()]
    assert latest.heard[0] is not threading.main_thread()
    assert not latest.busy


def test_a_stale_answer_never_overwrites_a_newer_one(latest, qtbot):
    go = threading.Event()

    def slow(work):
        go.wait(5)
        return "old"

    latest.start(slow)
    latest.start(lambda _work: "new")
    qtbot.waitUntil(lambda: latest.heard == ["new"], timeout=3000)
    go.set()
    qtbot.wait(200)
    assert latest.heard == ["new"]


def test_a_cancelled_job_is_told_and_its_answer_dropped(latest, qtbot):
    ended = threading.Event()

    def patient(work):
        while not work.cancelled():
            pass
        ended.set()
        return "late"

    busy = []
    latest.busy_changed.connect(busy.append)
    latest.start(patient)
    latest.cancel()
    qtbot.waitUntil(ended.is_set, timeout=3000)
    qtbot.wait(100)
    assert latest.heard == []
    assert busy == [True, False]


def test_an_error_on_purpose_is_an_answer(latest, qtbot):
    def fails(work):
        raise SeriesError("a slice is damaged")

    latest.start(fails)
    qtbot.waitUntil(lambda: len(latest.heard) == 1, timeout=3000)
    assert str(latest.heard[0]) == "a slice is damaged"
    assert not latest.busy


def test_progress_is_told(latest, qtbot):
    at = []
    latest.progressed.connect(lambda done, total: at.append((done, total)))
    held = threading.Event()

    def counts(work):
        work.progress(2, 7)
        held.wait(5)

    latest.start(counts)
    qtbot.waitUntil(lambda: at == [(2, 7)], timeout=3000)
    held.set()
    qtbot.waitUntil(lambda: latest.heard == [None], timeout=3000)


def test_run_here_shows_progress_and_obeys_cancel():
    from napari.utils.progress import progress

    seen = []

    def job(work: Work):
        for step in range(100):
            work.progress(step, 100)
            for bar in list(progress._all_instances):
                seen.append(bar.desc)
                bar.cancel()
            threading.Event().wait(0.02)
            work.stop_if_asked()

    with pytest.raises(Cancelled):
        run_here(job, "Counting")
    assert seen
    assert seen[0].startswith("Counting")
    assert not progress._all_instances


def test_run_here_passes_errors_on():
    def fails(work):
        raise TimeoutError("of the job's own")

    with pytest.raises(TimeoutError, match="own"):
        run_here(fails, "Failing")
