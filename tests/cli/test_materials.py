"""`ct-measure materials`: the list, a copy to edit, and a list of one's own checked."""

from __future__ import annotations

import json

import pytest

from ct_measure_plugin.cli import BAD_INPUT, DONE, main
from ct_measure_plugin.measurements.materials import SHIPPED, load_materials


def test_the_list_names_sources_and_expected_numbers(capsys):
    assert main(["materials", "--energy", "70", "--json"]) == DONE
    found = json.loads(capsys.readouterr().out)
    lines = {line["name"]: line for line in found["materials"]}
    # 126.1 HU: from the attenuation table at 70 keV (tests/physics/test_attenuation.py)
    assert lines["PMMA"]["expected_hu"] == pytest.approx(126.1, abs=0.1)
    assert all(line["source"] for line in lines.values())
    assert main(["materials"]) == DONE
    assert "polystyrene" in capsys.readouterr().out


def test_a_copy_can_be_edited_and_is_never_overwritten(capsys, tmp_path):
    own = tmp_path / "own.yaml"
    assert main(["materials", "--copy", str(own)]) == DONE
    assert load_materials(own) == load_materials(SHIPPED)
    text = own.read_text(encoding="utf-8").replace("density_g_cm3: 1.19\n", "density_g_cm3: 1.18\n")
    own.write_text(text, encoding="utf-8")
    assert main(["materials", str(own), "--json"]) == DONE
    found = json.loads(capsys.readouterr().out)
    [line] = [line for line in found["materials"] if line["name"] == "PMMA"]
    assert line["density_g_cm3"] == 1.18
    assert main(["materials", "--copy", str(own)]) == BAD_INPUT
    assert "does not exist yet" in capsys.readouterr().err


def test_faults_of_a_list_are_one_message(capsys, tmp_path):
    own = tmp_path / "own.yaml"
    own.write_text("materials:\n  - {name: lead, formula: Pb}\n", encoding="utf-8")
    assert main(["materials", str(own)]) == BAD_INPUT
    assert "materials[0].density_g_cm3: Field required" in capsys.readouterr().err
