"""The digital phantom of the Image Biomarker Standardisation Initiative, and its published values.

Source: IBSI reference manual (arXiv:1612.07003), chapter 5.1, data set ibsi_1_digital_phantom,
licence CC BY 4.0. Voxels of 2 × 2 × 2 mm, axes [z][y][x]; 74 of 80 voxels lie inside.
"""

from __future__ import annotations

import numpy as np

# fmt: off
IMAGE = np.array([
    [[1, 4, 4, 1, 1], [1, 4, 6, 1, 1], [4, 1, 6, 4, 1], [4, 4, 6, 4, 1]],
    [[1, 4, 4, 1, 1], [1, 1, 6, 1, 1], [1, 1, 3, 1, 1], [4, 4, 6, 1, 1]],
    [[1, 4, 4, 1, 1], [1, 1, 1, 1, 1], [1, 1, 9, 1, 1], [1, 1, 6, 1, 1]],
    [[1, 4, 4, 1, 1], [1, 1, 1, 1, 1], [1, 1, 1, 1, 1], [1, 1, 6, 1, 1]],
])
# fmt: on
MASK = np.ones(IMAGE.shape, bool)
for _z, _y, _x in ((1, 2, 0), (2, 0, 3), (2, 0, 4), (2, 2, 2), (3, 0, 3), (3, 0, 4)):
    MASK[_z, _y, _x] = False
SPACING_MM = (2.0, 2.0, 2.0)

#: Consensus values as printed (up to three significant digits), by our names, with the manual's
#: identifiers: section 3.3, intensity-based statistics.
STATISTICS = {
    "mean": (2.15, "Q4LE"),
    "variance": (3.05, "ECT3"),
    "skewness": (1.08, "KE2A"),
    "kurtosis": (-0.355, "IPH6"),
    "median": (1.0, "Y12H"),
    "minimum": (1.0, "1GSF"),
    "p10": (1.0, "QG58"),
    "p90": (4.0, "8DWT"),
    "maximum": (6.0, "84IY"),
    "interquartile_range": (3.0, "SALO"),
    "value_range": (5.0, "2OJQ"),
    "mean_absolute_deviation": (1.55, "4FUA"),
    "robust_mean_absolute_deviation": (1.11, "1128"),
    "median_absolute_deviation": (1.15, "N72L"),
    "coefficient_of_variation": (0.812, "7TET"),
    "quartile_coefficient_of_dispersion": (0.6, "9S40"),
    "energy": (567.0, "N8CA"),
    "root_mean_square": (2.77, "5ZWQ"),
}

#: Section 3.4, intensity histogram; the phantom is used without discretisation (bins of width 1),
#: so the features that section 3.3 has too keep their values.
HISTOGRAM = {
    "mean": (2.15, "X6K6"),
    "variance": (3.05, "CH89"),
    "skewness": (1.08, "88K1"),
    "kurtosis": (-0.355, "C3I7"),
    "median": (1.0, "WIFQ"),
    "minimum": (1.0, "1PR8"),
    "p10": (1.0, "1PR8"),
    "p90": (4.0, "GPMT"),
    "maximum": (6.0, "3NCY"),
    "mode": (1.0, "AMMC"),
    "interquartile_range": (3.0, "WR0O"),
    "value_range": (5.0, "5Z3W"),
    "mean_absolute_deviation": (1.55, "D2ZX"),
    "robust_mean_absolute_deviation": (1.11, "WRZB"),
    "median_absolute_deviation": (1.15, "4RNL"),
    "coefficient_of_variation": (0.812, "CWYJ"),
    "quartile_coefficient_of_dispersion": (0.6, "SLWD"),
    "entropy": (1.27, "TLU2"),
    "uniformity": (0.512, "BJ5W"),
}

#: Volume by voxel counting (YEKZ), in mm³.
VOLUME_MM3 = 592.0
