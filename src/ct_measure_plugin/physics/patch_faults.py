"""Patches that do not hold stationary noise alone: what is refused and what is cautioned."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from scipy import stats

from ct_measure_plugin.physics.results import Caution, NotMeasured

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.patch_spectra import PatchSpectra

    Floats = NDArray[np.float64]
    Whole = NDArray[np.intp]

__all__ = ["bad_values", "stationarity", "structure"]

#: Greater values are no CT numbers in any unit, and their powers leave computer arithmetic.
LARGEST = 1e12

#: Share of values piled up at one end from which the noise's tail is cut off.
PILED_SHARE = 1e-3

#: Structure is refused from this share of a patch's variance: it then rules the lowest bins.
STRUCTURE_SHARE = 0.1

#: Median share of slow terms beyond which noise and structure cannot be told apart.
SLOW_SHARE = 0.3

#: Departures from a Gaussian that matter: significant (in standard deviations) and large.
SHAPE_SIGNIFICANT, SKEW_LARGE, KURTOSIS_LARGE = 6.0, 0.3, 0.5

#: Spread of variances between patches beyond chance, relative, that is worth a caution.
UNEVEN = 0.05


def bad_values(patches: NDArray[np.generic]) -> NotMeasured | None:
    """Refuse patches with values that are missing, all equal in one patch, or cut off.

    Notes
    -----
    Values are cut off if more than one in a thousand stand at the lowest or highest value and
    more stand there than at the next value: the tail of a noise ends thin, a clipped one in a
    pile.
    """
    low, high = patches.min(), patches.max()
    if not (np.isfinite(low) and np.isfinite(high)):
        return NotMeasured(
            "a patch holds a value that is not finite", "lay the patches within the image"
        )
    if max(abs(float(low)), abs(float(high))) > LARGEST:
        return NotMeasured(
            f"a patch holds a value of {float(max(low, high, key=abs)):.2g}, far beyond any CT"
            " number",
            "look at the image's scale: CT numbers lie within some thousand HU",
        )
    first = patches.reshape(len(patches), -1)[:, :1]
    flat = patches.reshape(len(patches), -1)
    maybe = np.flatnonzero(flat[:, 1] == first[:, 0])
    still = [int(i) for i in maybe if np.all(flat[i] == first[i])]
    if still:
        return NotMeasured(
            f"patch {still[0]} holds one value only", "lay the patches where there is noise"
        )
    for end, word in ((low, "lowest"), (high, "highest")):
        there = int(np.count_nonzero(patches == end))
        if there <= PILED_SHARE * patches.size:
            continue
        rest = patches[patches != end]
        following = rest.min() if word == "lowest" else rest.max()
        if there > np.count_nonzero(rest == following):
            return NotMeasured(
                f"{100 * there / patches.size:.2g} % of the values stand at the {word} one,"
                f" {float(end):g}: they are clipped or padding",
                "lay the patches elsewhere, or reconstruct with a wider range of CT numbers",
            )
    return None


def structure(found: PatchSpectra, samples: float) -> NotMeasured | None:
    """Refuse patches that hold an object, an edge or a strong trend.

    Parameters
    ----------
    found : PatchSpectra
        The patches.
    samples : float
        Independent samples in one patch.

    Notes
    -----
    Two signs are looked for. Polynomials of degree 3 and 4 hold a tenth more of a patch's variance
    than of the others', significantly so (a tail probability of 1e-6 over all patches): an object
    in a few patches. Skewness or kurtosis of a patch's pixels depart from a Gaussian's by six
    standard deviations and by a size that matters: an edge in any number of patches.
    """
    pixels_power = np.sum(found.slow**2, axis=1)
    n, terms = found.slow.shape
    per_pixel = pixels_power / np.where(found.variance > 0, found.variance, 1.0)
    share = per_pixel / found.pixels
    typical = float(np.median(share))
    if typical > SLOW_SHARE:
        return NotMeasured(
            f"in the middle patch {100 * typical:.0f} % of the variance is slow change: structure,"
            " or noise too coarse for patches of this size",
            "lay the patches in a uniform part, or take larger ones",
        )
    # correlated terms spread more than χ²; half as many degrees of freedom cover that
    dof = max(terms / 2.0, 1.0)
    limit = stats.chi2.isf(1e-6 / n, dof) / stats.chi2.median(dof)
    sudden = (share > limit * typical) & (share > typical + STRUCTURE_SHARE)
    effective = max(min(samples, found.pixels), 20.0)
    skewed = np.abs(found.skewness) > max(
        SKEW_LARGE, SHAPE_SIGNIFICANT * math.sqrt(6.0 / effective)
    )
    peaked = _peaked(found.kurtosis, effective)
    faulty = np.flatnonzero(sudden | skewed | peaked)
    if not len(faulty):
        return None
    return NotMeasured(
        f"{len(faulty)} of {n} patches hold structure, not noise alone (first: patch {faulty[0]})",
        "lay the patches away from edges and inserts",
    )


def _peaked(kurtosis: Floats, samples: float) -> NDArray[np.bool_]:
    """Tell which kurtosis stands out, by the Anscombe-Glynn transformation to a normal one.

    F. J. Anscombe and W. J. Glynn, Biometrika 70 (1983) 227; formula as in scipy.stats.
    """
    n = samples
    mean = 3.0 * (n - 1) / (n + 1)
    variance = 24.0 * n * (n - 2) * (n - 3) / ((n + 1) ** 2 * (n + 3) * (n + 5))
    x = (kurtosis + 3.0 - mean) / math.sqrt(variance)
    root = 6.0 * (n * n - 5 * n + 2) / ((n + 7) * (n + 9))
    root *= math.sqrt(6.0 * (n + 3) * (n + 5) / (n * (n - 2) * (n - 3)))
    a = 6.0 + 8.0 / root * (2.0 / root + math.sqrt(1.0 + 4.0 / root**2))
    inner = (1 - 2 / a) / (1 + x * math.sqrt(2 / (a - 4)))
    z = ((1 - 2 / (9 * a)) - np.cbrt(inner)) / math.sqrt(2 / (9 * a))
    found: NDArray[np.bool_] = (np.abs(z) > SHAPE_SIGNIFICANT) & (np.abs(kurtosis) > KURTOSIS_LARGE)
    return found


def stationarity(variance: Floats, samples: float, slices: Whole | None) -> list[Caution]:
    """Caution noise whose variance changes from patch to patch or from slice to slice.

    Parameters
    ----------
    variance : ndarray, shape (n,)
        Of each patch.
    samples : float
        Independent samples behind each.
    slices : ndarray of int, shape (n,), optional
        The slice of each patch.

    Notes
    -----
    Bartlett's test at 1 % (M. S. Bartlett, Proc. R. Soc. A 160 (1937) 268), and a spread beyond
    chance of over 5 %, so that very many patches do not make a trifle significant.
    """
    found = []
    if _uneven(variance, samples):
        found.append(
            Caution(
                "nonstationary-noise",
                "The noise changes from patch to patch: the largest variance is"
                f" {variance.max() / variance.min():.2g} times the smallest.",
                "The spectrum is an average over them; lay the patches at one distance from the"
                " isocentre.",
            )
        )
    if slices is not None and len(kinds := np.unique(slices)) > 1:
        members = [variance[slices == k] for k in kinds]
        means = np.array([m.mean() for m in members])
        if _uneven(means, samples * min(len(m) for m in members)):
            found.append(
                Caution(
                    "nonstationary-noise",
                    "The noise changes from slice to slice: the largest variance is"
                    f" {means.max() / means.min():.2g} times the smallest.",
                    "Measure shorter slice ranges one by one.",
                )
            )
    return found


def _uneven(variance: Floats, samples: float) -> bool:
    n, nu = len(variance), max(samples - 1.0, 1.0)
    if n < 2 or not variance.min() > 0:
        return False
    bartlett = n * nu * (math.log(variance.mean()) - float(np.mean(np.log(variance))))
    bartlett /= 1.0 + (n + 1.0) / (3.0 * n * nu)
    beyond = float(variance.var(ddof=1)) / float(variance.mean()) ** 2 - 2.0 / nu
    return bool(stats.chi2.sf(bartlett, n - 1) < 0.01 and beyond > UNEVEN**2)
