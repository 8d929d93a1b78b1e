"""The two questions long work asks its caller: how far to show, and whether to go on."""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol

from ct_measure_plugin.errors import Cancelled

__all__ = ["Cancel", "Progress", "stop_if_asked"]

#: called with (done, total)
Progress = Callable[[int, int], None]


class _Flag(Protocol):
    """Something like :class:`threading.Event`."""

    def is_set(self) -> bool: ...


#: a function that answers True to stop, or an event that is set to stop
Cancel = Callable[[], bool] | _Flag


def stop_if_asked(cancel: Cancel | None) -> None:
    """Raise if the caller wants the work to stop.

    Raises
    ------
    Cancelled
        If so.
    """
    if cancel is None:
        return
    if cancel() if callable(cancel) else cancel.is_set():
        raise Cancelled("reading was stopped")
