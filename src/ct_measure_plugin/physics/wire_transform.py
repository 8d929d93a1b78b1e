"""The transform of a wire's cross-section about its centre, and its noise.

Every value of the transform is a weighted sum of pixels, so that its variance is the noise power
times the squared transform of the weights, with the background's subtraction among them.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import special

from ct_measure_plugin.physics.wire_rings import ring_areas

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.edge_noise import NoiseSpectrum
    from ct_measure_plugin.physics.wire_trace import WireTrace

    Floats = NDArray[np.float64]

__all__ = [
    "Section",
    "cut_sections",
    "object_transfer",
    "phase_weights",
    "transform",
]

#: Background: from this share of the half-width of the box outwards. Signal: within this share,
#: tapered from the second.
INSIDE, TAPERED = 0.72, 0.8

#: Frequencies at which the noise is evaluated; between them it is interpolated.
NOISE_STEPS = 41

#: Factor of variance that weights which cancel folding may cost.
MOST_WEIGHT_NOISE = 2.0


@dataclass(frozen=True, slots=True, eq=False)
class Section:
    """A wire's cross-section on one slice.

    Attributes
    ----------
    value : ndarray, shape (ny, nx)
        Pixels less their background.
    down, right : ndarray, shape (ny, 1) and (1, nx)
        Distances from the wire's centre, mm.
    taper : ndarray, shape (ny, nx)
        1 near the wire, falling to 0 at the end of what is transformed.
    outside : ndarray of bool, shape (ny, nx)
        Pixels that the background was fitted to.
    planes : ndarray, shape (3, ny, nx)
        The background's columns; ``weights - gather @ ...`` is how it enters, see `effective`.
    reach : float
        Radius of what is transformed, mm.
    """

    value: Floats
    down: Floats
    right: Floats
    taper: Floats
    outside: NDArray[np.bool_]
    planes: Floats
    reach: float

    @property
    def radius(self) -> Floats:
        """Distance of every pixel from the wire, mm."""
        found: Floats = np.hypot(self.down, self.right)
        return found

    def effective(self, weights: Floats) -> Floats:
        """Return how the raw pixels enter a sum whose weights, (k, ny, nx), are given.

        The background is a plane fitted to the pixels outside.
        """
        columns = self.planes.reshape(3, -1)
        used = columns * self.outside.ravel()
        share = weights.reshape(len(weights), -1) @ columns.T
        back = np.linalg.solve(used @ used.T, used)
        found: Floats = weights - (share @ back).reshape(weights.shape)
        return found


def cut_sections(
    stack: Floats, trace: WireTrace, spacing_mm: tuple[float, float], reach: float | None = None
) -> list[Section]:
    """Return the sections of a wire in slices, shape (nz, ny, nx)."""
    ny, nx = stack.shape[1:]
    dy, dx = spacing_mm
    half = np.array([(ny - 1) / 2 * dy, (nx - 1) / 2 * dx])
    room = float(np.min(half - np.abs(trace.centers)))
    inside = INSIDE * room if reach is None else min(reach, INSIDE * room)
    sections = []
    for plane, (cy, cx) in zip(stack, trace.centers, strict=True):
        down = ((np.arange(ny) - (ny - 1) / 2) * dy - cy)[:, None]
        right = ((np.arange(nx) - (nx - 1) / 2) * dx - cx)[None, :]
        radius = np.hypot(down, right)
        planes = np.stack(np.broadcast_arrays(np.ones((ny, nx)), down, right))
        mix, outside = _background(plane, planes, (radius > INSIDE * room) & (radius <= room))
        edge = np.clip((inside - radius) / ((1 - TAPERED) * inside), 0.0, 1.0)
        sections.append(
            Section(
                plane - np.tensordot(mix, planes, 1),
                down,
                right,
                0.5 - 0.5 * np.cos(math.pi * edge),
                outside,
                planes,
                inside,
            )
        )
    return sections


def _background(
    plane: Floats, planes: Floats, ring: NDArray[np.bool_]
) -> tuple[Floats, NDArray[np.bool_]]:
    """Return the plane through a ring of pixels, and those of them that do not depart from it.

    Pixels more than four robust SDs away are left out, three times over: a neighbour in the ring
    must not tilt the background.
    """
    kept = ring
    mix: Floats = np.zeros(3)
    for _ in range(4):
        mix = np.asarray(np.linalg.lstsq(planes[:, kept].T, plane[kept], rcond=None)[0])
        left = plane - np.tensordot(mix, planes, 1)
        middle = float(np.median(left[ring]))
        spread = 1.4826 * float(np.median(np.abs(left[ring] - middle)))
        next_kept = ring & (np.abs(left - middle) <= 4 * spread)
        if spread == 0 or int(next_kept.sum()) < 0.3 * int(ring.sum()):
            break
        kept = next_kept
    return mix, kept


def transform(
    sections: list[Section],
    frequency: Floats,
    spacing_mm: tuple[float, float],
    spectrum: NoiseSpectrum,
    *,
    direction_deg: float | None = None,
    ring_mm: float | None = None,
    slice_weights: Floats | None = None,
) -> tuple[Floats, Floats]:
    """Return MTF and standard uncertainty at frequencies in mm⁻¹, for independent slices.

    Parameters
    ----------
    sections : list of Section
        One a slice.
    frequency : ndarray, shape (k,)
        Frequencies, the first 0.
    spacing_mm : (float, float)
        dy, dx.
    spectrum : NoiseSpectrum
        Of the pixels.
    direction_deg : float, optional
        Direction of the frequencies, counter-clockwise on the screen from +x; by default the mean
        over all directions.
    ring_mm : float, optional
        Weigh pixels by the area of the rings that they stand for in all slices together, rather
        than all alike; sums are exact of all that is smooth over this length.

    Notes
    -----
    The two-dimensional transform about the centre of symmetry is real; its real part is not biased
    by noise as its modulus would be. Averaged over directions it is a sum with J0(2πfr).
    """
    sums = Sums(sections, spacing_mm, spectrum, ring_mm, slice_weights)
    mtf = sums.mtf(frequency, direction_deg)
    few = np.linspace(0, frequency[-1], NOISE_STEPS)
    doubt = sums.doubt(few, np.interp(few, frequency, mtf), direction_deg)
    return mtf, np.interp(frequency, few, doubt)


class Sums:
    """The weighted sums of a wire's pixels that are its transform; see :func:`transform`."""

    def __init__(
        self,
        sections: list[Section],
        spacing_mm: tuple[float, float],
        spectrum: NoiseSpectrum,
        ring_mm: float | None,
        slice_weights: Floats | None,
    ) -> None:
        even = np.full(len(sections), 1 / len(sections))
        self._each = even if slice_weights is None or ring_mm is not None else slice_weights
        if ring_mm is not None:
            areas = ring_areas(sections, ring_mm)
        else:
            cell = spacing_mm[0] * spacing_mm[1]
            areas = [np.full(sections[0].value.shape, cell * w) for w in self._each]
        self._shares = [area * s.taper for area, s in zip(areas, sections, strict=True)]
        self._sections, self._spectrum = sections, spectrum
        self._values = np.concatenate(
            [(w * s.value)[s.taper > 0] for w, s in zip(self._shares, sections, strict=True)]
        )
        self._total = float(self._values.sum())

    def mtf(self, frequency: Floats, direction_deg: float | None) -> Floats:
        """Return the MTF at even frequencies from 0."""
        places = [_place(s, direction_deg)[s.taper > 0] for s in self._sections]
        total = _summed(np.concatenate(places), self._values, frequency, direction_deg)
        return total / self._total

    def doubt(self, frequency: Floats, mtf: Floats, direction_deg: float | None) -> Floats:
        """Return the standard uncertainty of the MTF at any frequencies.

        The noise of the slice that weighs most stands for every slice's.
        """
        k = int(np.argmax(np.abs(self._each)))
        section, share = self._sections[k], self._shares[k]
        waves = _wave(frequency[:, None, None] * _place(section, direction_deg), direction_deg)
        weights = section.effective((waves - mtf[:, None, None]) * share) / self._total
        variance = self._spectrum.variance_of_sums(weights)
        found: Floats = np.sqrt(variance * float(np.sum((self._each / self._each[k]) ** 2)))
        return found


def _place(section: Section, direction_deg: float | None) -> Floats:
    """Return every pixel's distance from the wire, all around or along a direction, mm."""
    if direction_deg is None:
        return section.radius
    angle = math.radians(direction_deg)
    found: Floats = np.abs(math.cos(angle) * section.right - math.sin(angle) * section.down)
    return found


def _wave(cycles: Floats, direction_deg: float | None) -> Floats:
    turn = 2 * math.pi * cycles
    found: Floats = special.j0(turn) if direction_deg is None else np.cos(turn)
    return found


def _summed(place: Floats, value: Floats, frequency: Floats, direction_deg: float | None) -> Floats:
    """Return the sums of values times waves, gathered in so fine steps of place that none moves.

    Steps of 1/200 of the shortest wave, each at the mean place of its pixels: 4e-5 of the sum.
    """
    step = 1 / (200 * float(frequency[-1]))
    k = np.rint(place / step).astype(np.intp)
    count = np.bincount(k)
    used = count > 0
    middle = np.bincount(k, place)[used] / count[used]
    found: Floats = _wave(np.outer(frequency, middle), direction_deg) @ np.bincount(k, value)[used]
    return found


def phase_weights(trace: WireTrace, spacing_mm: tuple[float, float]) -> tuple[Floats, float]:
    """Return weights of slices that cancel the folded spectra, and which share of these is left.

    A wire at (y, x) on the pixel grid folds its spectrum back with the phases 2π(a y + b x) for
    whole a and b. Weights of least noise are sought that leave none of the eight nearest; one
    slice, or slices at one place of the grid, leave all: 1.
    """
    turns = trace.centers / np.asarray(spacing_mm)
    orders = np.array([(1, 0), (0, 1), (1, 1), (1, -1)])
    wave = np.exp(2j * math.pi * (orders @ turns.T))
    rows = np.vstack([np.ones(len(turns)), wave.real, wave.imag])
    wanted = np.zeros(len(rows))
    wanted[0] = 1.0
    # a share of 2e-3 of a folded spectrum harms no level; noise is not spent on less
    weights = rows.T @ np.linalg.solve(rows @ rows.T + 2e-3 * np.eye(len(rows)), wanted)
    weights /= weights.sum()
    if len(turns) * float(np.sum(weights**2)) > MOST_WEIGHT_NOISE:
        weights = np.full(len(turns), 1 / len(turns))
    return weights, float(np.abs(wave @ weights).max())


def object_transfer(frequency: Floats, diameter: float, shape: str) -> Floats:
    """Return the transform of a wire's or bead's own cross-section, 1 at frequency 0.

    A cylinder of diameter D gives ``2 J1(x)/x`` and a sphere ``3 (sin x - x cos x)/x³``, x = πDf.

    >>> object_transfer(np.array([1.0]), 0.2, "wire").round(4)
    array([0.9515])
    >>> object_transfer(np.array([1.0]), 0.28, "bead").round(4)
    array([0.9247])
    """
    x = math.pi * diameter * frequency
    safe = np.where(x > 1e-3, x, 1.0)
    if shape == "wire":
        found: Floats = np.where(x > 1e-3, 2 * special.j1(safe) / safe, 1 - x * x / 8)
        return found
    ball = 3 * (np.sin(safe) - safe * np.cos(safe)) / safe**3
    sphere: Floats = np.where(x > 1e-3, ball, 1 - x * x / 10)
    return sphere
