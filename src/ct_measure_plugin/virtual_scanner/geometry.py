"""Where the rays run: parallel beam, and a rotating fan with a curved detector.

Lengths are at the isocentre, which is the origin. Angles θ turn clockwise on the screen (x to
the right, y down); a ray is x cos θ + y sin θ = t.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple, TypeAlias

import numpy as np

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["FanBeam", "Geometry", "ParallelBeam", "Rays"]


class Rays(NamedTuple):
    """Rays: cos θ, sin θ and t in mm, broadcast against each other."""

    cos: FloatArray
    sin: FloatArray
    t: FloatArray


def _counted(name: str, value: int, least: int) -> None:
    if value < least:
        raise ArgumentError(name, f"must be at least {least}", value)


def _offsets(width: float, count: int) -> FloatArray:
    """Return the centres of `count` equal parts of a width, about 0."""
    return width * ((np.arange(count) + 0.5) / count - 0.5)


@dataclass(frozen=True, slots=True, kw_only=True)
class ParallelBeam:
    """Parallel rays, turned in equal steps over half a turn or a whole one.

    Parameters
    ----------
    views : int
        Number of view angles. Over a whole turn an odd number makes every one a new direction.
    channels : int
        Number of detector channels.
    pitch_mm : float
        Distance between channels at the isocentre.
    aperture_mm : float or None
        Width of a channel; None for the pitch.
    focal_spot_mm : float
        Width of the blur by the focal spot at the isocentre: its size times (m−1)/m at
        magnification m. 0 for a point.
    arc_deg : {180, 360}
        Half a turn or a whole one.
    aperture_rays, focal_rays : int
        Sub-samples of aperture and focal spot. Within a sub-sample of the aperture the line
        integral is averaged exactly; between sub-samples the transmission is.

    Examples
    --------
    >>> beam = ParallelBeam(views=4, channels=5, pitch_mm=2.0)
    >>> beam.channel_mm.tolist()
    [-4.0, -2.0, 0.0, 2.0, 4.0]
    """

    views: int = 720
    channels: int = 512
    pitch_mm: float = 0.5
    aperture_mm: float | None = None
    focal_spot_mm: float = 0.0
    arc_deg: int = 180
    aperture_rays: int = 1
    focal_rays: int = 1

    def __post_init__(self) -> None:
        _counted("views", self.views, 2)
        _counted("channels", self.channels, 2)
        _counted("aperture_rays", self.aperture_rays, 1)
        _counted("focal_rays", self.focal_rays, 1)
        if not self.pitch_mm > 0:
            raise ArgumentError("pitch_mm", "must be greater than 0", self.pitch_mm)
        if self.arc_deg not in (180, 360):
            raise ArgumentError("arc_deg", "must be 180 or 360", self.arc_deg)
        if self.focal_spot_mm > 0 and self.focal_rays < 2:
            raise ArgumentError(
                "focal_rays", "must be at least 2 for a focal spot with a size", self.focal_rays
            )

    @property
    def width_mm(self) -> float:
        """Width of a channel at the isocentre."""
        return self.pitch_mm if self.aperture_mm is None else self.aperture_mm

    @property
    def strip_mm(self) -> float:
        """Width over which one sub-sample averages the line integral."""
        return self.width_mm / self.aperture_rays

    @property
    def radius_mm(self) -> float:
        """Radius of the circle every view sees."""
        return 0.5 * (self.channels - 1) * self.pitch_mm

    @property
    def angles(self) -> FloatArray:
        """View angles in radians, shape (views,)."""
        return np.asarray(np.arange(self.views) * (math.radians(self.arc_deg) / self.views))

    @property
    def channel_mm(self) -> FloatArray:
        """Channel positions at the isocentre, shape (channels,)."""
        steps = np.arange(self.channels) - 0.5 * (self.channels - 1)
        return np.asarray(steps * self.pitch_mm)

    def sub_offsets(self) -> list[tuple[float, float]]:
        """Return the sub-samples as pairs of shifts: of the aperture and of the focal spot."""
        spots = _offsets(self.focal_spot_mm, self.focal_rays)
        parts = _offsets(self.width_mm, self.aperture_rays)
        return [(float(a), float(s)) for a in parts for s in spots]

    def rays(
        self, view: NDArray[np.intp], channel: NDArray[np.intp], sub: tuple[float, float]
    ) -> Rays:
        """Return the rays of views and channels for one sub-sample."""
        angle = self.angles[view]
        t = self.channel_mm[channel] + (sub[0] + sub[1])
        return Rays(np.cos(angle), np.sin(angle), t)

    def channel_of(self, y_mm: float, x_mm: float) -> FloatArray:
        """Return the channel (with fraction) that sees a point in each view, shape (views,)."""
        t = x_mm * np.cos(self.angles) + y_mm * np.sin(self.angles)
        return t / self.pitch_mm + 0.5 * (self.channels - 1)

    def spread_of(self, reach_mm: float, y_mm: float, x_mm: float) -> int:  # noqa: ARG002
        """Return how many channels to either side a disc about a point may touch."""
        blur = 0.5 * (self.width_mm + self.focal_spot_mm)
        return math.ceil((reach_mm + blur) / self.pitch_mm) + 1


@dataclass(frozen=True, slots=True, kw_only=True)
class FanBeam:
    """A fan that turns a whole turn about the isocentre, with a detector curved about the source.

    Parameters
    ----------
    views : int
        Number of source positions over 360 degrees.
    channels : int
        Number of channels, equally spaced in angle.
    pitch_mm : float
        Distance between channels projected to the isocentre: the angle between them is
        pitch / source distance.
    aperture_mm : float or None
        Width of a channel at the isocentre; None for the pitch.
    focal_spot_mm : float
        Width of the focal spot itself, across the central ray.
    source_mm, detector_mm : float
        Distance of the source from the isocentre, and of the detector from the source.
    aperture_rays, focal_rays : int
        Sub-samples of aperture and focal spot.

    Notes
    -----
    At view angle β the channels count in the direction (x, y) = (cos β, sin β) and the source
    stands at D (−sin β, cos β). A ray that leaves it at angle γ from the central one is the
    parallel ray θ = β + γ, t = D sin γ (Kak and Slaney 1988, ch. 3).
    """

    views: int = 720
    channels: int = 512
    pitch_mm: float = 0.5
    aperture_mm: float | None = None
    focal_spot_mm: float = 0.0
    source_mm: float = 500.0
    detector_mm: float = 900.0
    aperture_rays: int = 1
    focal_rays: int = 1

    def __post_init__(self) -> None:
        _counted("views", self.views, 4)
        _counted("channels", self.channels, 2)
        _counted("aperture_rays", self.aperture_rays, 1)
        _counted("focal_rays", self.focal_rays, 1)
        if not self.pitch_mm > 0:
            raise ArgumentError("pitch_mm", "must be greater than 0", self.pitch_mm)
        if not 0 < self.source_mm < self.detector_mm:
            raise ArgumentError(
                "detector_mm",
                f"must be greater than source_mm ({self.source_mm:g})",
                self.detector_mm,
            )
        if self.step_rad * (self.channels - 1) >= math.pi * 0.75:
            raise ArgumentError("channels", "must span less than 135 degrees", self.channels)
        if self.focal_spot_mm > 0 and self.focal_rays < 2:
            raise ArgumentError(
                "focal_rays", "must be at least 2 for a focal spot with a size", self.focal_rays
            )

    @property
    def arc_deg(self) -> int:
        """A whole turn."""
        return 360

    @property
    def step_rad(self) -> float:
        """Angle between neighbouring channels."""
        return self.pitch_mm / self.source_mm

    @property
    def width_mm(self) -> float:
        """Width of a channel at the isocentre."""
        return self.pitch_mm if self.aperture_mm is None else self.aperture_mm

    @property
    def strip_mm(self) -> float:
        """Width at the isocentre over which one sub-sample averages the line integral."""
        return self.width_mm / self.aperture_rays

    @property
    def radius_mm(self) -> float:
        """Radius of the circle every view sees."""
        return self.source_mm * math.sin(0.5 * (self.channels - 1) * self.step_rad)

    @property
    def angles(self) -> FloatArray:
        """View angles β in radians, shape (views,)."""
        return np.asarray(np.arange(self.views) * (2.0 * math.pi / self.views))

    @property
    def channel_rad(self) -> FloatArray:
        """Fan angles γ of the channels, shape (channels,)."""
        steps = np.arange(self.channels) - 0.5 * (self.channels - 1)
        return np.asarray(steps * self.step_rad)

    def sub_offsets(self) -> list[tuple[float, float]]:
        """Return the sub-samples: shift of the fan angle, shift of the source in mm."""
        spots = _offsets(self.focal_spot_mm, self.focal_rays)
        parts = _offsets(self.width_mm / self.source_mm, self.aperture_rays)
        return [(float(a), float(s)) for a in parts for s in spots]

    def rays(
        self, view: NDArray[np.intp], channel: NDArray[np.intp], sub: tuple[float, float]
    ) -> Rays:
        """Return the rays of views and channels for one sub-sample.

        The shifted source and the unshifted detector element are joined by a straight line.
        """
        turn, shift = sub
        gamma = self.channel_rad[channel] + turn
        beta = self.angles[view]
        if shift == 0.0:
            theta = beta + gamma
            return Rays(np.cos(theta), np.sin(theta), self.source_mm * np.sin(gamma))
        # In the frame of the view: source at (shift, -D), element at R (sin γ, cos γ) from it.
        across = self.detector_mm * np.sin(gamma) - shift
        along = self.detector_mm * np.cos(gamma)
        tilt = np.arctan2(across, along)
        theta = beta + tilt
        return Rays(
            np.cos(theta),
            np.sin(theta),
            self.source_mm * np.sin(tilt) + shift * np.cos(tilt),
        )

    def channel_of(self, y_mm: float, x_mm: float) -> FloatArray:
        """Return the channel (with fraction) that sees a point in each view, shape (views,)."""
        cos, sin = np.cos(self.angles), np.sin(self.angles)
        across = x_mm * cos + y_mm * sin
        along = self.source_mm + x_mm * sin - y_mm * cos
        gamma = np.arctan2(across, along)
        return np.asarray(gamma / self.step_rad + 0.5 * (self.channels - 1))

    def spread_of(self, reach_mm: float, y_mm: float, x_mm: float) -> int:
        """Return how many channels to either side a disc about a point may touch."""
        near = max(self.source_mm - math.hypot(y_mm, x_mm), 1e-6)
        blur = 0.5 * (self.width_mm + self.focal_spot_mm)
        if reach_mm + blur >= near:
            return self.channels
        return math.ceil(1.02 * math.asin((reach_mm + blur) / near) / self.step_rad) + 2


Geometry: TypeAlias = ParallelBeam | FanBeam
