"""The CT-number line on readings made from the attenuation table, where the answer is known."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.attenuation import MATERIALS
from ct_measure_plugin.physics.ct_number_line import CtNumberLine, ct_number_line
from ct_measure_plugin.physics.results import NotMeasured

NAMES = ("air", "LDPE", "polystyrene", "PMMA", "POM", "PTFE", "polycarbonate", "nylon-6")
RODS = [MATERIALS[name] for name in NAMES]


def readings(energy_kev: float) -> np.ndarray:
    return np.array([float(rod.hu(energy_kev)) for rod in RODS])


def codes(found: CtNumberLine) -> set[str]:
    return {caution.code for caution in found.cautions}


@pytest.mark.parametrize("energy", [45.0, 60.0, 70.0, 85.0, 100.0])
def test_exact_readings_give_back_the_energy_and_the_scale(energy):
    """By definition slope · μ_w = 1000 and the intercept is -1000; the energy is refined to about
    0.01 keV, which moves the intercept by up to 0.03 HU at 45 keV."""
    found = ct_number_line(readings(energy), RODS, hu_uncertainty=1.0)
    assert found.effective_energy.value == pytest.approx(energy, abs=0.02)
    assert found.scale_energy.value == pytest.approx(energy, abs=0.02)
    assert found.scale_factor.value == pytest.approx(1.0, abs=1e-4)
    assert found.intercept.value == pytest.approx(-1000.0, abs=0.03)
    assert found.largest_residual.value < 0.05
    assert "one-energy-fails" not in codes(found)


@pytest.mark.parametrize("spread", [1.0, 3.0])
def test_stated_energies_cover_the_truth(spread):
    """300 repeats: a share of 95 % is fixed to 1.3 % (one sigma), so 92 to 98 % is two sigma."""
    rng = np.random.default_rng(int(spread))
    inside, inside_scale = [], []
    for _ in range(300):
        noisy = readings(70.0) + rng.normal(0, spread, len(RODS))
        found = ct_number_line(noisy, RODS, hu_uncertainty=spread)
        for energy, hits in ((found.effective_energy, inside), (found.scale_energy, inside_scale)):
            hits.append(abs(energy.value - 70.0) < 1.96 * energy.uncertainty)
    assert 0.92 < np.mean(inside) < 0.98
    assert 0.92 < np.mean(inside_scale) < 0.98


def test_a_mixed_up_rod_is_named():
    values = readings(70.0)
    values[3] = float(MATERIALS["polystyrene"].hu(70.0))
    found = ct_number_line(values, RODS, hu_uncertainty=1.0, density_uncertainty_g_cm3=0.002)
    assert "rod-reads-as-another" in codes(found)
    [text] = [c.text for c in found.cautions if c.code == "rod-reads-as-another"]
    assert text.startswith("Rod 4 reads as 1.06 g/cm³ polystyrene, entered as PMMA")
    assert [rod.reads_as for rod in found.rods].count("") == len(RODS) - 1


def test_a_scale_that_is_off_shows_in_the_scale():
    """Readings stretched by 2 % about -1000 and raised by 3 HU."""
    values = 1.02 * (readings(70.0) + 1000) - 1000 + 3
    found = ct_number_line(values, RODS, hu_uncertainty=1.0)
    assert found.effective_energy.value == pytest.approx(70.0, abs=0.05)
    assert found.scale_factor.value == pytest.approx(1.02, abs=1e-3)
    assert found.water_offset.value == pytest.approx(23.0, abs=0.1)


def test_rods_that_one_energy_cannot_describe_are_cautioned():
    """Half the plastics as at 60 keV, half as at 80: no single energy has these readings."""
    values = np.where(np.arange(len(RODS)) % 2, readings(60.0), readings(80.0))
    found = ct_number_line(values, RODS, hu_uncertainty=1.0)
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


def test_the_remedy_names_a_material_that_would_help():
    found = pick("air", "LDPE", "polypropylene", "polymethylpentene")
    assert isinstance(found, NotMeasured)
    named = found.remedy.removeprefix("add a rod of ")
    assert isinstance(
        pick("air", "LDPE", "polypropylene", "polymethylpentene", named), CtNumberLine
    )


def test_misuse_names_the_argument():
    with pytest.raises(ArgumentError, match="'materials' must name 8 rods, got 3"):
        ct_number_line(readings(70.0), RODS[:3], hu_uncertainty=1.0)
    with pytest.raises(ArgumentError, match="'hu_uncertainty' must be greater than 0"):
        ct_number_line(readings(70.0), RODS, hu_uncertainty=0.0)
