"""What the detector makes of the signal: quanta, noise, faults, calibration, logarithm."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from scipy.ndimage import gaussian_filter1d

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.virtual_scanner.geometry import Geometry

    FloatArray = NDArray[np.float64]

__all__ = ["Detector", "Reading", "read_out", "with_scatter"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Detector:
    """Exposure, noise and faults.

    Parameters
    ----------
    quanta_per_mm2 : float or None
        Noise-equivalent quanta per mm² at the isocentre, per view, in air, at `dose` 1. None for
        a scan without quantum noise (faults still act).
    dose : float
        Relative exposure.
    electronic_quanta : float
        Standard deviation of the electronic noise of a reading, in quanta.
    air_views : int or None
        Number of air readings averaged in the air calibration; None for a perfect one.
    gain_errors : tuple of (int, float)
        Channels whose gain has drifted since the air calibration, and by what fraction: rings.
    dead_channels : tuple of int
        Channels that give nothing.
    mend_dead : bool
        Whether the scanner knows them and interpolates between their neighbours.
    scatter_ratio : float
        Strength of the scatter; 0 for none.
    scatter_sigma_mm : float
        Its width along the detector, at the isocentre.
    floor_quanta : float
        Starvation: a reading below this is taken for this, so that it has a logarithm.

    Notes
    -----
    Scatter is added to the quanta as r · G * (p e^{−p}), with G a Gaussian of the given width
    and p the noise-free line integral: forward scatter grows with the interactions along the
    ray and with the share that gets out (the form of B. Ohnesorge, T. Flohr, K.
    Klingenbeck-Regn, Eur. Radiol. 9, 1999, 563, from memory). Nothing corrects it.
    """

    quanta_per_mm2: float | None = None
    dose: float = 1.0
    electronic_quanta: float = 0.0
    air_views: int | None = None
    gain_errors: tuple[tuple[int, float], ...] = ()
    dead_channels: tuple[int, ...] = ()
    mend_dead: bool = False
    scatter_ratio: float = 0.0
    scatter_sigma_mm: float = 40.0
    floor_quanta: float = 1.0

    def __post_init__(self) -> None:
        if self.quanta_per_mm2 is not None and not self.quanta_per_mm2 > 0:
            raise ArgumentError(
                "quanta_per_mm2", "must be greater than 0 or None", self.quanta_per_mm2
            )
        if not self.dose > 0:
            raise ArgumentError("dose", "must be greater than 0", self.dose)
        if self.electronic_quanta < 0 or self.scatter_ratio < 0:
            raise ArgumentError(
                "electronic_quanta",
                "must not be negative, nor scatter_ratio",
                (self.electronic_quanta, self.scatter_ratio),
            )
        if self.air_views is not None and self.air_views < 1:
            raise ArgumentError("air_views", "must be at least 1 or None", self.air_views)
        if any(not error > -1 for _, error in self.gain_errors):
            raise ArgumentError("gain_errors", "must each be greater than -1", self.gain_errors)

    def quanta_in_air(self, width_mm: float, thickness_mm: float) -> float | None:
        """Return the mean reading of a channel in air, or None without quantum noise.

        >>> Detector(quanta_per_mm2=1e5, dose=0.5).quanta_in_air(0.5, 2.0)
        50000.0
        """
        if self.quanta_per_mm2 is None:
            return None
        return self.quanta_per_mm2 * self.dose * width_mm * thickness_mm

    def variance(self, line_integral: FloatArray, quanta: float) -> FloatArray:
        """Return the variance of the measured line integral, to first order.

        var p = 1/N + σ_e²/N² with N = N₀ e^{−p}; the air calibration adds 1/(N₀ n).
        """
        counts = quanta * np.exp(-line_integral)
        air = 0.0 if self.air_views is None else 1.0 / (quanta * self.air_views)
        spread: FloatArray = 1.0 / counts + (self.electronic_quanta / counts) ** 2 + air
        return spread


class Reading(NamedTuple):
    """Measured line integrals, and how many readings were starved."""

    line_integral: FloatArray
    starved: int


def with_scatter(line_integral: FloatArray, detector: Detector, geometry: Geometry) -> FloatArray:
    """Return −ln of the noise-free signal, scatter included, relative to air."""
    if detector.scatter_ratio == 0:
        return line_integral
    primary = np.exp(-line_integral)
    sigma = detector.scatter_sigma_mm / geometry.pitch_mm
    spread = gaussian_filter1d(line_integral * primary, sigma, axis=1, mode="constant")
    return np.asarray(-np.log(primary + detector.scatter_ratio * spread))


def _channel_index(name: str, channels: tuple[int, ...], count: int) -> NDArray[np.intp]:
    if any(not 0 <= channel < count for channel in channels):
        raise ArgumentError(name, f"must name channels 0 to {count - 1}", channels)
    return np.asarray(channels, dtype=np.intp)


def _mend(values: FloatArray, dead: NDArray[np.intp]) -> None:
    """Interpolate dead channels linearly between their living neighbours."""
    everyone = np.arange(values.shape[1])
    alive = np.setdiff1d(everyone, dead)
    for row in values:
        row[dead] = np.interp(dead, alive, row[alive])


def read_out(
    line_integral: FloatArray,
    detector: Detector,
    geometry: Geometry,
    *,
    thickness_mm: float,
    rng: np.random.Generator,
) -> Reading:
    """Return what the scanner takes for the line integrals.

    Parameters
    ----------
    line_integral : ndarray, shape (views, channels)
        Noise-free −ln of the signal relative to air.
    detector : Detector
        Exposure, noise and faults.
    geometry : ParallelBeam or FanBeam
        Pitch and width of the channels.
    thickness_mm : float
        Slice thickness; quanta are proportional to it.
    rng : numpy.random.Generator
        The noise.

    Returns
    -------
    Reading
        −ln(reading / air calibration), and the number of starved readings.

    Raises
    ------
    ArgumentError
        If a fault names a channel that is not there.
    """
    count = line_integral.shape[1]
    drifted = _channel_index("gain_errors", tuple(c for c, _ in detector.gain_errors), count)
    dead = _channel_index("dead_channels", detector.dead_channels, count)
    quanta = detector.quanta_in_air(geometry.width_mm, thickness_mm)
    signal = np.exp(-with_scatter(line_integral, detector, geometry))
    unit = 1.0 if quanta is None else quanta
    counts = signal if quanta is None else rng.poisson(quanta * signal).astype(float)
    if detector.electronic_quanta > 0 and quanta is not None:
        counts += rng.normal(0.0, detector.electronic_quanta, counts.shape)
    counts[:, drifted] *= 1.0 + np.asarray([error for _, error in detector.gain_errors])
    counts[:, dead] = 0.0
    floor = detector.floor_quanta if quanta is not None else math.exp(-50.0)
    starved = int(np.count_nonzero(counts < floor))
    air: FloatArray = np.full(count, unit, dtype=float)
    if detector.air_views is not None and quanta is not None:
        air = np.asarray(rng.poisson(quanta * detector.air_views, count) / detector.air_views)
    measured: FloatArray = -np.log(np.maximum(counts, floor) / air)
    if detector.mend_dead and dead.size:
        _mend(measured, dead)
    return Reading(measured, starved)
