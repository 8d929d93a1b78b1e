"""From a phantom's cuts to the noise-free signal of every detector channel."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ct_measure_plugin.virtual_scanner.geometry import Geometry
    from ct_measure_plugin.virtual_scanner.phantom import AnyMaterial, Cut
    from ct_measure_plugin.virtual_scanner.sections import Section
    from ct_measure_plugin.virtual_scanner.spectrum import Spectrum

    FloatArray = NDArray[np.float64]

__all__ = ["path_lengths", "projection"]


def _add_section(
    total: FloatArray, section: Section, weight: float, geometry: Geometry, sub: tuple[float, float]
) -> None:
    """Add a figure's strip means; a small one touches only the channels in its shadow."""
    views, channels = total.shape
    view = np.arange(views)[:, None]
    centre = section.centre_mm
    spread = geometry.spread_of(section.reach_mm, *centre)
    if 2 * spread + 1 >= channels:
        rays = geometry.rays(view, np.arange(channels)[None, :], sub)
        total += weight * section.strip_mean(*rays, geometry.strip_mm)
        return
    middle = np.rint(geometry.channel_of(*centre)).astype(np.intp)[:, None]
    channel = middle + np.arange(-spread, spread + 1)[None, :]
    seen = (channel >= 0) & (channel < channels)
    channel = np.clip(channel, 0, channels - 1)
    values = section.strip_mean(*geometry.rays(view, channel, sub), geometry.strip_mm)
    rows = np.broadcast_to(view, channel.shape)
    total[rows[seen], channel[seen]] += weight * values[seen]


def path_lengths(
    geometry: Geometry, cuts: Sequence[Cut], sub: tuple[float, float] = (0.0, 0.0)
) -> dict[tuple[AnyMaterial, AnyMaterial], FloatArray]:
    """Return the path in each material that replaces another, in mm.

    Parameters
    ----------
    geometry : ParallelBeam or FanBeam
        Where the rays run.
    cuts : sequence of Cut
        What a slice sees of a phantom.
    sub : (float, float)
        A sub-sample of aperture and focal spot, as `geometry.sub_offsets` gives them.

    Returns
    -------
    dict
        (material, what it replaces) -> ndarray, shape (views, channels).
    """
    shape = (geometry.views, geometry.channels)
    found: dict[tuple[AnyMaterial, AnyMaterial], FloatArray] = {}
    for cut in cuts:
        total = found.setdefault((cut.material, cut.inside), np.zeros(shape))
        _add_section(total, cut.section, cut.weight, geometry, sub)
    return found


def _line_integral(
    paths: dict[tuple[AnyMaterial, AnyMaterial], FloatArray],
    energy_kev: float,
    shape: tuple[int, int],
) -> FloatArray:
    """Return ∫ (μ − μ_air) dl at one energy."""
    total = np.zeros(shape)
    for (material, inside), path in paths.items():
        step_per_mm = 0.1 * float(material.mu(energy_kev) - inside.mu(energy_kev))
        total += step_per_mm * path
    return total


def projection(geometry: Geometry, cuts: Sequence[Cut], spectrum: Spectrum) -> FloatArray:
    """Return −ln of the signal relative to air, without noise.

    Parameters
    ----------
    geometry : ParallelBeam or FanBeam
        Where the rays run.
    cuts : sequence of Cut
        What a slice sees of a phantom.
    spectrum : Spectrum
        Shares of the signal by energy.

    Returns
    -------
    ndarray, shape (views, channels)
        A pure number.

    Notes
    -----
    Signal = mean over the sub-samples of Σ_E s(E) exp(−Σ_m (μ_m − μ_replaced)(E) L_m). The mean
    along z is one of line integrals, not of transmissions (no non-linear partial volume).

    Examples
    --------
    >>> from ct_measure_plugin.virtual_scanner import Phantom, Part, SliceProfile, WATER, disc_rod
    >>> from ct_measure_plugin.virtual_scanner import ParallelBeam, monoenergetic
    >>> water = Phantom((Part(disc_rod((0.0, 0.0), 50.0), WATER),))
    >>> beam = ParallelBeam(views=3, channels=101, pitch_mm=1.0, aperture_mm=1e-3)
    >>> p = projection(beam, water.cuts(SliceProfile(), 0.0), monoenergetic(70.0))
    >>> p[:, 50].round(4).tolist()  # 10 cm of water, less 10 cm of air
    [1.9264, 1.9264, 1.9264]
    """
    subs = geometry.sub_offsets()
    shape = (geometry.views, geometry.channels)
    if spectrum.is_mono and len(subs) == 1:
        return _line_integral(
            path_lengths(geometry, cuts, subs[0]), spectrum.energies_kev[0], shape
        )
    signal = np.zeros(shape)
    for sub in subs:
        paths = path_lengths(geometry, cuts, sub)
        for energy, share in zip(spectrum.energies_kev, spectrum.shares, strict=True):
            signal += (share / len(subs)) * np.exp(-_line_integral(paths, energy, shape))
    return -np.log(signal)
