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

#: Consensus values, as printed (three significant digits).
PUBLISHED = {
    "mean": 2.15,
    "variance": 3.05,
    "skewness": 1.08,
    "kurtosis": -0.355,
    "median": 1.0,
    "minimum": 1.0,
    "maximum": 6.0,
}
