"""Order, gaps, tilt and the patient frame come from positions and orientation alone."""

from __future__ import annotations

import numpy as np
import pytest
import series_writer as sw

from ct_measure_plugin.dicom import read_series, scan_series

STORED = sw.noise((5, 8, 8))


def codes(volume):
    return {caution.code for caution in volume.cautions}


def place(volume, z, y, x):
    """Return the patient place of a voxel by the Volume's affine."""
    return (volume.affine_lps @ [z, y, x, 1])[:3]


def test_slices_lie_in_the_order_of_their_positions_whatever_names_and_numbers_say(tmp_path):
    folder = sw.write_series(
        tmp_path, STORED, sw.line(5), SliceLocation=lambda k: 100 - 7 * k, SpacingBetweenSlices=-16
    )
    volume = read_series(folder)
    assert np.array_equal(volume.hu, STORED - 1024)
    assert volume.spacing_mm == (2.0, 0.5, 0.5)
    assert volume.positions_mm.tolist() == [0, 2, 4, 6, 8]
    # an eightfold, negative spacing tag is noted and not believed
    assert codes(volume) == {"spacing-tag-wrong"}


def test_pixel_spacing_is_rows_first_and_the_equation_of_the_standard_holds(tmp_path):
    """The worked example: dy 0.8, dx 0.4, S (−100, −50, 10); row 10, column 20 → (−92, −42, 10)."""
    folder = sw.write_series(
        tmp_path, STORED, sw.line(5, start=10, xy=(-100, -50)), PixelSpacing=[0.8, 0.4]
    )
    volume = read_series(folder)
    assert volume.spacing_mm == (2.0, 0.8, 0.4)
    # positions are decimal text; the sum rounds at the last bit of a double
    assert place(volume, 0, 10, 20) == pytest.approx([-92, -42, 10], abs=1e-12)
    assert volume.origin_mm == (10, -50, -100)


ORIENTATIONS = {
    "head first": (1, 0, 0, 0, 1, 0),
    "mirrored": (-1, 0, 0, 0, 1, 0),
    "prone": (-1, 0, 0, 0, -1, 0),
    "coronal": (1, 0, 0, 0, 0, -1),
    "sagittal": (0, 1, 0, 0, 0, -1),
    "oblique": (0.8, 0.6, 0, 0, 0, -1),
    "doubly oblique": (2 / 3, 2 / 3, 1 / 3, -2 / 3, 1 / 3, 2 / 3),
}


@pytest.mark.parametrize("cosines", ORIENTATIONS.values(), ids=ORIENTATIONS)
def test_every_orientation_keeps_each_voxel_at_its_place(tmp_path, cosines):
    """Slices are written against the normal; the Volume turns them so that z increases along it."""
    cosines = [round(c, 10) for c in cosines]
    x, y = np.array(cosines[:3]), np.array(cosines[3:])
    normal = np.cross(x, y)
    places = sw.along(5, -3.0 * normal)
    folder = sw.write_series(tmp_path, STORED, places, ImageOrientationPatient=list(cosines))
    volume = read_series(folder)
    assert np.array_equal(volume.hu, STORED[::-1] - 1024)
    assert volume.spacing_mm == pytest.approx((3.0, 0.5, 0.5), abs=1e-5)  # positions: 6 decimals
    for k in range(5):
        expected = np.array(places[4 - k]) + 0.5 * (3 * y + 2 * x)
        assert place(volume, k, 3, 2) == pytest.approx(expected, abs=1e-5)
    assert np.allclose(volume.direction_lps, [normal, y, x], atol=1e-9)
    assert volume.tilt_deg == 0
    assert ("oblique" in codes(volume)) == (np.max(np.abs(normal)) < 0.99)


@pytest.mark.parametrize("degrees", [-17.5, 0.3, 20.0])
@pytest.mark.parametrize("tag", [None, 20.0, 0.0])
def test_tilt_is_the_angle_between_stacking_and_normal_with_or_without_its_tag(
    tmp_path, degrees, tag
):
    angle = np.radians(degrees)
    cosines = (1, 0, 0, 0, round(np.cos(angle), 8), round(np.sin(angle), 8))
    places = sw.along(5, (0, 0, 5.0))
    changes = {} if tag is None else {"GantryDetectorTilt": tag}
    folder = sw.write_series(
        tmp_path, STORED, places, ImageOrientationPatient=list(cosines), **changes
    )
    volume = read_series(folder)
    assert volume.tilt_deg == pytest.approx(abs(degrees), abs=1e-4)  # cosines: 8 decimals
    assert "gantry-tilt" in codes(volume)
    assert ("tilt-tag-disagrees" in codes(volume)) == (
        tag is not None and abs(abs(degrees) - tag) > 0.5
    )
    # slices are 5 cos(angle) apart along their normal, and voxels stay where they were
    assert volume.spacing_mm[0] == pytest.approx(5 * np.cos(angle), abs=1e-6)
    first = int(np.argmin([p @ volume.direction_lps[0] for p in np.array(places)]))
    assert place(volume, 0, 0, 0) == pytest.approx(places[first], abs=1e-6)
    assert place(volume, 4, 0, 0) == pytest.approx(places[4 - first], abs=1e-6)


def test_rounding_of_positions_is_no_tilt(tmp_path):
    places = [(-10 + 0.004 * (k % 2), -10, 2.0 * k) for k in range(5)]
    assert read_series(sw.write_series(tmp_path, STORED, places)).tilt_deg == 0


def test_a_missing_slice_is_reported_and_the_gap_kept(tmp_path):
    places = [(-10, -10, z) for z in (0, 2, 4, 8, 10)]
    volume = read_series(sw.write_series(tmp_path, STORED, places))
    assert {"uneven-spacing", "missing-slice"} <= codes(volume)
    assert not volume.evenly_spaced
    assert volume.spacing_mm[0] == 2
    assert volume.positions_mm.tolist() == [0, 2, 4, 8, 10]
    text = next(c.text for c in volume.cautions if c.code == "missing-slice")
    assert "1 more slice of 2 mm" in text


def test_uneven_gaps_that_are_no_multiples_miss_no_slice(tmp_path):
    places = [(-10, -10, z) for z in (0, 2, 4, 7, 9)]
    volume = read_series(sw.write_series(tmp_path, STORED, places))
    assert "uneven-spacing" in codes(volume)
    assert "missing-slice" not in codes(volume)


def test_gaps_within_the_tolerance_are_even(tmp_path):
    places = [(-10, -10, z) for z in (0, 2.005, 4, 6.005, 8)]
    volume = read_series(sw.write_series(tmp_path, STORED, places))
    assert codes(volume) == set()
    assert volume.evenly_spaced
    assert volume.spacing_mm[0] == pytest.approx(2.0, abs=1e-12)


def test_slices_beside_the_line_are_reported(tmp_path):
    places = [(-10 + 3 * (k == 2), -10, 2.0 * k) for k in range(5)]
    volume = read_series(sw.write_series(tmp_path, STORED, places))
    text = next(c.text for c in volume.cautions if c.code == "uneven-spacing")
    assert "3 mm beside" in text


def test_mixed_thickness_is_reported(tmp_path):
    folder = sw.write_series(
        tmp_path, STORED, sw.line(5), SliceThickness=lambda k: "2" if k < 3 else "5"
    )
    volume = read_series(folder)
    assert codes(volume) == {"mixed-thickness"}
    assert [a.slice_thickness_mm for a in volume.acquisition] == [2, 2, 2, 5, 5]
    assert scan_series(folder)[0].thickness_mm == (2, 5)


def test_one_slice_takes_its_thickness_for_a_step(tmp_path):
    volume = read_series(sw.write_series(tmp_path, STORED[:1], sw.line(1)))
    assert volume.spacing_mm == (2.0, 0.5, 0.5)
    assert volume.shape == (1, 8, 8)


@pytest.mark.parametrize("lost", ["ImagePositionPatient", "ImageOrientationPatient"])
def test_slices_without_a_place_stand_alone(tmp_path, lost):
    """Their order is unknown, and no other tag may decide it."""
    folder = sw.write_series(tmp_path, STORED[:3], sw.line(3), **{lost: None})
    entries = scan_series(folder)
    assert [entry.slice_count for entry in entries] == [1, 1, 1]
    for entry in entries:
        volume = read_series(entry)
        assert "missing-geometry" in codes(volume)
        assert volume.affine_lps is None


@pytest.mark.parametrize(
    "cosines", [[0] * 6, [1, 0, 0, 1, 0, 0], [5, 0, 0, 0, 1, 0], [1, 0, 0]], ids=str
)
def test_impossible_orientations_are_as_good_as_none(tmp_path, cosines):
    folder = sw.write_series(tmp_path, STORED[:1], sw.line(1), ImageOrientationPatient=cosines)
    assert "missing-geometry" in codes(read_series(folder))


def test_missing_pixel_spacing_falls_back_on_the_diameter_or_is_refused(tmp_path):
    folder = sw.write_series(
        tmp_path, STORED, sw.line(5), PixelSpacing=None, ReconstructionDiameter="4"
    )
    volume = read_series(folder)
    assert volume.spacing_mm == (2.0, 0.5, 0.5)
    assert codes(volume) == {"missing-geometry"}


def test_a_diameter_that_contradicts_the_pixel_spacing_is_noted(tmp_path):
    folder = sw.write_series(tmp_path, STORED, sw.line(5), ReconstructionDiameter="8")
    assert codes(read_series(folder)) == {"spacing-tag-wrong"}
    assert read_series(folder).spacing_mm == (2.0, 0.5, 0.5)


def test_patient_position_is_kept(tmp_path):
    folder = sw.write_series(tmp_path, STORED, sw.line(5), PatientPosition="FFP")
    assert read_series(folder).patient_position == "FFP"
