"""What one image says about itself: where its pixels are, its geometry, its rescale.

A classic file is one image; an enhanced file is as many as it has frames. Everything is checked
against the length of the file before anything is allocated.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import TYPE_CHECKING, Final

from ct_measure_plugin.dicom import tags
from ct_measure_plugin.dicom.elements import UNDEFINED, Elements
from ct_measure_plugin.dicom.frames import frame_items
from ct_measure_plugin.dicom.header import Header, UnreadableFileError
from ct_measure_plugin.dicom.layout import PixelLayout, layout_of
from ct_measure_plugin.dicom.syntaxes import SYNTAXES
from ct_measure_plugin.dicom.texts import digest_of, known_position, shown_text
from ct_measure_plugin.dicom.windows import windows_of
from ct_measure_plugin.physics.volume import Acquisition

if TYPE_CHECKING:
    from ct_measure_plugin.physics.volume import HeaderWindow

__all__ = ["ImageFacts", "images_of"]

CT_IMAGE: Final = "1.2.840.10008.5.1.4.1.1.2"
ENHANCED_CT: Final = "1.2.840.10008.5.1.4.1.1.2.1"
CONVERTED_CT: Final = "1.2.840.10008.5.1.4.1.1.2.2"
_CT_CLASSES: Final = frozenset({CT_IMAGE, ENHANCED_CT, CONVERTED_CT})
#: more frames than any detector and table give; a larger claim is a damaged number
MAX_FRAMES: Final = 1 << 16
#: CT slopes lie between 0.01 and 16; what is beyond these is a damaged number. With 32 bit cells
#: the largest CT number they allow is 4e15, far inside single precision
SMALLEST_SLOPE: Final = 1e-9
LARGEST_SLOPE: Final = 1e6
LARGEST_INTERCEPT: Final = 1e9


@dataclass(slots=True, kw_only=True, eq=False)
class ImageFacts:
    """The facts of one image; stays inside the room, for it knows the file and its UIDs."""

    path: str
    frame: int
    frame_count: int
    syntax_uid: str
    pixel_offset: int
    pixel_length: int
    headerless: bool
    layout: PixelLayout
    series_uid: str
    series_number: int
    instance_uid: str
    description: str
    image_type: tuple[str, ...]
    patient_position: str
    position: tuple[float, ...] | None
    orientation: tuple[float, ...] | None
    pixel_spacing: tuple[float, float] | None
    spacing_from_diameter: bool
    spacing_between: float | None
    tilt_tag: float | None
    slope: float | None
    intercept: float | None
    rescale_type: str
    padding: tuple[int, int] | None
    padding_mistyped: bool
    lossy: bool
    simulated: bool
    acquisition: Acquisition
    windows: tuple[HeaderWindow, ...]
    moments: tuple[object, ...]

    @property
    def plane_offset(self) -> int:
        """Where an uncompressed frame begins."""
        return self.pixel_offset + self.frame * self.layout.plane_bytes


def images_of(header: Header, path: str) -> list[ImageFacts]:
    """Return the facts of every image in a file.

    Raises
    ------
    UnreadableFileError
        If it is not a CT image, or one that cannot be read; the text says why.
    """
    elements = header.elements
    _require_ct(elements)
    uid = elements.text(tags.SERIES_UID)
    try:
        return _images_of(header, path, uid)
    except UnreadableFileError as problem:
        problem.series_digest = digest_of(uid)
        raise


def _images_of(header: Header, path: str, uid: str) -> list[ImageFacts]:
    elements = header.elements
    layout = layout_of(elements)
    count = elements.whole(tags.FRAMES)
    count = 1 if count is None else count
    offset, length = _pixels_of(header, layout, count)
    sources = frame_items(elements, count)
    image = ImageFacts(
        path=path,
        frame=0,
        frame_count=count,
        syntax_uid=header.syntax_uid,
        pixel_offset=offset,
        pixel_length=length,
        headerless=header.headerless,
        layout=layout,
        series_uid=uid,
        series_number=elements.whole(tags.SERIES_NUMBER) or 0,
        instance_uid=elements.text(tags.SOP_INSTANCE),
        description=shown_text(
            elements.raw(tags.SERIES_DESCRIPTION), elements.text(tags.CHARACTER_SET)
        ),
        patient_position=known_position(elements.text(tags.PATIENT_POSITION)),
        spacing_between=elements.number(tags.SPACING_BETWEEN),
        tilt_tag=elements.number(tags.GANTRY_TILT),
        lossy=_is_lossy(elements, header.syntax_uid),
        simulated=_is_simulated(elements),
        **_own_facts(elements, elements, layout),  # type: ignore[arg-type]
    )
    images = [image]
    if sources is not None:
        images = [
            replace(image, frame=k, **_own_facts(source, elements, layout))  # type: ignore[arg-type]
            for k, source in enumerate(sources)
        ]
    images = [one for one in images if "LOCALIZER" not in one.image_type]
    if not images:
        raise UnreadableFileError("a localiser, not a slice", stray=True)
    images = [one for one in images if one.pixel_spacing is not None]
    if not images:
        raise UnreadableFileError("the pixel spacing is missing, so nothing is known in mm")
    return images


def _require_ct(elements: Elements) -> None:
    kind = elements.text(tags.SOP_CLASS)
    modality = elements.text(tags.MODALITY)
    if kind in _CT_CLASSES or (not kind and modality == "CT"):
        return
    raise UnreadableFileError(f"{_class_name(kind)}: not a CT image", stray=True)


@lru_cache(maxsize=256)
def _class_name(uid: str) -> str:
    """Return the standard's name of an object class, never the file's own text."""
    from pydicom._uid_dict import UID_dictionary

    entry = UID_dictionary.get(uid)
    return entry[0] if entry else "an object of another kind"


def _pixels_of(header: Header, layout: PixelLayout, count: int) -> tuple[int, int]:
    """Return offset and length of the pixel data after checking them against the file."""
    syntax = SYNTAXES.get(header.syntax_uid)
    if syntax is None:
        raise UnreadableFileError("its transfer syntax is not one that is read here")
    if not 1 <= count <= MAX_FRAMES:
        raise UnreadableFileError("the number of frames is impossible")
    _, offset, length = header.elements.found[tags.PIXELS]
    if syntax.encapsulated != (length == UNDEFINED):
        raise UnreadableFileError("its pixel data contradict its transfer syntax")
    if syntax.encapsulated:
        if layout.allocated > 16 and syntax.family != "rle":
            raise UnreadableFileError("compressed pixels of more than 16 bits are not read here")
        if offset >= header.size:
            raise UnreadableFileError("the pixel data are missing")
        return offset, header.size - offset
    needed = layout.plane_bytes * count
    if header.deflated:
        # deflate gains at most a factor of 1032 (RFC 1951: 258 bytes for two bits)
        available = min(length, header.size * 1032)
    else:
        available = min(length, header.size - offset)
    if available < needed:
        raise UnreadableFileError(
            f"the pixel data are cut short: {max(available, 0)} of {needed} bytes"
        )
    return offset, needed


def _is_lossy(elements: Elements, syntax_uid: str) -> bool:
    said = elements.text(tags.LOSSY)
    kind = SYNTAXES[syntax_uid].lossy
    return said == "01" or kind == "yes" or (kind == "possible" and said != "00")


def _is_simulated(elements: Elements) -> bool:
    said = (elements.text(tags.MANUFACTURER), *elements.text(tags.IMAGE_TYPE).split("\\"))
    return "SIMULATED" in said


def _own_facts(own: Elements, whole: Elements, layout: PixelLayout) -> dict[str, object]:
    """Return the facts that may differ from frame to frame."""
    spacing, from_diameter = _spacing_of(own, layout)
    slope, intercept = _rescale_of(own)
    padding, mistyped = _padding_of(own if tags.PADDING in own else whole, layout)
    kind = own.text(tags.IMAGE_TYPE) or own.text(tags.FRAME_TYPE)
    return {
        "image_type": tuple(kind.split("\\")),
        "position": own.vector(tags.POSITION, 3),
        "orientation": own.vector(tags.ORIENTATION, 6),
        "pixel_spacing": spacing,
        "spacing_from_diameter": from_diameter,
        "slope": slope,
        "intercept": intercept,
        "rescale_type": own.text(tags.RESCALE_TYPE),
        "padding": padding,
        "padding_mistyped": mistyped,
        "acquisition": _acquisition_of(own),
        "windows": windows_of(own, whole),
        "moments": _moments_of(own),
    }


def _rescale_of(own: Elements) -> tuple[float | None, float | None]:
    """Return slope and intercept, None for what is missing; a slope of 0 is as good as none."""
    slope, intercept = own.number(tags.SLOPE) or None, own.number(tags.INTERCEPT)
    odd = slope is not None and not SMALLEST_SLOPE <= abs(slope) <= LARGEST_SLOPE
    if odd or (intercept is not None and abs(intercept) > LARGEST_INTERCEPT):
        raise UnreadableFileError("the rescale slope or intercept is impossible")
    return slope, intercept


def _spacing_of(own: Elements, layout: PixelLayout) -> tuple[tuple[float, float] | None, bool]:
    """Return (dy, dx) and whether they had to come from the reconstruction diameter."""
    pair = own.vector(tags.PIXEL_SPACING, 2)
    if pair is not None and all(1e-4 < step < 1e3 for step in pair):
        return (pair[0], pair[1]), False
    diameter = own.number(tags.RECON_DIAMETER)
    if diameter is not None and 1 < diameter < 1e4 and layout.rows == layout.columns:
        step = diameter / layout.columns
        return (step, step), True
    return None, False


def _padding_of(own: Elements, layout: PixelLayout) -> tuple[tuple[int, int] | None, bool]:
    """Return the padding range in stored values and whether its type was wrong.

    The bytes are read with the sign of the pixels: an unsigned 63536 declared for signed pixels
    is their −2000 (PS3.3, C.7.5.1.1.2 demands the pixels' own representation).
    """
    if tags.PADDING not in own or layout.allocated > 16:
        return None, False
    values = []
    mistyped = False
    for tag in (tags.PADDING, tags.PADDING_LIMIT):
        raw = own.raw(tag)
        if len(raw) < 2:
            continue
        order = "big" if own.encoding.big else "little"
        values.append(int.from_bytes(raw[:2], order, signed=layout.signed))  # type: ignore[arg-type]
        declared = own.found[tag][0]
        if not own.encoding.implicit and declared != ("SS" if layout.signed else "US"):
            mistyped = True
    if not values:
        return None, False
    return (min(values), max(values)), mistyped


def _positive(value: float | None) -> float | None:
    return value if value is not None and value > 0 else None


def _acquisition_of(own: Elements) -> Acquisition:
    number = own.number
    exposure = number(tags.EXPOSURE)
    if exposure is None:
        exposure = number(tags.EXPOSURE_MAS)
    if exposure is None:
        fine = number(tags.EXPOSURE_UAS)
        exposure = None if fine is None else fine / 1000
    centre = own.vector(tags.COLLECTION_CENTRE, 3)
    acquisition_number = own.whole(tags.ACQUISITION_NUMBER)
    if acquisition_number is None:
        acquisition_number = own.whole(tags.FRAME_ACQUISITION)
    diameter = _positive(number(tags.RECON_DIAMETER))
    return _acquisition(
        _positive(number(tags.KVP)),
        _first(number(tags.TUBE_CURRENT), number(tags.TUBE_CURRENT_MA)),
        exposure,
        _first(number(tags.EXPOSURE_TIME), number(tags.EXPOSURE_TIME_MS)),
        number(tags.CTDI_VOL),
        _positive(number(tags.SLICE_THICKNESS)),
        shown_text(own.raw(tags.KERNEL).split(b"\\")[0], "", longest=32),
        diameter,
        centre,
        acquisition_number,
    )


def _first(*values: float | None) -> float | None:
    return next((value for value in values if value is not None), None)


@lru_cache(maxsize=1024)
def _acquisition(*facts: object) -> Acquisition:
    """Return one Acquisition for all slices that share its facts."""
    names = (
        "kvp",
        "tube_current_ma",
        "exposure_mas",
        "exposure_time_ms",
        "ctdi_vol_mgy",
        "slice_thickness_mm",
        "kernel",
        "reconstruction_diameter_mm",
        "isocentre_mm",
        "acquisition_number",
    )
    return Acquisition(**dict(zip(names, facts, strict=True)))  # type: ignore[arg-type]


def _moments_of(own: Elements) -> tuple[object, ...]:
    """Return what may tell apart several volumes under one series UID, best first."""
    time = own.text(tags.ACQUISITION_TIME)
    return (
        own.whole(tags.ACQUISITION_NUMBER),
        own.whole(tags.FRAME_ACQUISITION),
        own.whole(tags.TEMPORAL_POSITION),
        own.whole(tags.TEMPORAL_INDEX),
        own.whole(tags.ECHO_NUMBER),
        own.number(tags.TRIGGER_TIME),
        time if math.isfinite(_number_or_nan(time)) else None,
    )


@lru_cache(maxsize=1024)
def _number_or_nan(text: str) -> float:
    try:
        return float(text)
    except ValueError:
        return math.nan
