"""Undo of what a dock did to regions: deleted, moved, copied, arrayed, painted."""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import TYPE_CHECKING, Any
from weakref import ref

import numpy as np
from psygnal import Signal

from ct_measure_plugin.viewer.outlines import Outline, outlines_of, put
from ct_measure_plugin.viewer.region_features import ids_on

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Mapping

    from numpy.typing import NDArray

__all__ = ["OutlineStep", "Step", "Undo", "VoxelStep", "change_outlines", "change_voxels"]

#: Steps kept; the oldest is forgotten first.
_MOST = 50


class Step(ABC):
    """One thing that was done to a layer.

    Attributes
    ----------
    words : str
        What was done, for a button: "delete 3 regions".
    """

    def __init__(self, layer: Any, words: str) -> None:
        self._layer = ref(layer)
        self.words = words

    @property
    def layer(self) -> Any:
        """The layer, None if it is gone."""
        return self._layer()

    @abstractmethod
    def back(self) -> None:
        """Undo it."""

    @abstractmethod
    def again(self) -> None:
        """Do it again."""


class OutlineStep(Step):
    """Shapes or points that were added, moved or taken away.

    Parameters
    ----------
    layer : napari layer
        Shapes or Points.
    words : str
        What was done.
    before, after : mapping of int to Outline or None
        By the number that stays with a region; None where it was not there.
    """

    def __init__(
        self,
        layer: Any,
        words: str,
        before: Mapping[int, Outline | None],
        after: Mapping[int, Outline | None],
    ) -> None:
        super().__init__(layer, words)
        self._before, self._after = dict(before), dict(after)

    def back(self) -> None:
        """Put everything where it was before."""
        put(self.layer, self._before)

    def again(self) -> None:
        """Put everything where it was after."""
        put(self.layer, self._after)


class VoxelStep(Step):
    """Voxels of a Labels layer that were given other labels."""

    def __init__(
        self, layer: Any, words: str, indices: tuple[NDArray[Any], ...], new: NDArray[Any] | int
    ) -> None:
        super().__init__(layer, words)
        self._indices = indices
        self._old = np.array(layer.data[indices])
        self._new = np.broadcast_to(np.asarray(new, self._old.dtype), self._old.shape)

    def back(self) -> None:
        """Give the voxels the labels that they had."""
        self.layer.data_setitem(self._indices, self._old)

    def again(self) -> None:
        """Give the voxels their new labels."""
        self.layer.data_setitem(self._indices, self._new)


class Undo:
    """What was done, newest last, and what was undone.

    Signals
    -------
    changed()
        There is something else to undo or to redo.
    """

    changed = Signal()

    def __init__(self) -> None:
        self._done: list[Step] = []
        self._undone: list[Step] = []

    def done(self, step: Step) -> None:
        """Take note of what was done."""
        self._done = [*self._done, step][-_MOST:]
        self._undone = []
        self.changed.emit()

    @property
    def next_undo(self) -> str:
        """What would be undone, in words; "" if there is nothing."""
        self._forget_gone()
        return self._done[-1].words if self._done else ""

    @property
    def next_redo(self) -> str:
        """What would be done again, in words; "" if there is nothing."""
        self._forget_gone()
        return self._undone[-1].words if self._undone else ""

    def undo(self) -> bool:
        """Undo the newest; return whether there was anything."""
        self._forget_gone()
        if not self._done:
            return False
        step = self._done.pop()
        step.back()
        self._undone.append(step)
        self.changed.emit()
        return True

    def redo(self) -> bool:
        """Do again what was undone last; return whether there was anything."""
        self._forget_gone()
        if not self._undone:
            return False
        step = self._undone.pop()
        step.again()
        self._done.append(step)
        self.changed.emit()
        return True

    def _forget_gone(self) -> None:
        self._done = [step for step in self._done if step.layer is not None]
        self._undone = [step for step in self._undone if step.layer is not None]


def change_outlines(
    layer: Any, words: str, indices: Iterable[int], act: Callable[[], Iterable[int]]
) -> OutlineStep:
    """Do something to shapes or points, and return the step that undoes it.

    Parameters
    ----------
    layer : napari layer
        Shapes or Points.
    words : str
        What is done.
    indices : iterable of int
        The regions that it changes or takes away.
    act : callable
        Does it; returns the numbers of the regions that it added.
    """
    before: dict[int, Outline | None] = {**outlines_of(layer, indices)}
    new = list(act())
    at = {number: i for i, number in enumerate(ids_on(layer))}
    touched = [*before, *new]
    there = outlines_of(layer, [at[number] for number in touched if number in at])
    after: dict[int, Outline | None] = {number: there.get(number) for number in touched}
    for number in new:
        before.setdefault(number, None)
    return OutlineStep(layer, words, before, after)


def change_voxels(
    layer: Any, words: str, indices: tuple[NDArray[Any], ...], new: NDArray[Any] | int
) -> VoxelStep:
    """Give voxels of a Labels layer another label, and return the step that undoes it."""
    step = VoxelStep(layer, words, indices, new)
    step.again()
    return step
