"""What a reader of a noise power spectrum must know."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics import patch_faults as faults
from ct_measure_plugin.physics.results import Caution

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.patch_differences import Taken
    from ct_measure_plugin.physics.patch_independence import Independence
    from ct_measure_plugin.physics.patch_spectra import PatchSpectra
    from ct_measure_plugin.physics.results import Curve

    Flags = NDArray[np.bool_]

__all__ = ["spectrum_cautions"]

#: Relative uncertainty of the middle ring from which patches count as few.
FEW = 0.1

#: Share of the variance, in percent, from which what detrending took is told.
TREND = 5.0

#: Smear of the window from which the patches count as small, where there is any power: above this
#: share of the peak. Its square, 2 %, is what dividing it out leaves uncertain.
SMEARED, POWER = 0.15, 0.01


def spectrum_cautions(
    taken: Taken,
    found: PatchSpectra,
    independence: Independence,
    samples: float,
    *,
    radial: Curve,
    smear: Curve,
    trend: float,
    at_end: bool,
) -> tuple[Caution, ...]:
    """Return the cautions of one measurement.

    Parameters
    ----------
    taken, found, independence : Taken, PatchSpectra, Independence
        The patches, their spectra, and how many separate ones they are worth.
    samples : float
        Independent samples in a patch's variance.
    radial, smear : Curve
        The spectrum over rings, and what was divided out of it.
    trend : float
        Share of the variance that detrending took, in percent.
    at_end : bool
        Whether the spectrum peaks at the end of its range.
    """
    slices = None if taken.corners is None else taken.corners[:, 0]
    notes = [*taken.cautions, *faults.stationarity(found.variance, samples, slices)]
    doubt = radial.y if radial.y_uncertainty is None else radial.y_uncertainty
    relative = float(np.median(doubt / radial.y))
    if relative > FEW:
        notes.append(
            Caution(
                "few-patches",
                f"The radial curve is uncertain by {100 * relative:.0f} % in its middle bin.",
                "Lay more patches, in more slices.",
            )
        )
    if independence.shared():
        notes.append(
            Caution(
                "patches-share-noise",
                f"The {independence.patches} patches overlap or lie in correlated slices; they"
                f" are worth {independence.independent:.3g} separate ones, and the"
                " uncertainties say so.",
            )
        )
    if trend > TREND:
        notes.append(
            Caution(
                "trend-removed",
                f"Detrending took {trend:.1f} % of the variance: a slow trend, or noise"
                " at the lowest frequencies.",
                "A repeat scan tells the two apart.",
            )
        )
    if at_end:
        notes.append(
            Caution(
                "peak-at-end",
                "The spectrum is largest at the end of its usable range; its peak may lie beyond.",
            )
        )
    largest = float(np.abs(smear.y[radial.y > POWER * radial.y.max()]).max(initial=0.0))
    if largest > SMEARED:
        notes.append(
            Caution(
                "patches-small",
                f"The window of patches so small changes the spectrum by up to"
                f" {100 * largest:.0f} %; that is divided out, to about {100 * largest**2:.1g} %.",
                "Lay larger patches.",
            )
        )
    return tuple(notes)
