"""The frame of every dock: throttled, asleep while hidden, in the theme's colours."""

from __future__ import annotations

import time

import pytest
from napari.utils._proxies import PublicOnlyProxy

from ct_measure_plugin.viewer.docks.dock import Dock
from ct_measure_plugin.viewer.session import Session
from ct_measure_plugin.viewer.theme import colours_of


class Counting(Dock):
    def __init__(self, viewer):
        self.refreshed = self.paused = 0
        self.coloured, self.heard = [], []
        super().__init__(viewer)

    def refresh(self):
        self.refreshed += 1

    def pause(self):
        self.paused += 1

    def recolour(self, colours):
        self.coloured.append(colours.dark)

    def note(self, *_):
        self.heard.append(1)


@pytest.fixture
def dock(qtbot, viewer_model):
    made = Counting(viewer_model)
    qtbot.addWidget(made)
    return made


def test_many_kicks_are_few_refreshes_but_not_none(dock, qtbot):
    """A drag is followed: a timer that each event restarts would not fire until it ends."""
    dock.show()
    qtbot.waitUntil(lambda: dock.refreshed == 1, timeout=2000)
    before = dock.refreshed
    began = time.perf_counter()
    for _ in range(30):
        dock.kick()
        qtbot.wait(10)
    at_most = 30 * (time.perf_counter() - began) + 3  # 30 a second; a timer may be early by a tick
    assert 3 <= dock.refreshed - before <= at_most


def test_a_hidden_dock_does_nothing_until_shown(dock, qtbot):
    for _ in range(5):
        dock.kick()
    qtbot.wait(80)
    assert dock.refreshed == 0
    dock.show()
    qtbot.waitUntil(lambda: dock.refreshed == 1, timeout=2000)
    dock.hide()
    assert dock.paused == 1
    dock.kick()
    qtbot.wait(80)
    assert dock.refreshed == 1
    dock.show()
    qtbot.waitUntil(lambda: dock.refreshed == 2, timeout=2000)


@pytest.mark.canvas
def test_a_dock_behind_another_tab_sleeps(make_napari_viewer, qtbot):
    """Qt does not hide it: it would go on measuring for nobody."""
    viewer = make_napari_viewer(show=True)
    first, second = Counting(viewer), Counting(viewer)
    frames = [
        viewer.window.add_dock_widget(one, name=name, area="right", tabify=name == "b")
        for one, name in ((first, "a"), (second, "b"))
    ]

    def in_front(frame, one, other):
        frame.raise_()  # again and again: napari lays its window out step by step
        return one.awake and not other.awake

    qtbot.waitUntil(lambda: in_front(frames[0], first, second), timeout=5000)
    qtbot.waitUntil(lambda: first.refreshed > 0, timeout=3000)
    assert second.paused > 0
    before = first.refreshed, second.refreshed
    viewer.layers.events.reordered()  # napari calls reset_choices of every dock
    for one in (first, second):
        one.kick()
    qtbot.waitUntil(lambda: first.refreshed > before[0], timeout=3000)
    assert second.refreshed == before[1]
    qtbot.waitUntil(lambda: in_front(frames[1], second, first), timeout=5000)
    qtbot.waitUntil(lambda: second.refreshed > before[1], timeout=3000)
    viewer.window.remove_dock_widget(frames[1])
    assert not second.awake


def test_a_proxy_is_the_viewer(qtbot, viewer_model):
    made = Counting(PublicOnlyProxy(viewer_model))
    qtbot.addWidget(made)
    assert made.viewer is viewer_model
    assert made.session is Session.of(viewer_model)


def test_the_theme_is_taken_up(dock, qtbot, viewer_model):
    dock.show()
    assert dock.coloured == [True]
    viewer_model.theme = "light"
    assert dock.coloured[-1] is False
    dock.hide()
    viewer_model.theme = "dark"
    assert dock.coloured[-1] is False
    dock.show()
    assert dock.coloured[-1] is True


def test_listening_is_once_and_can_be_taken_back(dock):
    dock.listen(dock.session.asked_changed, dock.note)
    dock.listen(dock.session.asked_changed, dock.note)
    dock.session.asked_changed.emit(None)
    assert dock.heard == [1]
    dock.unlisten(dock.session.asked_changed, dock.note)
    dock.unlisten(dock.session.asked_changed, dock.note)
    dock.session.asked_changed.emit(None)
    assert dock.heard == [1]


@pytest.mark.parametrize("theme", ["dark", "light"])
def test_colours_stand_out_from_the_ground(viewer_model, theme):
    """Contrast of at least 3 to 1 for lines and 4.5 to 1 for text (WCAG 2.1, 1.4.3 and 1.4.11)."""
    viewer_model.theme = theme
    colours = colours_of(viewer_model)
    assert colours.dark == (theme == "dark")
    assert contrast(colours.text, colours.background) >= 4.5
    for line in colours.lines:
        assert contrast(line, colours.background) >= 3.0, line


def contrast(one: str, other: str) -> float:
    """Contrast ratio by WCAG 2.1's relative luminance."""
    light, dark = sorted((luminance(one), luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def luminance(colour: str) -> float:
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    r, g, b = (c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts)
    return 0.2126 * r + 0.7152 * g + 0.0722 * b
