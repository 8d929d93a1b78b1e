"""Every label of a label map as a row of one table, with uncertainties."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal, TypeAlias, get_args

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.first_order import LARGEST, SMALLEST, Moments, why_unusable
from ct_measure_plugin.physics.label_numbers import LabelNumbers, label_numbers, label_quantiles
from ct_measure_plugin.physics.noise_correlation import (
    MeanDoubt,
    doubt_of_mean,
    doubt_of_samples,
)
from ct_measure_plugin.physics.quantisation import single_value
from ct_measure_plugin.physics.region_masks import boxes_of
from ct_measure_plugin.physics.region_numbers import mean_and_sd
from ct_measure_plugin.physics.region_statistics import FEW_PIXELS, FEW_SAMPLES
from ct_measure_plugin.physics.results import Caution, NotMeasured, Quantity, Result

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["LabelRow", "LabelStatistics", "NoiseModel", "label_statistics"]

#: How the pixels of a label are taken to depend on each other; "none" states no uncertainty.
NoiseModel: TypeAlias = Literal["region", "independent", "none"]

#: The quantiles of a row, and where they stand.
_AT = (0.1, 0.25, 0.5, 0.75, 0.9)
_NAMES = ("p10", "p25", "median", "p75", "p90")


@dataclass(frozen=True, slots=True, kw_only=True)
class LabelRow:
    """One label.

    Attributes
    ----------
    name : str
        What people call it.
    label : int
        Its number.
    n : Quantity
        Pixels with a finite value.
    size : Quantity
        Their area in mm² (flat map) or volume in mm³.
    mean, sd, minimum, maximum, median, p10, p25, p75, p90, skewness, kurtosis : Quantity or str
        As in :class:`~ct_measure_plugin.physics.region_statistics.RegionStatistics`; an empty text
        where a label has no pixel with a value, and for the SD of a single one.
    """

    name: str
    label: int
    n: Quantity
    size: Quantity
    mean: Quantity | str = ""
    sd: Quantity | str = ""
    minimum: Quantity | str = ""
    maximum: Quantity | str = ""
    median: Quantity | str = ""
    p10: Quantity | str = ""
    p25: Quantity | str = ""
    p75: Quantity | str = ""
    p90: Quantity | str = ""
    skewness: Quantity | str = ""
    kurtosis: Quantity | str = ""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LabelStatistics(Result):
    """All labels of a map.

    Attributes
    ----------
    count : Quantity
        How many labels there are.
    n, size : Quantity
        Their pixels with a finite value, and their area or volume, together.
    labels : tuple of LabelRow
        One a label, by number.
    """

    count: Quantity
    n: Quantity
    size: Quantity
    labels: tuple[LabelRow, ...]


def label_statistics(
    values: NDArray[Any],
    labels: NDArray[Any],
    *,
    spacing_mm: tuple[float, ...],
    unit: str = "HU",
    names: Mapping[int, str] | None = None,
    noise: NoiseModel = "region",
) -> LabelStatistics | NotMeasured:
    """Return the first-order statistics of every label.

    Parameters
    ----------
    values : ndarray, shape (ny, nx) or (nz, ny, nx)
        CT numbers.
    labels : ndarray of int, same shape
        0 is background.
    spacing_mm : tuple of float
        Step along each axis.
    unit : str
        Unit of the values.
    names : mapping of int to str, optional
        What labels are called; by default "label 7".
    noise : {"region", "independent", "none"}
        "region": each label's standard error from its own noise, as for any region, about a
        millisecond a label and slice. "independent": pixels are taken as independent, at once, and
        wrong where noise is correlated. "none": numbers without uncertainties.

    Returns
    -------
    LabelStatistics or NotMeasured
        NotMeasured if there is no label, or the values' powers are beyond computer arithmetic.

    Raises
    ------
    ArgumentError
        If shapes differ, the labels are not whole numbers, or the noise is none of the three.

    Examples
    --------
    >>> image = np.array([[3, 5, 7], [1, 1, 9]])
    >>> found = label_statistics(image, np.array([[1, 1, 1], [0, 4, 4]]), spacing_mm=(1.0, 1.0))
    >>> [(row.label, row.mean.value, str(row.size)) for row in found.labels]
    [(1, 5.0, '3 mm²'), (4, 5.0, '2 mm²')]
    """
    if noise not in get_args(NoiseModel):
        raise ArgumentError("noise", "must be 'region', 'independent' or 'none'", noise)
    if values.ndim not in (2, 3) or len(spacing_mm) != values.ndim:
        raise ArgumentError("spacing_mm", f"must hold {values.ndim} lengths", spacing_mm)
    found = label_numbers(values, labels, percentiles=tuple(100 * at for at in _AT))
    if not len(found.label):
        return NotMeasured("the label map holds no label", "paint one, or choose another map")
    if why := _unusable(found):
        return NotMeasured(*why)
    called = names or {}
    doubts = _doubts(found, values, labels, tuple(spacing_mm), noise)
    spreads = None if doubts is None else _spreads(found, doubts)
    kept = _Writer(math.prod(spacing_mm), "mm²" if values.ndim == 2 else "mm³", unit)
    rows = tuple(
        kept.row(
            found,
            i,
            called.get(number, f"label {number}"),
            None if doubts is None else doubts[i],
            None if spreads is None else spreads[i],
        )
        for i, number in enumerate(found.label.tolist())
    )
    total = float(found.n.sum())
    return LabelStatistics(
        count=Quantity(float(len(rows)), "", 0.0),
        n=Quantity(total, "px", 0.0),
        size=Quantity(total * kept.pixel, kept.size_unit, 0.0),
        labels=rows,
        cautions=tuple(_cautions(found, doubts, noise)),
    )


def _unusable(found: LabelNumbers) -> tuple[str, str] | None:
    """Return why one of the labels has no statistics, and the remedy."""
    ends = np.stack([found.minimum, found.maximum], axis=1)
    spread = ends[:, 1] - ends[:, 0]
    bad = (np.abs(ends) > LARGEST).any(axis=1) | ((spread > 0) & (spread < SMALLEST))
    for i in np.flatnonzero(bad)[:1]:
        if why := why_unusable(ends[i]):
            return why[0].replace("the region", f"label {found.label[i]}"), why[1]
    return None


@dataclass(frozen=True, slots=True)
class _Writer:
    """Makes rows of one map."""

    pixel: float
    size_unit: str
    unit: str

    def row(
        self,
        found: LabelNumbers,
        i: int,
        name: str,
        doubt: MeanDoubt | None,
        spread: Floats | None,
    ) -> LabelRow:
        n = int(found.n[i])
        head: dict[str, Any] = {
            "name": name,
            "label": int(found.label[i]),
            "n": Quantity(float(n), "px", 0.0),
            "size": Quantity(n * self.pixel, self.size_unit, 0.0),
        }
        if not n:
            return LabelRow(**head)
        order: dict[str, Any] = {
            called: Quantity(
                float(found.percentiles[i, k]),
                self.unit,
                None if spread is None else float(spread[k]),
            )
            for k, called in enumerate(_NAMES)
        }
        return LabelRow(
            **head,
            **self._mean_and_sd(found, i, doubt),
            **order,
            minimum=Quantity(float(found.minimum[i]), self.unit),
            maximum=Quantity(float(found.maximum[i]), self.unit),
        )

    def _mean_and_sd(self, found: LabelNumbers, i: int, doubt: MeanDoubt | None) -> dict[str, Any]:
        numbers = {
            "mean": Quantity(float(found.mean[i]), self.unit),
            "skewness": Quantity(float(found.skewness[i]), ""),
            "kurtosis": Quantity(float(found.kurtosis[i]), ""),
        }
        if found.n[i] < 2:
            return numbers
        if doubt is None:
            return {**numbers, "sd": Quantity(float(found.sd[i]), self.unit)}
        _, u_mean, sd, u_sd = mean_and_sd(
            _moments(found, i), int(found.n[i]), doubt, float(found.whole[i])
        )
        nu = max(doubt.power_samples, 2.0)
        return {
            "mean": Quantity(float(found.mean[i]), self.unit, u_mean),
            "sd": Quantity(sd, self.unit, u_sd),
            "skewness": Quantity(float(found.skewness[i]), "", math.sqrt(6.0 / nu)),
            "kurtosis": Quantity(float(found.kurtosis[i]), "", math.sqrt(24.0 / nu)),
        }


def _moments(found: LabelNumbers, i: int) -> Moments:
    m2, n = float(found.population_sd[i]) ** 2, float(found.n[i])
    m3 = float(found.skewness[i]) * m2**1.5
    m4 = (float(found.kurtosis[i]) + 3.0) * m2**2
    return Moments(float(found.mean[i]), m2, m3, m4, n, n)


def _doubts(
    found: LabelNumbers,
    values: NDArray[Any],
    labels: NDArray[Any],
    steps: tuple[float, ...],
    noise: NoiseModel,
) -> list[MeanDoubt | None] | None:
    """Return the doubt of each label's mean, None for one with fewer than two pixels."""
    if noise == "none":
        return None
    if noise == "independent":
        return [
            doubt_of_samples(float(found.sd[i]) ** 2, float(found.n[i])) if found.n[i] > 1 else None
            for i in range(len(found.label))
        ]
    return [
        doubt if n > 1 else None
        for n, doubt in zip(found.n, _by_region(found, values, labels, steps), strict=True)
    ]


def _by_region(
    found: LabelNumbers, values: NDArray[Any], labels: NDArray[Any], steps: tuple[float, ...]
) -> Iterator[MeanDoubt | None]:
    numbers = tuple(found.label.tolist())
    for i, box in enumerate(boxes_of(labels, numbers)):
        if found.n[i] < 2:
            yield None
            continue
        inside = (labels[box] == numbers[i]).astype(float)
        own = np.asarray(values[box], float)
        finite = np.isfinite(own)
        if not finite.all():
            own, inside = np.where(finite, own, 0.0), np.where(finite, inside, 0.0)
        if own.ndim == 3 and len(own) == 1:
            own, inside = own[0], inside[0]
        yield doubt_of_mean(own, inside, steps[-own.ndim :])


def _spreads(found: LabelNumbers, doubts: list[MeanDoubt | None]) -> Floats:
    """Return the uncertainty of each quantile of each label, as a region's are found."""
    at = np.tile(np.asarray(_AT), (len(doubts), 1))
    effective = found.n.astype(float)
    for i, doubt in enumerate(doubts):
        if doubt is not None and doubt.variance_of_mean > 0:
            effective[i] = min(float(found.sd[i]) ** 2 / doubt.variance_of_mean, effective[i])
    reach = np.sqrt(at * (1 - at) / np.maximum(effective, 1.0)[:, None])
    high, low = label_quantiles(found, at + reach), label_quantiles(found, at - reach)
    spread: Floats = np.hypot((high - low) / 2, single_value(1.0) * found.whole[:, None])
    return spread


def _cautions(
    found: LabelNumbers, doubts: list[MeanDoubt | None] | None, noise: NoiseModel
) -> Iterator[Caution]:
    yield Caution(
        "no-uncertainty",
        "Minimum, maximum and single pixels describe these pixels only; no uncertainty is stated."
        if doubts is not None
        else "No uncertainties were asked for.",
    )
    if noise == "independent":
        yield Caution("independence-assumed", "The pixels were taken as independent samples.")
    if lost := int(found.lost.sum()):
        yield Caution(
            "not-finite",
            f"{lost} pixels of the labels hold no finite value and were left out.",
            "Look where they come from.",
        )
    if few := int(np.count_nonzero(found.n < FEW_PIXELS)):
        yield Caution(
            "few-pixels",
            f"{few} of {len(found.n)} labels hold fewer than {FEW_PIXELS} pixels.",
            "Read their spread with care.",
        )
    smooth = [d for d in doubts or () if d is not None and d.reach > 0]
    if scarce := sum(d.power_samples < FEW_SAMPLES for d in smooth):
        yield Caution(
            "few-independent-samples",
            f"{scarce} of {len(found.n)} labels hold fewer than {FEW_SAMPLES:.0f} independent noise"
            " samples; their standard errors are themselves uncertain.",
            "Read them with care.",
        )
