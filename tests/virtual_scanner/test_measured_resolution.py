"""Resolution of the shipped samples, in the plane and along z, against what was put in.

The series are fixed, so nothing is drawn anew; where many numbers are compared, the distribution of
their standardised errors is held as well.
"""

from __future__ import annotations

import numpy as np
import pytest
from known_answers import along_z, series, truth_of

import ct_measure_plugin as ctm
from ct_measure_plugin.physics.regions import direction
from ct_measure_plugin.virtual_scanner import bench_phantom as bench


def _edge_boxes():
    """Return a box across the middle of every side of every block, and how far the side leans."""
    for insert in bench.edge_blocks():
        for side in (0, 90, 180, 270):
            uy, ux = direction(insert.lean_deg + side)
            y, x = insert.centre_mm
            half, along = insert.size_mm / 2, insert.size_mm - 8.0
            size = (14.0, along) if side in (90, 270) else (along, 14.0)
            middle = (y + half * uy, x + half * ux)
            yield ctm.regions.Box(middle, size, z_mm=bench.SECTIONS["edges"]), insert.lean_deg


@pytest.mark.parametrize("name", ["standard", "sharp"])
def test_every_edge_has_the_mtf_that_was_put_in(name):
    """16 edges from 99 to 940 HU: f50, f10 and lean within 4 standard uncertainties.

    Of 48 errors the root mean square is 1 within 0.3 (3 σ of some 30 that are independent).
    """
    volume, truth, errors = series(name), truth_of(name), []
    for box, lean in _edge_boxes():
        found = ctm.measure("edge_mtf", volume, box)
        assert found, (box, found)
        for got, value in (
            (found.f50, truth.frequency_at(0.5)),
            (found.f10, truth.frequency_at(0.1)),
            (found.angle, abs(lean)),
        ):
            errors.append((got.value - value) / got.uncertainty)
    errors = np.array(errors)
    assert np.abs(errors).max() < 4.0
    assert np.sqrt(np.mean(errors**2)) == pytest.approx(1.0, abs=0.3)


@pytest.mark.parametrize("name", ["standard", "repeat", "sharp", "low-dose"])
def test_every_rod_has_the_mtf_that_was_put_in(name):
    """Rods of at least 80 HU contrast: f50 and f10 within 4 standard uncertainties."""
    volume, truth, errors = series(name), truth_of(name), []
    for rod in bench.material_rods():
        if abs(truth.hu(rod.material)) < 80.0:
            continue
        region = ctm.regions.Disc(rod.centre_mm, 9.5, z_mm=bench.SECTIONS["rods"])
        found = ctm.measure("disc_mtf", volume, region)
        assert found, (rod, found)
        for got, level in ((found.f50, 0.5), (found.f10, 0.1)):
            errors.append((got.value - truth.frequency_at(level)) / got.uncertainty)
    assert len(errors) == 14
    assert np.abs(errors).max() < 4.0
    assert np.sqrt(np.mean(np.square(errors))) < 1.6  # χ² of 14: one in a thousand


@pytest.mark.parametrize("name", ["standard", "repeat", "sharp", "low-dose", "thin-steps"])
def test_the_wire_and_the_beads_have_the_mtf_that_was_put_in(name):
    """f50 and f10 within 4 standard uncertainties, though the pixels under-sample the spot.

    The sharp kernel's beads are a pixel and a half wide on their one slice: a refusal is right.
    """
    volume, truth = series(name), truth_of(name)
    fine = (44.0, 56.0)
    asked = [(ctm.regions.Disc((-20.0, 18.0), 9.0, z_mm=fine), "wire", bench.WIRE_DIAMETER_MM)]
    asked += [
        (ctm.regions.Disc(place[1:], 7.0, z_mm=place[0]), "bead", bench.BEAD_DIAMETER_MM)
        for place in bench.BEADS_MM
    ]
    for region, shape, size in asked:
        found = ctm.measure("wire_mtf", volume, region, object_diameter_mm=size, shape=shape)
        if not found and (name, shape) == ("sharp", "bead"):
            assert "pixels wide" in found.reason
            continue
        assert found, (region, found)
        for got, level in ((found.f50, 0.5), (found.f10, 0.1)):
            off = abs(got.value - truth.frequency_at(level))
            assert off < 4.0 * got.uncertainty, (region, level)


def test_beads_and_ramps_have_the_slice_profile_that_was_put_in():
    """A trapezoid in steps of 0.5 mm: widths and f50 along z within 4 standard uncertainties."""
    volume, promised = series("thin-steps"), along_z(truth_of("thin-steps"))
    beads = [
        (ctm.regions.Disc(place[1:], 7.0), {"object_size_mm": bench.BEAD_DIAMETER_MM})
        for place in bench.BEADS_MM
    ]
    strip = {"target": "ramp", "object_size_mm": bench.RAMP_THICKNESS_MM, "in_plane_fwhm_mm": 1.04}
    ramps = [
        (ctm.regions.Box(middle, (18.0, 44.0), z_mm=(46.0, 54.0)), strip)
        for middle in ((8.0, 10.0), (32.0, 14.0))
    ]
    for region, settings in beads + ramps:
        found = ctm.measure("slice_profile", volume, region, **settings)
        assert found, (region, found)
        for name, value in promised.items():
            got = getattr(found, name)
            assert abs(got.value - value) < 4.0 * got.uncertainty, (region, name)


def test_the_whole_mtf_of_a_strong_edge_lies_on_the_true_curve():
    """The PTFE block, both kernels: within 4 standard uncertainties and the truth's own 0.01."""
    box, _ = list(_edge_boxes())[12]
    for name in ("standard", "sharp"):
        curve = ctm.measure("edge_mtf", series(name), box).mtf
        truth = truth_of(name)
        used = curve.x < 0.9
        off = np.abs(curve.y - truth.mtf(curve.x))[used]
        assert np.all(off < truth.mtf_bound + 4.0 * curve.y_uncertainty[used])
        assert off.max() < 0.04
