"""Measurements as a structured report: numbers, units, doubts and outlines, read by tags alone."""

from __future__ import annotations

from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import series_writer as sw
from identities import IDENTITY, MARK, OTHERS
from pydicom import Dataset, dcmread
from report_walker import Node, groups_of, tree_of

from ct_measure_plugin.dicom import read_series, scan_series
from ct_measure_plugin.dicom.codes import Code, LabelClass
from ct_measure_plugin.dicom.segmentation import read_segmentation, write_segmentation
from ct_measure_plugin.dicom.structured_report import MeasuredRegion, write_structured_report
from ct_measure_plugin.errors import ArgumentError, SeriesError
from ct_measure_plugin.physics import regions as regions_in_mm
from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.region_statistics import region_statistics
from ct_measure_plugin.physics.regions import (
    Box,
    Disc,
    Ellipse,
    Ellipsoid,
    Mask,
    Polygon,
    Region,
    Segment,
)
from ct_measure_plugin.physics.results import Caution, NotMeasured, Result, quantities_of

SHAPE = (5, 32, 40)
STORED = sw.noise(SHAPE)
UNIT = {"HU": "UCUM:[hnsf'U]", "mm²": "UCUM:mm2", "px": "UCUM:{pixels}", "": "UCUM:1"}
UPPER, LOWER = "SCT:371886008", "SCT:371885007"


def entry_of(folder: Path, **changes: Any) -> Any:
    positions = changes.pop("positions", sw.line(SHAPE[0]))
    sw.write_series(folder, STORED, positions, **changes)
    (entry,) = scan_series(folder)
    return entry


@cache
def statistics() -> Any:
    return region_statistics(STORED[2, 8:20, 9:25] - 1024.0, spacing_mm=(0.5, 0.5))


def one(region: Region | None = None, answer: Result | NotMeasured | None = None, **more: Any):
    answer = statistics() if answer is None else answer
    return MeasuredRegion(answer=answer, measurement="region_statistics", region=region, **more)


def numbers_of(group: Node) -> list[Node]:
    return [child for child in group.children if child.kind == "NUM"]


def sources_of(folder: Path) -> dict[str, Dataset]:
    found = [dcmread(path) for path in folder.iterdir()]
    return {str(ds.SOPInstanceUID): ds for ds in found}


DISC = Disc((-4.0, -2.0), 2.5, z_mm=4.0, name="Leber Köln", group="Liver", code="SCT:10200004")


def test_every_number_is_there_with_unit_and_uncertainty(tmp_path):
    entry, answer = entry_of(tmp_path / "s"), statistics()
    (group,) = groups_of(write_structured_report(tmp_path / "sr", entry, [one(DISC, answer)]))
    found = numbers_of(group)
    told = quantities_of(answer)
    assert len(found) == len(told) > 20
    for number, (name, quantity) in zip(found, told.items(), strict=True):
        value, unit = number.value
        assert value == quantity.value  # all 64 bits
        if quantity.unit in UNIT:
            assert unit == UNIT[quantity.unit]
        doubts = [child for child in number.children if child.name in (UPPER, LOWER)]
        assert len(doubts) == (0 if quantity.uncertainty is None else 2), name
        for doubt in doubts:
            # a decimal string has 16 characters: 14 digits where there is a point and a sign
            assert doubt.value[0] == pytest.approx(quantity.uncertainty, rel=1e-9)
            assert doubt.value[1] == unit


def test_statistics_and_sizes_have_the_standards_names(tmp_path):
    entry = entry_of(tmp_path / "s")
    wanted = ("mean", "sd", "median", "minimum", "maximum", "area", "n")
    file = write_structured_report(tmp_path / "sr", entry, [one(DISC)], quantities=wanted)
    (group,) = groups_of(file)
    named = []
    for number in numbers_of(group):
        statistic = number.all("DCM:121401")
        named.append((number.name, statistic[0].value[0] if statistic else ""))
    assert named == [
        ("DCM:112031", "SCT:373098007"),
        ("DCM:112031", "SCT:386136009"),
        ("99CTMEASURE:n", ""),
        ("SCT:42798000", ""),
        ("DCM:112031", "SCT:255605001"),
        ("DCM:112031", "SCT:56851009"),
        ("DCM:112031", "SCT:373099004"),
    ]
    (scheme,) = dcmread(file).CodingSchemeIdentificationSequence
    assert scheme.CodingSchemeDesignator == "99CTMEASURE"


def test_a_group_says_what_it_shows_and_how_it_was_measured(tmp_path):
    entry = entry_of(tmp_path / "s")
    label = LabelClass("rod 3", Code("C1", "99LAB", "PTFE"), Code("260787004", "SCT", "Object"))
    measured = [one(DISC), one(Disc((-4, -2), 2, z_mm=0.0), label=label), one(None)]
    first, second, third = groups_of(write_structured_report(tmp_path / "sr", entry, measured))
    assert first.one("DCM:112039").value == "Leber Köln"
    assert first.one("DCM:121071").value == ("SCT:10200004", "Liver")
    assert first.one("SCT:370129005").value == (
        "99CTMEASURE:region_statistics",
        "region statistics",
    )
    assert second.one("DCM:112039").value == "rod 3"
    assert second.one("DCM:121071").value == ("99LAB:C1", "PTFE")
    assert second.one("SCT:276214006").value == ("SCT:260787004", "Object")
    assert third.one("DCM:112039").value == "region_statistics"
    uids = {group.one("DCM:112040").value for group in (first, second, third)}
    assert len(uids) == 3


SERIES: dict[str, dict[str, Any]] = {
    "plain": {},
    "pixels not square": {"PixelSpacing": [0.8, 0.3]},
    "oblique": {
        "ImageOrientationPatient": [0.8, 0.6, 0.0, 0.0, 0.0, -1.0],
        "positions": sw.along(5, 2.0 * np.cross((0.8, 0.6, 0), (0, 0, -1)), (-1, 2, 3)),
        "PixelSpacing": [0.7, 0.4],
    },
}


def rim_of(graphic: str, data: list[float]) -> np.ndarray:
    """Return points of an outline as (column, row), by the standard's words for each graphic."""
    points = np.array(data).reshape(-1, 2)
    angle = np.linspace(0, 2 * np.pi, 720, endpoint=False)[:, None]
    if graphic == "CIRCLE":
        radius = np.hypot(*(points[1] - points[0]))
        return points[0] + radius * np.hstack([np.cos(angle), np.sin(angle)])
    if graphic == "ELLIPSE":
        center = points[:2].mean(axis=0)
        assert points[2:].mean(axis=0) == pytest.approx(center, abs=1e-4)
        long, short = points[1] - center, points[3] - center
        assert np.hypot(*long) >= np.hypot(*short)
        assert long @ short == pytest.approx(0, abs=1e-3)
        return center + np.cos(angle) * long + np.sin(angle) * short
    assert graphic == "POLYLINE"
    assert np.array_equal(points[0], points[-1])
    return points[:-1]


def in_patient(rim: np.ndarray, ds: Dataset) -> np.ndarray:
    """Return points of a slice in the patient (PS3.3, C.7.6.2.1.1), pixel centres at the half."""
    cosines = np.array(ds.ImageOrientationPatient, float)
    dy, dx = (float(v) for v in ds.PixelSpacing)
    column, row = rim[:, :1] - 0.5, rim[:, 1:] - 0.5
    place = np.array(ds.ImagePositionPatient, float)
    return place + cosines[:3] * dx * column + cosines[3:] * dy * row


def shoelace(points: np.ndarray) -> float:
    y, x = points.T
    return float(abs(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y)) / 2)


def middle_of(entry: Any) -> tuple[float, float, float]:
    volume = read_series(entry)
    _, ny, nx = volume.shape
    z = float(volume.positions_mm[2])
    y = volume.origin_mm[1] + 0.5 * ny * volume.spacing_mm[1]
    return z, y, volume.origin_mm[2] + 0.5 * nx * volume.spacing_mm[2]


@pytest.mark.parametrize("kind", SERIES)
def test_outlines_lie_where_the_regions_lie_in_the_patient(tmp_path, kind):
    """Found again in millimetres from the source images' own tags, and with the same area."""
    entry = entry_of(tmp_path / "s", **SERIES[kind])
    z, y, x = middle_of(entry)
    regions: list[Any] = [
        Disc((y + 1, x - 0.5), 2.2, z_mm=z),
        Ellipse((y - 1, x + 0.7), (1.1, 2.9), angle_deg=25.0, z_mm=z),
        Box((y, x), (3.0, 4.0), angle_deg=-35.0, z_mm=z),
        Polygon(((y, x), (y + 3, x), (y + 1, x + 1), (y, x + 4)), z_mm=z),
        Segment((y - 1, x - 2), (y + 2, x + 1), width_mm=1.5, z_mm=z),
        regions_in_mm.Path(((y - 1, x - 2), (y + 2, x + 1), (y + 2, x + 3)), 1.0, z_mm=z),
    ]
    areas = [r.length_mm * r.width_mm if isinstance(r, Segment)
             else r.strip().area_mm2 if isinstance(r, regions_in_mm.Path) else r.area_mm2
             for r in regions]  # fmt: skip
    images = sources_of(tmp_path / "s")
    file = write_structured_report(
        tmp_path / "sr", entry, [one(r) for r in regions], quantities=("mean",)
    )
    for group, region, area in zip(groups_of(file), regions, areas, strict=True):
        drawn = group.one("DCM:111030")
        ds = images[drawn.children[0].value[0]]
        cosines = np.array(ds.ImageOrientationPatient, float)
        normal = np.cross(cosines[:3], cosines[3:])
        rim = in_patient(rim_of(*drawn.value), ds)
        assert rim @ normal == pytest.approx(np.full(len(rim), z), abs=1e-4)
        plane = np.stack([rim @ cosines[3:], rim @ cosines[:3]], axis=1)  # y, x
        # coordinates are written in single precision: 40 pixels to 4e-6 of a pixel; 720 corners
        # of a circle have 1.3e-5 less area
        assert shoelace(plane) == pytest.approx(area, rel=2e-5)
        if isinstance(region, Disc | Ellipse):
            assert plane.mean(axis=0) == pytest.approx(region.center_mm, abs=1e-4)
            radii = region.radii_mm if isinstance(region, Ellipse) else (region.radius_mm,) * 2
            turn = np.radians(region.angle_deg if isinstance(region, Ellipse) else 0.0)
            off_y, off_x = (plane - region.center_mm).T
            along = off_x * np.cos(turn) - off_y * np.sin(turn)
            across = off_x * np.sin(turn) + off_y * np.cos(turn)
            assert (along / radii[1]) ** 2 + (across / radii[0]) ** 2 == pytest.approx(
                np.ones(720), abs=1e-4
            )


@pytest.mark.parametrize("offset", [(0, -8), (-8, 0), (6, 9), (0, 11), (-100, 0)])
def test_what_reaches_beyond_the_image_is_cut_off_there(tmp_path, offset):
    entry = entry_of(tmp_path / "s")
    z, y, x = middle_of(entry)
    center = (y + offset[0], x + offset[1])
    regions: list[Any] = [
        Ellipse(center, (4.0, 6.0), angle_deg=30.0, z_mm=z),
        Box(center, (5.0, 7.0), angle_deg=20.0, z_mm=z),
    ]
    file = write_structured_report(
        tmp_path / "sr", entry, [one(r) for r in regions], quantities=("mean",)
    )
    for group, region in zip(groups_of(file), regions, strict=True):
        drawn = group.all("DCM:111030")
        cover = plane_coverage(
            region, SHAPE[1:], spacing_mm=(0.5, 0.5), origin_mm=(-10.0, -10.0)
        ).weights
        if not cover.any():
            assert drawn == []
            assert len(group.all("DCM:121112")) == 1  # its slice all the same
            continue
        points = rim_of(*drawn[0].value)
        assert points.min() >= 0
        assert np.all(points <= [SHAPE[2], SHAPE[1]])
        # an ellipse that is cut has 180 corners, whose area is 0.02 % too small
        assert 0.25 * shoelace(points) == pytest.approx(0.25 * cover.sum(), rel=3e-4)


def test_a_region_on_several_slices_is_drawn_on_each(tmp_path):
    entry = entry_of(tmp_path / "s")
    z, y, x = middle_of(entry)
    ball = Ellipsoid((y, x), (3.0, 3.0), 3.0, z_mm=z)
    disc = Disc((y, x), 2.0, z_mm=(z - 2, z + 2))
    images = sources_of(tmp_path / "s")
    file = write_structured_report(tmp_path / "sr", entry, [one(disc), one(ball)])
    for group, heights in zip(groups_of(file), ([2, 4, 6], [2, 4, 6]), strict=True):
        drawn = group.all("DCM:111030")
        found = [images[d.children[0].value[0]].ImagePositionPatient[2] for d in drawn]
        assert found == heights
    radii = [np.diff(d.value[1])[1] for d in groups_of(file)[1].all("DCM:111030")]
    assert abs(radii[1]) > 0


def test_masks_and_lines_refer_to_their_images(tmp_path):
    entry = entry_of(tmp_path / "s")
    inside = np.zeros(SHAPE, bool)
    inside[1:3, 4:9, 4:9] = True
    mask = Mask(inside, (2.0, 0.5, 0.5), (0.0, -10.0, -10.0))
    line = Segment((-4, -4), (0, 0), z_mm=8.0)
    images = sources_of(tmp_path / "s")
    groups = groups_of(write_structured_report(tmp_path / "sr", entry, [one(mask), one(line)]))
    for group, heights in zip(groups, ([2, 4], [8]), strict=True):
        assert group.all("DCM:111030") == []
        pictures = group.all("DCM:121112")
        assert [images[p.value[0]].ImagePositionPatient[2] for p in pictures] == heights


def test_a_label_refers_to_its_segment(tmp_path):
    entry = entry_of(tmp_path / "s")
    labels = np.zeros(SHAPE, int)
    labels[1:3, 4:9, 4:9] = 7
    seg_file = write_segmentation(tmp_path / "seg", entry, labels, {7: LabelClass("left")})
    link = read_segmentation(seg_file, entry).links[7]
    file = write_structured_report(tmp_path / "sr", entry, [one(None, segment=link)])
    seg = dcmread(seg_file)
    (group,) = groups_of(file)
    assert group.one("DCM:121191").value == (seg.SOPInstanceUID, None, 1)
    assert group.one("DCM:112040").value == seg.SegmentSequence[0].TrackingUID
    assert group.one("DCM:112039").value == "left"
    evidence = dcmread(file).CurrentRequestedProcedureEvidenceSequence
    series = {s.SeriesInstanceUID for study in evidence for s in study.ReferencedSeriesSequence}
    assert series == {seg.SeriesInstanceUID, sw.uid("series")}


def test_frames_of_a_multi_frame_file_are_referred_to_by_number(tmp_path):
    shuffled = [3, 0, 4, 1, 2]
    places = [(-10.0, -10.0, 2.0 * k) for k in shuffled]
    sw.save(sw.enhanced(STORED, places), tmp_path / "s" / "one")
    (entry,) = scan_series(tmp_path / "s")
    file = write_structured_report(tmp_path / "sr", entry, [one(Disc((-4, -2), 2, z_mm=6.0))])
    (group,) = groups_of(file)
    instance, frame, _ = group.one("DCM:111030").children[0].value
    assert instance == dcmread(tmp_path / "s" / "one").SOPInstanceUID
    assert frame == 1 + shuffled.index(3)


def test_what_could_not_be_measured_is_there_with_its_reason(tmp_path):
    entry = entry_of(tmp_path / "s")
    caution = Caution("few-pixels", "4 pixels.")
    answer = NotMeasured("the region holds 4 pixels; at least 9 are needed", "larger", (caution,))
    (group,) = groups_of(write_structured_report(tmp_path / "sr", entry, [one(DISC, answer)]))
    assert numbers_of(group) == []
    assert group.one("99CTMEASURE:result").value == (
        "99CTMEASURE:not-measured",
        "the region holds 4 pixels; at least 9 are needed",
    )
    assert group.one("99CTMEASURE:caution").value == ("99CTMEASURE:few-pixels", "Few pixels")


def test_the_report_says_what_it_is_and_what_made_it(tmp_path):
    entry = entry_of(tmp_path / "s")
    file = write_structured_report(tmp_path / "sr", entry, [one(DISC)])
    ds, tree = dcmread(file), tree_of(file)
    assert ds.SOPClassUID == "1.2.840.10008.5.1.4.1.1.88.33"
    assert ds.ContentTemplateSequence[0].TemplateIdentifier == "1500"
    assert (ds.CompletionFlag, ds.VerificationFlag) == ("COMPLETE", "UNVERIFIED")
    assert tree.name == "DCM:126000"
    assert tree.one("DCM:121005").value[0] == "DCM:121007"
    assert tree.one("DCM:121013").value == "ct_measure_plugin"
    library = tree.one("DCM:111028").one("DCM:126200")
    assert len(library.children) == 5


def test_patient_and_study_are_repeated_unless_anonymous(tmp_path):
    entry = entry_of(tmp_path / "s", **IDENTITY, **OTHERS)
    ds = dcmread(write_structured_report(tmp_path / "sr", entry, [one(DISC)]))
    for name, value in IDENTITY.items():
        assert str(ds[name].value) == value
    raw = (tmp_path / "sr").read_bytes().decode("latin-1")
    assert raw.count(MARK) == sum(MARK in value for value in IDENTITY.values())
    file = write_structured_report(tmp_path / "sr", entry, [one(DISC)], anonymous=True)
    assert MARK not in file.read_bytes().decode("latin-1")
    assert not dcmread(file).PatientBirthDate


def test_nothing_measured_and_odd_names_are_refused(tmp_path):
    entry = entry_of(tmp_path / "s")
    with pytest.raises(ArgumentError, match="at least one answer"):
        write_structured_report(tmp_path / "sr", entry, [])
    with pytest.raises(ArgumentError, match="printable"):
        write_structured_report(tmp_path / "sr", entry, [one(Disc((0, 0), 1, name="a\nb"))])
    lost = entry_of(tmp_path / "lost", FrameOfReferenceUID=None)
    with pytest.raises(SeriesError, match="frame of reference"):
        write_structured_report(tmp_path / "sr", lost, [one(DISC)])
    assert not (tmp_path / "sr").exists()
