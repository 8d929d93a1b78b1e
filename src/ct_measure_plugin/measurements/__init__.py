"""The measurements: one file each, with its settings, its regions and its call into physics.

What belongs here: what a measurement is called, which settings it takes (their types make the
form, the plan entry and the command's options), which regions it needs, how pixels are gathered
from a Volume. What it may import: dicom, virtual_scanner, physics, pydantic. What it must not do:
arithmetic that belongs in physics, drawing, storing.

Adding one: a physics file, a file here, a docs page, and a line in ``catalogue.py``.
"""

from __future__ import annotations

from ct_measure_plugin.measurements.base import Measurement, RegionNeed, Settings
from ct_measure_plugin.measurements.catalogue import (
    DRAWN,
    NAMES,
    expanded,
    find,
    glance_each,
    measure,
    measure_each,
)
from ct_measure_plugin.measurements.comparison import Comparison, compare

__all__ = [
    "DRAWN",
    "NAMES",
    "Comparison",
    "Measurement",
    "RegionNeed",
    "Settings",
    "compare",
    "expanded",
    "find",
    "glance_each",
    "measure",
    "measure_each",
]
