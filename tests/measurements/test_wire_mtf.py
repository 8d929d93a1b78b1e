"""The wire MTF through the door that plans, docks and scripts use, on the sample volumes."""

from __future__ import annotations

from pathlib import Path

import pytest
from truth_images import GAUSS, disc_image

import ct_measure_plugin as ctm

SAMPLES = Path(__file__).parents[2] / "sample_volumes"
WIRE = ctm.regions.Disc((-20.0, 18.0), 9.0, z_mm=(43.0, 57.0))


@pytest.fixture(scope="module")
def standard():
    return ctm.read_series(SAMPLES / "standard")


@pytest.mark.parametrize("method", ["fitted", "transform", "rings"])
def test_the_sample_wire_gives_its_truth(standard, method):
    """sample_volumes/README.md: f50 0.4683, f10 0.7653; 0.2 mm thick at y -20, x 18, leaning 3°.

    The detector folds a thin wire's spectrum, by less than 0.01 in the mean over directions.
    """
    found = ctm.measure("wire_mtf", standard, WIRE, object_diameter_mm=0.2, method=method)
    assert abs(found.f50.value - 0.4683) < 0.005 + 2.5 * found.f50.uncertainty
    assert abs(found.f10.value - 0.7653) < 0.004 + 2.5 * found.f10.uncertainty
    assert abs(found.lean.value - 3.0) < 3 * found.lean.uncertainty
    assert found.center_mm == pytest.approx((-20.0, 18.0), abs=0.02)
    assert found.f50.uncertainty < 0.01


def test_the_sharp_kernel_gives_its_truth():
    volume = ctm.read_series(SAMPLES / "sharp")
    found = ctm.measure("wire_mtf", volume, WIRE, object_diameter_mm=0.2)
    assert abs(found.f50.value - 0.7496) < 0.005 + 2.5 * found.f50.uncertainty
    assert abs(found.f10.value - 0.8995) < 0.004 + 2.5 * found.f10.uncertainty
    assert found.peak.value == pytest.approx(1.2, abs=0.02 + 2.5 * found.peak.uncertainty)


def test_a_bead_is_measured_on_its_slices():
    volume = ctm.read_series(SAMPLES / "thin-steps")
    bead = ctm.regions.Box((22.0, -26.0), (14.0, 14.0), z_mm=50.0)
    found = ctm.measure("wire_mtf", volume, bead, object_diameter_mm=0.5, shape="bead")
    assert abs(found.f50.value - 0.4683) < 0.005 + 2.5 * found.f50.uncertainty
    assert found.lean is None


def test_marks_follow_the_wire(standard):
    settings = ctm.measurements.find("wire_mtf").settings_type(object_diameter_mm=0.2)
    measurement = ctm.measurements.find("wire_mtf")
    answer = measurement.measure(standard, (WIRE,), settings)
    spot, way = measurement.marks(standard, (WIRE,), settings, answer)
    assert spot.radius_mm == pytest.approx(answer.width.value / 2)
    # 3° over five gaps of 2.5 mm, towards 40° counter-clockwise: up and to the right
    assert way.length_mm == pytest.approx(0.0524 * 12.5, abs=0.02)
    assert way.end_mm[0] < way.start_mm[0]
    assert way.end_mm[1] > way.start_mm[1]


def test_what_is_known_of_the_volume_is_told_with_the_curve():
    """Lossy compression, above all: it smooths, or rings."""
    plane = disc_image(GAUSS, 0.1, shape=(56, 56), contrast=1e4)
    lossy = ctm.physics.Caution("lossy-compression", "Pixels are lossy.", "Export them again.")
    volume = ctm.Volume(plane[None], (2.0, 0.5, 0.5), cautions=(lossy,))
    found = ctm.measure("wire_mtf", volume, ctm.regions.Disc((13.75, 13.75), 12.0))
    assert found.f50.value == pytest.approx(0.187391 / 0.6, rel=0.01)
    assert lossy in found.cautions
