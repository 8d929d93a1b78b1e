"""`ct-measure convert`: the physics functions by words, and one sentence for bad input."""

from __future__ import annotations

import json

import pytest

from ct_measure_plugin.cli import BAD_INPUT, DONE, main


def converted(capsys, *words):
    assert main(["convert", *words, "--json"]) == DONE
    return json.loads(capsys.readouterr().out)


def test_hu_becomes_mu_and_mu_hu(capsys):
    """PMMA at 70 keV: 126.1 HU, 0.2172 cm⁻¹ (tests/physics/test_attenuation.py)."""
    mu = converted(capsys, "--hu", "126.1:2", "--energy", "70:1")["μ"]
    assert mu["value"] == pytest.approx(0.2172, abs=1e-4)
    assert 0.0012 < mu["uncertainty"] < 0.0014
    hu = converted(capsys, "--mu", "0.2172", "--energy", "70")["HU"]
    assert hu["value"] == pytest.approx(126.1, abs=0.3)


def test_a_material_at_another_energy(capsys):
    found = converted(capsys, "--material", "PTFE", "--energy", "60", "--to-energy", "80")
    assert found["HU there"]["value"] == pytest.approx(919.8, abs=0.1)
    found = converted(
        capsys, "--material", "PTFE", "--energy", "60", "--to-energy", "80", "--hu", "972.1:3"
    )
    assert found["HU here"]["uncertainty"] == 3.0


def test_water_at_its_temperature(capsys):
    found = converted(capsys, "--water-temperature", "20")
    assert found["HU"]["value"] == pytest.approx(-1.8, abs=0.05)
    assert main(["convert", "--water-temperature", "20"]) == DONE
    assert "0.99821" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--hu", "5"], "'energy' must be given"),
        (["--energy", "70"], "'hu' must be given"),
        (["--hu", "a", "--energy", "70"], "'hu' must be VALUE or VALUE:UNCERTAINTY, got 'a'"),
        (["--material", "PMMA", "--energy", "70"], "'to_energy' must be given"),
        (["--material", "gold", "--energy", "70", "--to-energy", "60"], "no material is called"),
        (["--hu", "5", "--energy", "7000"], "'energy_kev' must lie within 1 to 500 keV"),
        (["--water-temperature", "90"], "must lie within 0 to 40 °C"),
    ],
)
def test_bad_input_is_one_sentence(capsys, words, said):
    assert main(["convert", *words]) == BAD_INPUT
    err = capsys.readouterr().err
    assert said in err
    assert err.count("\n") == 1
