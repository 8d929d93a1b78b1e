"""Simulated series as DICOM: CT Image Storage, one file a slice, or one Enhanced CT file.

The one file of the room that imports pydicom. The bytes follow from recipe, volume and labels
alone: UIDs are digests of them (2.25 form, PS3.5 B.2), dates are the labels', and nothing in the
header names a program version. Every image says in ImageType, ImageComments and
DerivationDescription that it was simulated.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from pydicom.dataset import Dataset, FileMetaDataset
from pydicom.sequence import Sequence
from pydicom.uid import UID, CTImageStorage, EnhancedCTImageStorage, ExplicitVRLittleEndian

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from ct_measure_plugin.physics.volume import Volume
    from ct_measure_plugin.virtual_scanner.recipe import Recipe

__all__ = ["Labels", "write_enhanced", "write_series"]

#: Stored value = HU − intercept. Signed storage: air noise below −1024 HU is kept.
INTERCEPT = -1024
#: The tube load the header states for `dose` 1; invented, it only keeps the ratios.
MAS_AT_DOSE_1 = 100.0
COMMENT = "SIMULATED data from a virtual scanner. No object was scanned."


@dataclass(frozen=True, slots=True, kw_only=True)
class Labels:
    """What the header says beyond the recipe. Nothing here may name a person.

    Parameters
    ----------
    study : str
        Series with the same word share one study and frame of reference.
    series_number : int
        Greater than 0.
    phantom_id : str
        Stands in the patient's ID and, with "SIMULATED", in the patient's name.
    lab : str
        Stands in the institution's name.
    date : str
        YYYYMMDD, of study, series and images.
    """

    study: str = "virtual scanner"
    series_number: int = 1
    phantom_id: str = "PHANTOM"
    lab: str = "invented lab"
    date: str = "20260105"


def _uid(*words: object) -> UID:
    """Return a UID that follows from the words: 2.25 and a 128-bit number."""
    text = "\x1f".join(str(word) for word in words)
    number = int.from_bytes(hashlib.sha256(text.encode()).digest()[:16], "big")
    return UID(f"2.25.{number}")


def _number(value: float) -> str:
    """Return a decimal string of at most 16 characters (VR DS)."""
    return f"{value:.10g}"


def _file_meta(sop_class: UID, instance: UID) -> FileMetaDataset:
    meta = FileMetaDataset()
    meta.MediaStorageSOPClassUID = sop_class
    meta.MediaStorageSOPInstanceUID = instance
    meta.TransferSyntaxUID = ExplicitVRLittleEndian
    meta.ImplementationClassUID = _uid("ct_measure_plugin", "virtual scanner", "writer")
    meta.ImplementationVersionName = "VIRTUALSCANNER_1"
    return meta


def _fill(dataset: Dataset, values: dict[str, Any]) -> Dataset:
    for keyword, value in values.items():
        setattr(dataset, keyword, value)
    return dataset


def _item(**values: Any) -> Sequence:
    return Sequence([_fill(Dataset(), values)])


def _common(recipe: Recipe, labels: Labels) -> Dataset:
    """Return what every image of a series shares: patient, study, equipment, frame."""
    series = _uid("series", recipe.digest(), labels)
    return _fill(
        Dataset(),
        {
            "SpecificCharacterSet": "ISO_IR 192",
            "StudyDate": labels.date,
            "SeriesDate": labels.date,
            "AcquisitionDate": labels.date,
            "ContentDate": labels.date,
            "StudyTime": "120000",
            "SeriesTime": "120000",
            "AcquisitionTime": "120000",
            "ContentTime": "120000",
            "AccessionNumber": "",
            "Modality": "CT",
            "Manufacturer": "SIMULATED",
            "InstitutionName": labels.lab,
            "ReferringPhysicianName": "",
            "StudyDescription": labels.study,
            "SeriesDescription": recipe.title[:64],
            "ManufacturerModelName": "virtual scanner",
            "DerivationDescription": COMMENT,
            "PatientName": f"SIMULATED^{labels.phantom_id}",
            "PatientID": labels.phantom_id,
            "PatientBirthDate": "",
            "PatientSex": "",
            "DeviceSerialNumber": "0",
            "SoftwareVersions": "1",
            "PatientPosition": "HFS",
            "StudyInstanceUID": _uid("study", labels.study, labels.date),
            "SeriesInstanceUID": series,
            "StudyID": "1",
            "SeriesNumber": labels.series_number,
            "AcquisitionNumber": 1,
            "FrameOfReferenceUID": _uid("frame", labels.study, recipe.phantom.name),
            "PositionReferenceIndicator": "",
            "ImageComments": COMMENT,
            "SamplesPerPixel": 1,
            "PhotometricInterpretation": "MONOCHROME2",
            "Rows": recipe.grid.matrix,
            "Columns": recipe.grid.matrix,
            "BitsAllocated": 16,
            "BitsStored": 16,
            "HighBit": 15,
            "PixelRepresentation": 1,
            "QualityControlImage": "YES",
            "BurnedInAnnotation": "NO",
            "LossyImageCompression": "00",
        },
    )


def _exposure(recipe: Recipe) -> float:
    return recipe.detector.dose * MAS_AT_DOSE_1


def _stored(volume: Volume, index: int) -> bytes:
    plane = np.asarray(volume.plane(index), dtype=np.int32) - INTERCEPT
    return np.clip(plane, -32768, 32767).astype("<i2").tobytes()


def _position(recipe: Recipe, index: int) -> list[str]:
    x, y = float(recipe.grid.axis_mm(1)[0]), float(recipe.grid.axis_mm(0)[0])
    return [_number(x), _number(y), _number(recipe.positions_mm[index])]


def _check(volume: Volume, recipe: Recipe) -> None:
    expected = (len(recipe.positions_mm), recipe.grid.matrix, recipe.grid.matrix)
    if volume.shape != expected:
        raise ArgumentError("volume", f"must have the recipe's shape {expected}", volume.shape)


def _slice_dataset(recipe: Recipe, labels: Labels, index: int) -> Dataset:
    dataset = _common(recipe, labels)
    y, x = recipe.grid.centre_mm
    pixel = _number(recipe.grid.pixel_mm)
    return _fill(
        dataset,
        {
            "ImageType": ["ORIGINAL", "PRIMARY", "AXIAL", "SIMULATED"],
            "SOPClassUID": CTImageStorage,
            "SOPInstanceUID": _uid("image", dataset.SeriesInstanceUID, index),
            "SliceThickness": _number(recipe.profile.width_mm),
            "KVP": "" if recipe.spectrum.kvp is None else _number(recipe.spectrum.kvp),
            "DataCollectionDiameter": _number(2.0 * recipe.geometry.radius_mm),
            "ReconstructionDiameter": _number(recipe.grid.fov_mm),
            "GantryDetectorTilt": "0",
            "Exposure": round(_exposure(recipe)),
            "ConvolutionKernel": recipe.kernel.label,
            "DataCollectionCenterPatient": [0.0, 0.0, recipe.positions_mm[index]],
            "ReconstructionTargetCenterPatient": [x, y, recipe.positions_mm[index]],
            "InstanceNumber": index + 1,
            "ImagePositionPatient": _position(recipe, index),
            "ImageOrientationPatient": ["1", "0", "0", "0", "1", "0"],
            "SliceLocation": _number(recipe.positions_mm[index]),
            "PixelSpacing": [pixel, pixel],
            "WindowCenter": "40",
            "WindowWidth": "400",
            "RescaleIntercept": str(INTERCEPT),
            "RescaleSlope": "1",
            "RescaleType": "HU",
        },
    )


def _save(dataset: Dataset, pixels: bytes, path: Path) -> None:
    dataset.add_new("PixelData", "OW", pixels)
    dataset.file_meta = _file_meta(dataset.SOPClassUID, dataset.SOPInstanceUID)
    dataset.save_as(path, enforce_file_format=True)


def write_series(
    volume: Volume, recipe: Recipe, folder: Path, *, labels: Labels | None = None
) -> tuple[Path, ...]:
    """Write a simulated volume as CT Image Storage, one uncompressed file a slice.

    Parameters
    ----------
    volume : Volume
        What `simulate(recipe)` gave.
    recipe : Recipe
        Geometry and facts for the header.
    folder : Path
        Made if it is not there; files of the same names are replaced.
    labels : Labels, optional
        What the header says beyond the recipe.

    Returns
    -------
    tuple of Path
        ``slice_001.dcm`` and so on.

    Raises
    ------
    ArgumentError
        If the volume is not of the recipe's shape.
    """
    _check(volume, recipe)
    labels = labels or Labels()
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    paths = []
    for index in range(len(recipe.positions_mm)):
        path = folder / f"slice_{index + 1:03d}.dcm"
        _save(_slice_dataset(recipe, labels, index), _stored(volume, index), path)
        paths.append(path)
    return tuple(paths)


def _shared_groups(recipe: Recipe) -> Dataset:
    """Return the functional groups all frames share (PS3.3 A.38.1.4)."""
    return _fill(Dataset(), {**_picture_groups(recipe), **_acquisition_groups(recipe)})


def _picture_groups(recipe: Recipe) -> dict[str, Sequence]:
    return {
        "PixelMeasuresSequence": _item(
            SliceThickness=_number(recipe.profile.width_mm),
            SpacingBetweenSlices=_number(recipe.spacing_mm[0]),
            PixelSpacing=[_number(recipe.grid.pixel_mm)] * 2,
        ),
        "PlaneOrientationSequence": _item(ImageOrientationPatient=["1", "0", "0", "0", "1", "0"]),
        "PixelValueTransformationSequence": _item(
            RescaleIntercept=str(INTERCEPT), RescaleSlope="1", RescaleType="HU"
        ),
        "FrameVOILUTSequence": _item(WindowCenter="40", WindowWidth="400"),
        "FrameAnatomySequence": _item(
            AnatomicRegionSequence=_item(
                CodeValue="113681", CodingSchemeDesignator="DCM", CodeMeaning="Phantom"
            ),
            FrameLaterality="U",
        ),
        "CTImageFrameTypeSequence": _item(
            FrameType=["ORIGINAL", "PRIMARY", "VOLUME", "NONE"],
            PixelPresentation="MONOCHROME",
            VolumetricProperties="VOLUME",
            VolumeBasedCalculationTechnique="NONE",
        ),
    }


def _acquisition_groups(recipe: Recipe) -> dict[str, Sequence]:
    """Return how the frames were made; a beam of one energy has no tube to describe."""
    y, x = recipe.grid.centre_mm
    groups = {
        "CTAcquisitionTypeSequence": _item(
            AcquisitionType="SEQUENCED",
            TubeAngle=0.0,
            ConstantVolumeFlag="NO",
            FluoroscopyFlag="NO",
        ),
        "CTAcquisitionDetailsSequence": _item(
            RotationDirection="CW",
            RevolutionTime=1.0,
            SingleCollimationWidth=recipe.profile.width_mm,
            TotalCollimationWidth=recipe.profile.width_mm,
            TableHeight=0.0,
            GantryDetectorTilt=0.0,
            DataCollectionDiameter=2.0 * recipe.geometry.radius_mm,
        ),
        "CTGeometrySequence": _item(
            DistanceSourceToDetector=0.0, DistanceSourceToDataCollectionCenter=0.0
        ),
        "CTReconstructionSequence": _item(
            ReconstructionAlgorithm="FILTER_BACK_PROJ",
            ConvolutionKernel=recipe.kernel.label,
            ReconstructionDiameter=recipe.grid.fov_mm,
            ReconstructionPixelSpacing=[recipe.grid.pixel_mm] * 2,
            ReconstructionTargetCenterPatient=[x, y, recipe.positions_mm[0]],
        ),
        "CTExposureSequence": _item(
            ExposureTimeInms=1000.0,
            XRayTubeCurrentInmA=_exposure(recipe),
            ExposureInmAs=_exposure(recipe),
            ExposureModulationType="NONE",
        ),
    }
    if recipe.spectrum.kvp is not None:
        groups["CTXRayDetailsSequence"] = _item(
            KVP=_number(recipe.spectrum.kvp),
            FocalSpots=[recipe.geometry.focal_spot_mm],
            FilterType="NONE",
            FilterMaterial="NONE",
        )
    return groups


def _frame_groups(recipe: Recipe, labels: Labels, index: int) -> Dataset:
    when = f"{labels.date}120000"
    content = _item(
        FrameAcquisitionNumber=1,
        FrameReferenceDateTime=when,
        FrameAcquisitionDateTime=when,
        FrameAcquisitionDuration=1000.0,
        StackID="1",
        InStackPositionNumber=index + 1,
        DimensionIndexValues=[1, index + 1],
    )
    position = _item(ImagePositionPatient=_position(recipe, index))
    table = _item(TableSpeed=0.0, TableFeedPerRotation=0.0, SpiralPitchFactor=0.0)
    return _fill(
        Dataset(),
        {
            "FrameContentSequence": content,
            "PlanePositionSequence": position,
            "CTPositionSequence": _item(
                TablePosition=recipe.positions_mm[index],
                DataCollectionCenterPatient=[0.0, 0.0, recipe.positions_mm[index]],
            ),
            "CTTableDynamicsSequence": table,
        },
    )


def _enhanced_facts(recipe: Recipe, labels: Labels, series: str) -> dict[str, Any]:
    """Return what an Enhanced CT image says outside its functional groups."""
    count = len(recipe.positions_mm)
    dimension = _uid("dimensions", series)
    frame_content = 0x00209111
    indices = [
        _fill(
            Dataset(),
            {
                "DimensionOrganizationUID": dimension,
                "DimensionIndexPointer": pointer,
                "FunctionalGroupPointer": frame_content,
            },
        )
        for pointer in (0x00209056, 0x00209057)  # stack ID, position in the stack
    ]
    return {
        "ImageType": ["ORIGINAL", "PRIMARY", "VOLUME", "NONE"],
        "SOPClassUID": EnhancedCTImageStorage,
        "SOPInstanceUID": _uid("enhanced", series),
        "AcquisitionDateTime": f"{labels.date}120000",
        "AcquisitionDuration": 1000.0 * count,
        "InstanceNumber": 1,
        "NumberOfFrames": count,
        "ContentQualification": "RESEARCH",
        "PixelPresentation": "MONOCHROME",
        "VolumetricProperties": "VOLUME",
        "VolumeBasedCalculationTechnique": "NONE",
        "PresentationLUTShape": "IDENTITY",
        "DimensionOrganizationSequence": _item(DimensionOrganizationUID=dimension),
        "DimensionIndexSequence": Sequence(indices),
        "AcquisitionContextSequence": Sequence([]),
    }


def write_enhanced(
    volume: Volume, recipe: Recipe, path: Path, *, labels: Labels | None = None
) -> Path:
    """Write a simulated volume as one uncompressed Enhanced CT Image Storage file.

    Parameters
    ----------
    volume : Volume
        What `simulate(recipe)` gave.
    recipe : Recipe
        Geometry and facts for the header.
    path : Path
        The file; its folder is made if it is not there.
    labels : Labels, optional
        What the header says beyond the recipe.

    Returns
    -------
    Path
        The file.
    """
    _check(volume, recipe)
    labels = labels or Labels()
    path = Path(path)
    path.parent.mkdir(parents=True, exist_ok=True)
    dataset = _common(recipe, labels)
    _fill(dataset, _enhanced_facts(recipe, labels, dataset.SeriesInstanceUID))
    frames = range(len(recipe.positions_mm))
    dataset.SharedFunctionalGroupsSequence = Sequence([_shared_groups(recipe)])
    dataset.PerFrameFunctionalGroupsSequence = Sequence(
        [_frame_groups(recipe, labels, index) for index in frames]
    )
    _save(dataset, b"".join(_stored(volume, index) for index in frames), path)
    return path
