"""Docked measuring tools for CT volumes in napari, and the same measurements without a screen.

The public names are loaded on first use, so importing the package costs next to nothing:

>>> import numpy as np, ct_measure_plugin as ctm
>>> volume = ctm.Volume(np.zeros((4, 32, 32), np.int16), spacing_mm=(1.0, 0.5, 0.5))
>>> ctm.measure("region_statistics", volume, ctm.regions.Disc((8, 8), 5)).mean.value
0.0
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import lazy_loader

if TYPE_CHECKING:
    from ct_measure_plugin import errors, physics
    from ct_measure_plugin.dicom import read_series, scan_series
    from ct_measure_plugin.measurements import compare, measure, measure_each
    from ct_measure_plugin.measurements.rod_layouts import find_rods
    from ct_measure_plugin.measurements.targets import targets_on
    from ct_measure_plugin.physics import regions
    from ct_measure_plugin.physics.results import (
        Caution,
        Curve,
        NotMeasured,
        Picture,
        Quantity,
        Result,
        ResultGroup,
    )
    from ct_measure_plugin.physics.volume import Volume

__version__ = "0.1.0"

_load, __dir__, _ = lazy_loader.attach(
    __name__,
    submodules={"errors", "physics"},
    submod_attrs={
        "dicom": ["read_series", "scan_series"],
        "measurements": ["compare", "measure", "measure_each"],
        "measurements.rod_layouts": ["find_rods"],
        "measurements.targets": ["targets_on"],
        "physics": ["regions"],
        "physics.results": [
            "Caution",
            "Curve",
            "NotMeasured",
            "Picture",
            "Quantity",
            "Result",
            "ResultGroup",
        ],
        "physics.volume": ["Volume"],
    },
)
__getattr__ = _load

__all__ = [
    "Caution",
    "Curve",
    "NotMeasured",
    "Picture",
    "Quantity",
    "Result",
    "ResultGroup",
    "Volume",
    "compare",
    "errors",
    "find_rods",
    "measure",
    "measure_each",
    "physics",
    "read_series",
    "regions",
    "scan_series",
    "targets_on",
]
