"""What every dock is: a narrow column that scrolls, sleeps while hidden and wakes when shown."""

from __future__ import annotations

import contextlib
from typing import TYPE_CHECKING, Any
from weakref import WeakMethod

from qtpy.QtCore import QSize, Qt, QTimer
from qtpy.QtWidgets import (
    QComboBox,
    QDockWidget,
    QFrame,
    QScrollArea,
    QSizePolicy,
    QTabBar,
    QVBoxLayout,
    QWidget,
)

from ct_measure_plugin.viewer.session import Session
from ct_measure_plugin.viewer.theme import Colours, colours_of

if TYPE_CHECKING:
    from qtpy.QtGui import QHideEvent, QShowEvent

__all__ = ["Dock", "narrow", "spell_tabs"]

#: Milliseconds between refreshes while something is dragged: 30 a second.
_TICK_MS = 33

#: Narrowest a box of choices becomes, pixels.
_NARROWEST = 80


def narrow(box: QComboBox) -> None:
    """Let a box be narrower than its longest entry, as a layer's name may be."""
    box.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
    box.setMinimumContentsLength(6)
    box.setMinimumWidth(_NARROWEST)  # Qt keeps an older hint until told a number


def spell_tabs(frames: dict[str, QDockWidget]) -> None:
    """Write whole titles on the tabs of docked frames, with arrows where they do not all fit."""
    for title, frame in frames.items():
        frame.setWindowTitle(title)
        direct = Qt.FindChildOption.FindDirectChildrenOnly
        for bar in frame.window().findChildren(QTabBar, options=direct):
            bar.setElideMode(Qt.TextElideMode.ElideNone)
            bar.setUsesScrollButtons(True)


class Dock(QWidget):
    """Parent of all docks.

    A subclass fills :attr:`body` in its constructor, then connects :meth:`kick` to whatever should
    refresh it, with :meth:`listen`, and overrides :meth:`refresh`. Refreshes are throttled, not
    delayed: a drag is followed, at most 30 times a second. A hidden dock does nothing, and
    refreshes once when shown again.

    Parameters
    ----------
    viewer : napari.viewer.Viewer
        The viewer, or a proxy of it.
    """

    def __init__(self, viewer: Any) -> None:
        super().__init__()
        self.viewer = getattr(viewer, "__wrapped__", viewer)
        self.session = Session.of(viewer)
        self._stale = True
        self._timer = self.single_shot(_TICK_MS, self._tick)
        self._links: list[tuple[int, WeakMethod[Any]]] = []
        self._frame: QDockWidget | None = None
        self._behind = False

        content = QWidget(self)
        self.body = QVBoxLayout(content)
        self.body.setContentsMargins(6, 6, 6, 6)
        self.body.setSpacing(6)
        area = QScrollArea(self)
        area.setWidgetResizable(True)
        area.setFrameShape(QFrame.Shape.NoFrame)
        area.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        area.setWidget(content)
        outer = QVBoxLayout(self)
        outer.setContentsMargins(0, 0, 0, 0)
        outer.addWidget(area)
        self.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Expanding)
        self.listen(self.viewer.events.theme, self._on_theme)

    def sizeHint(self) -> QSize:  # noqa: N802 - Qt's name
        """Ask for a narrow column that never makes the window grow."""
        return QSize(300, 360)

    def minimumSizeHint(self) -> QSize:  # noqa: N802
        """Shrink to what still can be read; the rest scrolls."""
        return QSize(280, 120)

    # --- to be overridden -----------------------------------------------------------

    def refresh(self) -> None:
        """Show the present state."""

    def pause(self) -> None:
        """Stop whatever runs; the dock was hidden or closed."""

    def recolour(self, colours: Colours) -> None:
        """Take up the colours of a theme, for what the dock paints itself."""

    # --- to be used -----------------------------------------------------------------

    def listen(self, emitter: Any, slot: Any) -> None:
        """Connect a method of this dock to a napari event or a psygnal signal, once.

        Both hold methods weakly, so a dock that is gone is not called.
        """
        link = id(emitter), WeakMethod(slot)
        if link not in self._links:
            emitter.connect(slot)
            self._links.append(link)

    def unlisten(self, emitter: Any, slot: Any) -> None:
        """Take back a :meth:`listen`; harmless if there was none."""
        link = id(emitter), WeakMethod(slot)
        if link in self._links:
            self._links.remove(link)
            emitter.disconnect(slot)

    def single_shot(self, milliseconds: int, slot: Any) -> QTimer:
        """Return a timer that, once started, calls a method of this dock once."""
        timer = QTimer(self)
        timer.setSingleShot(True)
        timer.setInterval(milliseconds)
        timer.timeout.connect(slot)
        return timer

    def kick(self, *_: Any) -> None:
        """Ask for a refresh soon; the slot for anything that changed."""
        self._stale = True
        if self.awake and not self._timer.isActive():
            self._timer.start()

    def refresh_now(self) -> None:
        """Refresh at once, seen or not; for programs and tests."""
        self._timer.stop()
        self._stale = False
        self.refresh()

    @property
    def awake(self) -> bool:
        """True while someone can see the dock: shown, and not behind another tab."""
        return self.isVisible() and not self._behind

    @property
    def colours(self) -> Colours:
        """The colours of the viewer's theme."""
        return colours_of(self.viewer)

    # --- Qt and napari call these ---------------------------------------------------

    def reset_choices(self, event: Any = None) -> None:  # noqa: ARG002 - napari's signature
        """Look at the layers again; napari calls it whenever the layer list changes."""
        self.kick()

    def showEvent(self, event: QShowEvent) -> None:  # noqa: N802
        """Wake up."""
        super().showEvent(event)
        for box in self.findChildren(QComboBox):
            narrow(box)
        self._watch_frame()
        self._wake()

    def hideEvent(self, event: QHideEvent) -> None:  # noqa: N802
        """Go to sleep; closing a dock in napari arrives here too."""
        self._sleep()
        super().hideEvent(event)

    def _watch_frame(self) -> None:
        """Follow the frame that napari put the dock into.

        Qt does not hide a dock behind another tab, it moves it out of sight; only its frame tells.
        """
        frame: Any = self.parentWidget()
        while frame is not None and not isinstance(frame, QDockWidget):
            frame = frame.parentWidget()
        if frame is self._frame:
            return
        if self._frame is not None:
            with contextlib.suppress(RuntimeError):  # the frame may be gone with its window
                self._frame.visibilityChanged.disconnect(self._on_frame)
        self._frame = frame
        self._behind = False
        if frame is not None:
            frame.visibilityChanged.connect(self._on_frame)
            QTimer.singleShot(0, self._look_behind)  # when the tabs are laid out

    def _look_behind(self) -> None:
        """See where the frame stands already: that it fell behind may have been told before."""
        tabbed = self._frame is not None and self._frame.parentWidget() is not None
        if tabbed and self.isVisible() and self.visibleRegion().isEmpty():
            self._on_frame(False)

    def _on_frame(self, seen: bool) -> None:
        self._behind = not seen
        if seen:
            self._wake()
        else:
            self._sleep()

    def _wake(self) -> None:
        if self.awake:
            self.recolour(self.colours)
            if self._stale and not self._timer.isActive():
                self._timer.start()

    def _sleep(self) -> None:
        self._timer.stop()
        self._stale = True
        self.pause()

    def _tick(self) -> None:
        if self.awake:
            self.refresh_now()

    def _on_theme(self, event: Any = None) -> None:  # noqa: ARG002
        if self.awake:
            self.recolour(self.colours)
            self.kick()
