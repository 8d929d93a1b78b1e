"""How soon a dock may look again: at once after a rest, and then as often as its work allows."""

from __future__ import annotations

import time
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Callable

__all__ = ["Pace"]

#: Seconds from one look to the next: at least, as often as a screen is drawn; and 30 times a second
#: at least, however dear a look is, as long as some time is left to the viewer after it.
_SHORTEST, _LONGEST, _LEFT = 0.016, 0.033, 0.004


class Pace:
    """The rhythm of looks that follow something.

    The first event after a rest is followed at once. While events go on, a look comes every 16 to
    33 ms, twice as long as the last one took, so that half of the time is the viewer's own.

    Parameters
    ----------
    clock : callable, optional
        Returns seconds.

    Examples
    --------
    >>> now = [10.0]
    >>> pace = Pace(lambda: now[0])
    >>> pace.wait()
    0
    >>> pace.begin(); now[0] += 0.012; pace.end()
    >>> pace.wait()
    12
    >>> now[0] += 1.0
    >>> pace.wait()
    0
    """

    def __init__(self, clock: Callable[[], float] = time.perf_counter) -> None:
        self._clock = clock
        self._began = self._next = clock()

    def begin(self) -> None:
        """Note that a look begins."""
        self._began = self._clock()

    def end(self) -> None:
        """Note that it has ended."""
        now = self._clock()
        period = min(max(2 * (now - self._began), _SHORTEST), _LONGEST)
        self._next = max(self._began + period, now + _LEFT)

    def wait(self) -> int:
        """Return how many milliseconds to wait before the next one."""
        return max(round(1000 * (self._next - self._clock())), 0)
