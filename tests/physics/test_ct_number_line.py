"""The CT-number line on readings made from the attenuation table, where the answer is known."""

from __future__ import annotations

import re

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS, Material, water_attenuation
from ct_measure_plugin.physics.ct_number_line import CtNumberLine, ct_number_line
from ct_measure_plugin.physics.results import NotMeasured

NAMES = ("air", "LDPE", "polystyrene", "PMMA", "POM", "PTFE", "polycarbonate", "nylon-6")
RODS = [MATERIALS[name] for name in NAMES]


def readings(energy_kev: float) -> np.ndarray:
    return np.array([float(rod.hu(energy_kev)) for rod in RODS])


def line(values, **more):
    more = {"hu_uncertainty": 1.0, "density_uncertainty_g_cm3": 0.0, **more}
    return ct_number_line(values, RODS, **more)


def codes(found: CtNumberLine) -> set[str]:
    return {caution.code for caution in found.cautions}


@pytest.mark.parametrize("energy", [45.0, 60.0, 70.0, 85.0, 100.0])
def test_exact_readings_give_back_the_energy_and_the_scale(energy):
    """By definition slope · μ_w = 1000 and the intercept is -1000; the energy is refined to about
    0.01 keV, which moves the intercept by up to 0.03 HU at 45 keV."""
    found = line(readings(energy))
    assert found.effective_energy.value == pytest.approx(energy, abs=0.02)
    assert found.scale_energy.value == pytest.approx(energy, abs=0.02)
    assert found.scale_factor.value == pytest.approx(1.0, abs=1e-4)
    assert found.correlation_energy.value == pytest.approx(energy, abs=0.02)
    assert found.intercept.value == pytest.approx(-1000.0, abs=0.03)
    assert found.water_equivalent_factor.value == pytest.approx(1.0, abs=1e-4)
    assert found.contrast_scale.value == pytest.approx(
        float(water_attenuation(energy)) / 1000, rel=5e-4
    )
    assert found.largest_residual.value < 0.05
    assert found.energy_low.value < energy < found.energy_high.value
    assert codes(found) <= {"one-rod-decides"}  # air's leverage is 0.69 to 0.71


def test_a_mixed_up_rod_is_named():
    values = readings(70.0)
    values[3] = float(MATERIALS["polystyrene"].hu(70.0))
    found = line(values, density_uncertainty_g_cm3=0.002)
    assert "rod-reads-as-another" in codes(found)
    [text] = [c.text for c in found.cautions if c.code == "rod-reads-as-another"]
    assert text.startswith("Rod 4 reads as 1.06 g/cm³ polystyrene, entered as PMMA")
    assert "Without it the energy is 70.0" in text
    assert [rod.reads_as for rod in found.rods].count("") == len(RODS) - 1
    # the others are all right, so the single energy did not fail
    assert "one-energy-fails" not in codes(found)


def test_a_rod_of_another_density_is_told_its_density():
    """POM of 1.50 g/cm³ reads like nothing on the list."""
    values = readings(70.0)
    values[4] = float(Material("dense", "CH2O", 1.50).hu(70.0))
    found = line(values, density_uncertainty_g_cm3=0.002)
    [text] = [c.text for c in found.cautions if c.code == "rod-reads-as-another"]
    assert text.startswith("Rod 5 reads as no listed material, entered as POM")
    rod = found.rods[4]
    assert abs(rod.density_read.value - 1.50) < 2 * rod.density_read.uncertainty
    assert rod.density.value == 1.42


def test_candidates_come_from_the_given_list():
    values = readings(70.0)
    values[3] = float(MATERIALS["polystyrene"].hu(70.0))
    own = Material("house plastic", "C8H8", 1.06)
    found = line(values, density_uncertainty_g_cm3=0.002, library=[own])
    assert found.rods[3].reads_as == "1.06 g/cm³ house plastic"


def test_a_scale_that_is_off_shows_in_the_scale():
    """Readings stretched by 2 % about -1000 and raised by 3 HU."""
    values = 1.02 * (readings(70.0) + 1000) - 1000 + 3
    found = line(values)
    assert found.effective_energy.value == pytest.approx(70.0, abs=0.05)
    assert found.scale_factor.value == pytest.approx(1.02, abs=1e-3)
    assert found.water_offset.value == pytest.approx(23.0, abs=0.1)
    # on that line 0 HU is read where 1.02 (x - 1) 1000 + 20 + 3 = 0
    assert found.water_equivalent_factor.value == pytest.approx(1 - 23 / 1020, abs=1e-4)
    assert codes(found) == {"scale-off"}


def test_a_scale_that_rests_on_warm_water_is_right_on_its_own_terms():
    """A scanner calibrated on water of 0.9982 g/cm³: everything else reads 1.8 HU/1000 HU more."""
    mu_water = 0.9982 * float(water_attenuation(70.0))
    values = [1000 * (float(rod.mu(70.0)) / mu_water - 1) for rod in RODS]
    plain, own = line(values), line(values, water=Material("water", "H2O", 0.9982))
    assert plain.scale_factor.value == pytest.approx(1 / 0.9982, abs=1e-4)
    assert own.scale_factor.value == pytest.approx(1.0, abs=1e-4)
    assert own.effective_energy.value == pytest.approx(70.0, abs=0.02)


def test_rods_that_one_energy_cannot_describe_are_cautioned():
    """Half the plastics as at 60 keV, half as at 80: no single energy has these readings."""
    values = np.where(np.arange(len(RODS)) % 2, readings(60.0), readings(80.0))
    found = line(values)
    assert "one-energy-fails" in codes(found)


def pick(*names: str, energy: float = 70.0, **more):
    rods = [MATERIALS[name] for name in names]
    return ct_number_line([float(r.hu(energy)) for r in rods], rods, hu_uncertainty=3.0, **more)


@pytest.mark.parametrize(
    ("names", "reason"),
    [
        (("air", "LDPE", "PTFE"), "3 different materials were given; at least 4 are needed"),
        (("LDPE", "LDPE", "LDPE", "PTFE", "air"), "3 different materials"),
        (("LDPE", "polystyrene", "PMMA", "nylon-6"), "the rods span 225 HU; at least 500"),
        (("air", "LDPE", "polypropylene", "polymethylpentene"), "do not fix an effective energy"),
    ],
)
def test_too_little_to_go_by_is_refused(names, reason):
    found = pick(*names)
    assert isinstance(found, NotMeasured)
    assert reason in found.reason
    assert found.remedy


@pytest.mark.parametrize(
    "names",
    [
        ("air", "LDPE", "polypropylene", "polymethylpentene"),
        ("LDPE", "polystyrene", "PMMA", "nylon-6"),
        ("air", "LDPE", "PMMA"),
    ],
)
def test_the_remedy_names_a_material_that_helps(names):
    refused = pick(*names)
    assert isinstance(refused, NotMeasured)
    named, promised = re.fullmatch(
        r"add a rod of (.+); the energy would then be known to about ([\d.]+) keV", refused.remedy
    ).groups()
    found = pick(*names, named)
    assert isinstance(found, CtNumberLine)
    assert found.effective_energy.uncertainty == pytest.approx(float(promised), rel=0.1)


def test_advice_prefers_what_does_not_harden_the_beam():
    """Aluminium and PVC would tell the energy better, and would not tell the rods' energy."""
    refused = pick("air", "LDPE", "polypropylene", "polymethylpentene")
    assert refused.remedy.startswith("add a rod of PTFE")


def test_one_material_alone_is_told_what_a_set_is():
    assert pick("PMMA").remedy == "measure more rods, for example air, LDPE, PMMA and PTFE"


def test_misuse_names_the_argument():
    with pytest.raises(ArgumentError, match="'materials' must name 8 rods, got 3"):
        ct_number_line(readings(70.0), RODS[:3], hu_uncertainty=1.0)
    with pytest.raises(ArgumentError, match="'hu_uncertainty' must be greater than 0"):
        ct_number_line(readings(70.0), RODS, hu_uncertainty=0.0)
