"""Display windows against DICOM's own definitions, a reference library and worked values."""

from __future__ import annotations

import numpy as np
import pytest
from pydicom.dataset import Dataset
from pydicom.pixels import apply_windowing

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.windowing import (
    FUNCTIONS,
    SIGMOID_REACH,
    limits_of,
    sigmoid_ramp,
    window_of,
    window_of_spread,
    windowed,
)

# Centre 40, width 400, greys 0 to 255: worked by hand from the formulas of DICOM PS3.3,
# C.11.2.1.2.1 and C.11.2.1.3, to four decimals.
WORKED = [
    (-160, 0.0, 0.0, 30.3967),
    (0, 102.2556, 102.0, 102.3346),
    (39.5, 127.5, 127.1813, 127.1813),
    (40, 127.8195, 127.5, 127.5),
    (239, 255.0, 254.3625, 224.3345),
    (240, 255.0, 255.0, 224.6033),
]


@pytest.mark.parametrize(("x", "linear", "exact", "sigmoid"), WORKED)
def test_worked_values(x, linear, exact, sigmoid):
    found = [float(windowed(x, 40, 400, function=name)) for name in FUNCTIONS]
    assert found == pytest.approx([linear, exact, sigmoid], abs=5e-5)  # the table's own rounding


@pytest.mark.parametrize("function", FUNCTIONS)
@pytest.mark.parametrize(("centre", "width"), [(40, 400), (-600, 1500), (0.5, 1.0), (35.3, 80.7)])
def test_against_pydicom(function, centre, width):
    """pydicom 3 answers in the span of the stored values: 0 to 4095 for 12 bits unsigned."""
    stored = np.arange(4096, dtype=np.uint16).reshape(64, 64)
    header = Dataset()
    header.PhotometricInterpretation = "MONOCHROME2"
    header.BitsStored, header.PixelRepresentation = 12, 0
    header.WindowCenter, header.WindowWidth = centre + 1024, width
    header.VOILUTFunction = function
    with np.errstate(over="ignore"):  # the reference's own exp, far from a narrow sigmoid
        expected = apply_windowing(stored, header)
    hu = stored.astype(float) - 1024
    found = windowed(hu, centre, width, function=function, grey=(0, 4095))
    # both in doubles; the shift by 1024 costs a few last digits of 4095
    assert found == pytest.approx(expected, abs=1e-8)


def test_a_width_of_one_is_a_step_at_half_below_the_centre():
    assert windowed([11, 11.5, 11.6, 12], 12, 1).tolist() == [0, 0, 255, 255]


def test_a_far_value_under_a_sigmoid_does_not_overflow():
    with np.errstate(all="raise", under="ignore"):
        assert windowed([-3e4, 3e4], 0, 1, function="SIGMOID").tolist() == [0, 255]


@pytest.mark.parametrize("function", ["LINEAR", "LINEAR_EXACT"])
@pytest.mark.parametrize(("centre", "width"), [(40, 400), (-600, 1500), (12.25, 2.5)])
def test_limits_spread_evenly_give_the_same_greys(function, centre, width):
    """A viewer's own rule, (x - low) / (high - low) cut at 0 and 1, is the window."""
    low, high = limits_of(centre, width, function)
    x = np.linspace(centre - width, centre + width, 1001)
    shown = 255 * np.clip((x - low) / (high - low), 0, 1)
    assert shown == pytest.approx(windowed(x, centre, width, function=function), abs=1e-9)


def test_whole_numbers_see_the_step_of_width_one_exactly():
    low, high = limits_of(12, 1)
    x = np.arange(-5, 30)
    assert np.array_equal(255 * np.clip((x - low) / (high - low), 0, 1), windowed(x, 12, 1))


def test_the_sigmoid_ramp_along_its_limits_is_the_sigmoid():
    low, high = limits_of(40, 400, "SIGMOID")
    along = np.linspace(low, high, 1025)
    shown = 255 * sigmoid_ramp(1025)
    assert shown == pytest.approx(windowed(along, 40, 400, function="SIGMOID"), abs=1e-9)


def test_what_the_sigmoid_limits_cut_off_is_under_a_tenth_of_a_grey():
    low, _ = limits_of(0, 100, "SIGMOID")
    assert float(windowed(low, 0, 100, function="SIGMOID")) < 0.1
    assert SIGMOID_REACH == 2.0  # the docs say so


@pytest.mark.parametrize("function", FUNCTIONS)
@pytest.mark.parametrize(("centre", "width"), [(40, 400), (-600.5, 1.0), (1000, 1), (3, 2.25)])
def test_limits_and_back(function, centre, width):
    assert window_of(*limits_of(centre, width, function), function) == pytest.approx(
        (centre, width), rel=1e-12
    )


def test_a_window_over_a_spread():
    assert window_of_spread(12, 10, k=2) == (12, 40)
    assert window_of_spread(12, 0, k=2) == (12, 1)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: windowed(0, 0, 0.9), "'width' must be at least 1 for LINEAR, got 0.9"),
        (lambda: windowed(0, 0, 0, function="SIGMOID"), "'width' must be finite and greater"),
        (lambda: windowed(0, np.nan, 1), "'centre' must be finite, got nan"),
        (lambda: limits_of(0, 10, "GAMMA"), "'function' must be one of LINEAR, LINEAR_EXACT"),
        (lambda: window_of(5, 5), "'limits' must be finite, the low one first"),
        (lambda: window_of_spread(0, -1), "'sd' must not be negative"),
        (lambda: window_of_spread(0, 1, k=0), "'k' must be greater than 0"),
        (lambda: sigmoid_ramp(1), "'samples' must be at least 2"),
    ],
)
def test_misuse_is_named(call, message):
    with pytest.raises(ArgumentError, match=message):
        call()
