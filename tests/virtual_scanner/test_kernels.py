"""Kernel windows."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.virtual_scanner.kernels import KERNEL_SHAPES, Kernel


@pytest.mark.parametrize("shape", KERNEL_SHAPES)
def test_every_window_is_one_at_zero_and_nothing_beyond_its_cutoff(shape):
    kernel = Kernel(shape, 0.8)
    assert float(kernel.window(0.0)) == 1.0
    np.testing.assert_array_equal(kernel.window([0.801, 1.5, 9.0]), 0.0)
    np.testing.assert_array_equal(kernel.window([-0.3]), kernel.window([0.3]))


@pytest.mark.parametrize(
    ("kernel", "at_half"),
    [
        (Kernel("ramp", 1.0), 1.0),
        (Kernel("cosine", 1.0), np.sqrt(0.5)),
        (Kernel("hann", 1.0), 0.5),
        (Kernel("butterworth", 1.0, bend=0.5, order=2), np.sqrt(0.5)),
        (Kernel("enhancing", 1.0, gain=6.0), 0.5 * 2.5),
    ],
    ids=lambda value: getattr(value, "shape", None),
)
def test_windows_at_half_the_cutoff(kernel, at_half):
    assert float(kernel.window(0.5)) == pytest.approx(at_half, rel=1e-12)


def test_the_enhancing_window_exceeds_one_from_its_stated_gain_on():
    """(1 + g u²)(1 + cos πu)/2 = 1 + (g − π²/4) u² + … near u = 0."""
    u = np.linspace(0.0, 1.0, 10_001)
    peak = Kernel("enhancing", 1.0, gain=6.0).window(u)
    assert peak.max() == pytest.approx(1.285, abs=0.0005)
    assert u[peak.argmax()] == pytest.approx(0.42, abs=0.005)
    assert Kernel("enhancing", 1.0, gain=np.pi**2 / 4 - 0.05).window(u).max() == 1.0
    assert Kernel("enhancing", 1.0, gain=np.pi**2 / 4 + 0.05).window(0.05) > 1.0


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Kernel("soft", 1.0), "'shape' must be one of ramp, cosine"),
        (lambda: Kernel("hann", 0.0), "'cutoff_per_mm' must be greater than 0"),
        (lambda: Kernel("butterworth", 1.0, order=0), "'order' must be at least 1"),
        (lambda: Kernel("enhancing", 1.0, gain=-1.0), "'gain' must be greater than 0"),
    ],
)
def test_misuse_is_named(make, words):
    with pytest.raises(ArgumentError, match=words):
        make()
