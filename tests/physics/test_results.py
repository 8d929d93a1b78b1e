"""The shape of a result."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Quantity


@pytest.mark.parametrize(
    ("quantity", "text"),
    [
        # JCGM 100:2008, 7.2.6: uncertainty to two significant digits, the value to the same place
        (Quantity(10.05762, "Ω", 0.0272), "10.058 ± 0.027 Ω"),
        (Quantity(1.0, "HU", 12.3), "1 ± 12 HU"),
        (Quantity(-0.00412, "HU", 0.000987), "-0.00412 ± 0.00099 HU"),
        (Quantity(74.0, "px", 0.0), "74 px"),
        (Quantity(0.5, ""), "0.5"),
        (Quantity(1.0, "", 3e-17), "1"),  # lost in the value's own rounding: no digits of nothing
        (Quantity(2.1e-14, "", 1e-15), "2.10e-14 ± 0.10e-14"),
        (Quantity(-3e-20, "", 5e-20), "-3.0e-20 ± 5.0e-20"),
    ],
)
def test_value_and_uncertainty_are_rounded_together(quantity, text):
    assert str(quantity) == text


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
def test_a_quantity_is_never_a_silent_nan(value):
    with pytest.raises(ArgumentError, match="'value' must be finite"):
        Quantity(value, "HU")
    with pytest.raises(ArgumentError, match="'uncertainty' must be finite and not negative"):
        Quantity(1.0, "HU", value)


def test_an_unregistered_caution_is_refused():
    with pytest.raises(ArgumentError, match="'code' must be a registered caution code"):
        Caution("made-up", "text")


def test_not_measured_is_false_and_says_why():
    answer = NotMeasured("too few pixels", "draw it larger")
    assert not answer
    assert str(answer) == "Not measured: too few pixels. Remedy: draw it larger."


def test_a_curve_has_as_many_ordinates_as_abscissae():
    with pytest.raises(ArgumentError, match="'y' must have as many samples as x"):
        Curve(np.arange(3.0), np.arange(4.0))
    with pytest.raises(ArgumentError, match="'y_uncertainty' must have as many samples as x"):
        Curve(np.arange(3.0), np.arange(3.0), np.arange(4.0))
