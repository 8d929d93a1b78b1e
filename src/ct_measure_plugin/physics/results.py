"""The one shape of a result: numbers, curves and pictures that carry their doubt.

Tables, plots, exports, reports and comparisons find a result's fields by their type
(:func:`quantities_of`, :func:`curves_of`, :func:`pictures_of`); none of them knows a measurement
by name.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Any, TypeVar

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.cautions import KINDS, CautionKind

if TYPE_CHECKING:
    from collections.abc import Iterator

    import numpy as np
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]

__all__ = [
    "Caution",
    "Curve",
    "NotMeasured",
    "Picture",
    "Quantity",
    "Result",
    "ResultGroup",
    "curves_of",
    "label_of",
    "pictures_of",
    "quantities_of",
]

_T = TypeVar("_T")


#: Below this share of its value an uncertainty is no more than the rounding of floating point.
_LOST = 1e-13
#: With more decimals than this a number is written with a power of ten.
_MOST_DECIMALS = 12


@dataclass(frozen=True, slots=True)
class Quantity:
    """A measured number.

    Attributes
    ----------
    value : float
        The estimate, finite.
    unit : str
        Its unit, ``""`` for a pure number.
    uncertainty : float or None
        Standard uncertainty, one sigma, in the same unit. None means "not stated"; the result
        then carries a Caution that says why.

    Examples
    --------
    >>> print(Quantity(31.2341, "HU", 0.0421))
    31.234 ± 0.042 HU
    >>> print(Quantity(81.0, "px", 0.0))
    81 px
    """

    value: float
    unit: str
    uncertainty: float | None = None

    def __post_init__(self) -> None:
        if not math.isfinite(self.value):
            raise ArgumentError("value", "must be finite (answer NotMeasured instead)", self.value)
        if self.uncertainty is not None and not 0 <= self.uncertainty < math.inf:
            raise ArgumentError("uncertainty", "must be finite and not negative", self.uncertainty)

    def rounded(self) -> tuple[str, str]:
        """Return value and uncertainty as text, rounded together.

        The uncertainty keeps two significant digits and the value as many decimals (JCGM
        100:2008, 7.2.6). Without an uncertainty the value keeps five significant digits, and the
        second text is empty, as it is for an exact number, and for an uncertainty that is lost in
        the rounding of the value itself.
        """
        if not self.uncertainty or self.uncertainty < _LOST * abs(self.value):
            return f"{self.value:.5g}", ""
        decimals = max(0, 1 - math.floor(math.log10(self.uncertainty)))
        if decimals > _MOST_DECIMALS:
            power = math.floor(math.log10(max(abs(self.value), self.uncertainty)))
            decimals = max(0, decimals + power)
            tens = 10.0**-power
            texts = (f"{one * tens:.{decimals}f}e{power}" for one in (self.value, self.uncertainty))
            return next(texts), next(texts)
        return f"{self.value:.{decimals}f}", f"{self.uncertainty:.{decimals}f}"

    def __str__(self) -> str:
        value, doubt = self.rounded()
        text = f"{value} ± {doubt}" if doubt else value
        return f"{text} {self.unit}".strip()


@dataclass(frozen=True, slots=True, eq=False)
class Curve:
    """A sampled function with its axes named.

    Attributes
    ----------
    x, y : ndarray, shape (n,)
        Abscissa, increasing, and ordinate.
    y_uncertainty : ndarray, shape (n,), or None
        Standard uncertainty of `y`, one sigma.
    x_name, x_unit, y_name, y_unit : str
        What the axes show; frequencies are in mm⁻¹, lengths in mm.
    joined : bool
        False for samples that stand for themselves: drawn as points, with nothing between them.
    data : Curve or None
        What a fitted curve was fitted to: drawn as points over it.
    """

    x: FloatArray
    y: FloatArray
    y_uncertainty: FloatArray | None = None
    x_name: str = ""
    x_unit: str = ""
    y_name: str = ""
    y_unit: str = ""
    joined: bool = True
    data: Curve | None = None

    def __post_init__(self) -> None:
        if len(self.x) != len(self.y):
            raise ArgumentError("y", f"must have as many samples as x ({len(self.x)})", len(self.y))
        if self.y_uncertainty is not None and len(self.y_uncertainty) != len(self.x):
            raise ArgumentError(
                "y_uncertainty",
                f"must have as many samples as x ({len(self.x)})",
                len(self.y_uncertainty),
            )

    def samples(self) -> tuple[tuple[float, Quantity], ...]:
        """Return the samples one by one, each an abscissa and a Quantity.

        Examples
        --------
        >>> import numpy as np
        >>> curve = Curve(np.array([5.0, 95.0]), np.array([-12.0, 11.0]), y_unit="HU")
        >>> for x, y in curve.samples():
        ...     print(x, y)
        5.0 -12 HU
        95.0 11 HU
        """
        doubts: list[float | None] = [None] * len(self.x)
        if self.y_uncertainty is not None:
            doubts = [float(u) for u in self.y_uncertainty]
        return tuple(
            (float(x), Quantity(float(y), self.y_unit, u))
            for x, y, u in zip(self.x, self.y, doubts, strict=True)
        )


@dataclass(frozen=True, slots=True, eq=False)
class Picture:
    """A two-dimensional result.

    Attributes
    ----------
    values : ndarray, shape (rows, columns)
        The picture.
    spacing : tuple of float
        Step between rows and between columns, in the axes' unit.
    axis_names, axis_units : tuple of str
        Rows first.
    unit : str
        Unit of the values.
    origin : tuple of float
        Axis values at the centre of pixel (0, 0).
    """

    values: FloatArray
    spacing: tuple[float, float]
    axis_names: tuple[str, str]
    axis_units: tuple[str, str]
    unit: str
    origin: tuple[float, float] = (0.0, 0.0)


@dataclass(frozen=True, slots=True)
class Caution:
    """Something a reader of the number must know.

    Attributes
    ----------
    code : str
        One of :data:`ct_measure_plugin.physics.cautions.KINDS`.
    text : str
        One sentence: what was found, with its number.
    remedy : str
        One sentence: what to do about it; may be empty for a note.
    """

    code: str
    text: str
    remedy: str = ""

    def __post_init__(self) -> None:
        if self.code not in KINDS:
            raise ArgumentError("code", "must be a registered caution code", self.code)

    @property
    def kind(self) -> CautionKind:
        """The registry's entry: title, level, docs page."""
        return KINDS[self.code]

    @property
    def page(self) -> str:
        """Where the docs explain it, relative to ``docs/``."""
        return f"{self.kind.page}#{self.code}"

    def __str__(self) -> str:
        return f"{self.text} {self.remedy}".strip()


@dataclass(frozen=True, slots=True)
class NotMeasured:
    """Asked for, attempted, and not honestly answerable. Falsy.

    Attributes
    ----------
    reason : str
        Why, with the number that decided it.
    remedy : str
        What to do.

    Examples
    --------
    >>> answer = NotMeasured("the region holds 4 pixels; at least 9 are needed", "draw it larger")
    >>> bool(answer)
    False
    >>> print(answer)
    Not measured: the region holds 4 pixels; at least 9 are needed. Remedy: draw it larger.
    """

    reason: str
    remedy: str
    cautions: tuple[Caution, ...] = ()

    def __bool__(self) -> bool:
        return False

    def __str__(self) -> str:
        return f"Not measured: {self.reason}. Remedy: {self.remedy}."


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Result:
    """Parent of every measurement's result: frozen, its fields are the types above.

    Attributes
    ----------
    cautions : tuple of Caution
        What a reader of the numbers must know.
    """

    cautions: tuple[Caution, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ResultGroup(Result):
    """The results of one measurement on several regions, in the regions' order.

    Attributes
    ----------
    parts : tuple of Result or NotMeasured
        One a region.
    """

    parts: tuple[Result | NotMeasured, ...]

    def __iter__(self) -> Iterator[Result | NotMeasured]:
        return iter(self.parts)

    def __len__(self) -> int:
        return len(self.parts)

    def __getitem__(self, index: int) -> Result | NotMeasured:
        return self.parts[index]


#: Field names whose label is not simply their words.
_LABELS = {
    "sd": "SD",
    "population_sd": "Population SD",
    "n": "n",
    "effective_n": "Effective n",
    "cnr": "CNR",
    "npw": "NPW",
    "npwe": "NPWE",
    "auc": "AUC",
    "snr": "SNR",
    "mtf": "MTF",
    "esf": "ESF",
    "lsf": "LSF",
    "psf": "PSF",
    "ssp": "SSP",
    "fwhm": "FWHM",
    "fwtm": "FWTM",
    "f50": "f50",
    "f10": "f10",
    "f2": "f2",
}


def label_of(name: str) -> str:
    """Return what tables and pages call a field, the same everywhere.

    >>> label_of("sd"), label_of("peak_frequency"), label_of("pixel_sd")
    ('SD', 'Peak frequency', 'Pixel SD')
    """
    words = [_LABELS.get(word, word) for word in name.split("_")]
    words[0] = _LABELS.get(words[0], words[0][:1].upper() + words[0][1:])
    return _LABELS.get(name, " ".join(words))


def _fields_of(result: Any, kind: type[_T]) -> dict[str, _T]:
    found = {}
    for field in fields(result):
        value = getattr(result, field.name)
        if isinstance(value, kind):
            found[field.name] = value
    return found


def quantities_of(result: Result) -> dict[str, Quantity]:
    """Return the result's Quantities by field name, in the order they were declared."""
    return _fields_of(result, Quantity)


def curves_of(result: Result) -> dict[str, Curve]:
    """Return the result's Curves by field name, in the order they were declared."""
    return _fields_of(result, Curve)


def pictures_of(result: Result) -> dict[str, Picture]:
    """Return the result's Pictures by field name, in the order they were declared."""
    return _fields_of(result, Picture)
