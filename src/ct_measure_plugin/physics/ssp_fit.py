"""All slice profiles that agree with readings of one: the best, and how far the others differ.

Readings far apart along z leave the shape between them open, and a width read off one shape alone
would state too small an uncertainty. So many are tried, and a number is uncertain by what it
differs among those that agree.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import linalg, special

from ct_measure_plugin.physics.ssp_blur import FWHM
from ct_measure_plugin.physics.ssp_shapes import MOST_ROUND, MOST_SPLIT, MOST_TAIL, Shapes

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.ssp_blur import Blur
    from ct_measure_plugin.physics.ssp_samples import SspSamples

    Floats = NDArray[np.float64]

__all__ = ["Agreeing", "fit_shapes"]

#: Unknowns: middle, logarithm of the SD, the two angles of the shape, share of the tails.
UNKNOWNS = 5

#: Angles and tails of the shapes from which a best one is sought: the corners and edges of their
#: range and some within; steps of all, and of the best few thereafter.
STARTS = np.array(
    [(0.0, 0.0, 0.0), (0.0, 0.0, 0.1), (1.35, 0.25, 0.1)]
    + [(x, y, 0.0) for x in (0.8, 1.35, MOST_ROUND) for y in (0.0, 0.25, 0.5, MOST_SPLIT)],
)
STEPS, FEW, MORE = 6, 4, 20

#: Steps shorter than this share of the range are no longer taken.
DONE = 1e-6

#: Rounds of trials, how many each, and about how many of those that agree they are drawn.
ROUNDS, TRIALS, CENTRES = 6, 240, 26

#: Frequencies, over the SD, whose MTF a search drives to its ends: f50 and f10 of a Gaussian.
TOLD_BY = np.array([0.187, 0.342])

#: Spread of the trials of each round, as a share of that of those that agree.
KERNEL = (1.5, 1.2, 1.0, 0.8, 0.6, 0.4)

#: A profile agrees if its chi-squared is above the least by less than this; the 95 % quantile.
AGREES, NINETY_FIVE = 9.0, 1.959964

#: Readings are not trusted beyond this share of the height, nor a misfit beyond this chance.
TRUSTED, CHANCE = 2e-3, 0.01

#: Trials reach this far from the first guess: the middle by this share of the width, the SD by
#: these factors of a Gaussian's.
PLACES, NARROWEST, WIDEST = 0.8, 0.25, 1.8


@dataclass(frozen=True, slots=True, eq=False)
class Agreeing:
    """Profiles that agree with the readings, the best of them first.

    Attributes
    ----------
    shapes : Shapes
        k of them, without what the object added.
    middle, height : ndarray, shape (k,)
        Their middles and heights.
    height_doubt : float
        Standard uncertainty of the best's height, the rest given.
    excess : ndarray, shape (k,)
        Chi-squared above the best's, over the surplus.
    covariance, steps : ndarray, shapes (5, 5) and (5,)
        Of the best's unknowns; the last five profiles differ from the best by a step in each. The
        one before them is the best for another resolution in the slice.
    surplus : float
        Factor on the variance of the noise: above 1 where no shape fits within it.
    misfit : float
        RMS of what the best leaves of the readings, over its height.
    base : float
        What the readings share.
    """

    shapes: Shapes
    middle: Floats
    height: Floats
    height_doubt: float
    excess: Floats
    covariance: Floats
    steps: Floats
    surplus: float
    misfit: float
    base: float

    def told(self, values: Floats) -> tuple[Floats, Floats]:
        """Return the best's of values, shape (k, ...), and their standard uncertainty.

        The largest difference from the best, over 1.96, among profiles that agree at 95 %, whose
        chi-squared is higher by 1.96² at most; those a little beyond count too, by their
        difference over the root of that excess, since trials do not lie on the border. The
        covariance of the best carried through, if that is larger, but by a fifth at most: trials
        miss the very ends, while to first order a box's samples say nothing of its width. To this
        is added what the uncertainty of the resolution in the slice does.
        """
        best = values[0]
        scale = np.maximum(np.sqrt(np.maximum(self.excess, 0.0)), NINETY_FIVE)
        scale = scale.reshape(-1, *(1,) * (values.ndim - 1))
        among = np.max(np.abs(values - best) / scale, axis=0)
        slopes = np.tensordot(np.diag(1 / self.steps), values[-UNKNOWNS:] - best, 1)
        linear = np.einsum("i...,ij,j...->...", slopes, self.covariance, slopes)
        linear = np.sqrt(np.maximum(linear, 0.0))
        if len(self.excess) >= TRIALS / 8:
            linear = np.minimum(linear, 1.2 * among)
        return best, np.hypot(np.maximum(among, linear), values[-UNKNOWNS - 1] - best)


def fit_shapes(
    samples: SspSamples, blur: Blur, middle: float, width: float, *, base: bool
) -> Agreeing:
    """Return the profiles that agree with readings, about a first guess of middle and width.

    Parameters
    ----------
    samples : SspSamples
        The readings with their covariance.
    blur : Blur
        What widens them besides the slice.
    middle, width : float
        The first guess, mm.
    base : bool
        True if the readings may all be off by the same amount.

    Notes
    -----
    Height and base follow from each trial of middle, SD and shape by generalised least squares.
    Least squares solutions are sought from several shapes; about the best, trials are drawn, then
    about those that agree, above all those whose widths differ most: a search for the ends of
    profile likelihood intervals. The trials come from a fixed sequence that fills space evenly, so
    that the same readings give the same answer and nearly the same ones nearly the same.
    """
    problem = _Problem(samples, blur, middle, width, base=base)
    points, covariance = problem.solutions()
    fits = problem.fits(points)
    for turn in range(ROUNDS):
        surplus = problem.surplus(float(fits[0].min()))
        agree = (fits[0] - fits[0].min()) / surplus < AGREES
        points, fits = points[agree], fits[:, agree]
        centres = points[problem.telling(points, (fits[0] - fits[0].min()) / surplus)]
        if len(points) < TRIALS / 8:  # the covariance asks for too wide a step
            scale, spread = KERNEL[0] / 3**turn, covariance * surplus
        else:
            scale, spread = KERNEL[turn], np.cov(points.T)
        factor = linalg.cholesky(spread + np.diag(1e-12 * problem.size**2), lower=True)
        normal = special.ndtri(_even(TRIALS, turn)) * scale
        drawn = problem.within(centres[np.arange(TRIALS) % len(centres)] + normal @ factor.T)
        points, fits = np.vstack([points, drawn]), np.hstack([fits, problem.fits(drawn)])
    return problem.answer(points, fits)


class _Problem:
    """The readings, whitened, and the range of the unknowns."""

    def __init__(
        self, samples: SspSamples, blur: Blur, middle: float, width: float, *, base: bool
    ) -> None:
        self.blur = blur
        self.z, middle, width = np.round(samples.z, 9), round(middle, 9), round(width, 9)
        scale = 2.0 ** math.ceil(math.log2(float(np.ptp(samples.value))))
        self.read = _rounded(samples.value, scale)
        n = len(samples.z)
        floor = (TRUSTED * float(np.ptp(self.read))) ** 2 * np.eye(n)
        trusted = _rounded(samples.covariance, scale**2) + floor
        self.whiten = linalg.solve_triangular(
            linalg.cholesky(trusted, lower=True), np.eye(n), lower=True
        )
        if base:  # whatever the readings share is left out of them
            shared = self.whiten.sum(axis=1)
            shared /= math.sqrt(float(shared @ shared))
            self.whiten -= np.outer(shared, shared @ self.whiten)
        self.value = self.whiten @ self.read
        self.freedom = max(n - UNKNOWNS - 1 - int(base), 1)
        self.base = base
        reach = PLACES * max(width, float(np.diff(samples.z).max()))
        self.start = np.array([middle, math.log(width / FWHM)])
        low, high = math.log(NARROWEST), math.log(WIDEST)
        self.low = np.array([middle - reach, self.start[1] + low, 0.0, 0.0, 0.0])
        ends = (MOST_ROUND, MOST_SPLIT, MOST_TAIL)
        self.high = np.array([middle + reach, self.start[1] + high, *ends])
        self.size = self.high - self.low

    def within(self, points: Floats) -> Floats:
        found: Floats = np.clip(points, self.low, self.high)
        return found

    def shapes(self, points: Floats) -> Shapes:
        return Shapes.of_spread(np.exp(points[:, 1]), *points[:, 2:].T)

    def forms(self, points: Floats) -> tuple[Floats, Floats]:
        """Return what readings each trial expects, whitened, and its best height."""
        shapes = self.shapes(points)
        form = shapes.at(self.z - points[:, :1], self.blur) / shapes.at(np.zeros(1), self.blur)
        form = form @ self.whiten.T
        return form, form @ self.value / np.maximum(np.sum(form**2, axis=1), 1e-30)

    def left(self, points: Floats) -> Floats:
        form, height = self.forms(points)
        found: Floats = self.value - height[:, None] * form
        return found

    def fits(self, points: Floats) -> Floats:
        """Return chi-squared and height of each trial, (2, k)."""
        form, height = self.forms(points)
        chi2 = np.sum((self.value - height[:, None] * form) ** 2, axis=1)
        return np.stack([chi2, height])

    def surplus(self, least: float) -> float:
        """Return chi-squared over its freedom where noise seldom explains it, else 1."""
        rare = special.chdtrc(self.freedom, least) < CHANCE
        return max(1.0, least / self.freedom) if rare else 1.0

    def telling(self, points: Floats, excess: Floats) -> NDArray[np.intp]:
        """Return the best, those whose numbers differ most from its, and some of the others."""
        shapes = self.shapes(points)
        best = int(np.argmin(excess))
        numbers = np.column_stack(
            [
                shapes.widths(0.5),
                shapes.widths(0.1),
                shapes.spectra(TOLD_BY / np.exp(self.start[1])),
                points[:, 0],
            ]
        )
        score = (numbers - numbers[best]) / np.maximum(np.sqrt(excess), NINETY_FIVE)[:, None]
        ends = np.concatenate([score.argmin(axis=0), score.argmax(axis=0)])
        others = np.linspace(0, len(points) - 1, max(CENTRES - len(ends) - 1, 1)).astype(np.intp)
        return np.concatenate([[best], ends, others])

    def solutions(self) -> tuple[Floats, Floats]:
        """Return least squares solutions from all starts, (k, 5), and the best's covariance."""
        unit = Shapes.of_spread(np.ones(len(STARTS)), *STARTS.T)
        spread = self.start[1] + np.log(FWHM / unit.widths(0.5))
        start = np.column_stack([np.full(len(STARTS), self.start[0]), spread, STARTS])
        points = self.descended(self.within(start), STEPS)
        few = np.argsort(self.fits(points)[0], kind="stable")[:FEW]
        points = np.vstack([points, self.descended(points[few], MORE)])
        best = int(np.argmin(self.fits(points)[0]))
        return points, self.covariance(points[best])

    def descended(self, points: Floats, steps: int) -> Floats:
        """Return points after damped Gauss-Newton steps; those at an end of the range slide on."""
        damp = np.full(len(points), 1e-2)
        left = self.left(points)
        for _ in range(steps):
            jacobian = self.jacobian(points, left)
            slope = np.einsum("kni,kn->ki", jacobian, left)
            held = (points <= self.low) & (slope > 0) | (points >= self.high) & (slope < 0)
            jacobian *= ~held[:, None, :]
            normal = jacobian.transpose(0, 2, 1) @ jacobian
            extra = damp[:, None, None] * normal * np.eye(UNKNOWNS) + np.diag(1e-4 / self.size**2)
            step = np.linalg.solve(normal + extra, (slope * ~held)[..., None])[..., 0]
            moved = self.within(points - step)
            after = self.left(moved)
            better = np.sum(after**2, axis=1) < np.sum(left**2, axis=1)
            points = np.where(better[:, None], moved, points)
            left = np.where(better[:, None], after, left)
            damp = np.clip(np.where(better, damp / 6, damp * 8), 1e-9, 1e9)
            if bool((np.abs(step) < DONE * self.size).all()):
                break
        return points

    def inward(self, points: Floats) -> Floats:
        """Return a small step of each unknown that stays in its range."""
        found: Floats = np.where(points > self.low + self.size / 2, -1e-4, 1e-4) * self.size
        return found

    def jacobian(self, points: Floats, left: Floats) -> Floats:
        """Return the derivatives of the residuals, (k, n, 5)."""
        step = self.inward(points)
        moved = points[:, None] + step[:, None] * np.eye(UNKNOWNS)
        after = self.left(moved.reshape(-1, UNKNOWNS)).reshape(len(points), UNKNOWNS, -1)
        found: Floats = ((after - left[:, None]) / step[..., None]).transpose(0, 2, 1)
        return found

    def covariance(self, point: Floats) -> Floats:
        jacobian = self.jacobian(point[None], self.left(point[None]))[0]
        # nothing is more uncertain than its range
        found: Floats = np.linalg.inv(jacobian.T @ jacobian + np.diag(12 / self.size**2))
        return found

    def other(self, best: Floats) -> Floats:
        """Return the best, (1, 5), for a resolution in the slice lower by its uncertainty."""
        if self.blur.within == 0:
            return best
        blur, self.blur = self.blur, self.blur.doubted()
        found = self.descended(best, MORE)
        self.blur = blur
        return found

    def answer(self, points: Floats, fits: Floats) -> Agreeing:
        """Return the best, descended once more, what agrees, and the best's neighbours."""
        order = np.argsort(fits[0], kind="stable")
        first = self.descended(points[order[:1]], MORE)
        step = self.inward(first[0])
        last = np.vstack([self.other(first), first + np.diag(step)])
        points = np.vstack([first, points[order], last])
        chi2, height = np.hstack([self.fits(first), fits[:, order], self.fits(last)])
        surplus = self.surplus(float(chi2[0]))
        excess = np.maximum(chi2 - chi2[0], 0.0) / surplus
        excess[-UNKNOWNS - 1] = np.inf  # no alternative for the same blur
        kept = excess < AGREES
        kept[-UNKNOWNS - 1 :] = True
        shape = self.shapes(points[:1])
        read = shape.at(self.z - points[0, 0], self.blur) / shape.at(np.zeros(1), self.blur)
        rest = self.read - height[0] * read[0]
        level = float(rest.mean()) if self.base else 0.0
        return Agreeing(
            shapes=self.shapes(points[kept]),
            middle=points[kept, 0],
            height=height[kept],
            height_doubt=math.sqrt(surplus / float(np.sum(self.forms(first)[0] ** 2))),
            excess=excess[kept],
            covariance=self.covariance(points[0]) * surplus,
            steps=step,
            surplus=surplus,
            misfit=math.sqrt(float(np.mean((rest - level) ** 2))) / abs(float(height[0])),
            base=level,
        )


def _rounded(values: Floats, scale: float) -> Floats:
    """Return values to 1e-10 of a scale.

    A search takes other turns for another last bit; what differs by rounding alone, as an image
    does whose zero was moved, shall have the same answer.
    """
    found: Floats = np.round(values / scale, 10) * scale
    return found


def _even(count: int, turn: int) -> Floats:
    """Return points that fill the unit cube of five dimensions evenly, (count, 5)."""
    root = 1.1347241384015194  # of x⁶ = x + 1: additive recurrence, as the golden ratio in one
    steps = root ** -np.arange(1.0, UNKNOWNS + 1)
    found: Floats = (0.5 + np.outer(np.arange(1, count + 1) + turn * count, steps)) % 1.0
    return found
