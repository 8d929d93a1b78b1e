"""Layouts from files and from drawn regions, and rods found by them on a volume."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from rod_images import NAMES, PLACES, RADIUS, RING, ring_of_rods

import ct_measure_plugin as ctm
from ct_measure_plugin.errors import ArgumentError, MaterialsError, UnknownNameError
from ct_measure_plugin.measurements.materials import shipped_materials
from ct_measure_plugin.measurements.rod_layouts import (
    RodLayout,
    find_rods,
    layout_from,
    layout_of,
    load_layout,
    save_layout,
)
from ct_measure_plugin.physics.regions import Box, Disc, Ellipse
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.virtual_scanner.bench_phantom import material_rods

WHOLE = tuple(replace(region, radius_mm=RADIUS) for region in RING)


@pytest.fixture(scope="module")
def layout() -> RodLayout:
    """As drawn on the very image, then turned by 90°."""
    drawn = layout_of(WHOLE, title="Ring (invented)")
    turned = [
        rod.model_copy(update={"center_mm": (rod.center_mm[1], -rod.center_mm[0])})
        for rod in drawn.rods
    ]
    return drawn.model_copy(update={"rods": tuple(turned)})


@pytest.fixture(scope="module")
def volume():
    return ring_of_rods(noise=5.0, seed=2)


def test_a_layout_goes_through_a_file(tmp_path, layout):
    assert load_layout(save_layout(layout, tmp_path / "ring.yaml")) == layout


def test_rods_are_found_and_named(volume, layout):
    found = find_rods(volume, layout, slices=2)
    assert found.found.rotation.value == pytest.approx(90, abs=0.3)
    for region, name, place in zip(found.regions, NAMES, PLACES, strict=True):
        assert region.name == name
        assert np.hypot(*np.subtract(region.center_mm, place)) < 0.3
        assert region.radius_mm == pytest.approx(0.7 * RADIUS)
        assert region.z_mm == (0.0, 2.0)


def test_places_are_in_the_image_frame(volume, layout):
    moved = replace(volume, origin_mm=(10.0, -100.0, 50.0), slice_positions_mm=None)
    here, there = find_rods(volume, layout, z_mm=0.0), find_rods(moved, layout, z_mm=10.0)
    for a, b in zip(here.regions, there.regions, strict=True):
        np.testing.assert_allclose(np.subtract(b.center_mm, a.center_mm), (-100.0, 50.0))
        assert b.z_mm == 10.0


def test_the_line_finds_its_rods_by_itself(volume, layout, tmp_path):
    file = save_layout(layout, tmp_path / "ring.yaml")
    found = ctm.measure("ct_number_line", volume, layout=str(file), layout_slices=2)
    by_hand = ctm.measure("ct_number_line", volume, RING)
    assert found.effective_energy.value == pytest.approx(
        by_hand.effective_energy.value, abs=by_hand.effective_energy.uncertainty
    )
    assert found.layout_rotation.value == pytest.approx(90, abs=0.3)
    assert [rod.material for rod in found.rods] == list(NAMES)
    assert [place.seen for place in found.places].count("seen") >= 7
    measurement = ctm.measurements.find("ct_number_line")
    settings = measurement.settings_type(layout=str(file), layout_slices=2)
    assert [mark.name for mark in measurement.marks(volume, (), settings, found)] == list(NAMES)
    assert measurement.marks(volume, RING, measurement.settings_type(), by_hand) == RING


def test_refusals_of_the_layout_are_the_measurements(volume, layout):
    mirrored = layout.model_copy(
        update={
            "rods": tuple(
                rod.model_copy(update={"center_mm": (rod.center_mm[0], -rod.center_mm[1])})
                for rod in layout.rods
            )
        }
    )
    found = ctm.measure("ct_number_line", volume, layout=mirrored)
    assert isinstance(found, NotMeasured)
    assert "mirror image" in found.reason
    nothing = ctm.measure("ct_number_line", volume)
    assert nothing.reason == "there are no rods"
    with pytest.raises(ArgumentError, match="'layout' must be left out where regions are given"):
        ctm.measure("ct_number_line", volume, RING, layout=layout)


def test_a_slice_with_holes_in_its_data_is_refused(volume, layout):
    values = volume.hu.astype(float)
    values[:, 3, 3] = np.nan
    found = find_rods(replace(volume, hu=values), layout)
    assert isinstance(found, NotMeasured)
    assert "must be finite" in found.reason


@pytest.mark.parametrize(
    ("change", "where", "what"),
    [
        ({"rods": []}, "layout.rods", "at least 3 items"),
        ({"tolerance_mm": 0}, "layout.tolerance_mm", "greater than 0"),
        ({"scale": 1}, "layout.scale", "not permitted"),
    ],
)
def test_a_wrong_layout_is_told_with_its_place(layout, change, where, what):
    with pytest.raises(MaterialsError) as raised:
        layout_from({**layout.model_dump(mode="json"), **change})
    [(place, words)] = raised.value.problems.items()
    assert place == where
    assert what in words


def test_rods_that_overlap_are_told(layout):
    given = layout.model_dump(mode="json")
    given["rods"][1]["center_mm"] = given["rods"][0]["center_mm"]
    with pytest.raises(MaterialsError, match="must not overlap: air and LDPE"):
        layout_from(given)


def test_materials_of_a_layout_must_be_listed(volume, layout):
    rods = (layout.rods[0].model_copy(update={"material": "gold"}), *layout.rods[1:])
    with pytest.raises(UnknownNameError, match="no material is called 'gold'"):
        find_rods(volume, layout.model_copy(update={"rods": rods}))


def test_only_round_regions_make_a_layout():
    with pytest.raises(ArgumentError, match="must be round, got 'box'"):
        layout_of([*WHOLE[:3], Box((0.0, 0.0), (5.0, 5.0), name="PMMA")])
    with pytest.raises(ArgumentError, match="must be round, got 'ellipse'"):
        layout_of([*WHOLE[:3], Ellipse((0.0, 0.0), (5.0, 2.0), name="PMMA")])
    nearly = layout_of([*WHOLE[:3], Ellipse((9.0, 90.0), (4.1, 3.9), name="acrylic")])
    assert nearly.rods[3].diameter_mm == pytest.approx(8.0)
    assert nearly.rods[3].material == "PMMA"


@pytest.mark.parametrize(("name", "value"), [("share", 1.0), ("slices", 0)])
def test_misuse_is_named(volume, layout, name, value):
    with pytest.raises(ArgumentError, match=f"'{name}' must"):
        find_rods(volume, layout, **{name: value})


def test_a_drawn_disc_may_carry_any_case():
    drawn = [Disc((10.0 * k, k * k), 3.0, name=n) for k, n in enumerate(("pmma", "PTFE 2", "PE"))]
    assert [rod.material for rod in layout_of(drawn).rods] == ["PMMA", "PTFE", "LDPE"]


SAMPLES = Path(__file__).parents[2] / "sample_volumes"


def test_the_samples_layout_is_that_of_their_phantom():
    """One fact in two files: the phantom's own list of rods."""
    given = load_layout(SAMPLES / "spindle_stack_rods.yaml")
    found = [(rod.material, rod.center_mm, rod.diameter_mm) for rod in given.rods]
    assert found == [(i.material.name, i.centre_mm, i.size_mm) for i in material_rods()]


@pytest.mark.parametrize("series", ["standard", "low-dose"])
def test_the_samples_rods_are_found_and_tell_their_energy(series):
    """Scanned at 70 keV. Densities are exact there, so the readings alone decide."""
    volume = ctm.read_series(SAMPLES / series)
    exact = tuple(
        entry.model_copy(update={"density_uncertainty_g_cm3": 0.0}) for entry in shipped_materials()
    )
    found = ctm.measure(
        "ct_number_line",
        volume,
        layout=str(SAMPLES / "spindle_stack_rods.yaml"),
        layout_z_mm=31.25,
        layout_slices=3,
        materials=exact,
        further_hu=0.0,
    )
    assert found.layout_rotation.value == pytest.approx(0.0, abs=0.1)
    assert found.effective_energy.value == pytest.approx(70.0, abs=0.5)
    assert abs(found.effective_energy.value - 70.0) < 3 * found.effective_energy.uncertainty
