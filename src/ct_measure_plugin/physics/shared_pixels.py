"""Patches of unknown place that overlap, recognised by the very pixels they share."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Whole = NDArray[np.intp]

__all__ = ["places_from_pixels"]

#: Neighbouring pixels of a row that make one fingerprint; eight CT numbers of noise do not recur.
RUN = 8

#: One fingerprint in this many is kept, chosen by its own value, so that the same pixels are kept
#: wherever they lie in a patch.
KEPT = 64

#: Values looked at first; the rest only if patches among these overlap.
PROBE = 1 << 19

#: Fingerprints two patches must share at one shift to count as overlapping.
AGREEING = 2


def places_from_pixels(patches: NDArray[np.generic]) -> Whole | None:
    """Return a place for each patch that tells their overlaps, or None if none overlap.

    Parameters
    ----------
    patches : ndarray, shape (n, ny, nx) or (n, nz, ny, nx)
        Values of noise; equal runs of eight pixels are taken for the same pixels.

    Returns
    -------
    ndarray of int, shape (n, 3), or None
        Slice, row and column of each first pixel. Groups of patches that share nothing are set
        far apart.

    Examples
    --------
    >>> image = np.random.default_rng(1).normal(size=(64, 96))
    >>> places_from_pixels(np.stack([image[:, :64], image[:, 32:]])).tolist()
    [[0, 0, 0], [0, 0, 32]]
    """
    n, shape = len(patches), patches.shape[1:]
    probe = max(2, PROBE // int(np.prod(shape)))
    shifts = _pair_shifts(*_fingerprints(patches[:probe]))
    if not shifts:
        return None
    if n > probe:
        shifts = _pair_shifts(*_fingerprints(patches))
    apart = 2 * n * max(shape)
    found = np.zeros((n, 3), dtype=np.intp)
    neighbours: dict[int, list[tuple[int, tuple[int, ...]]]] = {}
    for (i, j), shift in shifts.items():
        neighbours.setdefault(i, []).append((j, shift))
        neighbours.setdefault(j, []).append((i, tuple(-s for s in shift)))
    seen: set[int] = set()
    for group, first in enumerate(range(n)):
        if first in seen:
            continue
        found[first] = (group * apart, 0, 0)
        seen.add(first)
        waiting = [first]
        while waiting:
            i = waiting.pop()
            for j, shift in neighbours.get(i, []):
                if j not in seen:
                    seen.add(j)
                    found[j] = found[i] + shift
                    waiting.append(j)
    return found


def _fingerprints(patches: NDArray[np.generic]) -> tuple[NDArray[np.uint64], Whole, Whole]:
    """Return the kept fingerprints, their patches, and their places (z, y, x) within them."""
    stack = np.ascontiguousarray(patches, dtype=np.float64)
    if stack.ndim == 3:
        stack = stack[:, None]
    bits = stack.view(np.uint64)
    factors = np.random.default_rng(64).integers(1 << 62, 1 << 63, RUN, dtype=np.uint64) | 1
    width = bits.shape[-1] - RUN + 1
    mixed = np.zeros((*bits.shape[:-1], width), dtype=np.uint64)
    for k, factor in enumerate(factors):
        mixed *= np.uint64(0x9E3779B97F4A7C15)
        mixed += (bits[..., k : k + width] >> np.uint64(20)) * factor
        mixed ^= mixed >> np.uint64(29)
    chosen = np.nonzero(mixed % np.uint64(KEPT) == 0)
    place = np.stack(chosen[1:], axis=1).astype(np.intp)
    return mixed[chosen], chosen[0].astype(np.intp), place


def _pair_shifts(
    prints: NDArray[np.uint64], owner: Whole, place: Whole
) -> dict[tuple[int, int], tuple[int, ...]]:
    """Return the shift of the second patch against the first, for pairs that share pixels."""
    order = np.argsort(prints, kind="stable")
    prints, owner, place = prints[order], owner[order], place[order]
    votes: dict[tuple[int, int, tuple[int, ...]], int] = {}
    # a pixel may lie in many patches: each is paired with the next few that hold it too
    for step in range(1, 5):
        same = np.flatnonzero(prints[step:] == prints[:-step])
        for k in same.tolist():
            i, j = int(owner[k]), int(owner[k + step])
            if i == j:
                continue
            shift = tuple(int(s) for s in place[k] - place[k + step])
            if i > j:
                i, j, shift = j, i, tuple(-s for s in shift)
            votes[i, j, shift] = votes.get((i, j, shift), 0) + 1
    best: dict[tuple[int, int], tuple[int, tuple[int, ...]]] = {}
    for (i, j, shift), count in votes.items():
        if count >= max(AGREEING, best.get((i, j), (0,))[0]):
            best[i, j] = (count, shift)
    return {pair: shift for pair, (_, shift) in best.items()}
