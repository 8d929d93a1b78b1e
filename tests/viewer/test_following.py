"""A drag is kept up with: the newest question is answered, those between are never begun."""

from __future__ import annotations

import threading

import pytest

from ct_measure_plugin.errors import SeriesError
from ct_measure_plugin.viewer.docks.busy_line import BusyLine
from ct_measure_plugin.viewer.following import Following


@pytest.fixture
def following(qtbot):
    made = Following("Testing")
    made.heard, made.busy_told = [], []
    made.answered.connect(made.heard.append)
    made.failed.connect(made.heard.append)
    made.busy_changed.connect(made.busy_told.append)
    yield made
    made.cancel()


def test_questions_asked_during_work_are_skipped_but_for_the_newest(following, qtbot):
    go = threading.Event()
    begun = []

    def job(name):
        def run(work):
            begun.append(name)
            go.wait(5)
            return name

        return run

    for name in "abcde":
        following.start(job(name))
    qtbot.waitUntil(lambda: begun == ["a"], timeout=3000)
    go.set()
    qtbot.waitUntil(lambda: following.heard == ["a", "e"], timeout=3000)
    qtbot.waitUntil(lambda: not following.busy, timeout=3000)
    assert begun == ["a", "e"]
    assert following.busy_told == [True, False]


def test_work_longer_than_the_pace_of_questions_still_answers(following, qtbot):
    """What Latest alone cannot: each question would stop the one before."""

    def slow(work):
        work._stop.wait(0.08)
        return work.cancelled()

    for _ in range(12):
        following.start(slow)
        qtbot.wait(20)
    qtbot.waitUntil(lambda: not following.busy, timeout=3000)
    assert len(following.heard) >= 2
    assert not any(following.heard)


def test_after_cancel_nothing_arrives(following, qtbot):
    go = threading.Event()
    following.start(lambda _work: go.wait(5))
    following.start(lambda _work: "waiting")
    following.cancel()
    go.set()
    qtbot.wait(200)
    assert following.heard == []
    assert following.busy_told == [True, False]
    following.start(lambda _work: "new")
    qtbot.waitUntil(lambda: following.heard == ["new"], timeout=3000)


def test_an_error_does_not_stop_the_next_question(following, qtbot):
    go = threading.Event()

    def fails(work):
        go.wait(5)
        raise SeriesError("a slice is damaged")

    following.start(fails)
    following.start(lambda _work: "after")
    go.set()
    qtbot.waitUntil(lambda: len(following.heard) == 2, timeout=3000)
    assert {type(one) for one in following.heard} == {SeriesError, str}


def test_how_far_a_job_is_is_told_and_shown(qtbot):
    following = Following("Counting")
    line = BusyLine(following)
    qtbot.addWidget(line)
    told, hold = [], threading.Event()
    following.progressed.connect(lambda done, total: told.append((done, total)))

    def job(work):
        work.progress(3, 7)
        hold.wait(5)

    following.start(job)
    qtbot.waitUntil(lambda: bool(told), timeout=5000)
    assert told == [(3, 7)]
    assert line.words.text() == "Measured 3 of 7"
    assert (line.bar.value(), line.bar.maximum()) == (3, 7)
    hold.set()
    qtbot.waitUntil(lambda: not following.busy, timeout=5000)
    following.start(lambda _work: None)
    assert line.words.text() == "Measuring…"  # nothing is known of the next job yet
    qtbot.waitUntil(lambda: not following.busy, timeout=5000)
