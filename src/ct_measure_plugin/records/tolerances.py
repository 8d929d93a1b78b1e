"""Tolerances: whether a number lies within its limits, given its uncertainty."""

from __future__ import annotations

import math
from enum import Enum
from typing import TYPE_CHECKING

from pydantic import BaseModel, ConfigDict, model_validator

if TYPE_CHECKING:
    from typing import Self

    from ct_measure_plugin.physics.results import Quantity

__all__ = ["Tolerance", "Verdict", "judge"]

#: Coverage factor of the expanded uncertainty: about 95 % for a normal distribution
#: (JCGM 100:2008, 6.3.3).
COVERAGE_FACTOR = 2.0


class Verdict(Enum):
    """What can be said of a number and its limits."""

    PASS = "pass"  # noqa: S105 - a verdict, not a password
    FAIL = "fail"
    INDETERMINATE = "indeterminate"


class Tolerance(BaseModel):
    """Limits for one quantity of a result; an open end is left out."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    quantity: str
    low: float | None = None
    high: float | None = None

    @model_validator(mode="after")
    def _has_limits(self) -> Self:
        if self.low is None and self.high is None:
            raise ValueError("needs 'low' or 'high'")
        if self.low is not None and self.high is not None and not self.low < self.high:
            raise ValueError("'low' must be less than 'high'")
        return self


def judge(quantity: Quantity, tolerance: Tolerance) -> Verdict:
    """Return whether a quantity surely passes, surely fails, or neither.

    With U the expanded uncertainty (k = 2): it passes if value ± U lies within the limits, fails
    if it lies wholly outside one of them, and is indeterminate otherwise; the remedy then is to
    measure again or longer.

    Examples
    --------
    >>> from ct_measure_plugin.physics.results import Quantity
    >>> limits = Tolerance(quantity="mean", low=-4, high=4)
    >>> [judge(Quantity(v, "HU", 0.5), limits).value for v in (1.0, 3.5, 6.0)]
    ['pass', 'indeterminate', 'fail']
    """
    doubt = COVERAGE_FACTOR * (quantity.uncertainty or 0.0)
    low = -math.inf if tolerance.low is None else tolerance.low
    high = math.inf if tolerance.high is None else tolerance.high
    if low <= quantity.value - doubt and quantity.value + doubt <= high:
        return Verdict.PASS
    if quantity.value + doubt < low or quantity.value - doubt > high:
        return Verdict.FAIL
    return Verdict.INDETERMINATE
