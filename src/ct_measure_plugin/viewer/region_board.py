"""What the dock of regions shows: rows of answers, for one image or several, and their features.

No Qt here. The board reads the layers, asks, and lays the answers out; the dock draws them.
"""

from __future__ import annotations

import operator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from psygnal import Signal

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.physics.results import NotMeasured, Quantity, Result
from ct_measure_plugin.viewer.answer_columns import put_features
from ct_measure_plugin.viewer.layers import shows_slab
from ct_measure_plugin.viewer.region_answers import Ask, RegionAnswers
from ct_measure_plugin.viewer.region_features import ids_on
from ct_measure_plugin.viewer.tasks import Latest

if TYPE_CHECKING:
    from collections.abc import Collection, Sequence

    from ct_measure_plugin.measurements import Settings
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.viewer.drawn import Drawn
    from ct_measure_plugin.viewer.placement import Placement
    from ct_measure_plugin.viewer.region_source import RegionSource
    from ct_measure_plugin.viewer.session import Session

__all__ = ["RegionBoard", "Row"]

_WAITING = NotMeasured("it is being measured", "wait a moment")

_SLAB = "The canvas shows several slices as one; single slices are measured."


#: Rows above which features are laid out in a thread: a thousand take some 20 ms.
MANY_ROWS = 1000


@dataclass(frozen=True, slots=True)
class Row:
    """One region on one image, or what differs there between two.

    Attributes
    ----------
    index : int
        The region's place on its layer; of a label, its value.
    name, group, code : str
        What people call the region, its class, and the class as "scheme:value".
    answer : Result or NotMeasured
        What was found.
    image, mark : str
        Which image, by its name and in short: "1", "2", "2 − 1"; "" where there is only one.
    complete : bool
        False while only a glance, or nothing yet, is known of where the region now is.
    difference : bool
        True for a difference.
    stale : bool
        True if the answer is that of where the region was: nothing is known yet of where it is.
    """

    index: int
    name: str
    group: str
    code: str
    answer: Result | NotMeasured
    image: str = ""
    mark: str = ""
    complete: bool = True
    difference: bool = False
    stale: bool = False

    def quantity(self, column: str) -> Quantity | None:
        """Return one of the answer's quantities, None if it has none of that name."""
        found = getattr(self.answer, column, None)
        return found if isinstance(found, Quantity) else None

    def warnings(self) -> int:
        """Return how many warnings the answer carries."""
        return sum(caution.kind.level == "warning" for caution in self.answer.cautions)


class RegionBoard:
    """Rows of a layer's regions on image layers.

    Parameters
    ----------
    session : Session
        The viewer's session.
    name : str
        The measurement's.

    Signals
    -------
    changed()
        Something came in from the background; look again.
    """

    changed = Signal()

    def __init__(self, session: Session, name: str) -> None:
        self._session = session
        self._name = name
        self.images: tuple[Any, ...] = ()
        self.source: RegionSource | None = None
        self.settings: Settings | None = None
        self.rows: tuple[Row, ...] = ()
        self.said = ""
        self.drawn: tuple[Drawn, ...] = ()
        self._asked: list[tuple[Placement, tuple[Drawn, ...]]] = []
        self._known_asks: dict[tuple[int, int], Ask] = {}
        self._known_rows: dict[tuple[int, str], Row] = {}
        self._last: dict[tuple[int, str], Result | NotMeasured] = {}
        self.answers = RegionAnswers(name)
        self.answers.changed.connect(self.changed.emit)
        self._columns = Latest("Features")
        self._columns.answered.connect(self._put)

    # --- looking --------------------------------------------------------------------

    def look(self, first: Collection[int] = (), seconds: float | None = None) -> int:
        """Read the layers and answer what can be answered in time; all of it without a time.

        Parameters
        ----------
        first : collection of int
            Indices of the regions most wanted.
        seconds : float, optional
            How long to measure.

        Returns
        -------
        int
            How many regions are worth another look soon.
        """
        self._asked, self.drawn, self.rows = [], (), ()
        self.said = self._read(wait=seconds is None)
        if not self._asked:
            return 0
        self._asks_now: dict[tuple[int, int], Ask] = {}
        columns = [self._asks(*asked) for asked in self._asked]
        self._known_asks = self._asks_now
        differences = [
            [_difference(one, two) for one, two in zip(columns[0], column, strict=True)]
            for column in columns[1:]
        ]
        order = sorted(range(len(self.drawn)), key=lambda i: self.drawn[i].index not in first)
        every = [*columns, *differences]
        asks = [ask for i in order for column in every if (ask := column[i]) is not None]
        left = self.answers.find(asks, seconds)
        self.rows = tuple(self._lay_out(columns, differences))
        self._known_rows = {(row.index, row.mark): row for row in self.rows}
        if len(self._last) > 2 * len(self.rows):
            kept = {(row.index, row.mark) for row in self.rows}
            self._last = {key: found for key, found in self._last.items() if key in kept}
        return left

    @property
    def busy(self) -> bool:
        """True while something runs in the background."""
        return self.answers.busy or (self.source is not None and self.source.busy)

    def stop(self) -> None:
        """Stop what runs in the background."""
        self.answers.stop()
        self._columns.cancel()
        if self.source is not None:
            self.source.close()

    def questions(self) -> list[tuple[Any, ...]]:
        """Return what records are made of, one an image: name, Volume, regions and settings."""
        return [
            (self._name, placement.volume, self._regions(drawn), self.settings)
            for placement, drawn in self._asked
        ]

    def placement(self) -> Placement | None:
        """Return the first image's placement, None if there is none.

        Raises
        ------
        ArgumentError
            If the image cannot be measured as it is.
        """
        return self._session.placement(self.images[0]) if self.images else None

    def region(self, index: int) -> Region | None:
        """Return a region in the first image's frame."""
        return next((one.region for one in self.drawn if one.index == index), None)

    def answer(self, index: int) -> Result | NotMeasured | None:
        """Return what was found in a region of the first image."""
        return next((row.answer for row in self.rows if row.index == index), None)

    def write_features(self) -> bool:
        """Write the answers into the layer's features; not while any of them is still to come.

        Many are laid out in a thread, and written when that is done unless something has changed
        meanwhile. Returns whether features were written.
        """
        source = self.source
        if source is None or source.unfinished or not self.rows or self._columns.busy:
            return False
        if not all(row.complete for row in self.rows):
            return False
        if len(self.rows) > MANY_ROWS:
            self._write_many(source)
            return False
        changed = [source.write_answers(*part) for part in self._parts()]
        if hasattr(source.layer, "selected_data"):
            ids_on(source.layer)
        return any(changed)

    # --- inside ---------------------------------------------------------------------

    def _parts(self) -> list[tuple[dict[int, Result | NotMeasured], str, str]]:
        """Return the answers of each image by region, its name, and how its columns end."""
        found = []
        for place, image in enumerate(self.images):
            title = image.name if len(self.images) > 1 else ""
            mine = {
                row.index: row.answer
                for row in self.rows
                if row.image == title and not row.difference
            }
            found.append((mine, image.name, f"_{place + 1}" if place else ""))
        return found

    def _write_many(self, source: RegionSource) -> None:
        rows, before = self.rows, source.layer.features
        job = source.columns_job(self._parts())
        self._columns.start(lambda work: (source, rows, before, job(work)))

    def _put(self, found: tuple[Any, ...]) -> None:
        """Write what a thread laid out, unless it is about what was there before."""
        source, rows, before, features = found
        layer = source.layer
        alike = len(rows) == len(self.rows) and all(map(operator.is_, rows, self.rows))
        if source is not self.source or layer.features is not before or not alike:
            return  # whatever changed is looked at, and written once it rests
        if features is not None:
            put_features(layer, features)
        if hasattr(layer, "selected_data"):
            ids_on(layer)

    def _read(self, *, wait: bool) -> str:
        """Read the layers; return what stands in the way, or a remark."""
        if not self.images:
            return "Open an image first."
        if self.source is None or self.source.empty:
            return "Press Draw, or choose a layer that holds regions."
        point = self._session.viewer.dims.point
        asked = []
        for image in self.images:
            try:
                placement = self._session.placement(image)
            except CtMeasureError as error:
                return str(error) if len(self.images) == 1 else f"{image.name}: {error}"
            asked.append((placement, self.source.drawn(placement, point, wait=wait)))
        if len({len(drawn) for _, drawn in asked}) > 1:
            return "Looking for the labels."  # one image's look through the map is ahead
        self._asked, self.drawn = asked, asked[0][1]
        if self.source.busy and not self.drawn:
            return "Looking for the labels."
        if not self.drawn:
            return "No label is painted yet."
        if any(shows_slab(image, self._session.viewer.dims) for image in self.images):
            return _SLAB
        return ""

    def _asks(self, placement: Placement, drawn: Sequence[Drawn]) -> list[Ask | None]:
        """Return the questions; those of regions that are the same objects as before stay, too."""
        settings, volume = self.settings, placement.volume
        if settings is None:
            return [None] * len(drawn)
        found: list[Ask | None] = []
        for one in drawn:
            if one.region is None:
                found.append(None)
                continue
            key = id(one.region), id(volume)
            ask = self._known_asks.get(key)
            if ask is None or ask.settings is not settings:
                ask = Ask(volume, one.region, settings)
            self._asks_now[key] = ask
            found.append(ask)
        return found

    def _lay_out(
        self, columns: list[list[Ask | None]], differences: list[list[Ask | None]]
    ) -> list[Row]:
        several = len(columns) > 1
        names = [image.name for image in self.images]
        rows = []
        for i in range(len(self.drawn)):
            for k, column in enumerate(columns):
                one = self._asked[k][1][i]
                words = (names[k], str(k + 1)) if several else ("", "")
                rows.append(self._row(one, column[i], words))
            for k, column in enumerate(differences, start=1):
                words = f"{names[k]} − {names[0]}", f"{k + 1} − 1"
                rows.append(self._row(self.drawn[i], column[i], words, difference=True))
        return rows

    def _row(
        self, one: Drawn, ask: Ask | None, image: tuple[str, str], *, difference: bool = False
    ) -> Row:
        answer: Result | NotMeasured | None
        stale = False
        if ask is None:
            answer, complete = NotMeasured(one.problem or "it is no region", "draw it again"), True
        else:
            answer, complete = self.answers.known(ask), self.answers.complete(ask)
        if answer is None:
            answer, stale = self._last.get((one.index, image[1]), _WAITING), True
        else:
            self._last[one.index, image[1]] = answer
        known = self._known_rows.get((one.index, image[1]))
        if (
            known is not None
            and known.answer is answer
            and (known.name, known.group, known.code) == (one.name, one.group, one.code)
            and (known.image, known.complete, known.stale) == (image[0], complete, stale)
        ):
            return known
        return Row(
            one.index, one.name, one.group, one.code,
            answer, *image, complete, difference, stale,
        )  # fmt: skip

    def _regions(self, drawn: Sequence[Drawn]) -> tuple[Region, ...]:
        return tuple(one.region for one in drawn if one.region is not None)


def _difference(one: Ask | None, two: Ask | None) -> Ask | None:
    if one is None or two is None:
        return None
    return Ask(one.volume, one.region, one.settings, two)
