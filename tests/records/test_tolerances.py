"""The decision rule: pass or fail only when the expanded uncertainty leaves no doubt."""

from __future__ import annotations

import pytest
from pydantic import ValidationError

from ct_measure_plugin.physics.results import Quantity
from ct_measure_plugin.records import Tolerance, Verdict, judge


@pytest.mark.parametrize(
    ("value", "uncertainty", "verdict"),
    [
        (2.9, 0.5, Verdict.PASS),
        (3.0, 0.5, Verdict.PASS),
        (3.1, 0.5, Verdict.INDETERMINATE),
        (4.9, 0.5, Verdict.INDETERMINATE),
        (5.1, 0.5, Verdict.FAIL),
        (-5.1, 0.5, Verdict.FAIL),
        (4.0, 0.0, Verdict.PASS),
    ],
)
def test_doubt_of_two_sigma_decides(value, uncertainty, verdict):
    limits = Tolerance(quantity="mean", low=-4.0, high=4.0)
    assert judge(Quantity(value, "HU", uncertainty), limits) is verdict


def test_one_open_end():
    limits = Tolerance(quantity="sd", high=5.0)
    assert judge(Quantity(-100.0, "HU", 1.0), limits) is Verdict.PASS


@pytest.mark.parametrize("limits", [{}, {"low": 4.0, "high": 4.0}])
def test_limits_that_say_nothing_are_refused(limits):
    with pytest.raises(ValidationError):
        Tolerance(quantity="mean", **limits)
