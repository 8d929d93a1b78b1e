"""Whether one straight edge stands still in all slices that are averaged."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.results import Caution, NotMeasured

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.edge_line import EdgeLine

    Floats = NDArray[np.float64]

__all__ = ["check_slices"]

#: An edge that moves evenly by a range of m sigma is blurred by m / sqrt(12) sigma: f50 falls by
#: m² / 24, which is 0.5 % at 0.35 and 4 % at 1.
FAIR_MOVE, MOST_MOVE = 0.35, 1.0

#: Slices whose contrast differs from the mean's by more than this do not show the same edge.
MOST_CONTRAST_CHANGE = 0.15


def check_slices(stack: Floats, line: EdgeLine) -> NotMeasured | list[Caution]:
    """Return what is wrong with averaging slices, shape (nz, ny, nx), whose mean's edge is known.

    Each slice is projected on the mean's edge and on its derivative: contrast and shift.
    """
    shape = line.rough.at(line.distance)
    columns = np.stack([np.ones_like(shape), shape, line.rough.line_at(line.distance)])
    flat = columns.reshape(3, -1)
    found = np.linalg.solve(flat @ flat.T, flat @ stack.reshape(len(stack), -1).T)
    contrast, shift = found[1], -found[2]
    spread = 1.4826 * float(np.median(np.abs(contrast - np.median(contrast))))
    worst = int(np.argmax(np.abs(contrast - 1)))
    if abs(contrast[worst] - 1) > MOST_CONTRAST_CHANGE + 4 * spread:
        return NotMeasured(
            f"slice {worst + 1} of {len(stack)} shows {100 * contrast[worst]:.0f} % of the mean"
            " contrast: the slices do not hold the same edge",
            "choose only slices on which the edge is alike",
        )
    index = np.arange(len(stack)) - (len(stack) - 1) / 2
    slope = float(index @ shift) / float(index @ index)
    left = shift - slope * index - shift.mean()
    doubt = float(np.sqrt(np.sum(left**2) / max(len(stack) - 2, 1) / float(index @ index)))
    move = max(0.0, abs(slope) - 2 * doubt) * (len(stack) - 1)
    if move > MOST_MOVE * line.sigma:
        return NotMeasured(
            f"the edge moves by {abs(slope) * (len(stack) - 1):.2g} mm through the slices",
            "take fewer slices, or align the phantom with the scan axis",
        )
    if move > FAIR_MOVE * line.sigma:
        bias = 100 * (move / line.sigma) ** 2 / 24
        return [
            Caution(
                "leaning-object",
                f"The edge moves by {move:.2g} mm through the slices; f50 reads low by about"
                f" {bias:.1f} %.",
                "Take fewer slices, or align the phantom with the scan axis.",
            )
        ]
    return []
