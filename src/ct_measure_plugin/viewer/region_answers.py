"""Answers of many regions, kept while nothing about them changes, found without holding up a drag.

Each tick asks for all of them. Those not known are measured until the tick's time is used up, the
first ones first; where that would take long, because many move at once or one is large, each is
glanced at (the same numbers, without their uncertainties) until the full answers follow. Once they
rest, what takes long is measured in a thread. An answer belongs to its question, region and Volume
and settings, so an old one can never stand beside a region that has moved on.
"""

from __future__ import annotations

import math
import time
from collections import deque
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from psygnal import Signal

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.measurements import find, glance_each, measure_each
from ct_measure_plugin.measurements.two_images import difference_between
from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.region_difference import region_difference
from ct_measure_plugin.physics.regions import Ellipsoid, Mask, Path, Segment
from ct_measure_plugin.physics.results import NotMeasured, Result
from ct_measure_plugin.viewer.following import Following
from ct_measure_plugin.viewer.shapes import shape_of

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from ct_measure_plugin.measurements import Settings
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.viewer.tasks import Work

__all__ = ["Ask", "RegionAnswers"]

#: Seconds that one region may take in the main thread.
LONG = 0.05

#: Seconds that all regions together may still need before they go into a thread, once at rest.
MANY = 0.1

#: Part of a tick's time that full answers may take while something moves; else glances come first.
GLANCE = 0.4

#: Seconds without a change after which regions are at rest: events of a drag come faster.
REST = 0.06

#: Seconds of a region on one slice and of each further slice, and of each pixel; the first guess,
#: which measured times replace.
_EACH, _PIXEL = 2.5e-3, 1.5e-7

#: What a glance costs, as a part of it.
_GLANCED = 0.2

#: Answers kept beyond those asked for: a drag that goes back finds them again.
_SPARE = 256


@dataclass(frozen=True, slots=True)
class Ask:
    """One region on one Volume, or what differs between two.

    Attributes
    ----------
    volume : Volume
        Compared by identity.
    region : Region
        Where.
    settings : Settings
        Complete.
    other : Ask or None
        The same region on a second Volume; given, the difference is asked for, second minus this.
    """

    volume: Volume
    region: Region
    settings: Settings
    other: Ask | None = None
    _hash: int = field(init=False, compare=False, repr=False)

    def __post_init__(self) -> None:
        found = hash((id(self.volume), self.region, self.settings, self.other))
        object.__setattr__(self, "_hash", found)

    def __hash__(self) -> int:
        return self._hash  # asked for many times a tick

    @property
    def alone(self) -> Ask:
        """The first of two by itself."""
        return Ask(self.volume, self.region, self.settings)


class RegionAnswers:
    """Answers by question.

    Parameters
    ----------
    name : str
        The measurement's; it measures each region by itself.

    Attributes
    ----------
    following : Following
        What is measured in the background.

    Signals
    -------
    changed()
        Answers came in from the background.
    """

    changed = Signal()

    def __init__(self, name: str) -> None:
        self._name = name
        self._known: dict[Ask, Result | NotMeasured] = {}
        self._glanced: dict[Ask, Result | NotMeasured] = {}
        self._last: frozenset[Ask] = frozenset()
        self._moved = -math.inf
        self._halted: frozenset[Ask] | None = None
        self._guesses: dict[Ask, float] = {}
        self._pace = self._glance_pace = 1.0
        self._round = 0
        self._fresh: deque[tuple[Ask, Result | NotMeasured]] = deque()  # a thread adds to it
        self.following = Following(find(name).title)
        self.following.answered.connect(self._take)

    @property
    def busy(self) -> bool:
        """True while something is measured in the background."""
        return self.following.busy

    def known(self, ask: Ask) -> Result | NotMeasured | None:
        """Return an answer, or a glance if that is all there is; None if not even that."""
        return self._known[ask] if ask in self._known else self._glanced.get(ask)

    def complete(self, ask: Ask) -> bool:
        """Tell whether an answer is known with all its numbers."""
        return ask in self._known

    def forget(self) -> None:
        """Measure everything anew: a Volume's values have changed."""
        self._known.clear()
        self._glanced.clear()
        self._fresh.clear()
        self._round += 1
        self.stop()

    def halt(self) -> None:
        """Stop what is measured in the background, and begin it again only when something moves."""
        self.following.cancel()
        self._halted = self._last

    def stop(self) -> None:
        """Stop what is measured in the background."""
        self.following.cancel()
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
        while self._fresh:
            ask, found = self._fresh.popleft()
            self._known[ask] = found
        self._make_room(asks)
        open_asks = [ask for ask in dict.fromkeys(asks) if ask not in self._known]
        if seconds is None:
            self._measure(open_asks, math.inf)
            return 0
        now, wanted = time.perf_counter(), frozenset(asks)
        if wanted != self._last:
            self._last, self._moved, self._halted = wanted, now, None
        at_rest = now - self._moved > REST
        short = [ask for ask in open_asks if self._cost(ask) <= LONG]
        seen = [] if at_rest else [ask for ask in open_asks if self._glance_cost(ask) <= seconds]
        if sum(map(self._cost, seen)) > GLANCE * seconds:
            self._glance(seen, now + seconds)
        else:
            self._measure(short, now + seconds)
        rest = [ask for ask in open_asks if ask not in self._known]
        if self.following.busy:
            return sum(ask not in self._glanced for ask in seen)
        if self._halted == wanted:
            return 0
        if at_rest and sum(map(self._cost, rest)) > MANY:
            self._send(rest)
            return 0
        unseen = [ask for ask in rest if at_rest or ask not in self._glanced]
        long = [ask for ask in unseen if self._cost(ask) > LONG]
        if long:
            self._send(long)
        return len(rest) - len(long)

    # --- inside ---------------------------------------------------------------------

    def _measure(self, asks: Iterable[Ask], end: float) -> None:
        for ask in asks:
            start = time.perf_counter()
            if start >= end:
                return
            self._known[ask] = self._answer(ask)
            self._glanced.pop(ask, None)
            self._learn(ask, time.perf_counter() - start)

    def _glance(self, asks: Iterable[Ask], end: float) -> None:
        for ask in asks:
            if ask not in self._glanced:
                start = time.perf_counter()
                if start >= end:
                    return
                self._glanced[ask] = self._answer(ask, moving=True)
                taken = time.perf_counter() - start
                self._glance_pace = _learnt(self._glance_pace, taken, _GLANCED * self._guess(ask))

    def _answer(self, ask: Ask, *, moving: bool = False) -> Result | NotMeasured:
        if ask.other is not None:
            return self._difference(ask.alone, ask.other, moving=moving)
        ask_each = glance_each if moving else measure_each
        try:
            return ask_each(self._name, ask.volume, ask.region, settings=ask.settings)[0]
        except CtMeasureError as error:
            return NotMeasured(str(error), "draw it again", ask.volume.cautions)

    def _difference(self, one: Ask, two: Ask, *, moving: bool) -> Result | NotMeasured:
        known = self._glanced if moving else self._known
        first, second = (
            known[ask] if ask in known else self._answer(ask, moving=moving) for ask in (one, two)
        )
        if moving or not _same_place(one.region, two.region):
            return region_difference(first, second)  # type: ignore[arg-type]
        pair = one.volume, two.volume
        return difference_between(pair, one.region, (first, second), one.settings)

    def _cost(self, ask: Ask) -> float:
        """Return about how long a region takes, in seconds."""
        return self._pace * self._guess(ask)

    def _glance_cost(self, ask: Ask) -> float:
        return self._glance_pace * _GLANCED * self._guess(ask)

    def _guess(self, ask: Ask) -> float:
        if ask not in self._guesses:
            self._guesses[ask] = _guess(ask)
        return self._guesses[ask]

    def _learn(self, ask: Ask, seconds: float) -> None:
        self._pace = _learnt(self._pace, seconds, self._guess(ask))

    def _send(self, asks: list[Ask]) -> None:
        number = self._round

        def job(work: Work) -> int:
            for i, ask in enumerate(asks):
                work.stop_if_asked()
                start = time.perf_counter()
                answer = self._answer(ask)
                self._learn(ask, time.perf_counter() - start)
                if number == self._round:
                    self._fresh.append((ask, answer))
                work.progress(i + 1, len(asks))
            return number

        self.following.start(job)

    def _take(self, number: int) -> None:
        if number == self._round:
            self.changed.emit()

    def _make_room(self, asks: Sequence[Ask]) -> None:
        if len(self._known) + len(self._glanced) > 2 * len(asks) + _SPARE:
            wanted = set(asks)
            self._known = {ask: found for ask, found in self._known.items() if ask in wanted}
            self._glanced = {ask: found for ask, found in self._glanced.items() if ask in wanted}
            self._guesses = {ask: cost for ask, cost in self._guesses.items() if ask in wanted}


def _learnt(pace: float, seconds: float, guess: float) -> float:
    """Bring guesses to this machine's pace; a hiccup must not decide."""
    return 0.8 * pace + 0.2 * min(max(seconds / guess, 0.1), 4.0)


def _same_place(one: Region, two: Region) -> bool:
    """Tell whether a region lies in the same place of two frames, to a thousandth of a mm."""
    if isinstance(one, Mask) or isinstance(two, Mask):
        return (
            isinstance(one, Mask)
            and isinstance(two, Mask)
            and np.allclose(one.origin_mm, two.origin_mm, rtol=0, atol=1e-3)
            and np.allclose(one.spacing_mm, two.spacing_mm, rtol=1e-6)
            and np.array_equal(one.inside, two.inside)
        )
    (corners, kind), (others, other) = shape_of(one), shape_of(two)
    return (
        kind == other
        and corners.shape == others.shape
        and bool(np.allclose(corners, others, rtol=0, atol=1e-3))
        and np.allclose(_ends(one), _ends(two), rtol=0, atol=1e-3)
    )


def _ends(region: Region) -> tuple[float, float]:
    z = region.z_mm
    return (0.0, 0.0) if z is None else z if isinstance(z, tuple) else (z, z)


def _guess(ask: Ask) -> float:
    """Return a first guess of a region's cost: by its slices and their pixels, in seconds."""
    region = ask.region
    if isinstance(region, Mask):  # there may be thousands: their slices are not looked up
        slices = len(region.inside) if region.inside.ndim == 3 else 1
    elif isinstance(region.z_mm, float) and not isinstance(region, Ellipsoid):
        slices = 1
    else:
        slices = max(len(slices_of(region, ask.volume)), 1)
    return _EACH * slices + _PIXEL * _pixels(ask, slices)


def _pixels(ask: Ask, slices: int) -> float:
    region: Any = ask.region
    inside = getattr(region, "inside", None)
    if inside is not None:
        return float(inside.size)
    _, dy, dx = ask.volume.spacing_mm
    if isinstance(region, Segment | Path):
        area = region.length_mm * region.width_mm
    else:
        area = getattr(region, "area_mm2", 0.0)
    return slices * float(area) / (dy * dx)
