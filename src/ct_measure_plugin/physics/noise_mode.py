"""The most frequent local SD: from histograms, with the doubt that blocks of the image leave."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
from scipy import ndimage, signal

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Bins", "Mode", "mode_of"]

#: Bins up to the median SD, and how many medians they reach.
FINE, REACH = 60, 4

#: The histogram is smoothed by this share of its lower standard deviation.
SMOOTH = 0.3

#: A second peak counts from this share of the first, behind a valley of this share of itself.
SECOND, VALLEY = 0.5, 0.8

#: Sets of blocks drawn; they fix a standard deviation to 5 %.
DRAWS = 200
SEED = 9


@dataclass(frozen=True, slots=True)
class Bins:
    """Bins of equal width from 0.

    Attributes
    ----------
    width : float
        Of a bin.
    count : int
        Number of bins; larger values are left out.
    """

    width: float
    count: int

    @classmethod
    def around(cls, sd: float) -> Bins:
        """Return bins fine enough for values about `sd`."""
        return cls(sd / FINE, FINE * REACH)

    @property
    def middle(self) -> Floats:
        """Middles of the bins, shape (count,)."""
        found: Floats = (np.arange(self.count, dtype=np.float64) + 0.5) * float(self.width)
        return found


@dataclass(frozen=True, slots=True, eq=False)
class Mode:
    """The most frequent value of a histogram.

    Attributes
    ----------
    value, doubt : float
        Of the mode, and its standard uncertainty.
    lower_sd : float
        Standard deviation of the values below it, about it.
    smooth : ndarray, shape (bins,)
        The smoothed histogram.
    second : float or None
        Another peak of at least half its height.
    """

    value: float
    doubt: float
    lower_sd: float
    smooth: Floats
    second: float | None


def mode_of(blocks: Floats, bins: Bins, draws: int = DRAWS) -> Mode:
    """Return the mode of the sum of histograms.

    Parameters
    ----------
    blocks : ndarray, shape (blocks, bins)
        Histograms of parts of the image that share no noise to speak of.
    bins : Bins
        Their bins.
    draws : int
        Sets of blocks drawn for the uncertainty.

    Notes
    -----
    The histogram is smoothed by a Gaussian of 0.3 of its lower standard deviation, and a parabola
    through the logarithms of its highest bin and its neighbours gives the mode. Its uncertainty is
    the standard deviation over sets of blocks drawn with replacement (B. Efron, Ann. Statist. 7
    (1979) 1).

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> bins = Bins.around(12.0)
    >>> reach = (0, bins.count * bins.width)
    >>> parts = [np.histogram(rng.normal(12, 1, 4000), bins.count, reach)[0] for _ in range(20)]
    >>> found = mode_of(np.array(parts, float), bins)
    >>> abs(found.value - 12) < 4 * found.doubt < 0.2, round(found.lower_sd, 1)
    (True, 1.0)
    """
    total = blocks.sum(axis=0)
    share = np.cumsum(total) / total.sum()
    middle, low = (float(np.interp(q, share, bins.middle)) for q in (0.5, 0.1587))
    sigma = max(SMOOTH * (middle - low) / bins.width, 1.0)
    smooth = ndimage.gaussian_filter1d(total, sigma, mode="constant")
    value = float(_peaks(smooth[None], bins)[0])
    below = bins.middle < value
    lower = float(np.sqrt(np.sum((total * (bins.middle - value) ** 2)[below]) / total[below].sum()))
    drawn = _picks(len(blocks), draws) @ blocks
    drawn = ndimage.gaussian_filter1d(drawn, sigma, axis=1, mode="constant")
    doubt = float(np.std(_peaks(drawn, bins))) if len(blocks) > 1 else 0.0
    return Mode(value, doubt, lower, smooth, _second(smooth, bins))


@lru_cache(maxsize=256)
def _picks(blocks: int, draws: int) -> Floats:
    """Return how often each block is drawn, shape (draws, blocks): always the same."""
    rng = np.random.default_rng(SEED)
    return rng.multinomial(blocks, np.full(blocks, 1.0 / blocks), size=draws).astype(float)


def _peaks(smooth: Floats, bins: Bins) -> Floats:
    """Return where each row has its peak, by a parabola through three logarithms."""
    rows, last = np.arange(len(smooth)), smooth.shape[1] - 1
    k = smooth.argmax(axis=1)
    near = smooth[rows[:, None], np.clip(k[:, None] + np.arange(-1, 2), 0, last)]
    within = (k > 0) & (k < last) & (near > 0).all(axis=1)
    a, b, c = np.log(np.where(within[:, None], near, 1.0)).T
    bend = a - 2 * b + c
    shift = np.where(bend < 0, 0.5 * (a - c) / np.where(bend < 0, bend, 1.0), 0.0)
    return np.asarray((k + 0.5 + shift) * bins.width)


def _second(smooth: Floats, bins: Bins) -> float | None:
    """Return the highest other peak that stands apart, or None."""
    first = int(smooth.argmax())
    peaks, _ = signal.find_peaks(smooth, height=SECOND * smooth[first])
    apart = [
        int(k)
        for k in peaks
        if k != first and smooth[min(k, first) : max(k, first)].min() < VALLEY * float(smooth[k])
    ]
    if not apart:
        return None
    return float(bins.middle[max(apart, key=lambda k: float(smooth[k]))])


def chi_factor(mode: float, lower_sd: float) -> float:
    """Return what a mode of local SDs is below the SD itself, √((ν − 1)/ν).

    The SD of ν independent samples is distributed as χ; about its mode its values below spread by
    close to σ/√(2ν), which gives ν.

    >>> round(chi_factor(11.925, 12 / 160**0.5), 4)  # ν = 80
    0.9937
    """
    freedom = max((mode / lower_sd) ** 2 / 2.0, 1.5) if lower_sd > 0 else math.inf
    return math.sqrt(1.0 - 1.0 / freedom) if math.isfinite(freedom) else 1.0
