"""The energy that a beam's quality predicts for a set of rods on a volume."""

from __future__ import annotations

from typing import TYPE_CHECKING

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.beam_quality import BeamQuality, Detector, beam_quality
from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.results import Caution, NotMeasured, Quantity
from ct_measure_plugin.physics.water_path import mean_water_path

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.physics.attenuation import Material
    from ct_measure_plugin.physics.regions import Region
    from ct_measure_plugin.physics.volume import Volume

__all__ = ["beam_of", "disagreement"]

#: Relative standard uncertainty of a path that was entered.
_U_PATH = 0.05

#: Difference of the two energies, in standard uncertainties, that is cautioned.
_APART = 3.0


def beam_of(
    volume: Volume,
    regions: Sequence[Region],
    materials: Sequence[Material],
    *,
    kvp: float | None,
    hvl_mm: float | None,
    filtration_mm: float | None,
    path_mm: float | None,
    detector: Detector,
) -> BeamQuality | NotMeasured | None:
    """Return what the beam should behave as, or None where its quality was not given.

    Raises
    ------
    ArgumentError
        If the tube voltage is neither given nor in the header, or both qualities are given.
    """
    if hvl_mm is None and filtration_mm is None:
        return None
    voltage = kvp if kvp is not None else _voltage(volume)
    if voltage is None:
        raise ArgumentError("kvp", "must be given, since the header does not tell one", None)
    path = _path(volume, regions) if path_mm is None else Quantity(path_mm, "mm", _U_PATH * path_mm)
    if isinstance(path, NotMeasured):
        return path
    return beam_quality(
        voltage,
        materials,
        path_mm=path,
        hvl_mm=hvl_mm,
        filtration_mm=filtration_mm,
        detector=detector,
    )


def _voltage(volume: Volume) -> float | None:
    found = {one.kvp for one in volume.acquisition if one.kvp is not None}
    return found.pop() if len(found) == 1 else None


def _path(volume: Volume, regions: Sequence[Region]) -> Quantity | NotMeasured:
    """Return the mean path through the slice of the first rod."""
    slices = slices_of(regions[0], volume)
    middle = slices[len(slices) // 2] if slices else volume.shape[0] // 2
    return mean_water_path(volume.plane(middle), volume.spacing_mm[1:])


def disagreement(energy: Quantity, beam: BeamQuality) -> tuple[Caution, ...]:
    """Return a caution if the rods' energy and the beam's differ."""
    spread = ((energy.uncertainty or 0.0) ** 2 + (beam.energy.uncertainty or 0.0) ** 2) ** 0.5
    if abs(energy.value - beam.energy.value) <= _APART * spread:
        return ()
    return (
        Caution(
            "beam-disagrees",
            f"The rods behave as at {energy}; the beam's quality makes one expect {beam.energy}.",
            "Check densities, tube voltage, half-value layer and the path through the phantom.",
        ),
    )
