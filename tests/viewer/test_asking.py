"""From shapes to questions: kinds, slices, and answers that are not measured twice."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.measurements import RegionNeed, find, measure
from ct_measure_plugin.physics.coverage import slices_of
from ct_measure_plugin.physics.regions import Box, Disc, Ellipse, Segment
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.viewer import asking
from ct_measure_plugin.viewer.asking import (
    Extent,
    Memory,
    Question,
    fitted,
    question_of,
    regions_for,
)
from ct_measure_plugin.viewer.drawn import Drawn
from ct_measure_plugin.viewer.layers import layer_of
from ct_measure_plugin.viewer.session import Session
from ct_measure_plugin.viewer.shapes import new_regions_layer

DISC = Disc((0.0, 24.0), 6.0, z_mm=-15.0, name="a")  # slice 2 of conftest's volume


@pytest.fixture
def statistics():
    return find("region_statistics").settings_type()


def test_a_region_spreads_over_slices_and_stops_at_the_ends(volume):
    assert slices_of(Extent().over(DISC, volume), volume) == [2]
    assert slices_of(Extent(1).over(DISC, volume), volume) == [1, 2, 3]
    assert slices_of(Extent(9).over(DISC, volume), volume) == [0, 1, 2, 3, 4, 5]
    assert slices_of(Extent(None).over(DISC, volume), volume) == [0, 1, 2, 3, 4, 5]


@pytest.mark.parametrize("extent", [Extent(1), Extent(None)])
def test_a_region_that_states_its_slices_keeps_them(volume, extent):
    stated = Disc((0.0, 24.0), 6.0, z_mm=(-17.5, -15.0))
    assert extent.over(stated, volume) == stated


def test_an_ellipse_becomes_the_disc_of_its_area_where_discs_are_taken():
    drawn = Drawn(0, "a", Ellipse((1.0, 2.0), (4.0, 9.0), 30.0, z_mm=3.0, name="a"))
    found = fitted(drawn, RegionNeed(("disc",)))
    assert found.region == Disc((1.0, 2.0), 6.0, z_mm=3.0, name="a")
    assert fitted(drawn, RegionNeed(("disc", "ellipse"))) is drawn


def test_what_does_not_fit_says_what_would():
    drawn = Drawn(0, "a", Segment((0.0, 0.0), (1.0, 1.0)))
    found = fitted(drawn, RegionNeed(("box",)))
    assert found.region is None
    assert found.problem == "it is a segment, not a rectangle"
    found = fitted(drawn, RegionNeed(("disc", "ellipse", "box", "mask")))
    assert found.problem == "it is a segment, not a disc, an ellipse or a rectangle"


def test_shapes_that_do_not_fit_are_left_out_by_name(viewer_model, volume):
    data, attributes, _ = layer_of(volume, "CT")
    image = viewer_model.add_image(data, **attributes)
    layer = new_regions_layer(viewer_model, image)
    corners = np.array([[2, 5, 5], [2, 5, 25], [2, 25, 25], [2, 25, 5]])
    layer.add(corners, shape_type="rectangle")
    layer.add(corners, shape_type="ellipse")
    placement = Session.of(viewer_model).placement(image)
    regions, said = regions_for("edge_mtf", layer, placement, (-15.0, 0, 0), Extent())
    assert [type(one) for one in regions] == [Box]
    assert said.startswith("region 2: it is ")
    assert said.endswith(", not a rectangle.")


def test_too_few_regions_are_no_question(volume, statistics):
    answer = question_of("region_statistics", "CT", volume, (), statistics)
    assert isinstance(answer, NotMeasured)
    assert answer.reason == "there is no region yet"
    assert answer.remedy.startswith("draw a disc, an ellipse, a rectangle")


def test_answers_are_those_of_python_each_with_its_label(volume, statistics):
    other = Disc((5.0, 20.0), 3.0, z_mm=-15.0, name="b")
    question = Question("region_statistics", "CT 1", volume, (DISC, other), statistics)
    answers = Memory().answer((question,))
    assert [one.label for one in answers] == ["a", "b"]
    assert answers[0].result.mean == measure("region_statistics", volume, DISC).mean
    second = Question("region_statistics", "CT 2", volume, (DISC,), statistics)
    both = Memory().answer((question, second))
    assert [(one.label, one.layer) for one in both] == [
        ("CT 1: a", 0),
        ("CT 1: b", 0),
        ("CT 2", 1),
    ]


def test_only_what_changed_is_measured_again(volume, statistics, monkeypatch):
    asked = []
    real = asking._measured

    def counted(question, regions):
        asked.append(regions)
        return real(question, regions)

    monkeypatch.setattr(asking, "_measured", counted)
    memory = Memory()
    still = Disc((5.0, 20.0), 3.0, z_mm=-15.0)
    for x in (24.0, 25.0, 25.0):
        moving = Disc((0.0, x), 6.0, z_mm=-15.0)
        memory.answer((Question("region_statistics", "", volume, (still, moving), statistics),))
    assert len(asked) == 3
    memory.forget()
    memory.answer((Question("region_statistics", "", volume, (still,), statistics),))
    assert len(asked) == 4


def test_regions_taken_together_are_one_part(volume):
    settings = find("noise_power").settings_type(patch_px=8)
    question = Question("noise_power", "", volume, (DISC, DISC), settings)
    assert question.parts() == ((DISC, DISC),)
    [answer] = Memory().answer((question,))
    assert answer.marks
    assert all(isinstance(mark, Box) for mark in answer.marks)
