"""The straight pieces of a path, and the strip around them: what belongs to which piece.

Where a path turns, the strips of two pieces overlap on the inner side and leave a wedge between
them on the outer side. The line that halves the corner shares the overlap out, so that nothing
beside the path is counted twice.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Pieces", "pieces_of"]

#: tan of half a turn of 180°, where the path goes back on itself.
_BACK = 1e12


@dataclass(frozen=True, slots=True, eq=False)
class Pieces:
    """The straight pieces of a path.

    Attributes
    ----------
    start : ndarray, shape (k, 2)
        Where each begins, (y, x) in mm.
    length : ndarray, shape (k,)
        In mm.
    along, left : ndarray, shape (k, 2)
        Unit vectors (y, x) in its direction, and to the left of it as seen on the screen.
    lean : ndarray, shape (k + 1,)
        tan of half the turn at each corner, positive to the left; 0 at both ends of the path.
    """

    start: Floats
    length: Floats
    along: Floats
    left: Floats
    lean: Floats

    def holds(self, piece: NDArray[np.intp], at: Floats, offset: Floats) -> NDArray[np.bool_]:
        """Tell which points beside a piece are its own.

        Parameters
        ----------
        piece : ndarray of int
            Number of the piece.
        at, offset : ndarray
            mm along the piece from its start, and to its left; shapes that broadcast with `piece`.
        """
        little = 1e-9 * self.length[piece]
        ahead = at - offset * self.lean[piece]
        behind = self.length[piece] - at - offset * self.lean[piece + 1]
        inside: NDArray[np.bool_] = (ahead >= -little) & (behind >= -little)
        return inside

    def narrowest(self) -> float:
        """Return the greatest width at which no two corners meet beside a piece, mm.

        >>> round(pieces_of(np.array([[0.0, 0.0], [0.0, 10.0], [4.0, 10.0]])).narrowest(), 9)
        8.0
        """
        widths = []
        for side in (1.0, -1.0):
            used = np.maximum(side * self.lean[:-1], 0) + np.maximum(side * self.lean[1:], 0)
            with np.errstate(divide="ignore"):
                widths.append(2 * float(np.min(self.length / used)))
        return min(widths)

    def strip(self, width: float) -> Floats:
        """Return the outline (n, 2) of the strip of a width: bevelled where it turns outwards."""
        sides = {}
        for side in (1.0, -1.0):
            offset = side * width / 2
            points = []
            for k, (start, length) in enumerate(zip(self.start, self.length, strict=True)):
                eaten = [max(offset * float(lean), 0.0) for lean in self.lean[k : k + 2]]
                edge = start + offset * self.left[k]
                points += [
                    edge + eaten[0] * self.along[k],
                    edge + (length - eaten[1]) * self.along[k],
                ]
            sides[side] = points
        outline = np.asarray([*sides[-1.0], *reversed(sides[1.0])])
        far = np.linalg.norm(outline - np.roll(outline, 1, axis=0), axis=1)
        kept: Floats = outline[far > 1e-9 * float(self.length.sum())]
        return kept


def pieces_of(corners: Floats) -> Pieces:
    """Return the pieces of a path, of corners (k + 1, 2) each different from the next.

    >>> found = pieces_of(np.array([[0.0, 0.0], [0.0, 3.0], [4.0, 3.0]]))
    >>> found.length.tolist(), found.lean.round(6).tolist()  # to the right, by 90°
    ([3.0, 4.0], [0.0, -1.0, 0.0])
    """
    steps = np.diff(np.asarray(corners, dtype=np.float64), axis=0)
    length = np.hypot(steps[:, 0], steps[:, 1])
    along = steps / length[:, None]
    # a quarter turn counter-clockwise on the screen, where y points down
    left = np.stack([-along[:, 1], along[:, 0]], axis=1)
    sine = np.sum(along[1:] * left[:-1], axis=1)
    cosine = np.sum(along[1:] * along[:-1], axis=1)
    lean = np.clip(np.tan(np.arctan2(sine, cosine) / 2), -_BACK, _BACK)
    return Pieces(np.asarray(corners[:-1], float), length, along, left, np.r_[0.0, lean, 0.0])
