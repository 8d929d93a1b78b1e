"""How far window and ring width smear a radial spectrum, and the curve without it.

A window of finite length replaces the spectrum by its local average over about a bin. To second
order that adds ½ σ² ∇²S, with σ² the second moment of the window's power response along an axis:
for a spectrum that starts like a ramp this is a sixth of (bin width / frequency)², 4 % in the
second bin. Taking the mean over a ring adds a quarter of the same for its width. Both follow from
the measured curve itself, through a smooth local model of it, and are divided out.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Flags = NDArray[np.bool_]

__all__ = ["smear", "window_moment"]

#: Rings to either side from which the local shape is taken.
REACH = 3

#: Largest relative smear that is believed: beyond it second order does not describe it.
LARGEST = 0.3


def window_moment(window: Floats, spacing_mm: float) -> float:
    """Return the second moment of a window's power response, in mm⁻².

    (1/4π²) ∫ w'² / ∫ w². A window that jumps at its ends (none, Hamming) has no finite moment; its
    leakage is not local, and 0 is returned.

    >>> w = np.sin(np.pi * (np.arange(64) + 0.5) / 64) ** 2
    >>> round(window_moment(w, 0.5) * (64 * 0.5) ** 2, 3)  # Hann: 1/3
    0.333
    """
    ends = max(abs(float(window[0])), abs(float(window[-1])))
    if ends > 2.0 * np.pi / len(window) * float(window.max()):
        return 0.0
    padded = np.concatenate([[0.0], window, [0.0]])
    slope = np.diff(padded) / spacing_mm
    return float(np.sum(slope**2) / np.sum(window**2)) / (4.0 * np.pi**2)


def smear(x: Floats, y: Floats, usable: Flags, moment: float, width: float) -> Floats:
    """Return the relative smear of each sample of a radial curve; 0 where it is not usable.

    Parameters
    ----------
    x, y : ndarray, shape (g,)
        Frequency and measured NPS.
    usable : ndarray of bool, shape (g,)
        Where detrending has left the noise alone.
    moment : float
        Second moment of the window's power response, the mean of both axes.
    width : float
        Of a ring.

    Notes
    -----
    Around each ring ln S is fitted by a + b ln f + c f², a family that holds white noise, ramps,
    Gaussians and their products, over seven rings. With L the fit, S''/S = L'' + L'².

    Examples
    --------
    >>> f = np.arange(1, 30) / 32
    >>> true = f * np.exp(-4 * f**2)
    >>> laplacian = 64 * f**2 - 24 + (1 - 8 * f**2) / f**2  # ∇²S / S
    >>> found = smear(f, true, f > 0, 1 / 3 / 32**2, 0.0)
    >>> bool(np.allclose(found[1:], laplacian[1:] / 6 / 32**2, atol=1e-3))
    True
    """
    found = np.zeros(len(x))
    index = np.flatnonzero(usable & (y > 0))
    if len(index) < 2 * REACH:
        return found
    for place, k in enumerate(index):
        start = min(max(place - REACH, 0), max(len(index) - 2 * REACH - 1, 0))
        near = index[start : start + 2 * REACH + 1]
        f = x[near] / x[k]
        design = np.stack([np.ones(len(f)), np.log(f), f**2], axis=1)
        (_, b, c), *_ = np.linalg.lstsq(design, np.log(y[near]), rcond=None)
        slope = (b + 2 * c) / x[k]
        second = (2 * c - b) / x[k] ** 2 + slope**2
        found[k] = moment / 2 * (second + slope / x[k]) + width**2 / 24 * second
    return np.clip(found, -LARGEST, LARGEST)
