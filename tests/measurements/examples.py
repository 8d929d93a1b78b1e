"""One example a measurement, for the laws that all of them obey.

A new measurement adds an entry: a Volume and the regions on which it gives a result.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from ct_measure_plugin.physics.regions import Box, Disc, Labels, Path, Region
from ct_measure_plugin.physics.volume import Volume

__all__ = ["EXAMPLES", "Example"]


@dataclass(frozen=True)
class Example:
    volume: Volume
    regions: tuple[Region, ...]
    settings: dict[str, Any] = field(default_factory=dict)
    #: How each Quantity answers when 100 is added to every value: "moves" or "stays".
    moves_with_level: tuple[str, ...] = ()
    #: Quantities that depend on where the scale has its zero (ratios to the mean, sums of squares).
    rests_on_zero: tuple[str, ...] = ()
    #: Directions in the image: they turn with it, counter-clockwise, modulo 180°.
    turns_with_image: tuple[str, ...] = ()
    #: True if larger pixels are another question: a setting is in mm and would have to follow.
    keeps_pixel_size: bool = False
    #: Power of the pixel size that each Quantity scales with; others do not change.
    scales_with_spacing: dict[str, int] = field(default_factory=dict)


def _noise() -> Volume:
    rng = np.random.default_rng(11)
    values = np.rint(rng.normal(40, 12, (3, 64, 64))).astype(np.int16)
    return Volume(values, (2.0, 0.5, 0.5))


def region_statistics() -> Example:
    return Example(
        _noise(),
        (Disc((15.75, 15.75), 9.0, z_mm=2.0),),
        moves_with_level=(
            *("mean", "minimum", "maximum", "median", "mode"),
            *("p10", "p25", "p75", "p90"),
        ),
        rests_on_zero=(
            *("energy", "root_mean_square"),
            *("coefficient_of_variation", "quartile_coefficient_of_dispersion"),
        ),
        scales_with_spacing={"area": 2},
    )


def region_contrast() -> Example:
    volume = _noise()
    hu = volume.hu.copy()
    hu[:, 4:28, 4:28] += 60
    rod, water = Disc((7.75, 7.75), 5.0, z_mm=2.0), Disc((22.0, 22.0), 5.0, z_mm=2.0)
    return Example(
        Volume(hu, volume.spacing_mm),
        (rod, water),
        moves_with_level=("object_mean", "background_mean"),
        rests_on_zero=("contrast", "snr", "attenuation_snr"),
    )


def label_statistics() -> Example:
    volume = _noise()
    labels = np.zeros(volume.shape, np.uint8)
    labels[:, 8:30, 8:30], labels[1, 36:56, 10:50] = 2, 5
    return Example(volume, (Labels(labels, volume.spacing_mm),), scales_with_spacing={"size": 2})


def noise_power() -> Example:
    frequencies = ("peak_frequency", "mean_frequency", "lowest_frequency")
    return Example(
        _noise(),
        (Disc((15.75, 15.75), 15.0),),
        settings={"patch_px": 16, "layout": "grid"},
        scales_with_spacing=dict.fromkeys(frequencies, -1),
    )


def detectability() -> Example:
    f = np.linspace(0.05, 1.0, 20)
    return Example(
        _noise(),
        (Disc((15.75, 15.75), 15.0),),
        settings={
            "patch_px": 16,
            "size_mm": 2.0,
            "transfer": {
                "frequency_per_mm": tuple(f.tolist()),
                "mtf": tuple(np.exp(-((f / 0.5) ** 2)).tolist()),
            },
        },
        keeps_pixel_size=True,
    )


def edge_mtf() -> Example:
    from truth_images import HANN, edge_image

    noise = np.random.default_rng(7).normal(0, 12, (2, 56, 56))
    values = np.rint(edge_image(HANN, shape=(56, 56), angle=5, contrast=900) + noise)
    frequencies = ("f50", "f10", "f2", "nyquist")
    return Example(
        Volume(values.astype(np.int16), (2.0, 0.5, 0.5)),
        (Box((13.75, 13.75), (24.0, 22.0)),),
        turns_with_image=("normal_direction",),
        scales_with_spacing=dict.fromkeys(frequencies, -1) | {"width": 1, "position": 1},
    )


def ct_number_line() -> Example:
    from rod_images import RING, ring_of_rods

    return Example(
        ring_of_rods(noise=5.0, seed=3),
        RING,
        moves_with_level=("intercept", "water_offset"),
        # where μ reads 0 HU, and the energy of best agreement with the definition
        rests_on_zero=("water_equivalent_factor", "scale_energy"),
    )


def noise_map() -> Example:
    return Example(
        _noise(),
        (Disc((15.75, 15.75), 15.0),),
        settings={"window_px": 7, "low_hu": -500.0, "high_hu": 500.0},
        scales_with_spacing={"window": 1},
    )


def uniformity() -> Example:
    y, x = np.mgrid[:96, :96]
    inside = np.hypot(y - 47.3, x - 48.1) < 40
    noise = np.random.default_rng(12).normal(20, 12, (1, 96, 96))
    values = np.where(inside, np.rint(noise), -1000).astype(np.int16)
    return Example(
        Volume(values, (2.0, 0.5, 0.5)),
        (),
        moves_with_level=("water", "centre", "edge"),
        rests_on_zero=("cupping_percent", "integral_non_uniformity"),
        scales_with_spacing={"radius": 1},
    )


def disc_mtf() -> Example:
    from truth_images import HANN, disc_image

    noise = np.random.default_rng(9).normal(0, 12, (2, 56, 56))
    values = np.rint(disc_image(HANN, 6.0, shape=(56, 56), contrast=900) + noise)
    frequencies = ("f50", "f10", "f2", "nyquist")
    return Example(
        Volume(values.astype(np.int16), (2.0, 0.5, 0.5)),
        (Disc((13.75, 13.75), 12.0, z_mm=0.0),),
        scales_with_spacing=dict.fromkeys(frequencies, -1)
        | {"width": 1, "radius": 1, "roundness": 1},
    )


def line_profile() -> Example:
    from truth_images import HANN, edge_image

    noise = np.random.default_rng(5).normal(0, 12, (2, 56, 56))
    values = np.rint(edge_image(HANN, shape=(56, 56), angle=5, contrast=900) + noise)
    lengths = ("edge_width", "middle", "length")
    return Example(
        Volume(values.astype(np.int16), (2.0, 0.5, 0.5)),
        (Path(((14.2, 3.0), (13.1, 23.0), (9.0, 25.5)), width_mm=3.0),),
        moves_with_level=("mean", "minimum", "maximum", "level"),
        scales_with_spacing=dict.fromkeys(lengths, 1),
    )


def wire_mtf() -> Example:
    from truth_images import HANN, disc_image

    rng = np.random.default_rng(5)
    wire = disc_image(HANN, 0.1, contrast=1.0, shape=(56, 56), spacing=(0.4, 0.4))
    values = np.rint(wire / wire.max() * 900 + rng.normal(0, 6, (2, 56, 56)))
    frequencies = ("f50", "f10", "f2", "nyquist")
    return Example(
        Volume(values.astype(np.int16), (2.0, 0.5, 0.5)),
        (Disc((13.75, 13.75), 12.0, z_mm=0.0),),
        settings={"object_diameter_mm": 0.0},
        scales_with_spacing=dict.fromkeys(frequencies, -1) | {"width": 1},
    )


def slice_profile() -> Example:
    rng = np.random.default_rng(5)
    y, x = (np.mgrid[:40, :40] - np.array([19.3, 20.4])[:, None, None]) * 0.5
    z = np.arange(30) * 0.4
    bead = np.exp(-(y**2 + x**2) / 0.7) * np.exp(-((z - 5.7) ** 2) / 1.6)[:, None, None]
    values = np.rint(900 * bead + rng.normal(0, 6, bead.shape)).astype(np.int16)
    return Example(
        Volume(values, (0.4, 0.5, 0.5)),
        (Box((9.75, 9.75), (19.0, 19.0)),),
        settings={"object_size_mm": 0.5},
    )


def bar_pattern() -> Example:
    from truth_images import GAUSS, bars

    values = np.zeros((160, 160))
    values[:80, :80] = bars(GAUSS, 0.3, shape=(80, 80), spacing=(0.5, 0.5))
    values[:80, 80:] = bars(GAUSS, 0.5, shape=(80, 80), spacing=(0.5, 0.5))
    values[80:, :80], values[80:, 80:] = 100, -100
    values = np.rint(values + np.random.default_rng(5).normal(0, 8, values.shape))
    middles = [(20.0, 20.0), (20.0, 60.0), (60.0, 20.0), (60.0, 60.0)]
    return Example(
        Volume(values[None].astype(np.int16), (2.0, 0.5, 0.5)),
        tuple(Box((y - 0.25, x - 0.25), (32.0, 32.0)) for y, x in middles),
        settings={"frequencies": (0.3, 0.5)},
        keeps_pixel_size=True,
    )


def ring_artefact() -> Example:
    noise = np.rint(np.random.default_rng(13).normal(20, 12, (1, 96, 96)))
    return Example(
        Volume(noise.astype(np.int16), (2.0, 0.5, 0.5)),
        (Disc((23.75, 23.75), 22.0),),
        scales_with_spacing={"worst_radius": 1},
    )


def mtf_isotropy() -> Example:
    from truth_images import HANN, edge_image

    tiles = [edge_image(HANN, shape=(48, 48), angle=a, contrast=900) for a in (5, 52, 95, 140)]
    noise = np.random.default_rng(8).normal(0, 12, (1, 96, 96))
    values = np.rint(np.block([tiles[:2], tiles[2:]]) + noise)
    frequencies = ("f50", "center", "far", "far_radial", "far_azimuthal")
    return Example(
        Volume(values.astype(np.int16), (2.0, 0.5, 0.5)),
        tuple(Box((y, x), (20.0, 20.0)) for y in (11.75, 35.75) for x in (11.75, 35.75)),
        turns_with_image=("sharpest_direction",),
        scales_with_spacing=dict.fromkeys(frequencies, -1) | {"largest_distance": 1},
    )


EXAMPLES: dict[str, Callable[[], Example]] = {
    "region_statistics": region_statistics,
    "region_contrast": region_contrast,
    "label_statistics": label_statistics,
    "noise_power": noise_power,
    "noise_map": noise_map,
    "uniformity": uniformity,
    "ring_artefact": ring_artefact,
    "detectability": detectability,
    "edge_mtf": edge_mtf,
    "disc_mtf": disc_mtf,
    "line_profile": line_profile,
    "wire_mtf": wire_mtf,
    "mtf_isotropy": mtf_isotropy,
    "slice_profile": slice_profile,
    "bar_pattern": bar_pattern,
    "ct_number_line": ct_number_line,
}
