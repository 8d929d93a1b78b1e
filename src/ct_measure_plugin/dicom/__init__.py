"""The only room that knows DICOM: finding and reading series, and writing what was found on them.

What belongs here: finding series, ordering slices, decoding and rescaling pixels, every caution the
headers give reason for; segmentations in and out, measurements out. What it may import: physics,
errors, pydicom and its decoders, highdicom, numpy, dask for series larger than memory. What it must
not do: measure, draw, or let anything out that identifies a patient. Names, birth dates, accession
numbers and institutions are not read; UIDs leave as SHA-256 digests; file text never stands in an
error. The one exception is :mod:`ct_measure_plugin.dicom.identity`: an object that is written for
a series repeats its patient, as DICOM demands, and nothing else ever sees what is read for that.
"""

from __future__ import annotations

from ct_measure_plugin.dicom.codes import Code, LabelClass
from ct_measure_plugin.dicom.entries import SeriesEntry, SeriesScan, SkippedFile
from ct_measure_plugin.dicom.read import read_series
from ct_measure_plugin.dicom.scan import scan_folder, scan_series
from ct_measure_plugin.dicom.segmentation import LabelMap, read_segmentation, write_segmentation
from ct_measure_plugin.dicom.structured_report import MeasuredRegion, write_structured_report

__all__ = [
    "Code",
    "LabelClass",
    "LabelMap",
    "MeasuredRegion",
    "SeriesEntry",
    "SeriesScan",
    "SkippedFile",
    "read_segmentation",
    "read_series",
    "scan_folder",
    "scan_series",
    "write_segmentation",
    "write_structured_report",
]
