"""X-ray spectra: one line, or a tube's continuum by formula."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["Spectrum", "monoenergetic", "tube_spectrum"]


@dataclass(frozen=True, slots=True)
class Spectrum:
    """Shares of the detected signal by photon energy.

    Parameters
    ----------
    energies_kev : tuple of float
        Photon energies.
    shares : tuple of float
        Share of each in the detector's signal in air; they sum to 1.
    name : str
        For titles.
    kvp : float or None
        Tube voltage, if there is a tube.

    Examples
    --------
    >>> beam = tube_spectrum(120.0)
    >>> len(beam.energies_kev), round(beam.mean_kev, 1)
    (56, 64.9)
    """

    energies_kev: tuple[float, ...]
    shares: tuple[float, ...]
    name: str = ""
    kvp: float | None = None

    def __post_init__(self) -> None:
        if not self.energies_kev or len(self.energies_kev) != len(self.shares):
            raise ArgumentError("shares", "must hold one share an energy", self.shares)
        if any(share < 0 for share in self.shares) or abs(math.fsum(self.shares) - 1) > 1e-9:
            raise ArgumentError("shares", "must sum to 1 and not be negative", self.shares)

    @property
    def mean_kev(self) -> float:
        """Signal-weighted mean energy."""
        return math.fsum(e * s for e, s in zip(self.energies_kev, self.shares, strict=True))

    @property
    def is_mono(self) -> bool:
        """True if there is one energy."""
        return len(self.energies_kev) == 1


def monoenergetic(energy_kev: float) -> Spectrum:
    """Return a beam of one energy.

    >>> monoenergetic(70.0).is_mono
    True
    """
    return Spectrum((float(energy_kev),), (1.0,), f"monoenergetic {energy_kev:g} keV")


def tube_spectrum(
    kvp: float,
    *,
    aluminium_mm: float = 6.0,
    copper_mm: float = 0.0,
    energy_weighted: bool = True,
    step_kev: float = 2.0,
) -> Spectrum:
    """Return a tube's continuum after filtration, by Kramers' law.

    Parameters
    ----------
    kvp : float
        Tube voltage, 30 to 200 kV.
    aluminium_mm, copper_mm : float
        Filters in the beam, not negative.
    energy_weighted : bool
        True for a detector whose signal is proportional to the absorbed energy, False for one
        that counts. It is taken to absorb every photon.
    step_kev : float
        Width of the energy bins.

    Returns
    -------
    Spectrum
        From 8 keV up to the tube voltage.

    Notes
    -----
    Kramers' law gives an energy spectrum proportional to (E₀ − E), hence (E₀ − E)/E photons in
    an energy interval (H. A. Kramers, Phil. Mag. 46, 1923, 836-871; reference from memory).
    Filtration is exp(−Σ μ(E) d). Characteristic lines, self-filtration in the anode, and the
    detector's own response are left out: the beam is a plausible one, not that of a given tube.
    """
    if not 30 <= kvp <= 200:
        raise ArgumentError("kvp", "must lie within 30 to 200 kV", kvp)
    if aluminium_mm < 0 or copper_mm < 0:
        raise ArgumentError(
            "aluminium_mm", "must not be negative, nor copper_mm", (aluminium_mm, copper_mm)
        )
    if not 0 < step_kev <= 10:
        raise ArgumentError("step_kev", "must lie in 0 < step <= 10", step_kev)
    energies = np.arange(8.0 + 0.5 * step_kev, kvp, step_kev)
    photons = (kvp - energies) / energies
    filters = (("aluminium", aluminium_mm), ("copper", copper_mm))
    for name, thickness in filters:
        photons = photons * np.exp(-MATERIALS[name].mu(energies) * thickness / 10.0)
    signal = photons * energies if energy_weighted else photons
    shares = signal / np.sum(signal)
    shares = shares / math.fsum(shares.tolist())
    name = f"{kvp:g} kV continuum, {aluminium_mm:g} mm Al"
    if copper_mm:
        name += f" + {copper_mm:g} mm Cu"
    return Spectrum(tuple(energies.tolist()), tuple(shares.tolist()), name, float(kvp))
