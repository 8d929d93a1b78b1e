"""The CT-number line on images: names, lists of one's own, rods that cannot be read, refusals."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from rod_images import NAMES, RING, ring_of_rods

import ct_measure_plugin as ctm
from ct_measure_plugin.errors import ArgumentError, UnknownNameError
from ct_measure_plugin.measurements.materials import SHIPPED, save_materials, shipped_materials
from ct_measure_plugin.physics.attenuation import MATERIALS
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.volume import Acquisition, Volume
from ct_measure_plugin.virtual_scanner import tube_spectrum
from ct_measure_plugin.virtual_scanner.hardening import WaterCalibration

EXACT = tuple(
    entry.model_copy(update={"density_uncertainty_g_cm3": 0.0}) for entry in shipped_materials()
)


def line(volume, regions=RING, **settings):
    return ctm.measure("ct_number_line", volume, regions, **settings)


def codes(found):
    return {caution.code for caution in found.cautions}


@pytest.mark.parametrize("energy", [45.0, 60.0, 70.0, 85.0, 100.0])
def test_the_energy_is_read_from_an_image(energy):
    """Noise of 5 HU in 113 pixels is 0.5 HU a rod: 0.15 keV at 70 keV, growing as energy cubed."""
    found = line(ring_of_rods(energy=energy, noise=5.0, seed=1), materials=EXACT, further_hu=0.0)
    assert found.effective_energy.value == pytest.approx(energy, abs=0.5 * (energy / 70) ** 3)
    assert abs(found.effective_energy.value - energy) < 3 * found.effective_energy.uncertainty
    assert found.scale_factor.value == pytest.approx(1.0, abs=4 * found.scale_factor.uncertainty)
    assert [rod.name for rod in found.rods] == list(NAMES)


def test_regions_may_be_called_anything_if_the_materials_are_given():
    volume = ring_of_rods(noise=5.0)
    bare = tuple(replace(region, name=f"Region {k}") for k, region in enumerate(RING))
    found = line(volume, bare, rods=NAMES)
    assert found.effective_energy == line(volume).effective_energy
    assert [rod.name for rod in found.rods][:2] == ["Region 0", "Region 1"]
    assert [rod.material for rod in found.rods] == list(NAMES)


def test_names_that_mean_nothing_are_refused():
    volume = ring_of_rods()
    with pytest.raises(UnknownNameError, match="no material is called 'Region 3'; there are: air"):
        line(volume, [*RING[:7], replace(RING[7], name="Region 3")])
    with pytest.raises(ArgumentError, match="'rods' must name 8 regions, got 2"):
        line(volume, rods=("air", "PMMA"))


def test_a_list_of_ones_own_counts_and_stays_in_the_settings(tmp_path):
    """PMMA is really 1.17 g/cm³: 18.9 HU less. With the right density nothing is amiss."""
    volume = ring_of_rods(
        noise=5.0, hu={"PMMA": float(replace(MATERIALS["PMMA"], density_g_cm3=1.17).hu(70.0))}
    )
    own = [
        entry.model_copy(
            update={
                "density_uncertainty_g_cm3": 0.001,
                "density_g_cm3": 1.17 if entry.name == "PMMA" else entry.density_g_cm3,
            }
        )
        for entry in shipped_materials()
    ]
    file = save_materials(own, tmp_path / "own.yaml")
    found = line(volume, materials=str(file))
    assert found.rods[3].density.value == 1.17
    assert "rod-reads-as-another" not in codes(found)
    wrong = [e.model_copy(update={"density_uncertainty_g_cm3": 0.001}) for e in shipped_materials()]
    assert "rod-reads-as-another" in codes(line(volume, materials=tuple(wrong)))
    # a record repeats itself without the file
    kind = ctm.measurements.find("ct_number_line").settings_type
    settings = kind(materials=str(file))
    file.unlink()
    assert kind.model_validate_json(settings.model_dump_json()) == settings
    assert settings.materials == tuple(own)


def test_a_list_that_is_wrong_says_where(tmp_path):
    file = tmp_path / "own.yaml"
    file.write_text(SHIPPED.read_text(encoding="utf-8").replace("1.19", "-1.19"), encoding="utf-8")
    with pytest.raises(ArgumentError, match=r"materials\[8\]\.density_g_cm3: Input should be"):
        line(ring_of_rods(), materials=str(file))


def test_a_mixed_up_rod_is_named_as_people_say_it():
    volume = ring_of_rods(noise=5.0, hu={"PMMA": float(MATERIALS["polystyrene"].hu(70.0))})
    found = line(volume)
    [text] = [c.text for c in found.cautions if c.code == "rod-reads-as-another"]
    assert text.startswith("Rod 4 reads as 1.06 g/cm³ polystyrene, entered as PMMA")


def test_a_rod_that_cannot_be_read_is_left_out_and_said():
    volume = ring_of_rods(noise=5.0)
    found = line(volume, [*RING[:7], replace(RING[7], center_mm=(500.0, 500.0))])
    assert len(found.rods) == 7
    [text] = [c.text for c in found.cautions if c.code == "rod-left-out"]
    assert text == "Rod 8 (nylon-6) was left out: the region lies outside the volume."


def test_air_at_the_end_of_the_stored_range_is_left_out():
    """Half of the air rod's noise is cut off at -1000: its mean would be too high."""
    volume = ring_of_rods(noise=10.0)
    clipped = Volume(
        np.maximum(volume.hu, -1000), volume.spacing_mm, representable_hu=(-1000.0, 3095.0)
    )
    found = line(clipped, materials=EXACT)
    assert [rod.material for rod in found.rods] == list(NAMES[1:])
    assert "stands at the end of the stored range" in found.cautions[0].text


def test_a_region_over_a_border_is_said():
    found = line(ring_of_rods(noise=5.0), [*RING[:5], replace(RING[5], radius_mm=4.5), *RING[6:]])
    [text] = [c.text for c in found.cautions if c.code == "rod-uneven"]
    assert text.startswith("Rod 6 (PTFE) reads ")
    assert text.endswith(" less near its border than in its middle.")


def test_values_that_are_not_hu_are_refused():
    found = line(replace(ring_of_rods(), unit="cm⁻¹"))
    assert isinstance(found, NotMeasured)
    assert "not HU" in found.reason


def test_too_few_rods_are_refused_with_what_would_help():
    found = line(ring_of_rods(noise=5.0), RING[:3])
    assert isinstance(found, NotMeasured)
    assert found.reason == "3 different materials were given; at least 4 are needed"
    assert found.remedy.startswith("add a rod of ")


def test_water_of_a_temperature_is_lighter():
    """20 °C: 0.99821 g/cm³, 1.79 HU below 0."""
    names = ("water", *NAMES[1:])
    volume = ring_of_rods(names=names, hu={"water": -1.79}, whole=False)
    regions = [replace(r, name=n) for r, n in zip(RING, names, strict=True)]
    cold = line(volume, regions, materials=EXACT, water_temperature_c=20.0)
    plain = line(volume, regions, materials=EXACT)
    assert abs(cold.rods[0].residual.value) < 0.02
    assert plain.rods[0].density_read.value == pytest.approx(0.99821, abs=1e-4)
    assert cold.rods[0].density.value == pytest.approx(0.99821, abs=1e-5)


def test_a_scale_on_water_of_20_degrees_is_right_on_its_own_terms():
    exact = {
        name: 1000 * (float(MATERIALS[name].mu(70.0)) / (0.9982 * 0.192852) - 1) for name in NAMES
    }
    volume = ring_of_rods(hu=exact, whole=False)
    own = line(volume, materials=EXACT, scale_water_g_cm3=0.9982)
    assert own.scale_factor.value == pytest.approx(1.0, abs=2e-4)
    assert line(volume, materials=EXACT).scale_factor.value == pytest.approx(1 / 0.9982, abs=2e-4)


def test_further_uncertainty_makes_the_energy_less_certain():
    volume = ring_of_rods(noise=2.0)
    some, more = (line(volume, materials=EXACT, further_hu=u).effective_energy for u in (1.0, 4.0))
    assert more.uncertainty > 2 * some.uncertainty


def in_air(volume, kvp=None):
    """The rods in a cylinder of water of 25 mm radius, air around it."""
    y, x = (0.5 * c for c in np.mgrid[: volume.shape[1], : volume.shape[2]])
    middle = 0.25 * (volume.shape[1] - 1)
    outside = np.hypot(y - middle, x - middle) > 25
    facts = (Acquisition(kvp=kvp),) * volume.shape[0]
    return replace(volume, hu=np.where(outside, -1000, volume.hu), acquisition=facts)


def test_the_beams_quality_predicts_an_energy_beside_the_rods():
    """The virtual scanner's beam of 120 kV behind 7 mm of aluminium and 42 mm of water, read by
    thin rods; 0.85 x 50 mm is the mean path through the slice."""
    beam = WaterCalibration(tube_spectrum(120.0, aluminium_mm=7.0), path_mm=42.4)
    read = {name: beam.thin_insert_hu(MATERIALS[name], 42.4) for name in NAMES}
    volume = in_air(ring_of_rods(hu=read, whole=False), kvp=120.0)
    found = line(volume, materials=EXACT, filtration_mm_al=7.0)
    assert found.beam_energy.value == pytest.approx(found.effective_energy.value, abs=0.5)
    assert found.beam_water_energy.value == pytest.approx(beam.effective_kev, abs=0.5)
    assert "beam-disagrees" not in codes(found)
    told = line(replace(volume, acquisition=()), materials=EXACT, kvp=120.0, filtration_mm_al=7.0)
    assert told.beam_energy == found.beam_energy
    other = line(volume, materials=EXACT, kvp=80.0, filtration_mm_al=7.0)
    assert "beam-disagrees" in codes(other)


def test_a_path_that_is_entered_counts():
    volume = in_air(ring_of_rods(noise=5.0), kvp=120.0)
    thin, thick = (
        line(volume, hvl_mm_al=7.0, path_mm=path).beam_energy.value for path in (50.0, 300.0)
    )
    assert thick > thin + 5.0


def test_a_beam_that_cannot_be_is_said_and_the_line_stands():
    found = line(in_air(ring_of_rods(noise=5.0), kvp=80.0), hvl_mm_al=12.0)
    assert found.beam_energy is None
    assert "beam-unknown" in codes(found)


def test_without_a_tube_voltage_the_beam_cannot_be_asked():
    with pytest.raises(ArgumentError, match="'kvp' must be given, since the header does not"):
        line(ring_of_rods(noise=5.0), hvl_mm_al=7.0)


@pytest.mark.long
def test_intervals_hold_the_energy_of_whole_images():
    """400 images, readings and their doubts from the pixels: a share of 95 % is fixed to 1.1 %."""
    inside, pulls = [], []
    for seed in range(400):
        volume = ring_of_rods(noise=12.0, seed=1000 + seed)
        found = line(volume, materials=EXACT, further_hu=0.0)
        inside.append(found.energy_low.value < 70.0 < found.energy_high.value)
        pulls.append((found.effective_energy.value - 70.0) / found.effective_energy.uncertainty)
    assert 0.93 < np.mean(inside) < 0.97
    assert np.std(pulls) == pytest.approx(1.0, abs=0.1)  # three sigma of an SD from 400
