"""Projections: nesting, sub-sampling, spectra, and an outside program's Radon transform."""

from __future__ import annotations

import numpy as np
import pytest
from skimage.transform import radon

from ct_measure_plugin.physics.attenuation import material
from ct_measure_plugin.virtual_scanner import (
    AIR,
    WATER,
    Detector,
    FanBeam,
    ParallelBeam,
    Part,
    Phantom,
    SliceProfile,
    TabulatedMaterial,
    block,
    disc_rod,
    elliptic_cylinder,
    monoenergetic,
    tube_spectrum,
)
from ct_measure_plugin.virtual_scanner.detector import with_scatter
from ct_measure_plugin.virtual_scanner.projector import path_lengths, projection

PTFE = material("PTFE")
NESTED = Phantom(
    (
        Part(disc_rod((0.0, 0.0), 50.0), WATER),
        Part(disc_rod((10.0, -20.0), 10.0), PTFE, WATER),
        Part(disc_rod((12.0, -21.0), 3.0), AIR, PTFE),
    )
)
FLAT = SliceProfile("rectangular", 1.0)


def test_a_child_replaces_its_parent():
    """Through the middle of all three: 100 mm, of which 20 are rod, of which 6 are hole."""
    beam = ParallelBeam(views=2, channels=241, pitch_mm=0.5, aperture_mm=1e-4)
    cuts = Phantom(
        tuple(
            Part(disc_rod((0.0, 0.0), r), m, p)
            for r, m, p in ((50.0, WATER, AIR), (10.0, PTFE, WATER), (3.0, AIR, PTFE))
        )
    ).cuts(FLAT, 0.0)
    found = projection(beam, cuts, monoenergetic(70.0))[0, 120]
    mu = {m: float(m.mu(70.0)) for m in (WATER, PTFE, AIR)}
    expected = 8.0 * mu[WATER] + 1.4 * mu[PTFE] + 0.6 * mu[AIR] - 10.0 * mu[AIR]
    assert float(found) == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize(
    "geometry",
    [
        ParallelBeam(views=36, channels=260, pitch_mm=0.5),
        FanBeam(views=36, channels=260, pitch_mm=0.5, source_mm=300.0, detector_mm=600.0),
    ],
    ids=["parallel", "fan"],
)
def test_a_small_object_is_the_same_through_its_window_as_on_the_whole_detector(geometry):
    """The shadow's window is a short cut; a slow twin takes every channel."""
    cuts = NESTED.cuts(FLAT, 0.0)[2:]
    found = path_lengths(geometry, cuts)[AIR, PTFE]
    view, channel = np.meshgrid(np.arange(36), np.arange(260), indexing="ij")
    rays = geometry.rays(view, channel, (0.0, 0.0))
    np.testing.assert_allclose(
        found, cuts[0].section.strip_mean(*rays, geometry.strip_mm), atol=1e-12
    )
    assert np.count_nonzero(found) < found.size / 8


def test_one_energy_is_a_spectrum_of_one_line():
    beam = ParallelBeam(views=5, channels=240, pitch_mm=0.5)
    cuts = NESTED.cuts(FLAT, 0.0)
    straight = projection(beam, cuts, monoenergetic(70.0))
    twice = type(monoenergetic(70.0))((70.0, 70.0), (0.25, 0.75))
    # 1e-12: rounding of exp and log
    np.testing.assert_allclose(projection(beam, cuts, twice), straight, atol=1e-12)


def test_a_spectrum_attenuates_by_beers_law_at_every_energy():
    beam = ParallelBeam(views=2, channels=241, pitch_mm=0.5, aperture_mm=1e-4)
    spectrum = tube_spectrum(120.0)
    found = projection(beam, NESTED.cuts(FLAT, 0.0)[:1], spectrum)[0, 120]
    energies = np.array(spectrum.energies_kev)
    behind = np.exp(-10.0 * (WATER.mu(energies) - AIR.mu(energies)))
    assert float(found) == pytest.approx(-np.log(np.sum(spectrum.shares * behind)), rel=1e-9)


def test_sub_sampling_the_aperture_averages_transmission():
    """At an edge the mean of e^{−p} exceeds e^{−mean p}: the finer signal is larger."""
    dense = TabulatedMaterial("dense", (1.0, 500.0), (5.0, 5.0))
    cuts = Phantom((Part(block((0.0, 0.0), (20.0, 20.0)), dense),)).cuts(FLAT, 0.0)
    shape = {"views": 2, "channels": 61, "pitch_mm": 0.7}
    once = projection(ParallelBeam(**shape), cuts, monoenergetic(70.0))[0]
    finely = projection(ParallelBeam(**shape, aperture_rays=16), cuts, monoenergetic(70.0))[0]
    edge = np.flatnonzero((once > 0.1) & (once < 0.9 * once.max()))
    assert edge.size == 2
    assert np.all(finely[edge] < once[edge] - 0.5)
    flat = np.setdiff1d(np.arange(61), edge)
    np.testing.assert_allclose(finely[flat], once[flat], atol=1e-9)
    # a channel with a share w in the shadow lets 1 − w past, apart from e^{−10}
    share = once[edge] / once.max()
    np.testing.assert_allclose(np.exp(-finely[edge]), 1.0 - share, atol=0.5 / 16)


def test_a_focal_spot_blurs_by_its_width():
    """Its sub-samples shift the shadow; the mean over them equals shifting by hand."""
    thin = TabulatedMaterial("thin", (1.0, 500.0), (1e-4, 1e-4))
    faint = Phantom((Part(disc_rod((3.0, 4.0), 6.0), thin),)).cuts(FLAT, 0.0)
    shape = {"views": 3, "channels": 101, "pitch_mm": 0.5}
    blurred = projection(
        ParallelBeam(**shape, focal_spot_mm=1.0, focal_rays=2), faint, monoenergetic(70.0)
    )
    sharp = projection(ParallelBeam(**shape), faint, monoenergetic(70.0))
    assert blurred.sum() == pytest.approx(sharp.sum(), rel=1e-4)
    # two points 0.5 mm apart: at ±0.25 mm, half a channel; compare on a grid of half channels
    fine = projection(
        ParallelBeam(views=3, channels=203, pitch_mm=0.25, aperture_mm=0.5),
        faint,
        monoenergetic(70.0),
    )
    by_hand = 0.5 * (fine[:, 0:-2:2] + fine[:, 2::2])
    np.testing.assert_allclose(blurred, by_hand, atol=1e-9)


def test_projections_agree_with_an_independent_radon_transform():
    """scikit-image's radon of a rasterised object, differences explained.

    It rotates the image by bilinear interpolation and sums columns: it works on a raster, so its
    edges are about a pixel soft. Each pixel here holds the disc's share of 64 points in it.
    Inside the shadows the two agree within 0.6 % of the largest projection; at the edges, where
    the chord has an infinite slope, within 3 %.
    """
    pixels = 201
    fine = (np.arange(8 * pixels) + 0.5) / 8 - 0.5
    inside_disc = np.hypot(fine[:, None] - 112.0, fine - 78.0) <= 50.0
    raster = inside_disc.reshape(pixels, 8, pixels, 8).mean(axis=(1, 3))
    beam = ParallelBeam(views=12, channels=pixels, pitch_mm=1.0)
    # scikit-image turns counter-clockwise on the screen: y is counted upwards
    figure = elliptic_cylinder((-12.0, -22.0), (50.0, 50.0))
    unit = TabulatedMaterial("unit", (1.0, 500.0), (10.0, 10.0))
    empty = TabulatedMaterial("empty", (1.0, 500.0), (0.0, 0.0))
    cuts = Phantom((Part(figure, unit, empty),)).cuts(FLAT, 0.0)
    exact = projection(beam, cuts, monoenergetic(70.0))
    outside = radon(raster, theta=np.degrees(beam.angles), circle=True).T
    error = np.abs(outside - exact) / exact.max()
    assert exact.max() == pytest.approx(100.0, rel=1e-4)
    assert error.max() < 0.03
    inside = exact > 0.5 * exact.max()
    assert error[inside].max() < 0.006
    # both see the same area in every view: rotation by interpolation loses up to 0.1 %
    np.testing.assert_allclose(outside.sum(axis=1), exact.sum(axis=1), rtol=1e-3)


def test_scatter_adds_signal_most_where_least_comes_through():
    beam = ParallelBeam(views=2, channels=241, pitch_mm=0.5)
    clean = projection(beam, NESTED.cuts(FLAT, 0.0)[:1], monoenergetic(70.0))
    found = with_scatter(clean, Detector(scatter_ratio=0.3, scatter_sigma_mm=20.0), beam)
    added = (np.exp(-found) - np.exp(-clean))[0]
    assert np.all(added >= 0)
    assert (clean - found)[0, 120] > 3 * (clean - found)[0, 30] > 0
    assert np.abs(np.diff(added)).max() < 0.02 * added.max()  # smooth
