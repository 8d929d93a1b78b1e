"""What every dock is: a narrow column that scrolls, sleeps while hidden and wakes when shown."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QSize, Qt, QTimer
from qtpy.QtWidgets import QFrame, QScrollArea, QSizePolicy, QVBoxLayout, QWidget

from ct_measure_plugin.viewer.session import Session
from ct_measure_plugin.viewer.theme import Colours, colours_of

if TYPE_CHECKING:
    from qtpy.QtGui import QHideEvent, QShowEvent

__all__ = ["Dock"]

#: Milliseconds between refreshes while something is dragged: 30 a second.
_TICK_MS = 33


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
        self._timer = QTimer(self)
        self._timer.setSingleShot(True)
        self._timer.setInterval(_TICK_MS)
        self._timer.timeout.connect(self._tick)
        self._links: list[tuple[Any, Any]] = []

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
        if not any(known == (id(emitter), slot) for known in self._links):
            emitter.connect(slot)
            self._links.append((id(emitter), slot))

    def unlisten(self, emitter: Any, slot: Any) -> None:
        """Take back a :meth:`listen`; harmless if there was none."""
        if (id(emitter), slot) in self._links:
            self._links.remove((id(emitter), slot))
            emitter.disconnect(slot)

    def kick(self, *_: Any) -> None:
        """Ask for a refresh soon; the slot for anything that changed."""
        self._stale = True
        if self.isVisible() and not self._timer.isActive():
            self._timer.start()

    def refresh_now(self) -> None:
        """Refresh at once, seen or not; for programs and tests."""
        self._timer.stop()
        self._stale = False
        self.refresh()

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
        self.recolour(self.colours)
        if self._stale and not self._timer.isActive():
            self._timer.start()

    def hideEvent(self, event: QHideEvent) -> None:  # noqa: N802
        """Go to sleep; closing a dock in napari arrives here too."""
        self._timer.stop()
        self._stale = True
        self.pause()
        super().hideEvent(event)

    def _tick(self) -> None:
        if self.isVisible():
            self.refresh_now()

    def _on_theme(self, event: Any = None) -> None:  # noqa: ARG002
        if self.isVisible():
            self.recolour(self.colours)
            self.kick()
