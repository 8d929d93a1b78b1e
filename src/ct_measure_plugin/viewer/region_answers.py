"""Answers of many regions, kept while nothing about them changes, found without holding up a drag.

Each tick asks for all of them. Those not known are measured until the tick's time is used up, the
first ones first; the rest waits for the next tick. A region that would take long by itself, and
many that have come to rest, are measured in a thread. An answer belongs to its question, region
and Volume and settings, so an old one can never stand beside a region that has moved on.
"""

from __future__ import annotations

import time
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from psygnal import Signal

from ct_measure_plugin.measurements import find
from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.results import NotMeasured, Result
from ct_measure_plugin.physics.threshold import threshold_mask
from ct_measure_plugin.viewer.following import Following

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from ct_measure_plugin.measurements import Settings
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.viewer.tasks import Work

__all__ = ["Ask", "RegionAnswers", "cut"]

#: Seconds that one region may take in the main thread.
LONG = 0.05

#: Seconds that all regions together may still need before they go into a thread, once at rest.
MANY = 0.1

#: Seconds of a region on one slice and of each further slice, and of each pixel; the first guess,
#: which measured times replace.
_EACH, _PIXEL = 2.5e-3, 1.5e-7

#: Answers kept beyond those asked for: a drag that goes back finds them again.
_SPARE = 256


@dataclass(frozen=True, slots=True)
class Ask:
    """One region on one Volume.

    Attributes
    ----------
    volume : Volume
        Compared by identity.
    region : Region
        Where.
    settings : Settings
        Complete.
    values : (float, float) or None
        The range of values that counts.
    """

    volume: Volume
    region: Region
    settings: Settings
    values: tuple[float, float] | None = None


def cut(ask: Ask) -> Region | NotMeasured:
    """Return the region that is measured: itself, or the part within the range of values."""
    if ask.values is None:
        return ask.region
    return threshold_mask(ask.volume, ask.region, *ask.values)


class RegionAnswers:
    """Answers by question.

    Parameters
    ----------
    name : str
        The measurement's; it measures each region by itself.

    Signals
    -------
    changed()
        Answers came in from the background.
    """

    changed = Signal()

    def __init__(self, name: str) -> None:
        self._measurement = find(name)
        self._known: dict[Ask, Result | NotMeasured] = {}
        self._last: frozenset[Ask] = frozenset()
        self._guesses: dict[Ask, float] = {}
        self._pace = 1.0
        self._round = 0
        self._fresh: dict[Ask, Result | NotMeasured] = {}
        self._following = Following(self._measurement.title)
        self._following.answered.connect(self._take)

    @property
    def busy(self) -> bool:
        """True while something is measured in the background."""
        return self._following.busy

    def known(self, ask: Ask) -> Result | NotMeasured | None:
        """Return an answer, None if it is not known yet."""
        return self._known.get(ask)

    def forget(self) -> None:
        """Measure everything anew: a Volume's values have changed."""
        self._known.clear()
        self._round += 1
        self.stop()

    def stop(self) -> None:
        """Stop what is measured in the background."""
        self._following.cancel()
        self._last = frozenset()

    def find(self, asks: Sequence[Ask], seconds: float | None = None) -> int:
        """Measure what is not known.

        Parameters
        ----------
        asks : sequence of Ask
            All that is wanted, the most wanted first; anything else may be forgotten.
        seconds : float, optional
            How long to measure here; without it, until all is known.

        Returns
        -------
        int
            How many are worth another tick: not known, and not being measured in the background.
        """
        self._known.update(self._fresh)
        self._fresh = {}
        self._make_room(asks)
        open_asks = [ask for ask in dict.fromkeys(asks) if ask not in self._known]
        if seconds is None:
            self._measure(open_asks, None)
            return 0
        wanted = frozenset(asks)
        at_rest, self._last = wanted == self._last, wanted
        self._measure([ask for ask in open_asks if self._cost(ask) <= LONG], seconds)
        rest = [ask for ask in open_asks if ask not in self._known]
        if not rest or self._following.busy:
            return len(rest)
        costs = [self._cost(ask) for ask in rest]
        if at_rest and sum(costs) > MANY:
            self._send(rest)
            return 0
        long = [ask for ask, cost in zip(rest, costs, strict=True) if cost > LONG]
        if long:
            self._send(long)
        return len(rest) - len(long)

    # --- inside ---------------------------------------------------------------------

    def _measure(self, asks: Iterable[Ask], seconds: float | None) -> None:
        end = None if seconds is None else time.perf_counter() + seconds
        for ask in asks:
            start = time.perf_counter()
            if end is not None and start >= end:
                return
            self._known[ask] = self._answer(ask)
            self._learn(ask, time.perf_counter() - start)

    def _answer(self, ask: Ask) -> Result | NotMeasured:
        region = cut(ask)
        if isinstance(region, NotMeasured):
            return replace(region, cautions=(*region.cautions, *ask.volume.cautions))
        return self._measurement.measure(ask.volume, (region,), ask.settings)

    def _cost(self, ask: Ask) -> float:
        """Return about how long a region takes, in seconds."""
        return self._pace * self._guess(ask)

    def _guess(self, ask: Ask) -> float:
        if ask not in self._guesses:
            self._guesses[ask] = _guess(ask)
        return self._guesses[ask]

    def _learn(self, ask: Ask, seconds: float) -> None:
        """Bring the guesses to this machine's pace; a hiccup must not decide."""
        ratio = min(max(seconds / self._guess(ask), 0.1), 4.0)
        self._pace = 0.8 * self._pace + 0.2 * ratio

    def _send(self, asks: list[Ask]) -> None:
        number = self._round

        def job(work: Work) -> int:
            for i, ask in enumerate(asks):
                work.stop_if_asked()
                start = time.perf_counter()
                answer = self._answer(ask)
                self._learn(ask, time.perf_counter() - start)
                if number == self._round:
                    self._fresh[ask] = answer
                work.progress(i + 1, len(asks))
            return number

        self._following.start(job)

    def _take(self, number: int) -> None:
        if number == self._round:
            self.changed.emit()

    def _make_room(self, asks: Sequence[Ask]) -> None:
        if len(self._known) > 2 * len(asks) + _SPARE:
            wanted = set(asks)
            self._known = {ask: found for ask, found in self._known.items() if ask in wanted}
            self._guesses = {ask: cost for ask, cost in self._guesses.items() if ask in wanted}


def _guess(ask: Ask) -> float:
    """Return a first guess of a region's cost: by its slices and their pixels, in seconds."""
    slices = max(len(slices_of(ask.region, ask.volume)), 1)
    return _EACH * slices + _PIXEL * _pixels(ask, slices)


def _pixels(ask: Ask, slices: int) -> float:
    region: Any = ask.region
    inside = getattr(region, "inside", None)
    if inside is not None:
        return float(inside.size)
    _, dy, dx = ask.volume.spacing_mm
    area = getattr(region, "area_mm2", None)
    if area is None:
        area = region.length_mm * region.width_mm
    return slices * float(area) / (dy * dx)
