"""The MTF a recipe promises, against the Fourier transform of simulated points."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.virtual_scanner import (
    AIR,
    KERNEL_SHAPES,
    WATER,
    Blob,
    FanBeam,
    Grid,
    Kernel,
    ParallelBeam,
    Part,
    Phantom,
    Recipe,
    SliceProfile,
    Straight,
    TabulatedMaterial,
    Truth,
    disc_rod,
    simulate_slice,
    tilted_wire,
)

WIRE = TabulatedMaterial("wire", (1.0, 500.0), (500.0, 500.0))


def _spectrum(recipe):
    """Return |F|/F(0) of a slice less its background, and the frequency of every bin."""
    image = simulate_slice(recipe, 0).hu - Truth(recipe).hu(AIR)
    found = np.abs(np.fft.fft2(image))
    f = np.fft.fftfreq(recipe.grid.matrix, recipe.grid.pixel_mm)
    return found / found[0, 0], np.hypot(f[:, None], f)


def _point(geometry, kernel, at_mm, *, sigma_mm=0.15, matrix=256, lookup="fine"):
    """A Gaussian point: all but without detail beyond the detector's Nyquist frequency."""
    return Recipe(
        phantom=Phantom((Part(Straight(Blob(at_mm, sigma_mm)), WATER),)),
        geometry=geometry,
        kernel=kernel,
        grid=Grid(matrix=matrix, fov_mm=0.5 * matrix, centre_mm=at_mm, lookup=lookup),
    )


def _error(recipe, sigma_mm=0.15):
    found, f = _spectrum(recipe)
    f_own = np.exp(-2.0 * np.pi**2 * sigma_mm**2 * f**2)
    near = f <= 0.9 * 0.5 / recipe.grid.pixel_mm
    return np.abs(found / f_own - Truth(recipe).mtf(f))[near].max()


FOCUS = {"views": 720, "channels": 512, "pitch_mm": 0.25, "focal_spot_mm": 0.4, "focal_rays": 3}


@pytest.mark.parametrize("shape", KERNEL_SHAPES)
def test_a_point_has_the_promised_mtf_in_every_direction(shape):
    """Pixels of 0.5 mm, cut-off at their Nyquist frequency 1 mm⁻¹; up to 0.9 of it within 1 %.

    Every bin of the plane is compared, no averaging over directions. The point's own spectrum is
    known and divided out. The error of the smooth kernels is below 0.001. The pure ramp ends in a
    jump, whose ripples reach far: its field is 256 mm wide, so that little of them is cut off.
    """
    matrix = 512 if shape == "ramp" else 256
    recipe = _point(ParallelBeam(**FOCUS), Kernel(shape, 1.0), (7.3, -11.9), matrix=matrix)
    assert Truth(recipe).mtf_bound == 0.01
    error = _error(recipe)
    assert error < (0.01 if shape in ("ramp", "butterworth") else 0.002)


def test_linear_lookup_keeps_its_wider_bound():
    recipe = _point(ParallelBeam(**FOCUS), Kernel("enhancing", 1.0), (7.3, -11.9), lookup="linear")
    assert 0.01 < _error(recipe) < Truth(recipe).mtf_bound == 0.05


@pytest.mark.parametrize("at_mm", [(0.3, -0.1), (20.3, -31.1)])
def test_a_fan_keeps_the_mtf_near_the_isocentre(at_mm):
    """Within 0.2 % at the isocentre and 0.5 % at 37 mm from it."""
    fan = FanBeam(views=1440, channels=512, pitch_mm=0.25, focal_spot_mm=1.0, focal_rays=4)
    recipe = _point(fan, Kernel("enhancing", 1.0), at_mm, sigma_mm=0.25, matrix=128)
    assert _error(recipe, 0.25) < (0.002 if at_mm[0] < 1 else 0.005)


def test_frequencies_of_the_textbook_case():
    """d = a = 0.5 mm, Hann cut-off 1 mm⁻¹, linear lookup: f50 0.4203, f10 0.7112 mm⁻¹.

    sinc(f a) · A(f) · sinc²(f d) solved by hand at 50 and 10 %; 5e-5 is their rounding.
    """
    truth = Truth(_point(ParallelBeam(), Kernel("hann", 1.0), (0.0, 0.0), lookup="linear"))
    assert truth.frequency_at(0.5) == pytest.approx(0.4203, abs=5e-5)
    assert truth.frequency_at(0.1) == pytest.approx(0.7112, abs=5e-5)
    listed = {0.1: 0.9636, 0.2: 0.8608, 0.4: 0.5358, 0.6: 0.2185, 0.8: 0.0414}
    np.testing.assert_allclose(truth.mtf(list(listed)), list(listed.values()), atol=5e-5)
    with pytest.raises(ArgumentError, match="'level' must be a value the MTF falls to"):
        truth.frequency_at(1.5)


def test_a_thin_wire_read_the_classical_way_has_these_frequencies():
    """A wire 0.2 mm thick, FFT, mean over directions, wire's own 2J₁(x)/x divided out: 1 %.

    Its detail beyond the detector's Nyquist frequency folds back and mostly cancels in the mean.
    """
    from scipy.special import j1

    recipe = Recipe(
        phantom=Phantom((Part(disc_rod((-14.9, 22.3), 0.1), WIRE),)),
        geometry=ParallelBeam(views=720, channels=256, pitch_mm=0.5),
        kernel=Kernel("hann", 1.0),
        grid=Grid(matrix=256, fov_mm=64.0, centre_mm=(-14.9, 22.3), lookup="linear"),
    )
    found, f = _spectrum(recipe)
    ring = np.rint(f * 64.0).astype(int)
    radial = np.bincount(ring.ravel(), found.ravel()) / np.bincount(ring.ravel())
    axis = np.arange(1, 60) / 64.0
    x = np.pi * axis * 0.2
    radial = radial[1:60] * x / (2.0 * j1(x))
    f50, f10 = (np.interp(-level, -radial, axis) for level in (0.5, 0.1))
    assert f50 == pytest.approx(0.4203, rel=0.01)
    assert f10 == pytest.approx(0.7112, rel=0.01)


def test_the_folding_of_a_point_stays_within_its_stated_size():
    """A wire thinner than a channel, one direction at a time: error below `folding`, and real."""
    recipe = Recipe(
        phantom=Phantom((Part(disc_rod((3.1, -2.2), 0.01), WIRE),)),
        geometry=ParallelBeam(views=720, channels=256, pitch_mm=0.5),
        kernel=Kernel("hann", 1.0),
        grid=Grid(matrix=128, fov_mm=64.0, centre_mm=(3.1, -2.2)),
    )
    truth = Truth(recipe)
    found, f = _spectrum(recipe)
    near = f < 0.9
    error = np.abs(found - truth.mtf(f))[near]
    # folding from beyond twice the sampling frequency is left out of it: 10 % more
    assert np.all(error < 1.1 * truth.folding(f[near]) + 0.01)
    assert error.max() > 0.5 * truth.folding(np.linspace(0, 0.9, 50)).max()


def test_a_focal_spot_costs_resolution_as_promised():
    sharp = Truth(_point(ParallelBeam(), Kernel("hann", 1.0), (0.0, 0.0)))
    blurred = Truth(
        _point(ParallelBeam(focal_spot_mm=0.6, focal_rays=24), Kernel("hann", 1.0), (0.0, 0.0))
    )
    f = np.array([0.2, 0.5, 0.8])
    # 24 points stand for a box 0.6 mm wide to (f·0.025)² of it
    np.testing.assert_allclose(blurred.mtf(f) / sharp.mtf(f), np.sinc(0.6 * f), rtol=1e-3)


@pytest.mark.parametrize(
    "profile",
    [
        SliceProfile("rectangular", 3.0),
        SliceProfile("trapezoid", 3.0, penumbra=0.5),
        SliceProfile("gaussian", 3.0),
    ],
    ids=lambda p: p.shape,
)
def test_a_leaning_wire_draws_the_slice_profile(profile):
    """At 45° a thin wire lays the profile along the slice, z = s: its trace has the FWHM.

    The trace is the profile blurred in the plane; summed across the trace, a line of pixels 0.25
    mm apart. Blur by the kernel (FWHM 1 mm) leaves the width of a symmetric profile with straight
    flanks alone: 2 %.
    """
    recipe = Recipe(
        phantom=Phantom((Part(tilted_wire((0.0, 0.0, 0.0), 0.2, tilt_deg=45.0), WIRE),)),
        geometry=ParallelBeam(views=360, channels=128, pitch_mm=0.25),
        kernel=Kernel("hann", 2.0),
        grid=Grid(matrix=96, fov_mm=24.0),
        profile=profile,
    )
    truth = Truth(recipe)
    image = simulate_slice(recipe, 0).hu - truth.hu(AIR)
    trace = image.sum(axis=0)
    z = recipe.grid.axis_mm(1)
    trace /= np.interp(0.0, z, trace)
    left = np.interp(0.5, trace[: z.size // 2], z[: z.size // 2])
    right = np.interp(0.5, trace[z.size // 2 :][::-1], z[z.size // 2 :][::-1])
    assert right - left == pytest.approx(truth.slice_fwhm_mm, rel=0.02)
    inner = np.abs(z) < 0.3 * profile.width_mm
    assert np.abs(trace - truth.slice_profile(z))[inner].max() < 0.04
