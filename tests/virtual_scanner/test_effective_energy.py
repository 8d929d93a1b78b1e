"""Effective energy from rods that were simulated, reconstructed and measured as regions."""

from __future__ import annotations

from dataclasses import replace

import pytest

import ct_measure_plugin as ctm
from ct_measure_plugin.physics.attenuation import material
from ct_measure_plugin.physics.ct_number_line import ct_number_line
from ct_measure_plugin.virtual_scanner import (
    WATER,
    Detector,
    Grid,
    Kernel,
    ParallelBeam,
    Part,
    Phantom,
    Recipe,
    Truth,
    disc_rod,
    monoenergetic,
    simulate,
    tube_spectrum,
)
from ct_measure_plugin.virtual_scanner.bench_phantom import material_rods

#: Material -> centre (y, x) of a rod 11 mm thick; the bench phantom's places.
PLASTICS = {rod.material.name: rod.centre_mm for rod in material_rods()}
#: The same places, three of them with what a beam of many energies hardens in.
DENSE = {
    {"polystyrene": "aluminium", "PMMA": "rigid PVC", "nylon-6": "cortical bone"}.get(n, n): place
    for n, place in PLASTICS.items()
}


def _recipe(rods, **change):
    body = Part(disc_rod((0.0, 0.0), 58.0), WATER)
    inside = (Part(disc_rod(place, 5.5), material(name), WATER) for name, place in rods.items())
    recipe = Recipe(
        phantom=Phantom((body, *inside)),
        geometry=ParallelBeam(views=360, channels=240, pitch_mm=0.5),
        detector=Detector(quanta_per_mm2=4e7),
        kernel=Kernel("hann", 0.8),
        grid=Grid(matrix=200, fov_mm=110.0),
        calibration_path_mm=116.0,
        seed=5,
    )
    return replace(recipe, **change)


def _means(recipe, rods):
    volume = simulate(recipe)
    return [
        ctm.measure("region_statistics", volume, ctm.regions.Disc(place, 3.6, z_mm=0.0)).mean
        for place in rods.values()
    ]


def _line(recipe, rods, noise_of=None):
    """`noise_of`: a scan whose readings' uncertainties are taken instead of this one's."""
    found = _means(recipe, rods)
    noise = found if noise_of is None else _means(noise_of, rods)
    return ct_number_line(
        [mean.value for mean in found],
        [material(name) for name in rods],
        hu_uncertainty=[mean.uncertainty for mean in noise],
        density_uncertainty_g_cm3=0.0,  # the phantom's densities are exact
    )


@pytest.mark.parametrize("energy", [45.0, 55.0, 70.0, 85.0, 100.0])
def test_one_energy_is_found_again(energy):
    """Within 0.5 keV, and within 3 of its standard uncertainties.

    Nothing to caution but that the air rod, far from all others, holds the line's other end.
    """
    line = _line(_recipe(PLASTICS, spectrum=monoenergetic(energy)), PLASTICS)
    assert line, line
    off = abs(line.effective_energy.value - energy)
    assert off < 0.5
    assert off < 3.0 * line.effective_energy.uncertainty < 1.5
    assert line.scale_factor.value == pytest.approx(1.0, abs=4 * line.scale_factor.uncertainty)
    assert line.water_offset.value == pytest.approx(0.0, abs=4 * line.water_offset.uncertainty)
    assert {caution.code for caution in line.cautions} <= {"one-rod-decides"}


def test_a_beam_of_many_energies_through_dense_rods_is_cautioned():
    """Aluminium, PVC and bone harden the beam: they read lower than any one energy allows.

    Streaks between them count as noise where a region's own pixels tell its uncertainty, up to 20
    HU; here it is that of a beam of one energy, so that counting noise alone is allowed for.
    """
    recipe = _recipe(DENSE, spectrum=tube_spectrum(120.0))
    single = replace(recipe, spectrum=monoenergetic(Truth(recipe).effective_energy))
    line = _line(recipe, DENSE, noise_of=single)
    assert line, line
    assert "one-energy-fails" in {caution.code for caution in line.cautions}
    alone = _line(single, DENSE)
    assert "one-energy-fails" not in {caution.code for caution in alone.cautions}
