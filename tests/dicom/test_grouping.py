"""Which images make one volume, and what happens where two claim one place."""

from __future__ import annotations

import numpy as np
import pytest
import series_writer as sw
from pydicom.uid import JPEG2000, RLELossless

from ct_measure_plugin.dicom import read_series, scan_series
from ct_measure_plugin.errors import SeriesChoiceError

A, B = sw.noise((4, 32, 32), seed=1), sw.noise((4, 32, 32), seed=2)


def codes(volume):
    return {caution.code for caution in volume.cautions}


def both(tmp_path, **changes):
    """Write two sets of slices under one series UID; changes hold (first, second)."""
    sw.write_series(tmp_path / "a", A, sw.line(4), **{n: v[0] for n, v in changes.items()})
    sw.write_series(
        tmp_path / "b",
        B,
        changes.pop("places", (None, sw.line(4)))[1],
        SOPInstanceUID=lambda k: sw.uid("second", k),
        **{n: v[1] for n, v in changes.items()},
    )
    return tmp_path


TELLING = {
    "acquisition": {"AcquisitionNumber": (1, 2)},
    "temporal position": {"TemporalPositionIdentifier": (1, 2)},
    "echo": {"EchoNumbers": (1, 2)},
    "trigger": {"TriggerTime": ("10", "20")},
    "kernel": {"ConvolutionKernel": ("K40", "K70")},
    "thickness": {"SliceThickness": ("2", "3")},
    "time": {"AcquisitionTime": ("101010.5", "101011.5")},
    "image type": {"ImageType": (["ORIGINAL", "PRIMARY"], ["DERIVED", "PRIMARY"])},
}


@pytest.mark.parametrize("changes", TELLING.values(), ids=TELLING)
def test_volumes_at_the_same_places_are_told_apart(tmp_path, changes):
    entries = scan_series(both(tmp_path, **changes))
    assert [(entry.slice_count, entry.part, entry.parts) for entry in entries] == [
        (4, 1, 2),
        (4, 2, 2),
    ]
    found = [read_series(entry) for entry in entries]
    assert all("split-series" in codes(volume) for volume in found)
    wanted = {(A - 1024).tobytes(), (B - 1024).tobytes()}
    assert {volume.hu.tobytes() for volume in found} == wanted


def test_a_second_acquisition_elsewhere_is_the_same_volume(tmp_path):
    """Axial scans number every slice as an acquisition of its own; that splits nothing."""
    sw.write_series(tmp_path, A, sw.line(4), AcquisitionNumber=lambda k: k + 1)
    (entry,) = scan_series(tmp_path)
    assert entry.slice_count == 4
    assert [a.acquisition_number for a in read_series(entry).acquisition] == [1, 2, 3, 4]


@pytest.mark.parametrize("tilted", [False, True])
def test_several_places_at_one_z_are_volumes_of_their_own(tmp_path, tilted):
    step = np.array([0, 0.5, 2.0]) if tilted else np.array([0, 0, 2.0])
    first = sw.along(4, step, start=(-50, -20, 0))
    second = sw.along(4, step, start=(30, -20, 0))
    sw.write_series(tmp_path / "a", A, first)
    sw.write_series(tmp_path / "b", B, second, SOPInstanceUID=lambda k: sw.uid("b", k))
    entries = scan_series(tmp_path)
    assert [entry.slice_count for entry in entries] == [4, 4]
    wanted = {-50.0: A, 30.0: B}
    for entry in entries:
        volume = read_series(entry)
        assert np.array_equal(volume.hu, wanted[volume.origin_mm[2]] - 1024)


DIFFERING = {
    "orientation": {"ImageOrientationPatient": [0, 1, 0, 0, 0, -1]},
    "pixel size": {"PixelSpacing": [0.7, 0.7]},
    "unit": {"RescaleType": "US"},
}


@pytest.mark.parametrize("changes", DIFFERING.values(), ids=DIFFERING)
def test_planes_that_differ_are_never_mixed(tmp_path, changes):
    sw.write_series(tmp_path / "a", A, sw.line(4))
    sw.write_series(tmp_path / "b", B[:3], sw.along(3, (2, 0, 2)), **changes)
    entries = scan_series(tmp_path)
    assert sorted(entry.slice_count for entry in entries) == [3, 4]


def test_matrix_that_differs_is_never_mixed(tmp_path):
    sw.write_series(tmp_path / "a", A, sw.line(4))
    sw.write_series(tmp_path / "b", B[:, :16, :16], sw.line(4, start=8))
    assert {entry.matrix for entry in scan_series(tmp_path)} == {(32, 32), (16, 16)}


def test_rounding_of_cosines_and_spacings_splits_nothing(tmp_path):
    sw.write_series(
        tmp_path,
        A,
        sw.line(4),
        ImageOrientationPatient=lambda k: [1, 1e-5 * k, 0, 0, 1, 0],
        PixelSpacing=lambda k: [0.5 + 1e-6 * k, 0.5],
    )
    assert [entry.slice_count for entry in scan_series(tmp_path)] == [4]


def test_a_copy_of_a_file_is_left_out_and_said(tmp_path):
    sw.write_series(tmp_path / "a", A, sw.line(4))
    file = next((tmp_path / "a").iterdir())
    (tmp_path / "copy").write_bytes(file.read_bytes())
    volume = read_series(tmp_path)
    assert volume.shape[0] == 4
    text = next(c.text for c in volume.cautions if c.code == "duplicate-slice")
    assert text == "Left out: 1 image of the same object."


def test_the_exact_one_of_two_encodings_is_kept(tmp_path):
    for k in range(4):
        ds = sw.ct_slice(A[k], position=(0, 0, 2 * k), SOPInstanceUID=sw.uid("one", k))
        sw.save(ds, tmp_path / f"plain{k}")
        again = sw.ct_slice(A[k], position=(0, 0, 2 * k), SOPInstanceUID=sw.uid("one", k))
        sw.save_compressed(again, tmp_path / f"lossy{k}", JPEG2000, j2k_cr=[8])
        third = sw.ct_slice(A[k], position=(0, 0, 2 * k), SOPInstanceUID=sw.uid("one", k))
        sw.save_compressed(third, tmp_path / f"packed{k}", RLELossless)
    volume = read_series(tmp_path)
    assert np.array_equal(volume.hu, A - 1024)
    assert codes(volume) == {"duplicate-slice"}


def test_a_rival_at_one_place_is_left_out_and_said(tmp_path):
    sw.write_series(tmp_path / "a", A, sw.line(4))
    sw.write_series(tmp_path / "b", B[:1], sw.line(1), SOPInstanceUID=sw.uid("rival"))
    volume = read_series(tmp_path)
    assert volume.shape[0] == 4
    text = next(c.text for c in volume.cautions if c.code == "duplicate-slice")
    assert text == "Left out: 1 image of another object at the same position."


def test_the_outcome_does_not_depend_on_file_names(tmp_path):
    def fill(folder, names):
        for name, (plane, own) in zip(names, [(A[0], "1"), (B[0], "2")], strict=True):
            sw.save(sw.ct_slice(plane, SOPInstanceUID=sw.uid(own)), folder / name)
        return read_series(folder).hu

    assert np.array_equal(fill(tmp_path / "p", "xy"), fill(tmp_path / "q", "yx"))


def test_several_series_must_be_chosen_from_and_are_listed_without_names(tmp_path):
    for number in (1, 2):
        sw.write_series(
            tmp_path / str(number),
            A,
            sw.line(4),
            SeriesInstanceUID=sw.uid("series", number),
            SeriesDescription="Doe^Jane follow-up",
            ConvolutionKernel=f"K{number}",
        )
    with pytest.raises(SeriesChoiceError) as caught:
        read_series(tmp_path)
    assert "kernel K1" in str(caught.value)
    assert "4 slices of 32 × 32" in str(caught.value)
    assert "Doe" not in str(caught.value)
    entries = scan_series(tmp_path)
    for entry in entries:
        for name in (entry.digest, entry.key):
            assert read_series(tmp_path, name).source.series_digest == entry.digest
    chosen = read_series(tmp_path, sw.uid("series", 2))
    assert chosen.acquisition[0].kernel == "K2"
