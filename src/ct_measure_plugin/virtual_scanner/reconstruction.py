"""Filtered backprojection of parallel projections, and rebinning of fan projections to them."""

from __future__ import annotations

import itertools
import math
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal, NamedTuple

import numpy as np
from scipy.fft import irfft, next_fast_len, rfft
from scipy.ndimage import map_coordinates, spline_filter1d

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.virtual_scanner.geometry import FanBeam, Geometry

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.virtual_scanner.kernels import Kernel

    FloatArray = NDArray[np.float64]
    Float32Array = NDArray[np.float32]

__all__ = ["FINE", "Grid", "Parallel", "backproject", "filter_views", "rebin", "reconstruct"]

#: "fine" lookup: the filtered views are first resampled this many times more densely.
FINE = 8
#: Rows of the image worked on at a time, so that the scratch arrays stay in the cache.
ROWS = 64
#: Views filtered at a time, to bound the memory.
VIEWS = 128


@dataclass(frozen=True, slots=True, kw_only=True)
class Grid:
    """The picture to be reconstructed.

    Parameters
    ----------
    matrix : int
        Rows and columns.
    fov_mm : float
        Side of the field of view; a pixel is `fov_mm / matrix` wide.
    centre_mm : (float, float)
        y, x of its centre.
    lookup : {"fine", "linear"}
        How a pixel finds its value in a filtered view: by linear interpolation between the
        channels ("linear"), which multiplies the MTF by sinc²(f·pitch); or between samples made 8
        times denser by Fourier interpolation ("fine"), which multiplies it by sinc²(f·pitch/8).

    Examples
    --------
    >>> Grid(matrix=4, fov_mm=8.0).axis_mm(1).tolist()
    [-3.0, -1.0, 1.0, 3.0]
    """

    matrix: int = 512
    fov_mm: float = 250.0
    centre_mm: tuple[float, float] = (0.0, 0.0)
    lookup: Literal["fine", "linear"] = "fine"

    def __post_init__(self) -> None:
        if self.matrix < 1:
            raise ArgumentError("matrix", "must be at least 1", self.matrix)
        if not self.fov_mm > 0:
            raise ArgumentError("fov_mm", "must be greater than 0", self.fov_mm)
        if self.lookup not in ("fine", "linear"):
            raise ArgumentError("lookup", "must be 'fine' or 'linear'", self.lookup)

    @property
    def pixel_mm(self) -> float:
        """Pixel size."""
        return self.fov_mm / self.matrix

    def axis_mm(self, axis: int) -> FloatArray:
        """Return pixel centres along y (0) or x (1)."""
        steps = np.arange(self.matrix) - 0.5 * (self.matrix - 1)
        return np.asarray(self.centre_mm[axis] + steps * self.pixel_mm)

    @property
    def reach_mm(self) -> float:
        """Distance of the farthest pixel centre from the isocentre."""
        y, x = (np.max(np.abs(self.axis_mm(axis))) for axis in (0, 1))
        return float(math.hypot(y, x))


class Parallel(NamedTuple):
    """Parallel projections: values (views, channels), angles in radians, pitch in mm."""

    values: FloatArray
    angles: FloatArray
    pitch_mm: float


def rebin(values: FloatArray, geometry: FanBeam) -> Parallel:
    """Return the parallel projections of a fan scan, by cubic splines in view and channel.

    The parallel ray (θ, t) is the fan ray γ = arcsin(t/D), β = θ − γ (Kak and Slaney 1988,
    ch. 3). Near the isocentre the rays of the two grids nearly coincide, and nothing is lost;
    further out the splines blur a little.
    """
    count = math.floor(2.0 * geometry.radius_mm / geometry.pitch_mm) + 1
    count -= (count - geometry.channels) % 2
    t = (np.arange(count) - 0.5 * (count - 1)) * geometry.pitch_mm
    gamma = np.arcsin(t / geometry.source_mm)
    step = 2.0 * math.pi / geometry.views
    margin = math.ceil(float(gamma[-1]) / step) + 12
    padded = np.pad(values, ((margin, margin), (0, 0)), mode="wrap")
    coefficients = spline_filter1d(padded, 3, axis=0, mode="mirror")
    coefficients = spline_filter1d(coefficients, 3, axis=1, mode="mirror")
    view = np.arange(geometry.views)[:, None] - gamma[None, :] / step + margin
    channel = np.broadcast_to(gamma / geometry.step_rad + 0.5 * (geometry.channels - 1), view.shape)
    found = map_coordinates(coefficients, (view, channel), order=3, mode="mirror", prefilter=False)
    return Parallel(np.asarray(found), geometry.angles, geometry.pitch_mm)


def _ramp(length: int, pitch_mm: float) -> FloatArray:
    """Return the transfer function of the band-limited ramp's taps, in mm⁻¹.

    Taps 1/(4d²) at 0, −1/(π²k²d²) at odd k, 0 at even k (Kak and Slaney 1988, ch. 3, eq. 61):
    the sampled |f| itself would be wrong at f = 0 and make a cup.
    """
    k = np.minimum(np.arange(length), length - np.arange(length)).astype(float)
    taps = np.zeros(length)
    odd = k % 2 == 1
    taps[odd] = -1.0 / (np.pi * k[odd] * pitch_mm) ** 2
    taps[0] = 0.25 / pitch_mm**2
    return np.asarray(rfft(taps).real) * pitch_mm


def filter_views(parallel: Parallel, kernel: Kernel, *, denser: int, margin: int) -> Float32Array:
    """Return the filtered views.

    Parameters
    ----------
    parallel : Parallel
        Projections.
    kernel : Kernel
        Its cut-off must not exceed 1/(2 pitch).
    denser : int
        Samples a channel.
    margin : int
        Channels to add at either end, where the projections are 0 but the filtered ones are not.

    Returns
    -------
    ndarray of float32, shape (views, (channels + 2 margin) * denser)
        mm⁻¹ where the projections are pure numbers. Sample i lies at channel i/denser − margin.
    """
    views, channels = parallel.values.shape
    pitch = parallel.pitch_mm
    if kernel.cutoff_per_mm > 0.5 / pitch * (1 + 1e-9):
        raise ArgumentError(
            "cutoff_per_mm",
            f"must not exceed {0.5 / pitch:g}, which is 1/(2 pitch)",
            kernel.cutoff_per_mm,
        )
    length = next_fast_len(2 * (channels + margin), real=True)
    length += length % 2
    response = _ramp(length, pitch) * kernel.window(np.fft.rfftfreq(length, pitch))
    count = (channels + 2 * margin) * denser
    take = (np.arange(count) - margin * denser) % (length * denser)
    filtered = np.empty((views, count), np.float32)
    for start in range(0, views, VIEWS):
        rows = slice(start, min(start + VIEWS, views))
        spectrum = rfft(parallel.values[rows], length, axis=1) * response
        if denser > 1:
            spectrum[:, -1] *= 0.5  # the highest frequency stands for itself and its mirror
        dense = irfft(spectrum, length * denser, axis=1) * denser
        filtered[rows] = dense[:, take]
    return filtered


class _Lookup(NamedTuple):
    """What every block of rows needs: per view, index = row term + column term."""

    filtered: Float32Array
    differences: Float32Array
    rows: Float32Array
    columns: Float32Array


def _block(lookup: _Lookup, low: int, high: int) -> Float32Array:
    shape = (high - low, lookup.columns.shape[1])
    total = np.zeros(shape, np.float32)
    place = np.empty(shape, np.float32)
    whole = np.empty(shape, np.float32)
    index = np.empty(shape, np.intp)
    value = np.empty(shape, np.float32)
    for view, table in enumerate(lookup.filtered):
        np.add(lookup.rows[view, low:high, None], lookup.columns[view][None], out=place)
        np.floor(place, out=whole)
        np.copyto(index, whole, casting="unsafe")
        np.take(table, index, out=value, mode="clip")
        total += value
        place -= whole
        np.take(lookup.differences[view], index, out=value, mode="clip")
        value *= place
        total += value
    return total


def backproject(
    filtered: Float32Array, angles: FloatArray, grid: Grid, *, pitch_mm: float, workers: int = 2
) -> Float32Array:
    """Return the mean over the views of the filtered values under every pixel, times π.

    Parameters
    ----------
    filtered : ndarray of float32, shape (views, samples)
        Centred on the isocentre.
    angles : ndarray, shape (views,)
        Radians.
    grid : Grid
        The picture.
    pitch_mm : float
        Distance of neighbouring samples.
    workers : int
        Threads. The result does not depend on it: each works on rows of its own.

    Returns
    -------
    ndarray of float32, shape (matrix, matrix)
        (π/M) Σ q(x cos θ + y sin θ).
    """
    middle = 0.5 * (filtered.shape[1] - 1)
    y, x = grid.axis_mm(0) / pitch_mm, grid.axis_mm(1) / pitch_mm
    rows = (np.sin(angles)[:, None] * y + middle).astype(np.float32)
    columns = (np.cos(angles)[:, None] * x).astype(np.float32)
    differences = np.diff(filtered, axis=1, append=filtered[:, -1:])
    lookup = _Lookup(filtered, differences, rows, columns)
    edges = [*range(0, grid.matrix, ROWS), grid.matrix]
    with ThreadPoolExecutor(max(1, workers)) as pool:
        spans = itertools.pairwise(edges)
        blocks = list(pool.map(lambda span: _block(lookup, *span), spans))
    return np.concatenate(blocks) * np.float32(math.pi / len(angles))


def reconstruct(
    values: FloatArray, geometry: Geometry, kernel: Kernel, grid: Grid, *, workers: int = 2
) -> Float32Array:
    """Return the filtered backprojection.

    Parameters
    ----------
    values : ndarray, shape (views, channels)
        Line integrals, pure numbers.
    geometry : ParallelBeam or FanBeam
        How they were taken; a fan is rebinned to parallel beams first.
    kernel : Kernel
        Filter.
    grid : Grid
        Picture. The projections count as 0 beyond the detector, so the object must lie within
        the circle every view sees; the picture may reach further.
    workers : int
        Threads.

    Returns
    -------
    ndarray of float32, shape (matrix, matrix)
        Reconstructed quantity in mm⁻¹.
    """
    if isinstance(geometry, FanBeam):
        parallel = rebin(values, geometry)
    else:
        parallel = Parallel(values, geometry.angles, geometry.pitch_mm)
    pitch = parallel.pitch_mm
    half = 0.5 * (parallel.values.shape[1] - 1) * pitch
    margin = max(0, math.ceil((grid.reach_mm - half) / pitch)) + 2
    denser = 1 if grid.lookup == "linear" else FINE
    filtered = filter_views(parallel, kernel, denser=denser, margin=margin)
    if denser > 1:
        # The last channel has `denser - 1` samples after it; none may unbalance the middle.
        filtered = np.ascontiguousarray(filtered[:, : -(denser - 1)])
    return backproject(filtered, parallel.angles, grid, pitch_mm=pitch / denser, workers=workers)
