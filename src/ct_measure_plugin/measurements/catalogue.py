"""The list of measurements, and the one way to run any of them."""

from __future__ import annotations

import importlib
from functools import cache
from typing import TYPE_CHECKING, Any, cast

from pydantic import ValidationError

from ct_measure_plugin.errors import ArgumentError, RegionError, UnknownNameError
from ct_measure_plugin.measurements.one_thread import one_thread
from ct_measure_plugin.physics.regions import Labels, Region
from ct_measure_plugin.physics.results import ResultGroup

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.measurements.base import Measurement, Settings
    from ct_measure_plugin.physics.results import NotMeasured, Result
    from ct_measure_plugin.physics.volume import Volume

__all__ = [
    "DRAWN",
    "NAMES",
    "expanded",
    "find",
    "glance_each",
    "measure",
    "measure_each",
    "settings_for",
]

#: Public name -> class, in the file of that name. Adding a measurement adds a line.
_CLASSES: dict[str, str] = {
    "region_statistics": "MeasureRegionStatistics",
    "region_contrast": "MeasureRegionContrast",
    "label_statistics": "MeasureLabelStatistics",
    "noise_power": "MeasureNoisePower",
    "noise_map": "MeasureNoiseMap",
    "detectability": "MeasureDetectability",
    "uniformity": "MeasureUniformity",
    "ring_artefact": "MeasureRingArtefact",
    "edge_mtf": "MeasureEdgeMtf",
    "disc_mtf": "MeasureDiscMtf",
    "line_profile": "MeasureLineProfile",
    "wire_mtf": "MeasureWireMtf",
    "mtf_isotropy": "MeasureMtfIsotropy",
    "slice_profile": "MeasureSliceProfile",
    "bar_pattern": "MeasureBarPattern",
    "ct_number_line": "MeasureCtNumberLine",
}

NAMES: tuple[str, ...] = tuple(_CLASSES)

#: Those that measure what is drawn; the others take a whole label map.
DRAWN: tuple[str, ...] = tuple(name for name in NAMES if name != "label_statistics")


@cache
def find(name: str) -> Measurement:
    """Return the measurement of a name.

    Raises
    ------
    UnknownNameError
        If there is none; the message lists those there are.

    Examples
    --------
    >>> find("region_statistics").title
    'Region statistics'
    """
    if name not in _CLASSES:
        raise UnknownNameError("measurement", name, NAMES)
    module = importlib.import_module(f"ct_measure_plugin.measurements.{name}")
    return cast("Measurement", getattr(module, _CLASSES[name])())


def settings_for(name: str, given: dict[str, Any]) -> Settings:
    """Return a measurement's complete settings from the few that were given.

    Raises
    ------
    ArgumentError
        If one is unknown or out of its range; it names the first.
    """
    kind = find(name).settings_type
    try:
        return kind(**given)
    except ValidationError as error:
        first = error.errors()[0]
        where = ".".join(str(part) for part in first["loc"])
        if first["type"] == "extra_forbidden":
            known = tuple(kind.model_fields)
            raise UnknownNameError(f"setting of {name}", where, known) from None
        why = first["msg"].removeprefix("Value error, ")
        raise ArgumentError(where, f"must be valid: {why}", first["input"]) from None


def measure_each(
    name: str,
    volume: Volume,
    regions: Region | Sequence[Region] = (),
    *,
    settings: Settings | None = None,
) -> tuple[Result | NotMeasured, ...]:
    """Return one answer a region, or one answer in all where the measurement takes them together.

    Always a tuple, whatever the number of regions.
    """
    return _each(name, volume, regions, settings, moving=False)


def glance_each(
    name: str,
    volume: Volume,
    regions: Region | Sequence[Region] = (),
    *,
    settings: Settings | None = None,
) -> tuple[Result | NotMeasured, ...]:
    """Return what :func:`measure_each` does, for regions that are still moving.

    The numbers are the same to the last bit; where they take long, uncertainties and the dearer
    numbers are left out until the regions rest and :func:`measure_each` is asked.
    """
    return _each(name, volume, regions, settings, moving=True)


def expanded(name: str, regions: Sequence[Region]) -> tuple[Region, ...]:
    """Return the regions with a label map as the masks of its labels, unless maps are measured.

    >>> import numpy as np
    >>> from ct_measure_plugin.physics.regions import Labels
    >>> labels = Labels(np.array([[0, 2, 5]]), (1, 1, 1))
    >>> [one.name for one in expanded("region_statistics", [labels])]
    ['label 2', 'label 5']
    >>> expanded("label_statistics", [labels]) == (labels,)
    True
    """
    kinds = find(name).regions.kinds
    found: list[Region] = []
    for region in regions:
        if isinstance(region, Labels) and "labels" not in kinds:
            masks = region.masks()
            if not masks:
                raise RegionError("regions", "must hold a label map with labels", "an empty map")
            found += masks
        else:
            found.append(region)
    return tuple(found)


def _each(
    name: str,
    volume: Volume,
    regions: Region | Sequence[Region],
    settings: Settings | None,
    *,
    moving: bool,
) -> tuple[Result | NotMeasured, ...]:
    measurement = find(name)
    settings = measurement.settings_type() if settings is None else settings
    ask = measurement.glance if moving else measurement.measure
    group = expanded(name, (regions,) if isinstance(regions, Region) else regions)
    measurement.check_regions(group)
    with one_thread():
        if measurement.regions.together or not group:
            return (ask(volume, group, settings),)
        return tuple(ask(volume, (region,), settings) for region in group)


def measure(
    name: str,
    volume: Volume,
    regions: Region | Sequence[Region] = (),
    **settings: Any,
) -> Result | NotMeasured:
    """Measure regions of a volume.

    Parameters
    ----------
    name : str
        One of :data:`NAMES`.
    volume : Volume
        From :func:`ct_measure_plugin.read_series` or made from an array.
    regions : Region or sequence of Region
        Where. For a measurement that takes each region by itself, one region gives its result and
        several give a :class:`~ct_measure_plugin.physics.results.ResultGroup` in their order.
    **settings
        The measurement's settings by name; those left out keep their defaults.

    Returns
    -------
    Result or NotMeasured
        NotMeasured, which is false, says why and what to do.

    Raises
    ------
    ArgumentError, RegionError, UnknownNameError
        On misuse, naming the argument, the rule and what arrived.

    Examples
    --------
    >>> import numpy as np, ct_measure_plugin as ctm
    >>> volume = ctm.Volume(np.full((3, 64, 64), 12, np.int16), spacing_mm=(2.0, 0.5, 0.5))
    >>> found = ctm.measure("region_statistics", volume, ctm.regions.Disc((16, 16), 8, z_mm=2.0))
    >>> str(found.mean), str(found.area)
    ('12.00 ± 0.29 HU', '201.06 mm²')
    """
    answers = measure_each(name, volume, regions, settings=settings_for(name, settings))
    return answers[0] if len(answers) == 1 else ResultGroup(parts=answers)
