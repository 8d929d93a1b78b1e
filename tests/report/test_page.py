"""The page is complete, harmless, and says what must be said."""

from __future__ import annotations

import re
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pytest
from examples import EXAMPLES

from ct_measure_plugin.measurements import NAMES
from ct_measure_plugin.measurements.catalogue import settings_for
from ct_measure_plugin.physics.regions import (
    Box,
    Disc,
    Ellipse,
    Ellipsoid,
    Labels,
    Mask,
    Path,
    Polygon,
    Segment,
)
from ct_measure_plugin.physics.results import Caution, quantities_of
from ct_measure_plugin.physics.volume import Acquisition, Source, Volume
from ct_measure_plugin.report import write_report
from ct_measure_plugin.run import run_measurement


def page_of(tmp_path, records, **more) -> str:
    return write_report(records, tmp_path / "page.html", **more).read_text(encoding="utf-8")


@pytest.mark.parametrize("name", NAMES)
def test_every_number_stands_on_the_page(tmp_path, name):
    example = EXAMPLES[name]()
    settings = settings_for(name, example.settings)
    records = run_measurement(name, example.volume, example.regions, settings)
    page = page_of(tmp_path, records)
    for quantity in quantities_of(records[0].answer()).values():
        assert f">{quantity.rounded()[0]}<" in page
    assert "not a medical device" in page
    assert records[0].id in page


class Collector(HTMLParser):
    def __init__(self) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))


def test_the_page_needs_nothing_else(tmp_path):
    example = EXAMPLES["region_statistics"]()
    collector = Collector()
    collector.feed(
        page_of(tmp_path, run_measurement("region_statistics", example.volume, example.regions))
    )
    for tag, attributes in collector.tags:
        assert tag not in ("script", "link", "iframe", "object")
        for key in ("src", "href", "xlink:href"):
            target = attributes.get(key) or "#"
            assert target.startswith(("#", "data:")), (tag, target)


HOSTILE = "<script>alert(1)</script>{{7*7}}%s\"'&"


def test_hostile_text_stays_text(tmp_path):
    volume = Volume(
        np.random.default_rng(1).normal(0, 9, (1, 64, 64)), (1, 1, 1),
        acquisition=(Acquisition(kernel=HOSTILE),), source=Source(title=HOSTILE),
        cautions=(Caution("padding", HOSTILE),),
    )  # fmt: skip
    records = run_measurement("region_statistics", volume, [Disc((32, 32), 9, name=HOSTILE)])
    page = page_of(tmp_path, records, title=HOSTILE)
    assert "<script>" not in page
    assert "{{7*7}}" in page
    assert page.count("&lt;script&gt;") >= 4


def test_every_kind_of_region_is_drawn(tmp_path):
    volume = Volume(np.random.default_rng(1).normal(0, 9, (1, 64, 64)), (1, 1, 1))
    inside = np.zeros((64, 64), bool)
    inside[20:30, 20:40] = True
    regions = [
        Disc((32, 32), 9), Ellipse((32, 32), (5, 9), 30.0), Box((32, 32), (8, 12), 20.0),
        Polygon(((10, 10), (10, 30), (30, 20))), Segment((5, 5), (50, 40), 4.0),
        Mask(inside, (1, 1, 1)), Ellipsoid((32, 32), (9, 9), 9, z_mm=0.0),
        Path(((5, 5), (5, 40), (50, 50)), 4.0),
    ]  # fmt: skip
    page = page_of(tmp_path, run_measurement("region_statistics", volume, regions))
    drawings = re.findall(r"<svg.*?</svg>", page, flags=re.DOTALL)
    # curves are drawn too, but only a slice with its region carries the colour of regions
    assert sum("#b3261e" in drawing for drawing in drawings) == len(regions)


def test_a_label_map_is_drawn_and_its_labels_are_a_table(tmp_path):
    volume = Volume(np.random.default_rng(1).normal(0, 9, (3, 64, 64)), (1, 1, 1))
    labels = np.zeros((3, 64, 64), np.uint8)
    labels[2, 20:30, 20:40], labels[2, 40:50, 5:15] = 3, 8
    map_ = Labels(labels, (1, 1, 1), names=((8, "plug"),))
    page = page_of(tmp_path, run_measurement("label_statistics", volume, [map_]))
    assert "#b3261e" in page
    assert "Slice at z = 2.00 mm" in page
    assert "label 3" in page
    assert "plug" in page


def test_a_refusal_is_shown_with_its_remedy(tmp_path):
    volume = Volume(np.zeros((1, 64, 64)), (1, 1, 1))
    page = page_of(tmp_path, run_measurement("region_statistics", volume, [Disc((900, 9), 3)]))
    assert "Not measured:" in page
    assert "move it onto the image" in page


def test_simulated_data_are_marked_in_large_letters(tmp_path):
    example = EXAMPLES["region_statistics"]()
    simulated = replace(
        example.volume, cautions=(Caution("simulated", "The series was simulated."),)
    )
    for volume, marked in ((example.volume, False), (simulated, True)):
        page = page_of(tmp_path, run_measurement("region_statistics", volume, example.regions))
        assert ("SIMULATED DATA" in page) is marked


def test_the_same_record_gives_the_same_page(tmp_path):
    example = EXAMPLES["region_statistics"]()
    records = run_measurement("region_statistics", example.volume, example.regions)
    first = page_of(tmp_path, records)
    assert page_of(tmp_path, records) == first
    assert not re.search(r"\d{4}-\d\d-\d\dT", first.split("<svg")[1].split("</svg>")[0])
