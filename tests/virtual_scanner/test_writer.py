"""DICOM files read back by another library than the one that wrote them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pydicom
import pytest
import SimpleITK

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.virtual_scanner import (
    WATER,
    Detector,
    Grid,
    ParallelBeam,
    Part,
    Phantom,
    Recipe,
    SliceProfile,
    disc_rod,
    simulate,
    tube_spectrum,
)
from ct_measure_plugin.virtual_scanner.writer import Labels, write_enhanced, write_series

RECIPE = Recipe(
    phantom=Phantom((Part(disc_rod((3.0, 4.0), 15.0), WATER),), "small"),
    geometry=ParallelBeam(views=60, channels=121, pitch_mm=0.5),
    detector=Detector(quanta_per_mm2=2e3, dose=0.5),
    grid=Grid(matrix=32, fov_mm=40.0, centre_mm=(2.0, -1.0)),
    profile=SliceProfile("rectangular", 2.5),
    positions_mm=(-2.5, 0.0, 2.5, 5.0),
    seed=8,
    title="SIMULATED small",
)
LABELS = Labels(study="bench", series_number=3, phantom_id="SMALL-1", lab="nowhere")


@pytest.fixture(scope="module")
def volume():
    return simulate(RECIPE)


@pytest.fixture(scope="module")
def written(volume, tmp_path_factory):
    return write_series(volume, RECIPE, tmp_path_factory.mktemp("series"), labels=LABELS)


def _check_geometry(image, recipe):
    assert image.GetSize() == (32, 32, 4)
    assert image.GetSpacing() == pytest.approx((1.25, 1.25, 2.5))
    y, x = recipe.grid.axis_mm(0)[0], recipe.grid.axis_mm(1)[0]
    assert image.GetOrigin() == pytest.approx((x, y, -2.5))
    assert image.GetDirection() == pytest.approx((1, 0, 0, 0, 1, 0, 0, 0, 1))


def test_simpleitk_reads_the_series_back(volume, written):
    reader = SimpleITK.ImageSeriesReader()
    folder = str(written[0].parent)
    assert len(reader.GetGDCMSeriesIDs(folder)) == 1
    reader.SetFileNames(reader.GetGDCMSeriesFileNames(folder))
    image = reader.Execute()
    _check_geometry(image, RECIPE)
    np.testing.assert_array_equal(SimpleITK.GetArrayFromImage(image), volume.hu)
    assert volume.hu.min() < -1024  # air noise below the intercept is kept


def test_simpleitk_reads_the_enhanced_file_back(volume, tmp_path):
    path = write_enhanced(volume, RECIPE, tmp_path / "new" / "frames.dcm", labels=LABELS)
    image = SimpleITK.ReadImage(str(path))
    _check_geometry(image, RECIPE)
    np.testing.assert_array_equal(SimpleITK.GetArrayFromImage(image), volume.hu)


def test_the_header_has_what_a_ct_image_must_have(written):
    """Types 1 and 2 of the CT Image IOD's modules (PS3.3 A.3), those that apply."""
    header = pydicom.dcmread(written[1])
    assert header.SOPClassUID == "1.2.840.10008.5.1.4.1.1.2"
    type_1 = (
        "SOPInstanceUID StudyInstanceUID SeriesInstanceUID FrameOfReferenceUID Modality "
        "ImageType SamplesPerPixel PhotometricInterpretation Rows Columns BitsAllocated "
        "BitsStored HighBit PixelRepresentation PixelSpacing ImageOrientationPatient "
        "ImagePositionPatient RescaleIntercept RescaleSlope PixelData"
    )
    type_2 = (
        "PatientName PatientID PatientBirthDate PatientSex StudyDate StudyTime "
        "ReferringPhysicianName StudyID AccessionNumber SeriesNumber Manufacturer "
        "PositionReferenceIndicator InstanceNumber SliceThickness KVP AcquisitionNumber"
    )
    for keyword in type_1.split():
        assert header.get(keyword) not in (None, ""), keyword
    for keyword in type_2.split():
        assert keyword in header, keyword
    assert header.file_meta.TransferSyntaxUID.is_little_endian
    assert header.SliceThickness == 2.5
    assert header.Exposure == 50
    assert "KVP" in header
    assert not header.KVP  # one energy: there is no tube voltage


def test_every_file_says_that_it_was_simulated_and_names_nobody(written):
    for path in written:
        header = pydicom.dcmread(path)
        assert header.ImageComments.startswith("SIMULATED")
        assert header.DerivationDescription.startswith("SIMULATED")
        assert "SIMULATED" in header.ImageType
        assert header.Manufacturer == "SIMULATED"
        assert str(header.PatientName) == "SIMULATED^SMALL-1"
        assert header.QualityControlImage == "YES"
        for keyword in ("PatientBirthDate", "AccessionNumber", "ReferringPhysicianName"):
            assert not header[keyword].value
        assert "OperatorsName" not in header


def test_the_enhanced_file_has_its_groups(volume, tmp_path):
    path = write_enhanced(volume, RECIPE, tmp_path / "frames.dcm", labels=LABELS)
    header = pydicom.dcmread(path)
    assert header.SOPClassUID == "1.2.840.10008.5.1.4.1.1.2.1"
    assert header.NumberOfFrames == 4
    shared = header.SharedFunctionalGroupsSequence[0]
    assert shared.PixelMeasuresSequence[0].PixelSpacing == [1.25, 1.25]
    assert shared.PixelValueTransformationSequence[0].RescaleType == "HU"
    assert "CTXRayDetailsSequence" not in shared
    frames = header.PerFrameFunctionalGroupsSequence
    z = [f.PlanePositionSequence[0].ImagePositionPatient[2] for f in frames]
    assert z == [-2.5, 0.0, 2.5, 5.0]
    index = [f.FrameContentSequence[0].DimensionIndexValues for f in frames]
    assert [list(i) for i in index] == [[1, 1], [1, 2], [1, 3], [1, 4]]
    with_tube = replace(RECIPE, spectrum=tube_spectrum(120.0))
    header = pydicom.dcmread(write_enhanced(volume, with_tube, tmp_path / "t.dcm"))
    assert header.SharedFunctionalGroupsSequence[0].CTXRayDetailsSequence[0].KVP == 120


def test_the_same_recipe_gives_the_same_bytes(volume, written, tmp_path):
    again = write_series(volume, RECIPE, tmp_path, labels=LABELS)
    assert [p.name for p in again] == [p.name for p in written]
    for first, second in zip(written, again, strict=True):
        assert first.read_bytes() == second.read_bytes()


def test_identifiers_are_valid_unique_and_shared_where_they_must_be(volume, written, tmp_path):
    other = write_series(volume, replace(RECIPE, seed=9), tmp_path, labels=LABELS)
    headers = [pydicom.dcmread(p, stop_before_pixels=True) for p in (*written, *other)]
    assert len({h.SOPInstanceUID for h in headers}) == 8
    assert len({h.SeriesInstanceUID for h in headers}) == 2
    assert len({h.StudyInstanceUID for h in headers}) == 1
    assert len({h.FrameOfReferenceUID for h in headers}) == 1
    for header in headers:
        assert header.SOPInstanceUID.is_valid
        assert header.SOPInstanceUID == header.file_meta.MediaStorageSOPInstanceUID


def test_a_volume_of_another_shape_is_refused(volume, tmp_path):
    other = replace(RECIPE, positions_mm=(0.0,))
    with pytest.raises(ArgumentError, match=r"'volume' must have the recipe's shape \(1, 32, 32\)"):
        write_series(volume, other, tmp_path)
