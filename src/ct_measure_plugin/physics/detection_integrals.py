"""The integrals over frequency from which the indices of detectability follow."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.spectrum_low import continuation

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.detection_task import Eye, Task
    from ct_measure_plugin.physics.results import Curve

    Floats = NDArray[np.float64]

__all__ = ["Integrals", "share_beyond"]

#: Frequencies of the integrals.
POINTS = 4000

#: The prewhitening observer divides by the NPS only where it exceeds this share of the mean NPS
#: that the signal meets.
LEAST_POWER = 1e-3

#: Correlation of neighbouring rings that is assumed: what a Hann window makes of them.
RING_CORRELATION = 1.0 / 3.0


def share_beyond(task: Task, transfer: Curve, end: float) -> float:
    """Return the share of the signal's power beyond a frequency, with the last MTF value kept on.

    >>> from ct_measure_plugin.physics.detection_task import Task
    >>> from ct_measure_plugin.physics.results import Curve
    >>> perfect = Curve(np.array([0.0, 1.0]), np.ones(2))
    >>> disc = Task(contrast_hu=10, size_mm=2.5)
    >>> round(share_beyond(disc, perfect, 1.0), 2)  # 1/(π² R F), less what lies beyond 4 F
    0.03
    """
    f = np.linspace(0.0, 4 * end, 4 * POINTS)
    power = f * (task.spectrum(f) * np.interp(f, transfer.x, transfer.y)) ** 2
    total = float(power.sum())
    return float(power[f > end].sum()) / total if total > 0 else 1.0


class Integrals:
    """The integrands of all observers on one grid of frequencies.

    Parameters
    ----------
    x, s, share : ndarray, shape (g,)
        Frequency, NPS and its relative uncertainty, where it is usable; where the NPS is 0 its
        absolute one.
    transfer : Curve
        MTF.
    task : Task
        The object.
    eye : Eye or None
        Without one the index behind it is that without it.
    end : float
        Last frequency.

    Attributes
    ----------
    f : ndarray, shape (points,)
        Frequencies.
    signal : ndarray, shape (points,)
        |W| T.
    """

    def __init__(
        self,
        x: Floats,
        s: Floats,
        share: Floats,
        transfer: Curve,
        task: Task,
        eye: Eye | None,
        end: float,
    ) -> None:
        self.f: Floats = (np.arange(POINTS, dtype=np.float64) + 0.5) * float(end / POINTS)
        self.behind_an_eye = eye is not None
        self._x, self._s, self._share = x, s, share
        self._low = self.f < x[0]
        mtf, doubt = _transfer_at(transfer, self.f)
        wave = np.abs(task.spectrum(self.f))
        self.signal: Floats = wave * mtf
        self._raised: Floats = wave * (mtf + doubt)
        self._ring = 2 * np.pi * self.f * (end / POINTS)
        self._eye = np.ones(POINTS) if eye is None else eye.response(self.f)
        self._noise = self._mean_noise(s)

    def _mean_noise(self, s: Floats) -> Floats:
        """Return S on the grid, continued below its first ring by the mean of the forms."""
        found: Floats = np.interp(self.f, self._x, s)
        if self._low.any():
            known = np.maximum(self._share, 1e-3)
            found[self._low] = continuation(self._x, s, known).mean(self.f[self._low])
        return np.maximum(found, 0.0)

    def indices(self, noise: Floats | None = None, signal: Floats | None = None) -> Floats:
        """Return d′ of the observers: NPW, NPWE, prewhitening."""
        noise = self._noise if noise is None else noise
        power = self._ring * (self.signal if signal is None else signal) ** 2
        eye = self._eye**2
        plain = float(power.sum()) / math.sqrt(max(float(np.sum(power * noise)), 1e-300))
        seen = float(np.sum(power * eye))
        seen /= math.sqrt(max(float(np.sum(power * eye**2 * noise)), 1e-300))
        known = self._known(power, noise)
        ideal = math.sqrt(float(np.sum(power[known] / noise[known])))
        return np.array([plain, seen, ideal])

    @staticmethod
    def _known(power: Floats, noise: Floats) -> NDArray[np.bool_]:
        """Tell where the NPS is not too near 0 to divide by."""
        met = float(np.sum(power * noise)) / float(power.sum())
        found: NDArray[np.bool_] = noise > LEAST_POWER * met
        return found

    def known_share(self) -> float:
        """Return the share of the signal's power that the prewhitening observer uses."""
        power = self._ring * self.signal**2
        return float(power[self._known(power, self._noise)].sum()) / float(power.sum())

    def ratio(self) -> Floats:
        """Return 2π f |W|² T²/S, 0 where the prewhitening observer knows nothing."""
        known = self._known(self._ring * self.signal**2, self._noise)
        safe = np.where(known, self._noise, 1.0)
        found: Floats = np.where(known, 2 * np.pi * self.f * self.signal**2 / safe, 0.0)
        return found

    def doubts(self) -> Floats:
        """Return the standard uncertainties of the indices.

        Those of the rings one by one, neighbours correlated; the scatter of the forms by which the
        NPS is continued below its first ring; and that of the MTF, as one that all frequencies
        share.
        """
        found = self.indices()
        slopes = np.zeros((len(self._s), 3))
        for k in np.flatnonzero(self._share > 0):
            moved = self._s.copy()
            moved[k] += self._share[k] * (moved[k] if moved[k] > 0 else 1.0)
            slopes[k] = self.indices(self._mean_noise(moved)) - found
        variance = np.sum(slopes**2, axis=0)
        variance += 2 * RING_CORRELATION * np.sum(slopes[1:] * slopes[:-1], axis=0)
        raised = self.indices(signal=self._raised) - found
        doubts: Floats = np.sqrt(np.maximum(variance, 0.0) + self._of_forms(found) + raised**2)
        return doubts

    def _of_forms(self, found: Floats) -> Floats:
        """Return the variance that the choice of a form below the first ring makes."""
        variance = np.zeros(3)
        if not self._low.any() or not np.any(self._share > 0):
            return variance
        forms = continuation(self._x, self._s, np.maximum(self._share, 1e-3))
        each = np.maximum(forms.each(self.f[self._low]), 0.0)
        for weight, below in zip(forms.weights, each, strict=True):
            noise = self._noise.copy()
            noise[self._low] = below
            variance += weight * (self.indices(noise) - found) ** 2
        return variance


def _transfer_at(transfer: Curve, f: Floats) -> tuple[Floats, Floats]:
    """Return the MTF and its uncertainty on a grid; 0 from where it falls below its own."""
    x, y = transfer.x, transfer.y
    doubt = np.zeros(len(x)) if transfer.y_uncertainty is None else transfer.y_uncertainty
    start = 1.0 if x[0] > 0 else float(y[0])
    found = np.interp(f, np.append(0.0, x), np.append(start, y), right=0.0)
    off = np.interp(f, np.append(0.0, x), np.append(0.0, doubt), right=0.0)
    lost = np.flatnonzero((y <= doubt) & (doubt > 0))
    if len(lost):
        found[f >= x[lost[0]]] = 0.0
        off[f >= x[lost[0]]] = 0.0
    return found, off
