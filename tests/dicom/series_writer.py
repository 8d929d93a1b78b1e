"""Writes small CT series, ordinary and odd, for the tests of this room."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydicom.dataset import Dataset, FileMetaDataset
from pydicom.encaps import encapsulate
from pydicom.filewriter import dcmwrite
from pydicom.sequence import Sequence
from pydicom.uid import (
    CTImageStorage,
    DeflatedExplicitVRLittleEndian,
    EnhancedCTImageStorage,
    ExplicitVRBigEndian,
    ExplicitVRLittleEndian,
    ImplicitVRLittleEndian,
    generate_uid,
)

AXIAL = (1.0, 0.0, 0.0, 0.0, 1.0, 0.0)
NATIVE = {
    "implicit": ImplicitVRLittleEndian,
    "explicit": ExplicitVRLittleEndian,
    "big": ExplicitVRBigEndian,
    "deflated": DeflatedExplicitVRLittleEndian,
}


def uid(*words: object) -> str:
    """Return a UID that is the same for the same words."""
    return str(generate_uid(entropy_srcs=["ct measure test", *map(str, words)]))


def ct_slice(stored: NDArray[Any], *, position=(0.0, 0.0, 0.0), **changes: Any) -> Dataset:
    """Return a CT image of stored values; None as a change leaves the attribute out."""
    ds = Dataset()
    ds.SOPClassUID = CTImageStorage
    ds.SOPInstanceUID = uid("instance", position, changes)
    ds.ImageType = ["ORIGINAL", "PRIMARY", "AXIAL"]
    ds.Modality = "CT"
    ds.SeriesInstanceUID = uid("series")
    ds.StudyInstanceUID = uid("study")
    ds.FrameOfReferenceUID = uid("frame")
    ds.SeriesNumber = 3
    ds.SeriesDescription = "water phantom"
    ds.PatientPosition = "HFS"
    ds.KVP = "120"
    ds.Exposure = "200"
    ds.SliceThickness = "2"
    ds.ConvolutionKernel = "K40"
    ds.ImagePositionPatient = [f"{v:.6f}".rstrip("0")[:16] for v in position]
    ds.ImageOrientationPatient = list(AXIAL)
    ds.PixelSpacing = [0.5, 0.5]
    set_pixels(ds, stored)
    ds.RescaleSlope = "1"
    ds.RescaleIntercept = "-1024"
    for name, value in changes.items():
        if value is None:
            delattr(ds, name)
        else:
            setattr(ds, name, value)
    return ds


def set_pixels(ds: Dataset, stored: NDArray[Any]) -> None:
    """Give a data set its pixels, and the attributes that follow from their type."""
    ds.Rows, ds.Columns = stored.shape[-2:]
    ds.SamplesPerPixel = 1
    ds.PhotometricInterpretation = "MONOCHROME2"
    ds.BitsAllocated = 8 * stored.dtype.itemsize
    ds.BitsStored = ds.BitsAllocated
    ds.HighBit = ds.BitsStored - 1
    ds.PixelRepresentation = int(stored.dtype.kind == "i")
    raw = stored.astype(stored.dtype.newbyteorder("<")).tobytes()
    ds.PixelData = raw + b"\0" * (len(raw) % 2)
    ds["PixelData"].VR = "OW" if ds.BitsAllocated > 8 else "OB"


def save(ds: Dataset, path: Path, syntax: str = ExplicitVRLittleEndian) -> Path:
    """Write a data set with preamble and file meta information."""
    path.parent.mkdir(parents=True, exist_ok=True)
    meta = FileMetaDataset()
    meta.TransferSyntaxUID = syntax
    meta.MediaStorageSOPClassUID = ds.SOPClassUID
    meta.MediaStorageSOPInstanceUID = ds.get("SOPInstanceUID", uid("none"))
    ds.file_meta = meta
    if syntax == ExplicitVRBigEndian and ds.BitsAllocated == 16:
        ds.PixelData = np.frombuffer(ds.PixelData, "<u2").astype(">u2").tobytes()
    dcmwrite(path, ds, enforce_file_format=True)
    return path


def save_compressed(ds: Dataset, path: Path, syntax: str, **options: Any) -> Path:
    """Write a data set through one of the DICOM library's encoders."""
    instance = ds.SOPInstanceUID
    ds.file_meta = FileMetaDataset()
    ds.file_meta.TransferSyntaxUID = ExplicitVRLittleEndian
    ds.compress(syntax, generate_instance_uid=False, **options)
    assert instance == ds.SOPInstanceUID
    return save(ds, path, syntax)


def save_frames(ds: Dataset, path: Path, syntax: str, frames: list[bytes]) -> Path:
    """Write a data set whose frames are already encoded."""
    ds.PixelData = encapsulate(frames)
    ds["PixelData"].VR = "OB"
    ds["PixelData"].is_undefined_length = True
    return save(ds, path, syntax)


def bare_bytes(ds: Dataset, path: Path, *, implicit: bool) -> Path:
    """Write a data set without preamble and file meta information."""
    path.parent.mkdir(parents=True, exist_ok=True)
    ds = Dataset(ds)
    if hasattr(ds, "file_meta"):
        del ds.file_meta
    dcmwrite(path, ds, implicit_vr=implicit, little_endian=True, enforce_file_format=False)
    return path


def noise(shape: tuple[int, ...], seed: int = 1) -> NDArray[np.int16]:
    """Return stored values of something like a water phantom in air."""
    rng = np.random.default_rng(seed)
    ny, nx = shape[-2:]
    y, x = np.mgrid[:ny, :nx]
    disc = (y - ny / 2) ** 2 + (x - nx / 2) ** 2 < (0.35 * min(ny, nx)) ** 2
    return (np.where(disc, 1024, 24) + rng.integers(-12, 13, shape)).astype(np.int16)


def write_series(
    folder: Path,
    stored: NDArray[Any],
    positions: list[tuple[float, float, float]],
    *,
    syntax: str = ExplicitVRLittleEndian,
    **changes: Any,
) -> Path:
    """Write one file a slice, named in an order that means nothing."""
    names = np.random.default_rng(7).permutation(len(stored))
    for k, (plane, position) in enumerate(zip(stored, positions, strict=True)):
        own = {name: value(k) if callable(value) else value for name, value in changes.items()}
        ds = ct_slice(plane, position=position, **own)
        ds.InstanceNumber = int(names[k]) + 1
        save(ds, folder / f"{names[k]:04d}", syntax)
    return folder


def line(
    count: int, step: float = 2.0, start: float = 0.0, xy: tuple[float, float] = (-10.0, -10.0)
) -> list[tuple[float, float, float]]:
    """Return positions along the patient's long axis."""
    return [(*xy, start + step * k) for k in range(count)]


def along(
    count: int, step: NDArray[np.float64] | tuple[float, ...], start=(-10.0, -20.0, 30.0)
) -> list[tuple[float, float, float]]:
    """Return positions along any vector."""
    return [tuple((np.array(start) + k * np.array(step)).tolist()) for k in range(count)]


def enhanced(
    stored: NDArray[Any],
    positions: list[tuple[float, float, float]],
    *,
    slopes: list[float] | None = None,
    intercepts: list[float] | None = None,
    orientation: tuple[float, ...] = AXIAL,
    spacing: tuple[float, float] = (0.5, 0.5),
) -> Dataset:
    """Return an enhanced CT image; rescale goes per frame if it differs, else shared."""
    ds = ct_slice(stored[0])
    for name in (
        "ImagePositionPatient",
        "ImageOrientationPatient",
        "PixelSpacing",
        "RescaleSlope",
        "RescaleIntercept",
        "KVP",
        "Exposure",
        "SliceThickness",
        "ConvolutionKernel",
    ):
        delattr(ds, name)
    ds.SOPClassUID = EnhancedCTImageStorage
    ds.NumberOfFrames = len(stored)
    set_pixels(ds, stored)
    shared = Dataset()
    shared.PixelMeasuresSequence = Sequence([_item(PixelSpacing=list(spacing), SliceThickness=2)])
    shared.PlaneOrientationSequence = Sequence([_item(ImageOrientationPatient=list(orientation))])
    shared.CTXRayDetailsSequence = Sequence([_item(KVP=120)])
    shared.CTReconstructionSequence = Sequence([_item(ConvolutionKernel="K40")])
    shared.CTImageFrameTypeSequence = Sequence(
        [_item(FrameType=["ORIGINAL", "PRIMARY", "VOLUME", "NONE"])]
    )
    if slopes is None:
        shared.PixelValueTransformationSequence = Sequence([_transformation(1, -1024)])
    ds.SharedFunctionalGroupsSequence = Sequence([shared])
    frames = []
    for k, position in enumerate(positions):
        frame = Dataset()
        frame.PlanePositionSequence = Sequence([_item(ImagePositionPatient=list(position))])
        frame.FrameContentSequence = Sequence([_item(FrameAcquisitionNumber=1)])
        frame.CTExposureSequence = Sequence([_item(ExposureInmAs=100.0 + k, CTDIvol=5.0 + k)])
        if slopes is not None and intercepts is not None:
            frame.PixelValueTransformationSequence = Sequence(
                [_transformation(slopes[k], intercepts[k])]
            )
        frames.append(frame)
    ds.PerFrameFunctionalGroupsSequence = Sequence(frames)
    return ds


def _transformation(slope: float, intercept: float) -> Dataset:
    return _item(RescaleSlope=slope, RescaleIntercept=intercept, RescaleType="HU")


def _item(**values: Any) -> Dataset:
    item = Dataset()
    for name, value in values.items():
        setattr(item, name, value)
    return item
