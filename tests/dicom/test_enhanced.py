"""Enhanced multi-frame CT: geometry and rescale from shared and per-frame functional groups."""

from __future__ import annotations

import numpy as np
import pytest
import series_writer as sw
from pydicom import dcmread
from pydicom.uid import JPEG2000Lossless, JPEGLSLossless, RLELossless

from ct_measure_plugin.dicom import read_series, scan_folder, scan_series

STORED = sw.noise((6, 32, 32))
SHUFFLED = [3, 0, 5, 1, 4, 2]
PLACES = [sw.line(6)[k] for k in SHUFFLED]


def codes(volume):
    return {caution.code for caution in volume.cautions}


def in_order(stored):
    """Return frames in the order of their places."""
    return stored[np.argsort(SHUFFLED)]


@pytest.mark.parametrize("syntax", sw.NATIVE)
def test_frames_are_ordered_by_their_own_positions(tmp_path, syntax):
    sw.save(sw.enhanced(STORED, PLACES), tmp_path / "one", sw.NATIVE[syntax])
    volume = read_series(tmp_path)
    assert np.array_equal(volume.hu, in_order(STORED) - 1024)
    assert volume.spacing_mm == (2.0, 0.5, 0.5)
    assert codes(volume) == set()
    assert volume.acquisition[0].kvp == 120
    assert volume.acquisition[0].kernel == "K40"
    assert [a.exposure_mas for a in volume.acquisition] == [101, 103, 105, 100, 104, 102]
    assert scan_series(tmp_path)[0].ctdi_vol_mgy == (5, 10)


@pytest.mark.parametrize("syntax", [RLELossless, JPEG2000Lossless, JPEGLSLossless])
def test_compressed_frames_are_found_one_by_one(tmp_path, syntax):
    sw.save_compressed(sw.enhanced(STORED.view(np.uint16), PLACES), tmp_path / "one", syntax)
    assert np.array_equal(read_series(tmp_path).hu, in_order(STORED) - 1024)


def test_frames_in_several_fragments_are_found_by_the_offset_table(tmp_path):
    from pydicom.encaps import encapsulate, generate_frames

    ds = sw.enhanced(STORED.view(np.uint16), PLACES)
    file = sw.save_compressed(ds, tmp_path / "one", RLELossless)
    ds = dcmread(file)
    frames = list(generate_frames(ds.PixelData, number_of_frames=6))
    ds.PixelData = encapsulate(frames, fragments_per_frame=2, has_bot=True)
    ds["PixelData"].is_undefined_length = True
    ds.save_as(file)
    assert np.array_equal(read_series(tmp_path).hu, in_order(STORED) - 1024)


def test_each_frame_has_its_own_rescale(tmp_path):
    slopes = [1.0, 2.0, 1.0, 3.0, 1.0, 1.0]
    intercepts = [-1024.0, -1000.0, 0.0, 5.0, -1.0, -7.0]
    sw.save(sw.enhanced(STORED, PLACES, slopes=slopes, intercepts=intercepts), tmp_path / "one")
    exact = STORED.astype(int) * np.array(slopes, int)[:, None, None]
    exact += np.array(intercepts, int)[:, None, None]
    assert np.array_equal(read_series(tmp_path).hu, in_order(exact))


def test_an_oblique_volume_with_pixels_that_are_not_square(tmp_path):
    cosines = (0.8, 0.6, 0.0, 0.0, 0.0, -1.0)
    normal = np.cross(cosines[:3], cosines[3:])
    places = sw.along(6, 1.5 * normal)
    ds = sw.enhanced(STORED, places, orientation=cosines, spacing=(0.9, 0.3))
    sw.save(ds, tmp_path / "one")
    volume = read_series(tmp_path)
    assert volume.spacing_mm == pytest.approx((1.5, 0.9, 0.3), abs=1e-6)
    expected = np.array(places[2]) + np.array(cosines[:3]) * 0.3 * 7
    expected += np.array(cosines[3:]) * 0.9 * 4
    assert (volume.affine_lps @ [2, 4, 7, 1])[:3] == pytest.approx(expected, abs=1e-6)


def test_frames_and_groups_that_disagree_are_refused(tmp_path):
    ds = sw.enhanced(STORED, PLACES)
    del ds.PerFrameFunctionalGroupsSequence[-1]
    sw.save(ds, tmp_path / "one")
    (skipped,) = scan_folder(tmp_path).skipped
    assert skipped.reason == "6 frames are declared and 5 are described"


def test_several_frames_without_groups_are_refused(tmp_path):
    ds = sw.ct_slice(STORED[0], NumberOfFrames=6)
    ds.PixelData = STORED.tobytes()
    sw.save(ds, tmp_path / "one")
    (skipped,) = scan_folder(tmp_path).skipped
    assert skipped.reason == "several frames without a position of their own"


def test_one_frame_may_have_all_its_groups_shared(tmp_path):
    ds = sw.enhanced(STORED[:1], sw.line(1))
    ds.SharedFunctionalGroupsSequence[0].update(ds.PerFrameFunctionalGroupsSequence[0])
    del ds.PerFrameFunctionalGroupsSequence
    sw.save(ds, tmp_path / "one")
    assert np.array_equal(read_series(tmp_path).hu, STORED[:1] - 1024)


def test_a_real_enhanced_file_is_read():
    """The file says US, not HU; its values are checked against the DICOM library's."""
    from pydicom.data import get_testdata_file

    path = get_testdata_file("eCT_Supplemental.dcm")
    volume = read_series(path)
    ds = dcmread(path)
    assert volume.unit == "rescaled units (US)"
    # its rows run to the patient's right and its columns to the back: the normal points to the feet
    heights = [
        -float(frame.PlanePositionSequence[0].ImagePositionPatient[2])
        for frame in ds.PerFrameFunctionalGroupsSequence
    ]
    groups = ds.SharedFunctionalGroupsSequence[0].PixelValueTransformationSequence[0]
    expected = ds.pixel_array[np.argsort(heights)].astype(float) * float(groups.RescaleSlope)
    assert np.array_equal(volume.hu, expected + float(groups.RescaleIntercept))
