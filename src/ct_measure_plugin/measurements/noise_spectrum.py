"""A noise power spectrum as a setting of other measurements: measured before, kept whole."""

from __future__ import annotations

import base64
import zlib
from typing import TYPE_CHECKING, Any

import numpy as np
from pydantic import BaseModel, ConfigDict, model_validator
from scipy import fft

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.measurements.recorded import (
    curve_in,
    only_result,
    picture_in,
    quantity_in,
)
from ct_measure_plugin.physics.noise_power import NoisePower
from ct_measure_plugin.physics.results import Curve, Picture, Quantity
from ct_measure_plugin.physics.slice_spectrum import SliceSpectrum

if TYPE_CHECKING:
    from typing import Self

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["NoiseSpectrum", "spectrum_from"]

_AXES = ("frequency", "mm⁻¹")


class NoiseSpectrum(BaseModel):
    """The noise power spectrum of slices, complete in itself, so that a record re-runs.

    Attributes
    ----------
    unit : str
        Of the values whose noise it is.
    sd, sd_uncertainty, lowest_per_mm : float
        Square root of its integral, and the first usable ring.
    spacing_mm : (float, float)
        Distance of rows and of columns.
    shape : (int, int)
        Rows and columns of the spectrum.
    plane : str
        Its half with columns from frequency 0 on, 32-bit numbers packed and in base 64.
    frequency_per_mm, power, power_uncertainty, smear : tuple of float
        Its rings.
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    unit: str = "HU"
    sd: float
    sd_uncertainty: float
    lowest_per_mm: float
    spacing_mm: tuple[float, float]
    shape: tuple[int, int]
    plane: str
    frequency_per_mm: tuple[float, ...]
    power: tuple[float, ...]
    power_uncertainty: tuple[float, ...]
    smear: tuple[float, ...]

    @model_validator(mode="after")
    def _whole(self) -> Self:
        rings = (self.power, self.power_uncertainty, self.smear)
        if len(self.power) < 4 or any(len(one) != len(self.frequency_per_mm) for one in rings):
            raise ValueError(
                "the rings of the spectrum must be as many as its frequencies, 4 or more"
            )
        if not all(8 <= n <= 4096 for n in self.shape) or not all(s > 0 for s in self.spacing_mm):
            raise ValueError("the spectrum's shape or pixel size is none")
        try:
            self._half()
        except (ValueError, zlib.error):
            raise ValueError("the spectrum's plane cannot be unpacked") from None
        return self

    @classmethod
    def of(cls, noise: NoisePower | SliceSpectrum) -> NoiseSpectrum:
        """Keep a measured spectrum.

        Raises
        ------
        ArgumentError
            If it is that of deep patches.
        """
        found = SliceSpectrum.of(noise)
        full = fft.ifftshift(found.spectrum.values)
        half = np.ascontiguousarray(full[:, : full.shape[1] // 2 + 1], dtype="<f4")
        doubt = found.radial.y_uncertainty
        return cls(
            unit=found.sd.unit,
            sd=found.sd.value,
            sd_uncertainty=found.sd.uncertainty or 0.0,
            lowest_per_mm=found.lowest_frequency.value,
            spacing_mm=found.spacing_mm,
            shape=(full.shape[0], full.shape[1]),
            plane=base64.b64encode(zlib.compress(half.tobytes(), 9)).decode(),
            frequency_per_mm=tuple(found.radial.x.tolist()),
            power=tuple(found.radial.y.tolist()),
            power_uncertainty=tuple((0 * found.radial.y if doubt is None else doubt).tolist()),
            smear=tuple(found.smear.y.tolist()),
        )

    def spectrum(self) -> SliceSpectrum:
        """Return it as physics takes it."""
        rows, columns = self.shape
        half = self._half().astype(float)
        full = np.empty((rows, columns))
        full[:, : half.shape[1]] = half
        # the other half plane is the same, turned by 180°
        rest = np.arange(half.shape[1], columns)
        full[:, rest] = half[-np.arange(rows) % rows][:, columns - rest]
        fy, fx = (
            np.asarray(fft.fftshift(fft.fftfreq(n, d)))
            for n, d in zip(self.shape, self.spacing_mm, strict=True)
        )
        power_unit = f"{self.unit}² mm²"
        x = np.array(self.frequency_per_mm)
        return SliceSpectrum(
            Picture(
                np.asarray(fft.fftshift(full)),
                (float(fy[1] - fy[0]), float(fx[1] - fx[0])),
                ("fy", "fx"),
                ("mm⁻¹", "mm⁻¹"),
                power_unit,
                (float(fy[0]), float(fx[0])),
            ),
            Curve(
                x, np.array(self.power), np.array(self.power_uncertainty), *_AXES, "NPS", power_unit
            ),
            Curve(x, np.array(self.smear), None, *_AXES, "smear of the window", ""),
            Quantity(self.lowest_per_mm, "mm⁻¹", 0.0),
            Quantity(self.sd, self.unit, self.sd_uncertainty),
        )

    def _half(self) -> NDArray[np.float32]:
        rows, columns = self.shape[0], self.shape[1] // 2 + 1
        size = 4 * rows * columns
        data = zlib.decompressobj().decompress(base64.b64decode(self.plane), size + 1)
        return np.frombuffer(data, dtype="<f4").reshape(rows, columns)


def spectrum_from(given: Any) -> Any:
    """Return the setting that a result of `noise_power`, or a file of records, makes.

    Raises
    ------
    ValueError
        If the spectrum is that of deep patches, or the file holds not just one.
    """
    if isinstance(given, NoisePower | SliceSpectrum):
        return _kept(given)
    if not isinstance(given, str):
        return given
    if not given.strip():
        return None
    result = only_result(
        given,
        lambda record: record.get("measurement") == "noise_power" and bool(record.get("measured")),
        "measured noise power spectra",
    )
    if result.get("axial") is not None:
        raise ValueError("the noise spectrum must come from patches on one slice, not deep ones")
    return _kept(
        SliceSpectrum(
            picture_in(result, "spectrum"),
            curve_in(result, "radial"),
            curve_in(result, "smear"),
            quantity_in(result, "lowest_frequency"),
            quantity_in(result, "sd"),
        )
    )


def _kept(noise: NoisePower | SliceSpectrum) -> NoiseSpectrum:
    try:
        return NoiseSpectrum.of(noise)
    except ArgumentError:
        raise ValueError(
            "the noise spectrum must come from patches on one slice, not deep ones"
        ) from None
