"""What a scan tells about a series, and what it tells about files that are none."""

from __future__ import annotations

import os
from collections import Counter
from dataclasses import dataclass, field
from os import fspath
from pathlib import Path
from typing import TYPE_CHECKING

from ct_measure_plugin.dicom.geometry import StackGeometry, stack_geometry
from ct_measure_plugin.dicom.header_cautions import encoding_names, header_cautions
from ct_measure_plugin.dicom.rescale import unit_of
from ct_measure_plugin.dicom.syntaxes import SYNTAXES, missing_decoder
from ct_measure_plugin.dicom.texts import digest_of
from ct_measure_plugin.physics.results import Caution

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator

    from ct_measure_plugin.dicom.grouping import Stack
    from ct_measure_plugin.physics.volume import HeaderWindow

__all__ = ["SeriesEntry", "SeriesScan", "SkippedFile", "entry_of"]

Range = tuple[float, float]


@dataclass(frozen=True, slots=True, eq=False)
class SeriesEntry:
    """One CT series (or one volume of a series that holds several), ready to be read.

    Attributes
    ----------
    digest : str
        SHA-256 of the series UID, hexadecimal; the UID itself is not kept.
    part, parts : int
        Which volume of the series this is, and how many it holds; 1 and 1 as a rule.
    description : str
        The header's own words for the series. Free text: show it to the person at the screen,
        keep it out of records, reports, logs and errors. `label` is safe.
    series_number : int
        The header's running number, 0 if absent.
    kernel : str
        Convolution kernel.
    kvp : float or None
        Tube voltage in kV; None if absent or not the same throughout.
    mas, ctdi_vol_mgy, thickness_mm : (float, float) or None
        Lowest and highest over the slices: mAs, CTDIvol in mGy, nominal thickness in mm.
    slice_count : int
        Slices of the volume.
    matrix : (int, int)
        Rows, columns.
    spacing_mm : (float, float, float)
        dz, dy, dx; dz of a single slice is its thickness.
    tilt_deg : float
        Angle between stacking direction and slice normal.
    patient_position : str
        "HFS", …
    unit : str
        "HU", or what the rescaled values are.
    decoder : str
        The compressed encodings to be decoded, ``""`` for plain pixels.
    decoder_missing : str
        The pip command that brings a decoder that is not installed, else ``""``.
    windows : tuple of HeaderWindow
        Display windows of the middle slice.
    cautions : tuple of Caution
        What the headers give reason for; reading may add more.
    """

    digest: str
    part: int
    parts: int
    description: str = field(repr=False)
    series_number: int
    kernel: str
    kvp: float | None
    mas: Range | None
    ctdi_vol_mgy: Range | None
    thickness_mm: Range | None
    slice_count: int
    matrix: tuple[int, int]
    spacing_mm: tuple[float, float, float]
    tilt_deg: float
    patient_position: str
    unit: str
    decoder: str
    decoder_missing: str
    windows: tuple[HeaderWindow, ...]
    cautions: tuple[Caution, ...]
    _stack: Stack = field(repr=False)
    _geometry: StackGeometry | None = field(repr=False)

    @property
    def key(self) -> str:
        """A short name to choose the series by: twelve digits of the digest, and the part."""
        return self.digest[:12] + (f"-{self.part}" if self.parts > 1 else "")

    @property
    def label(self) -> str:
        """A line that tells the series from others and may be shown anywhere.

        It holds no free text but the kernel.
        """
        rows, columns = self.matrix
        slices = "1 slice" if self.slice_count == 1 else f"{self.slice_count} slices"
        parts = [f"{slices} of {rows} × {columns}"]
        if self.thickness_mm is not None:
            parts.append(f"{self.thickness_mm[1]:g} mm")
        if self.kernel:
            parts.append(f"kernel {self.kernel}")
        if self.kvp is not None:
            parts.append(f"{self.kvp:g} kV")
        return ", ".join(parts)

    @property
    def folder(self) -> Path:
        """The folder that holds the files, or the nearest one that holds them all.

        Its name may be anybody's: show it to the person at the screen, and nowhere else.
        """
        parents = {os.path.dirname(fspath(image.path)) for image in self._stack.images}
        return Path(os.path.commonpath(parents))

    def places_of(self, file: Path) -> tuple[int, ...]:
        """Return the indices of the slices that come from a file; empty if none does."""
        images, name = self._stack.images, fspath(file)
        return tuple(index for index, image in enumerate(images) if fspath(image.path) == name)

    def holds(self, file: Path) -> bool:
        """Tell whether any slice comes from a file."""
        return bool(self.places_of(file))


@dataclass(frozen=True, slots=True)
class SkippedFile:
    """A file that is in no series.

    Attributes
    ----------
    path : Path
        Where it is.
    reason : str
        Why, in words that hold no text of the file.
    damaged : bool
        True if it looks like a CT image that cannot be read; False if it is something else.
    """

    path: Path = field(repr=False)
    reason: str
    damaged: bool = False


@dataclass(frozen=True, slots=True)
class SeriesScan:
    """The outcome of a scan.

    Attributes
    ----------
    entries : tuple of SeriesEntry
        The series, by series number.
    skipped : tuple of SkippedFile
        Every other file, with the reason.
    """

    entries: tuple[SeriesEntry, ...]
    skipped: tuple[SkippedFile, ...]

    def __iter__(self) -> Iterator[SeriesEntry]:
        return iter(self.entries)

    def __len__(self) -> int:
        return len(self.entries)

    def reasons(self) -> dict[str, int]:
        """Return how many files were skipped for each reason, most frequent first."""
        return dict(Counter(one.reason for one in self.skipped).most_common())


def entry_of(stack: Stack, part: int, parts: int, *, unreadable: int = 0) -> SeriesEntry:
    """Return the entry of a stack.

    Parameters
    ----------
    stack : Stack
        Ordered images of one volume.
    part, parts : int
        Its number within its series UID, from 1.
    unreadable : int
        Files that claim the same series and could not be read.
    """
    images = stack.images
    first, middle = images[0], images[len(images) // 2]
    geometry = None if stack.frame is None else stack_geometry(images, stack.frame)
    cautions = header_cautions(stack, geometry)
    if unreadable:
        cautions.append(_unreadable(unreadable))
    facts = [image.acquisition for image in images]
    thickness = _range(fact.slice_thickness_mm for fact in facts)
    kvp = _range(fact.kvp for fact in facts)
    dy, dx = first.pixel_spacing or (1.0, 1.0)
    return SeriesEntry(
        digest=digest_of(first.series_uid),
        part=part,
        parts=parts,
        description=first.description,
        series_number=first.series_number,
        kernel=middle.acquisition.kernel,
        kvp=kvp[0] if kvp is not None and kvp[0] == kvp[1] else None,
        mas=_range(fact.exposure_mas for fact in facts),
        ctdi_vol_mgy=_range(fact.ctdi_vol_mgy for fact in facts),
        thickness_mm=thickness,
        slice_count=len(images),
        matrix=(first.layout.rows, first.layout.columns),
        spacing_mm=geometry.spacing_mm if geometry else (thickness[0] if thickness else 1, dy, dx),
        tilt_deg=geometry.tilt_deg if geometry else 0.0,
        patient_position=first.patient_position,
        unit=unit_of(first),
        decoder=encoding_names(images),
        decoder_missing=_missing(stack),
        windows=middle.windows,
        cautions=tuple(cautions),
        _stack=stack,
        _geometry=geometry,
    )


def _unreadable(count: int) -> Caution:
    files = "1 file" if count == 1 else f"{count} files"
    return Caution(
        "unreadable-files",
        f"{files} of the series could not be read.",
        "Look at the reasons in the scan, and export the series again.",
    )


def _missing(stack: Stack) -> str:
    syntaxes = {image.syntax_uid for image in stack.images}
    commands = {missing_decoder(SYNTAXES[uid]) for uid in syntaxes} - {""}
    return " && ".join(sorted(commands))


def _range(values: Iterable[float | None]) -> Range | None:
    known = [value for value in values if value is not None]
    return (min(known), max(known)) if known else None
