"""Every voxel and its place in the patient, against SimpleITK, on many kinds of series.

SimpleITK orders slices and finds spacing and direction by itself. Its index and ours are related by
the two affines alone: where they lead to the same place, the values must be the same.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable
from pathlib import Path
from typing import Any

import lossless_jpeg
import numpy as np
import pytest
import series_writer as sw
import SimpleITK
from pydicom.data import get_testdata_file
from pydicom.uid import JPEG2000Lossless, JPEGLosslessSV1, JPEGLSLossless, RLELossless

from ct_measure_plugin.dicom import read_series

STORED = sw.noise((5, 32, 48)).view(np.uint16)
#: positions are written to a micrometre, the direction cosines to sixteen digits
PLACE_MM = 2e-6


def cosines_of(axis: tuple[float, ...], degrees: float) -> tuple[float, ...]:
    """Return the orientation of an axial slice turned about an axis (Rodrigues' formula)."""
    k = np.array(axis) / np.linalg.norm(axis)
    cross = np.array([[0, -k[2], k[1]], [k[2], 0, -k[0]], [-k[1], k[0], 0]])
    angle = np.radians(degrees)
    turn = np.eye(3) + np.sin(angle) * cross + (1 - np.cos(angle)) * cross @ cross
    return tuple(float(f"{v:.13f}") for v in [*turn[:, 0], *turn[:, 1]])


def places(cosines: tuple[float, ...], step: float) -> list[tuple[float, float, float]]:
    return sw.along(5, step * np.cross(cosines[:3], cosines[3:]))


def plain(folder: Path) -> None:
    sw.write_series(folder, STORED, sw.line(5, 0.7))


def oriented(cosines: tuple[float, ...], **changes: Any) -> Callable[[Path], None]:
    def write(folder: Path) -> None:
        changes["ImageOrientationPatient"] = list(cosines)
        sw.write_series(folder, STORED, places(cosines, 1.5), **changes)

    return write


def own_rescale(folder: Path) -> None:
    slopes, intercepts = ["1", "2", "0.5", "0.25", "3"], ["-1024", "-1000", "0", "7.5", "-3"]
    sw.write_series(
        folder,
        STORED,
        sw.line(5),
        RescaleSlope=lambda k: slopes[k],
        RescaleIntercept=lambda k: intercepts[k],
    )


def native(syntax: str) -> Callable[[Path], None]:
    return lambda folder: sw.write_series(folder, STORED, sw.line(5), syntax=sw.NATIVE[syntax])


def compressed(syntax: str) -> Callable[[Path], None]:
    def write(folder: Path) -> None:
        for k, position in enumerate(sw.line(5)):
            ds = sw.ct_slice(STORED[k], position=position, BitsStored=12, HighBit=11)
            sw.save_compressed(ds, folder / str(4 - k), syntax)

    return write


def jpeg(folder: Path) -> None:
    for k, position in enumerate(sw.line(5)):
        ds = sw.ct_slice(STORED[k], position=position, BitsStored=12, HighBit=11)
        frame = lossless_jpeg.encode(STORED[k], precision=12, predictor=1)
        sw.save_frames(ds, folder / str(k), JPEGLosslessSV1, [frame])


FEET_FIRST = (-1.0, 0.0, 0.0, 0.0, 1.0, 0.0)
PRONE = (-1.0, 0.0, 0.0, 0.0, -1.0, 0.0)
CORONAL = (1.0, 0.0, 0.0, 0.0, 0.0, -1.0)
SERIES: dict[str, Callable[[Path], Any]] = {
    "plain": plain,
    "feet first": oriented(FEET_FIRST, PatientPosition="FFS"),
    "prone": oriented(PRONE, PatientPosition="HFP"),
    "coronal": oriented(CORONAL),
    "oblique": oriented(cosines_of((1, 0, 0), 20)),
    "doubly oblique": oriented(cosines_of((1, 2, -0.5), 35), PixelSpacing=[0.4, 0.9]),
    "pixels not square": oriented(sw.AXIAL, PixelSpacing=[0.8, 0.3]),
    "its own rescale a slice": own_rescale,
    "implicit": native("implicit"),
    "big endian": native("big"),
    "deflated": native("deflated"),
    "RLE": compressed(RLELossless),
    "JPEG-LS": compressed(JPEGLSLossless),
    "JPEG 2000": compressed(JPEG2000Lossless),
    "JPEG lossless": jpeg,
}


def read_by_simpleitk(folder: Path) -> Any:
    reader = SimpleITK.ImageSeriesReader()
    reader.SetFileNames(reader.GetGDCMSeriesFileNames(str(folder)))
    reader.SetOutputPixelType(SimpleITK.sitkFloat64)
    return reader.Execute()


def affine_of(image: Any) -> np.ndarray:
    """Return what takes an index (z, y, x, 1) to LPS millimetres (x, y, z, 1)."""
    direction = np.array(image.GetDirection()).reshape(3, 3)
    affine = np.eye(4)
    affine[:3, :3] = (direction * np.array(image.GetSpacing()))[:, ::-1]
    affine[:3, 3] = image.GetOrigin()
    return affine


def in_their_order(volume: Any, theirs: np.ndarray) -> np.ndarray:
    """Return our values in the order of their index, after checking that both lie at one place.

    The two may count an axis in opposite directions and nothing else.
    """
    last = np.array(volume.shape) - 1
    lead = np.linalg.solve(theirs, volume.affine_lps)
    flipped = np.diag(lead)[:3] < 0
    for corner in itertools.product((0, 1), repeat=3):
        index = last * corner
        ours = volume.affine_lps @ [*index, 1]
        assert theirs @ [*np.where(flipped, last - index, index), 1] == pytest.approx(
            ours, abs=PLACE_MM
        )
    return np.asarray(volume.hu)[tuple(slice(None, None, -1 if flip else 1) for flip in flipped)]


def require_the_same(volume: Any, image: Any) -> None:
    theirs = SimpleITK.GetArrayFromImage(image)
    assert np.array_equal(in_their_order(volume, affine_of(image)), theirs)


@pytest.mark.parametrize("kind", SERIES)
def test_every_voxel_has_the_value_and_place_that_simpleitk_gives_it(tmp_path, kind):
    SERIES[kind](tmp_path)
    image = read_by_simpleitk(tmp_path)
    volume = read_series(tmp_path)
    require_the_same(volume, image)


def test_an_enhanced_file_has_the_values_and_places_that_simpleitk_gives_it(tmp_path):
    cosines = cosines_of((1, 0, 0), 20)
    ds = sw.enhanced(STORED, places(cosines, 1.5), orientation=cosines, spacing=(0.8, 0.3))
    file = sw.save(ds, tmp_path / "one")
    image = SimpleITK.ReadImage(str(file), SimpleITK.sitkFloat64)
    volume = read_series(tmp_path)
    require_the_same(volume, image)


def test_a_real_slice_has_the_values_and_places_that_simpleitk_gives_it():
    path = get_testdata_file("CT_small.dcm")
    image = SimpleITK.ReadImage(path, SimpleITK.sitkFloat64)
    volume = read_series(path)
    require_the_same(volume, image)


@pytest.mark.parametrize("name", ["standard", "thin-steps"])
def test_a_sample_volume_has_the_values_and_places_that_simpleitk_gives_it(name):
    folder = Path(__file__).parents[2] / "sample_volumes" / name
    require_the_same(read_series(folder), read_by_simpleitk(folder))


def test_each_slice_of_a_tilted_series_lies_where_simpleitk_puts_it(tmp_path):
    """SimpleITK makes the direction of a tilted series upright, so its slices are taken singly."""
    cosines = cosines_of((1, 0, 0), 15)
    sw.write_series(
        tmp_path, STORED, sw.along(5, (0, 0, 2.0)), ImageOrientationPatient=list(cosines)
    )
    volume = read_series(tmp_path)
    assert volume.tilt_deg == pytest.approx(15, abs=1e-4)  # positions to 1e-6 mm over 8 mm
    for file in tmp_path.iterdir():
        image = SimpleITK.ReadImage(str(file), SimpleITK.sitkFloat64)
        index = np.linalg.solve(volume.affine_lps, [*image.GetOrigin(), 1])
        k = round(index[0])
        assert index == pytest.approx([k, 0, 0, 1], abs=1e-5)
        assert np.array_equal(volume.plane(k), SimpleITK.GetArrayFromImage(image)[0])
        for y, x in ((0, 47), (31, 0), (31, 47)):
            there = image.TransformIndexToPhysicalPoint((x, y, 0))
            assert (volume.affine_lps @ [k, y, x, 1])[:3] == pytest.approx(there, abs=PLACE_MM)


def test_an_affine_or_a_value_that_is_off_is_red(tmp_path):
    plain(tmp_path)
    image = read_by_simpleitk(tmp_path)
    volume = read_series(tmp_path)
    theirs = affine_of(image)
    theirs[1, 3] += 1e-4
    with pytest.raises(AssertionError):
        in_their_order(volume, theirs)
    theirs = affine_of(image)
    theirs[:3, :3] = theirs[:3, [0, 2, 1]]
    with pytest.raises(AssertionError):
        in_their_order(volume, theirs)
    require_the_same(volume, image)
    image[3, 2, 1] += 1
    with pytest.raises(AssertionError):
        require_the_same(volume, image)
