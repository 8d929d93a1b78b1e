"""How well an object of known shape and contrast can be told from noise."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.detection_integrals import Integrals, share_beyond
from ct_measure_plugin.physics.detection_task import Eye, Task, auc_of
from ct_measure_plugin.physics.noise_power import NoisePower
from ct_measure_plugin.physics.results import Caution, Curve, NotMeasured, Quantity, Result
from ct_measure_plugin.physics.slice_spectrum import SliceSpectrum

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Detectability", "Eye", "Task", "detectability"]

#: Shares of the signal that may lie where nothing is known.
NOTED, REFUSED = 0.02, 0.25

#: Fewer samples are no curve.
FEWEST = 4


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Detectability(Result):
    """Detectability indices of one task.

    Attributes
    ----------
    npw : Quantity
        d′ of an observer who knows the blurred signal but not the noise's texture.
    npwe : Quantity or None
        The same behind the eye's response; None without an eye.
    prewhitening : Quantity
        d′ of the ideal observer of stationary Gaussian noise: no other does better.
    npw_auc, npwe_auc, prewhitening_auc : Quantity
        Area under the ROC curve of each, Φ(d′/√2): also the share of correct answers where one of
        two images holds the object.
    unseen : Quantity
        Share, in percent, of the blurred signal's power that lies where the prewhitening observer
        knows nothing: where the NPS is near 0, or beyond its range.
    task : Curve
        The blurred signal's spectrum |W| T.
    signal_to_noise : Curve
        2π f |W|² T²/S, whose integral is the square of the prewhitening d′.
    """

    npw: Quantity
    npwe: Quantity | None = None
    prewhitening: Quantity
    npw_auc: Quantity
    npwe_auc: Quantity | None = None
    prewhitening_auc: Quantity
    unseen: Quantity
    task: Curve
    signal_to_noise: Curve


def detectability(
    noise: NoisePower | SliceSpectrum | Curve,
    transfer: Curve | None,
    *,
    task: Task,
    eye: Eye | None = None,
    lowest_per_mm: float | None = None,
) -> Detectability | NotMeasured:
    """Return how detectable a round object is on a slice.

    Parameters
    ----------
    noise : NoisePower, SliceSpectrum or Curve
        A measured spectrum, or a radial NPS in HU² mm² against mm⁻¹.
    transfer : Curve or None
        MTF against mm⁻¹, from the same kernel, dose, slice thickness and contrast; None for an
        object that is taken as it appears in the image.
    task : Task
        The object.
    eye : Eye, optional
        The eye and its distance from the screen; without it there is no index behind an eye.
    lowest_per_mm : float, optional
        Where a NPS given as a curve begins to be usable; by default at its first sample.

    Returns
    -------
    Detectability or NotMeasured
        NotMeasured if a quarter of the signal lies beyond what was measured.

    Raises
    ------
    ArgumentError
        On misuse.

    Notes
    -----
    With W the task's spectrum, T the MTF, S the NPS and E the eye, integrals over the plane (ICRU
    Report 54, 1996; from memory): d′² = ∬|W|²T²/S prewhitening; [∬|W|²T²]²/∬|W|²T²S for a matched
    filter without it (NPW); [∬|W|²T²E²]²/∬|W|²T²E⁴S behind the eye (NPWE). Below its lowest ring S
    is continued as :func:`.spectrum_low.continuation` says; T is 0 beyond its range and from where
    it first falls below its own uncertainty.

    Examples
    --------
    >>> f = np.linspace(0.01, 2, 400)
    >>> white = Curve(f, np.full(400, 50.0), x_unit="mm⁻¹", y_unit="HU² mm²")
    >>> task = Task(contrast_hu=10, size_mm=2, shape="gaussian")
    >>> found = detectability(white, None, task=task)
    >>> round(found.npw.value, 3), round(found.prewhitening.value, 3)  # √(π C² s²/S)
    (5.013, 5.013)
    """
    curve, first = _noise(noise, lowest_per_mm)
    _check("noise", curve)
    usable = curve.x >= first - 1e-12
    x, s = curve.x[usable], curve.y[usable]
    if len(x) < FEWEST or not np.all(s >= 0) or not s.max() > 0:
        raise ArgumentError(
            "noise", f"must hold {FEWEST} or more usable samples, none negative", len(x)
        )
    blur = Curve(np.array([0.0, x[-1]]), np.ones(2)) if transfer is None else transfer
    _check("transfer", blur)
    if transfer is not None and len(transfer.x) < FEWEST:
        raise ArgumentError("transfer", f"must hold {FEWEST} or more samples", len(transfer.x))
    share = np.zeros(len(x))
    if curve.y_uncertainty is not None:
        share = curve.y_uncertainty[usable] / np.where(s > 0, s, 1.0)
    end = min(float(x[-1]), float(blur.x[-1]))
    beyond = share_beyond(task, blur, end)
    if beyond > REFUSED:
        return NotMeasured(
            f"{100 * beyond:.0f} % of the signal lies beyond {end:.2g} mm⁻¹, where the MTF or"
            " the NPS ends",
            "choose a larger object, or measure with smaller pixels",
        )
    work = Integrals(x, s, share, blur, task, eye, end)
    return _assembled(work, beyond, blurred=transfer is not None)


def _check(name: str, curve: Curve) -> None:
    """Raise ArgumentError unless a curve is finite and runs over rising frequencies in mm⁻¹."""
    if curve.x_unit not in ("mm⁻¹", ""):
        raise ArgumentError(name, "must run over frequencies in mm⁻¹", curve.x_unit)
    if not (np.isfinite(curve.x).all() and np.isfinite(curve.y).all()):
        raise ArgumentError(name, "must hold finite values only", "NaN or infinity")
    if np.any(np.diff(curve.x) <= 0):
        raise ArgumentError(name, "must run over rising frequencies", "falling or equal ones")


def _noise(noise: NoisePower | SliceSpectrum | Curve, lowest: float | None) -> tuple[Curve, float]:
    if isinstance(noise, NoisePower) and noise.slice_radial is not None:
        return noise.slice_radial, noise.lowest_frequency.value
    if isinstance(noise, NoisePower | SliceSpectrum):
        return noise.radial, noise.lowest_frequency.value
    if noise.y_unit != "HU² mm²":
        raise ArgumentError(
            "noise", "must be the spectrum of single slices in HU² mm²", noise.y_unit or "no unit"
        )
    return noise, float(noise.x[0]) if lowest is None else lowest


def _assembled(work: Integrals, beyond: float, *, blurred: bool) -> Detectability:
    found, doubts = work.indices(), work.doubts()
    npw, npwe, ideal = (
        Quantity(float(v), "", float(u)) for v, u in zip(found, doubts, strict=True)
    )
    unseen = 1.0 - (1.0 - beyond) * work.known_share()
    names = ("frequency", "mm⁻¹")
    return Detectability(
        npw=npw,
        npwe=npwe if work.behind_an_eye else None,
        prewhitening=ideal,
        npw_auc=auc_of(npw),
        npwe_auc=auc_of(npwe) if work.behind_an_eye else None,
        prewhitening_auc=auc_of(ideal),
        unseen=Quantity(100.0 * unseen, "%", 0.0),
        task=Curve(work.f, work.signal, None, *names, "signal", "HU mm²"),
        signal_to_noise=Curve(work.f, work.ratio(), None, *names, "signal over noise", "mm"),
        cautions=_cautions(beyond, unseen, blurred=blurred),
    )


def _cautions(beyond: float, unseen: float, *, blurred: bool) -> tuple[Caution, ...]:
    notes = []
    if not blurred:
        notes.append(
            Caution(
                "no-transfer",
                "No MTF was given: the object is taken as it appears in the image, unblurred.",
                "Name a record of an MTF of the same kernel for the contrast of the object itself.",
            )
        )
    if max(beyond, unseen) > NOTED and math.isfinite(unseen):
        notes.append(
            Caution(
                "signal-beyond",
                f"{100 * beyond:.0f} % of the signal lies beyond the measured frequencies and"
                f" {100 * unseen:.0f} % where the prewhitening observer knows nothing: d′ is a"
                " lower bound.",
                "Choose a larger object, or measure with smaller pixels.",
            )
        )
    return tuple(notes)
