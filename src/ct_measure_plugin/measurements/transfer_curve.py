"""An MTF as a setting of other measurements: measured before, kept whole."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from pydantic import BaseModel, ConfigDict, model_validator

from ct_measure_plugin.measurements.recorded import curve_in, only_result
from ct_measure_plugin.physics.results import Curve, Result

if TYPE_CHECKING:
    from typing import Self

__all__ = ["TransferCurve", "transfer_from"]


class TransferCurve(BaseModel):
    """A modulation transfer function.

    Attributes
    ----------
    frequency_per_mm, mtf, uncertainty : tuple of float
        Frequencies, rising; values; standard uncertainties, empty if they are not stated.
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    frequency_per_mm: tuple[float, ...]
    mtf: tuple[float, ...]
    uncertainty: tuple[float, ...] = ()

    @model_validator(mode="after")
    def _whole(self) -> Self:
        count = len(self.frequency_per_mm)
        if count < 4 or len(self.mtf) != count or len(self.uncertainty) not in (0, count):
            raise ValueError("an MTF needs 4 or more frequencies, and as many values")
        if not np.all(np.diff(self.frequency_per_mm) > 0) or self.frequency_per_mm[0] < 0:
            raise ValueError("the frequencies of an MTF must rise from 0 or more")
        if not np.all(np.isfinite((*self.mtf, *self.uncertainty))):
            raise ValueError("the values of an MTF must be finite")
        return self

    @classmethod
    def of(cls, curve: Curve) -> TransferCurve:
        """Keep a measured curve."""
        doubt = curve.y_uncertainty
        return cls(
            frequency_per_mm=tuple(np.asarray(curve.x, float).tolist()),
            mtf=tuple(np.asarray(curve.y, float).tolist()),
            uncertainty=() if doubt is None else tuple(np.asarray(doubt, float).tolist()),
        )

    def curve(self) -> Curve:
        """Return it as physics takes it."""
        doubt = np.array(self.uncertainty) if self.uncertainty else None
        x, y = np.array(self.frequency_per_mm), np.array(self.mtf)
        return Curve(x, y, doubt, "frequency", "mm⁻¹", "MTF", "")


def transfer_from(given: Any) -> Any:
    """Return the setting that a result with an MTF, its curve, or a file of records makes.

    Raises
    ------
    ValueError
        If the result has none, or the file holds not just one.
    """
    if isinstance(given, Curve):
        return TransferCurve.of(given)
    if isinstance(given, Result):
        curve = getattr(given, "mtf", None)
        if not isinstance(curve, Curve):
            raise ValueError(f"{type(given).__name__} holds no MTF")
        return TransferCurve.of(curve)
    if not isinstance(given, str):
        return given
    if not given.strip():
        return None
    result = only_result(
        given,
        lambda record: bool(record.get("measured")) and "mtf" in record["result"],
        "measured MTFs",
    )
    return TransferCurve.of(curve_in(result, "mtf"))
