"""From simulated DICOM to measured numbers: what is measured agrees with what was put in.

The shipped samples go through the same doors as a user's series: the reader and the
measurements. Series are fixed, so nothing here is drawn anew; where many numbers are compared,
the distribution of their standardised errors is held as well, so that neither a bias nor an
uncertainty that is too large or too small can hide.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from known_answers import series, truth_of

import ct_measure_plugin as ctm
from ct_measure_plugin.virtual_scanner import (
    WATER,
    Detector,
    Grid,
    Kernel,
    ParallelBeam,
    Part,
    Phantom,
    Recipe,
    Truth,
    disc_rod,
    samples,
    simulate,
)
from ct_measure_plugin.virtual_scanner import bench_phantom as bench


def _standardised(name, inserts, section, share):
    """Return error over stated uncertainty of every insert in every slice wholly in its section."""
    volume, truth = series(name), truth_of(name)
    found = []
    for insert in inserts:
        for z_mm in bench.slice_centres(section):
            region = ctm.regions.Disc(insert.centre_mm, share * insert.size_mm / 2, z_mm=z_mm)
            mean = ctm.measure("region_statistics", volume, region).mean
            slack = truth.hu_bound(insert.material)
            off = mean.value - truth.hu(insert.material)
            assert abs(off) < 4.0 * mean.uncertainty + slack, (name, insert, z_mm)
            found.append(off / mean.uncertainty)
    return np.array(found)


def test_rods_and_faint_discs_read_their_ct_numbers_within_their_uncertainty():
    """8 rods and 4 discs in 3 slices of 4 series; the bound of the truth is part of the error.

    Small regions state a wide uncertainty on purpose (their own noise cannot show how far its
    spectrum falls towards 0), so the errors spread less than 1; below 0.4 it would be useless.
    """
    large = [disc for disc in bench.faint_discs() if disc.size_mm >= 8.0]
    errors = []
    for name in ("standard", "repeat", "sharp", "low-dose"):
        errors.append(_standardised(name, bench.material_rods(), "rods", 0.66))
        errors.append(_standardised(name, large, "faint", 0.8))
    errors = np.concatenate(errors)
    assert errors.size == 4 * 12 * 3
    assert 0.4 < np.sqrt(np.mean(errors**2)) < 1.1
    assert abs(errors.mean()) < 0.25


def _cup_over_disc(truth, from_axis_mm, radius_mm):
    """Return the mean of the true cup over a disc."""
    steps = np.linspace(-radius_mm, radius_mm, 101)
    inside = np.hypot(steps[:, None], steps) <= radius_mm
    away = np.hypot(steps[:, None], from_axis_mm + steps)[inside]
    return float(truth.water_cup(away, bench.CYLINDER_MM).mean())


def test_the_cup_is_as_deep_as_beam_hardening_makes_it():
    """Uniformity of the series without correction: each within 4 standard uncertainties.

    The truth is the inverse Radon transform of the hardened readings, good to 0.2 HU.
    """
    truth, size = truth_of("cup"), 0.1 * bench.CYLINDER_MM
    found = ctm.measure("uniformity", series("cup"))
    centre, edge = (_cup_over_disc(truth, at, size) for at in (0.0, 8.0 * size))
    axis, border = truth.water_cup([0.0, 9.0 * size], bench.CYLINDER_MM)
    for got, value in (
        (found.centre, centre),
        (found.edge, edge),
        (found.cupping, edge - centre),
        (found.cup_depth, border - axis),
        (found.water, _cup_over_disc(truth, 0.0, 4.0 * size)),
    ):
        assert abs(got.value - value) < 4.0 * got.uncertainty + 0.2
    assert edge - centre > 30.0  # it is a cup worth measuring


def test_the_drifted_channels_are_found_as_rings_of_their_size():
    """Radii within 3 standard uncertainties; the radial mean about each ring within 0.6 HU.

    A millimetre holds a ring's flank and its middle; noise leaves 0.1 to 0.2 HU in it.
    """
    found = ctm.measure(
        "ring_artefact", series("rings"), ctm.regions.Disc((0.0, 0.0), 52.0, z_mm=(0.0, 20.0))
    )
    truth, radial = truth_of("rings"), found.radial_mean
    true_radii = [abs(channel - 129.5) * 0.5 for channel, _ in samples.RING_ERRORS]
    for radius in true_radii:
        ring = min(found.rings, key=lambda one, at=radius: abs(one.radius.value - at))
        assert abs(ring.radius.value - radius) < 3.0 * ring.radius.uncertainty
        assert ring in found.rings[:3]
        near = np.flatnonzero((radial.x > radius - 0.3) & (radial.x < radius + 0.8))
        half = (radial.x[1] - radial.x[0]) / 2
        low, high = radial.x[near[0]] - half, radial.x[near[-1]] + half
        promised = truth.rings(np.linspace(low, high, 101)).mean()
        assert abs(promised) > 5.0
        assert radial.y[near].mean() == pytest.approx(promised, abs=0.6)


def test_noise_power_of_a_fresh_scan_is_the_truth_within_its_uncertainty():
    """4 scans of 12 slices; each ring's χ² with the degrees of freedom that are stated for it.

    Standardised errors of 26 rings: neighbours are correlated by the window, so their mean square
    over one scan scatters by about ±0.4 and its root over four by ±0.1. Theory holds for the
    centre: the fall of the noise over the patch, 0.7 % of its variance, is worked in.
    """
    recipe = Recipe(
        phantom=Phantom((Part(disc_rod((0.0, 0.0), 58.0), WATER),)),
        geometry=ParallelBeam(views=240, channels=240, pitch_mm=0.5),
        detector=Detector(quanta_per_mm2=3e5),
        kernel=Kernel("hann", 1.0),
        grid=Grid(matrix=72, fov_mm=36.0),
        positions_mm=tuple(float(k) for k in range(12)),
        calibration_path_mm=116.0,
    )
    truth, memory, errors, levels = Truth(recipe), {}, [], []
    for seed in range(4):
        volume = simulate(replace(recipe, seed=seed), memory=memory)
        found = ctm.measure("noise_power", volume, ctm.regions.Disc((0.0, 0.0), 25.0))
        f = found.radial.x
        used = (f >= found.lowest_frequency.value) & (f < 0.9)
        promised = 0.993 * truth.nps(f[used])
        spread = np.sqrt(2.0 / found.degrees_of_freedom.y[used])
        errors.append((found.radial.y[used] / promised - 1.0) / spread)
        levels.append((found.sd.value / truth.noise_sd() - 0.9965) / found.sd.uncertainty)
    errors = np.array(errors)
    assert np.sqrt(np.mean(errors**2)) == pytest.approx(1.0, abs=0.25)
    assert abs(errors.mean()) < 0.3
    assert np.abs(errors).max() < 4.5
    assert np.sqrt(np.mean(np.square(levels))) < 2.15  # χ² of 4, one in a thousand
