"""Answers are kept, come within their time, and never stand beside a region that moved on."""

from __future__ import annotations

import threading
from dataclasses import replace

import numpy as np
import pytest

from ct_measure_plugin.measurements import find, measure
from ct_measure_plugin.physics.regions import Disc, Segment
from ct_measure_plugin.viewer import region_answers
from ct_measure_plugin.viewer.region_answers import Ask, RegionAnswers

NAME = "region_statistics"


@pytest.fixture
def answers():
    made = RegionAnswers(NAME)
    yield made
    made.stop()


def asks_of(volume, count, shift=0.0, **more):
    settings = find(NAME).settings_type()
    return [
        Ask(volume, Disc((0.0, 12.0 + 2 * i + shift), 4.0, z_mm=-15.0, **more), settings)
        for i in range(count)
    ]


def counted(answers, monkeypatch, hold=None):
    """Count what is measured, and hold it up while `hold` is not set."""
    done, real = [], answers._answer

    def answer(ask, moving=False):
        if hold is not None:
            hold.begun.set()
            hold.wait(5)
        if not moving:
            done.append(ask)
        return real(ask, moving=moving)

    monkeypatch.setattr(answers, "_answer", answer)
    return done


def test_an_answer_is_what_python_gives_and_is_found_once(answers, volume, monkeypatch):
    done = counted(answers, monkeypatch)
    asks = asks_of(volume, 3)
    assert answers.find(asks) == 0
    assert answers.find(asks) == 0
    assert done == asks
    for ask in asks:
        assert answers.known(ask).mean == measure(NAME, volume, ask.region).mean


def test_only_what_moved_is_measured_again(answers, volume, monkeypatch):
    done = counted(answers, monkeypatch)
    asks = asks_of(volume, 4)
    answers.find(asks)
    moved = replace(asks[2], region=replace(asks[2].region, center_mm=(1.0, 16.0)))
    answers.find([*asks[:2], moved, asks[3]])
    assert done == [*asks, moved]


def test_without_time_nothing_is_measured_and_the_rest_is_told(answers, volume, monkeypatch):
    done = counted(answers, monkeypatch)
    asks = asks_of(volume, 5)
    assert answers.find(asks, seconds=0.0) == 5
    assert done == []


def test_the_first_asked_is_the_first_measured(answers, volume, monkeypatch):
    clock = iter(np.arange(0, 100, 0.024))
    monkeypatch.setattr(region_answers.time, "perf_counter", lambda: float(next(clock)))
    monkeypatch.setattr(region_answers, "GLANCE", 1.0)
    done = counted(answers, monkeypatch)
    asks = asks_of(volume, 6)
    rest = answers.find(asks[::-1], seconds=0.08)
    assert 0 < rest < 6
    assert done == asks[::-1][: 6 - rest]


def test_a_long_one_is_measured_elsewhere(answers, volume, monkeypatch, qtbot):
    monkeypatch.setattr(region_answers, "LONG", 0.0)
    here = threading.get_ident()
    where = []
    real = answers._answer
    monkeypatch.setattr(
        answers, "_answer", lambda ask, **_more: (where.append(threading.get_ident()), real(ask))[1]
    )
    [ask] = asks_of(volume, 1)
    with_told = []
    answers.changed.connect(lambda: with_told.append(1))
    assert answers.find([ask], seconds=1.0) == 0
    assert answers.known(ask) is None
    qtbot.waitUntil(lambda: bool(with_told), timeout=5000)
    answers.find([ask], seconds=0.0)
    assert answers.known(ask).mean == measure(NAME, volume, ask.region).mean
    assert where
    assert here not in where


def test_many_at_rest_are_measured_elsewhere(answers, volume, monkeypatch, qtbot):
    """In a drag they are not: their questions would be out of date before the answers came."""
    monkeypatch.setattr(region_answers, "MANY", 0.0)
    for step in range(3):
        answers.find(asks_of(volume, 5, shift=0.1 * step), seconds=0.0)
        assert not answers.busy
    asks = asks_of(volume, 5, shift=0.2)
    qtbot.wait(round(1500 * region_answers.REST))
    assert answers.find(asks, seconds=0.0) == 0
    assert answers.busy
    qtbot.waitUntil(lambda: not answers.busy, timeout=5000)
    answers.find(asks, seconds=0.0)
    assert all(answers.known(ask) for ask in asks)


def test_what_was_stopped_begins_again_when_something_moves(answers, volume, monkeypatch, qtbot):
    monkeypatch.setattr(region_answers, "LONG", 0.0)
    hold = threading.Event()
    hold.begun = threading.Event()
    counted(answers, monkeypatch, hold)
    asks = asks_of(volume, 3)
    answers.find(asks, seconds=0.0)
    assert hold.begun.wait(5)
    answers.halt()
    hold.set()
    assert not answers.busy
    for _ in range(3):
        assert answers.find(asks, seconds=0.0) == 0
        assert not answers.busy
    moved = asks_of(volume, 3, shift=0.1)
    answers.find(moved, seconds=0.0)
    assert answers.busy
    qtbot.waitUntil(lambda: not answers.busy, timeout=5000)
    answers.find(moved, seconds=0.0)
    assert all(answers.complete(ask) for ask in moved)


def test_an_answer_that_comes_too_late_is_dropped(answers, volume, monkeypatch, qtbot):
    """The values changed while the job ran: what it found was of the values before."""
    monkeypatch.setattr(region_answers, "LONG", 0.0)
    hold = threading.Event()
    hold.begun = threading.Event()
    done = counted(answers, monkeypatch, hold)
    [ask] = asks_of(volume, 1)
    answers.find([ask], seconds=1.0)
    assert hold.begun.wait(5)
    answers.forget()
    hold.set()
    qtbot.waitUntil(lambda: bool(done), timeout=5000)
    answers.find([ask], seconds=0.0)
    assert answers.known(ask) is None
    qtbot.waitUntil(lambda: not answers.busy, timeout=5000)


def test_many_that_move_are_glanced_at_first(answers, volume, monkeypatch):
    """All of them show the numbers of where they are; the uncertainties follow at rest."""
    ticks = iter(np.arange(0, 1000, 0.001))
    monkeypatch.setattr(region_answers.time, "perf_counter", lambda: float(next(ticks)))
    asks = asks_of(volume, 8)
    rest = answers.find(asks, seconds=0.0181)
    assert rest == 8
    for ask in asks:
        full = measure(NAME, volume, ask.region)
        assert answers.known(ask).mean.value == full.mean.value
        assert answers.known(ask).mean.uncertainty is None
        assert not answers.complete(ask)
    for _ in range(100):  # the clock above goes on by a millisecond a look at least
        answers.find(asks, seconds=0.0181)
    assert all(answers.complete(ask) for ask in asks)
    assert answers.known(asks[0]).mean == measure(NAME, volume, asks[0].region).mean


def test_one_that_takes_long_for_a_tick_is_glanced_at_while_it_moves(answers, volume, monkeypatch):
    """Its number comes in time, its uncertainty when it rests."""
    monkeypatch.setattr(region_answers, "GLANCE", 1e-6)
    done = counted(answers, monkeypatch)
    for step in range(4):
        [ask] = asks_of(volume, 1, shift=0.1 * step)
        assert answers.find([ask], seconds=0.02) == 1
        assert answers.known(ask).mean.value == measure(NAME, volume, ask.region).mean.value
    assert done == []
    monkeypatch.setattr(region_answers, "REST", -1.0)
    assert answers.find([ask], seconds=0.02) == 0
    assert done == [ask]


def test_a_large_one_that_moves_is_glanced_at_and_measured_elsewhere_at_rest(
    answers, volume, monkeypatch, qtbot
):
    monkeypatch.setattr(region_answers, "LONG", 0.0)
    monkeypatch.setattr(region_answers, "GLANCE", 0.0)
    for step in range(3):
        [ask] = asks_of(volume, 1, shift=0.1 * step)
        assert answers.find([ask], seconds=1.0) == 1
        assert answers.known(ask).mean.value == measure(NAME, volume, ask.region).mean.value
        assert not answers.busy
    monkeypatch.setattr(region_answers, "REST", -1.0)
    assert answers.find([ask], seconds=1.0) == 0
    assert answers.busy
    qtbot.waitUntil(lambda: not answers.busy, timeout=5000)
    answers.find([ask], seconds=1.0)
    assert answers.complete(ask)


def test_misuse_is_an_answer_here(answers, volume):
    """A drawn thing must never raise in the middle of a drag."""
    [ask] = asks_of(volume, 1)
    bad = replace(ask, region=Segment((0.0, 12.0), (0.0, 20.0), 0.0, z_mm=-15.0))
    answers.find([bad])
    assert "width_mm" in answers.known(bad).reason


def test_answers_nobody_asks_for_are_forgotten(answers, volume, monkeypatch):
    monkeypatch.setattr(region_answers, "_SPARE", 2)
    for step in range(20):
        answers.find(asks_of(volume, 1, shift=0.1 * step))
    assert len(answers._known) <= 5  # two an ask, the spare ones, and the newest
