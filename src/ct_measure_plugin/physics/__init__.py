"""Arrays and millimetres in, frozen results out.

What belongs here: the definitions and algorithms of the measurements, the shapes of regions and
results, the Volume. What it may import: numpy, scipy, scikit-image, the standard library's maths
and typing, and xraydb in the one file that looks up attenuation. What it must not do: read files
or clocks, draw random numbers without a given seed, know of DICOM, napari or Qt.

Each measurement's function has the measurement's name and lives in the file of that name.
"""

from __future__ import annotations

from ct_measure_plugin.physics import regions
from ct_measure_plugin.physics.bar_pattern import BarPattern, bar_pattern
from ct_measure_plugin.physics.ct_number_line import CtNumberLine, ct_number_line
from ct_measure_plugin.physics.detectability import Detectability, detectability
from ct_measure_plugin.physics.disc_mtf import DiscMtf, disc_mtf
from ct_measure_plugin.physics.edge_mtf import EdgeMtf, edge_mtf
from ct_measure_plugin.physics.label_statistics import LabelStatistics, label_statistics
from ct_measure_plugin.physics.line_profile import LineProfile, line_profile
from ct_measure_plugin.physics.local_sd import local_sd
from ct_measure_plugin.physics.mtf_isotropy import MtfIsotropy, mtf_isotropy
from ct_measure_plugin.physics.noise_map import NoiseMap, noise_map
from ct_measure_plugin.physics.noise_power import NoisePower, noise_power
from ct_measure_plugin.physics.region_contrast import RegionContrast, region_contrast
from ct_measure_plugin.physics.region_statistics import RegionStatistics, region_statistics
from ct_measure_plugin.physics.results import (
    Caution,
    Curve,
    NotMeasured,
    Picture,
    Quantity,
    Result,
    ResultGroup,
)
from ct_measure_plugin.physics.ring_artefact import RingArtefact, ring_artefact
from ct_measure_plugin.physics.scan_difference import scan_difference
from ct_measure_plugin.physics.slice_profile import SliceProfile, slice_profile
from ct_measure_plugin.physics.standard_error import standard_error_from_nps
from ct_measure_plugin.physics.uniformity import Uniformity, uniformity
from ct_measure_plugin.physics.volume import Acquisition, HeaderWindow, Source, Volume
from ct_measure_plugin.physics.wire_mtf import WireMtf, wire_mtf

__all__ = [
    "Acquisition",
    "BarPattern",
    "Caution",
    "CtNumberLine",
    "Curve",
    "Detectability",
    "DiscMtf",
    "EdgeMtf",
    "HeaderWindow",
    "LabelStatistics",
    "LineProfile",
    "MtfIsotropy",
    "NoiseMap",
    "NoisePower",
    "NotMeasured",
    "Picture",
    "Quantity",
    "RegionContrast",
    "RegionStatistics",
    "Result",
    "ResultGroup",
    "RingArtefact",
    "SliceProfile",
    "Source",
    "Uniformity",
    "Volume",
    "WireMtf",
    "bar_pattern",
    "ct_number_line",
    "detectability",
    "disc_mtf",
    "edge_mtf",
    "label_statistics",
    "line_profile",
    "local_sd",
    "mtf_isotropy",
    "noise_map",
    "noise_power",
    "region_contrast",
    "region_statistics",
    "regions",
    "ring_artefact",
    "scan_difference",
    "slice_profile",
    "standard_error_from_nps",
    "uniformity",
    "wire_mtf",
]
