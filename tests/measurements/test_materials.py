"""The list of materials: what is shipped, and how a list of one's own is read and refused."""

from __future__ import annotations

import json

import pytest

from ct_measure_plugin.errors import ArgumentError, MaterialsError, UnknownNameError
from ct_measure_plugin.measurements.materials import (
    SHIPPED,
    find_material,
    load_materials,
    materials_from,
    save_materials,
    shipped_materials,
)
from ct_measure_plugin.physics.attenuation import MATERIALS

PMMA = {
    "name": "PMMA",
    "formula": "C5H8O2",
    "density_g_cm3": 1.19,
    "density_uncertainty_g_cm3": 0.01,
}


def test_the_shipped_list_is_the_library_of_physics():
    """One fact in two files, since physics reads none: they may never differ."""
    shipped = {entry.name: entry.material() for entry in shipped_materials()}
    assert list(shipped) == list(MATERIALS)
    for name, known in MATERIALS.items():
        assert shipped[name].composition == known.composition
        assert shipped[name].density_g_cm3 == known.density_g_cm3
        assert shipped[name].density_uncertainty_g_cm3 == known.density_uncertainty_g_cm3


def test_every_shipped_line_names_its_source_and_doubt():
    for entry in shipped_materials():
        assert entry.source, entry.name
        assert entry.density_uncertainty_g_cm3 > 0, entry.name


@pytest.mark.parametrize("suffix", [".yaml", ".json"])
def test_a_list_reads_back_the_same(tmp_path, suffix):
    file = tmp_path / f"own{suffix}"
    save_materials(shipped_materials(), tmp_path / "own.yaml")
    if suffix == ".json":
        lines = [e.model_dump(mode="json") for e in shipped_materials()]
        file.write_text(json.dumps({"materials": lines}), encoding="utf-8")
    assert load_materials(file) == shipped_materials()


@pytest.mark.parametrize(
    ("change", "where", "what"),
    [
        ({"density_g_cm3": -1}, "materials[0].density_g_cm3", "greater than 0"),
        ({"density_g_cm3": "heavy"}, "materials[0].density_g_cm3", "valid number"),
        ({"density_uncertainty_g_cm3": None}, "materials[0].density_uncertainty_g_cm3", "number"),
        ({"formula": "C5H8Q2x"}, "materials[0]", "must be a chemical formula, got 'C5H8Q2x'"),
        ({"formula": None}, "materials[0]", "either a formula or weight_fractions"),
        ({"weight_fractions": {"H": 1.0}}, "materials[0]", "either a formula or weight_fractions"),
        (
            {"formula": None, "weight_fractions": {"H": 0.5, "O": 0.2}},
            "materials[0]",
            "sum to 1 within 0.01",
        ),
        ({"colour": "clear"}, "materials[0].colour", "not permitted"),
        ({"name": ""}, "materials[0].name", "at least 1 character"),
    ],
)
def test_a_wrong_line_is_told_with_its_place(change, where, what):
    line = {key: value for key, value in {**PMMA, **change}.items() if value is not None}
    with pytest.raises(MaterialsError) as raised:
        materials_from({"materials": [line]})
    [(place, words)] = raised.value.problems.items()
    assert place == where
    assert what.lower() in words.lower() or "required" in words


def test_all_faults_are_told_at_once():
    lines = [{**PMMA, "density_g_cm3": 0}, PMMA, {**PMMA, "name": "pmma"}]
    with pytest.raises(MaterialsError) as raised:
        materials_from({"materials": lines})
    assert set(raised.value.problems) == {"materials[0].density_g_cm3", "materials[2].name"}
    assert "already that of materials[1]" in str(raised.value)


@pytest.mark.parametrize("given", [None, [], "text", {"materials": []}, {"rods": []}, 3])
def test_what_is_no_list_is_refused(given):
    with pytest.raises(MaterialsError, match=r"^materials: must be"):
        materials_from(given)


def test_a_file_that_cannot_be_read_is_named(tmp_path):
    with pytest.raises(MaterialsError, match=r"^none.yaml: cannot be read"):
        load_materials(tmp_path / "none.yaml")
    broken = tmp_path / "broken.yaml"
    broken.write_text("materials:\n  - name: [\n", encoding="utf-8")
    with pytest.raises(MaterialsError, match=r"^broken.yaml: is not valid YAML or JSON at line"):
        load_materials(broken)
    big = tmp_path / "big.yaml"
    big.write_bytes(b"#" * (4 * 2**20 + 1))
    with pytest.raises(MaterialsError, match=r"too large"):
        load_materials(big)


def test_yaml_that_would_run_code_is_refused(tmp_path):
    file = tmp_path / "hostile.yaml"
    file.write_text("materials: !!python/object/apply:os.getcwd []\n", encoding="utf-8")
    with pytest.raises(MaterialsError, match="not valid YAML"):
        load_materials(file)


@pytest.mark.parametrize(
    ("name", "found"),
    [
        ("PMMA", "PMMA"),
        ("pmma", "PMMA"),
        ("acrylic", "PMMA"),
        ("PMMA 2", "PMMA"),
        ("PMMA [1]", "PMMA"),
        ("nylon-6", "nylon-6"),
        ("nylon-6 (2)", "nylon-6"),
        ("Cortical Bone #3", "cortical bone"),
    ],
)
def test_names_people_write_are_understood(name, found):
    assert find_material(name, shipped_materials()).name == found


def test_an_unknown_name_lists_the_known_ones():
    with pytest.raises(UnknownNameError, match=r"no material is called 'gold'; there are: air, "):
        find_material("gold", shipped_materials())
    with pytest.raises(ArgumentError, match="must be named"):
        find_material(" ", shipped_materials())


def test_the_list_is_part_of_the_package():
    assert SHIPPED.exists()
    assert SHIPPED.parent.name == "measurements"


def test_a_line_can_be_a_key_and_goes_through_json():
    """Docks keep answers by their settings."""
    for entry in shipped_materials():
        assert hash(entry) == hash(type(entry).model_validate_json(entry.model_dump_json()))
