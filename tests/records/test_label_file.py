"""Label maps out of files: what is read, on which grid, and what is refused in which words."""

from __future__ import annotations

import numpy as np
import pytest
import tifffile
from series_writer import line, noise, write_series

import ct_measure_plugin as ctm
from ct_measure_plugin.dicom.codes import Code, LabelClass
from ct_measure_plugin.dicom.segmentation import write_segmentation
from ct_measure_plugin.errors import ArgumentError, CtMeasureError, LabelFileError
from ct_measure_plugin.physics.regions import Labels
from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.records import read_labels, write_labels

VOLUME = Volume(np.zeros((3, 8, 9)), (2.0, 0.5, 0.7), origin_mm=(10.0, -3.0, 4.0))


def painted(dtype=np.uint16) -> np.ndarray:
    return np.random.default_rng(71).integers(0, 5, VOLUME.shape).astype(dtype)


def saved(path, labels):
    if path.suffix == ".npy":
        np.save(path, labels)
    elif path.suffix == ".npz":
        np.savez(path, labels=labels)
    else:
        tifffile.imwrite(path, labels, photometric="minisblack")
    return path


@pytest.mark.parametrize("suffix", [".npy", ".npz", ".tif", ".tiff"])
@pytest.mark.parametrize("dtype", [np.uint8, np.int32, np.float32])
def test_a_map_of_the_volumes_shape_lies_on_its_voxels(tmp_path, suffix, dtype):
    """Floats that hold whole numbers are labels too: some programs write nothing else."""
    found = read_labels(saved(tmp_path / f"a{suffix}", painted(dtype)), VOLUME)
    np.testing.assert_array_equal(found.labels, painted())
    assert found.labels.dtype.kind in "iu"
    assert (found.spacing_mm, found.origin_mm) == (VOLUME.spacing_mm, VOLUME.origin_mm)


def test_a_mask_of_true_and_false_is_one_label(tmp_path):
    found = read_labels(saved(tmp_path / "a.npy", painted() > 2), VOLUME)
    assert found.numbers() == (1,)


def test_a_flat_map_lies_on_a_volume_of_one_slice(tmp_path):
    one = Volume(np.zeros((8, 9)), (1.0, 0.5, 0.7))
    found = read_labels(saved(tmp_path / "a.tif", painted()[0]), one)
    assert found.labels.shape == (1, 8, 9)


def test_what_was_written_comes_back_with_its_grid_and_names(tmp_path):
    labels = Labels(
        painted()[:, :4, :5],
        (1.0, 0.25, 0.35),
        (2.0, -1.0, 5.5),
        names=((1, "Leber ä"), (4, "rod")),
        codes=((4, "99LAB:ROD"),),
    )
    found = read_labels(write_labels(labels, tmp_path / "a.npz"), VOLUME)
    np.testing.assert_array_equal(found.labels, labels.labels)
    for name in ("spacing_mm", "origin_mm", "names", "codes", "z_mm"):
        assert getattr(found, name) == getattr(labels, name), name
    flat = Labels(painted()[0], (1.0, 0.25, 0.35), z_mm=(3.0, 7.0))
    assert read_labels(write_labels(flat, tmp_path / "b.npz"), VOLUME).z_mm == (3.0, 7.0)
    with pytest.raises(ArgumentError, match=r"must end in \.npz"):
        write_labels(labels, tmp_path / "a.npy")


def test_a_dicom_segmentation_brings_its_names_and_codes(tmp_path):
    folder = write_series(tmp_path / "ct", noise((3, 16, 16)), line(3))
    [entry] = ctm.scan_series(folder)
    volume = ctm.read_series(entry)
    labels = np.zeros(volume.shape, np.uint8)
    labels[1, 3:9, 4:12], labels[2, 1:4, 1:4] = 2, 9
    classes = {2: LabelClass("rod", Code.of("99LAB:ROD", "rod"))}
    file = write_segmentation(tmp_path / "seg.dcm", entry, labels, classes)
    found = read_labels(file, volume)
    np.testing.assert_array_equal(found.labels, labels)
    assert found.names == ((2, "rod"), (9, "Label 9"))
    assert (2, "99LAB:ROD") in found.codes
    answer = ctm.measure("label_statistics", volume, found)
    assert answer.labels[0].mean.value == pytest.approx(volume.hu[labels == 2].mean())


@pytest.mark.parametrize(
    ("name", "make", "message"),
    [
        ("a.npy", lambda p: np.save(p, painted()[:2]),
         r"a\.npy has 2 × 8 × 9 voxels and the volume 3 × 8 × 9; a map of another grid needs"),
        ("a.npy", lambda p: np.save(p, painted() + 0.5), "holds no whole numbers"),
        ("a.npy", lambda p: np.save(p, np.full(VOLUME.shape, np.nan)), "holds no whole numbers"),
        ("a.npy", lambda p: np.save(p, np.array([{"a": 1}], dtype=object), allow_pickle=True),
         r"is no \.npy file of plain numbers"),
        ("a.npy", lambda p: p.write_bytes(b"not numpy"), r"is no \.npy file of plain numbers"),
        ("a.npy", lambda p: p.write_bytes(b""), r"is no \.npy file of plain numbers"),
        ("a.npz", lambda p: p.write_bytes(b"PK rubbish"), r"is no \.npz file of plain numbers"),
        ("a.npz", lambda p: np.savez(p, other=painted()), "holds no array called labels"),
        ("a.npz", lambda p: np.savez(p, labels=painted(), spacing_mm=np.ones(2)),
         r"a\.npz: 'spacing_mm' must hold three lengths"),
        ("a.npz", lambda p: np.savez(p, labels=painted(), spacing_mm=-np.ones(3)),
         r"a\.npz: 'spacing_mm' must be greater than 0"),
        ("a.npz", lambda p: np.savez(p, labels=painted(), names=np.array(["rod"])),
         "names labels otherwise than by number, tab and text"),
        ("a.tif", lambda p: p.write_bytes(b"II*\0rubbish"), r"is no \.tif file"),
        ("a.tif", lambda p: p.write_bytes(b"rubbish"), r"is no \.tif file"),
        ("a.npy", lambda p: p.parent, r"a\.npy cannot be read \(No such file"),
    ],
    ids=range(14),
)  # fmt: skip
def test_what_is_no_label_map_says_so(tmp_path, name, make, message):
    make(tmp_path / name)
    with pytest.raises(LabelFileError, match=message):
        read_labels(tmp_path / name, VOLUME)


def test_anything_else_is_tried_as_dicom_and_refused_in_a_sentence(tmp_path):
    (tmp_path / "a.bin").write_bytes(b"rubbish" * 99)
    with pytest.raises(CtMeasureError):
        read_labels(tmp_path / "a.bin", VOLUME)
