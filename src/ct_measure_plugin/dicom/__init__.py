"""The only room that knows DICOM: scanning folders, reading series into Volumes.

What belongs here: finding series, ordering slices, decoding and rescaling pixels, and every
caution the headers give reason for. What it may import: physics, errors, pydicom and its decoders,
numpy, dask for series larger than memory. What it must not do: measure, draw, or let anything out
that identifies a patient. Names, birth dates, accession numbers and institutions are never read;
UIDs leave as SHA-256 digests; file text never stands in an error.
"""

from __future__ import annotations

from ct_measure_plugin.dicom.entries import SeriesEntry, SeriesScan, SkippedFile
from ct_measure_plugin.dicom.read import read_series
from ct_measure_plugin.dicom.scan import scan_folder, scan_series

__all__ = [
    "SeriesEntry",
    "SeriesScan",
    "SkippedFile",
    "read_series",
    "scan_folder",
    "scan_series",
]
