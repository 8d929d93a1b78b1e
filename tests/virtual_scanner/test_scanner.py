"""The scan of a series: progress, stopping, seeds, and what the Volume says."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from ct_measure_plugin.errors import ArgumentError, Cancelled
from ct_measure_plugin.physics.attenuation import material
from ct_measure_plugin.virtual_scanner import (
    WATER,
    Detector,
    Grid,
    Kernel,
    ParallelBeam,
    Part,
    Phantom,
    Recipe,
    SliceProfile,
    disc_rod,
    scanner,
    simulate,
    simulate_slice,
    tilted_wire,
)

RECIPE = Recipe(
    phantom=Phantom(
        (
            Part(disc_rod((0.0, 0.0), 20.0), WATER),
            Part(disc_rod((5.0, 5.0), 4.0, (0.0, 4.0)), material("PMMA"), WATER),
        ),
        "small",
    ),
    geometry=ParallelBeam(views=90, channels=101, pitch_mm=0.5),
    detector=Detector(quanta_per_mm2=1e5),
    grid=Grid(matrix=40, fov_mm=44.0, centre_mm=(1.0, -2.0)),
    profile=SliceProfile("rectangular", 2.0),
    positions_mm=(1.0, 3.0, 5.0),
    seed=4,
    title="SIMULATED small",
)


def test_a_volume_knows_its_place_and_that_it_was_simulated():
    volume = simulate(RECIPE)
    assert volume.shape == (3, 40, 40)
    assert volume.hu.dtype == np.int16
    assert volume.spacing_mm == pytest.approx((2.0, 1.1, 1.1))
    # pixel centres: half a field of view less half a pixel before the centre
    assert volume.origin_mm == pytest.approx((1.0, 1.0 - 21.45, -2.0 - 21.45))
    assert [c.code for c in volume.cautions] == ["simulated"]
    assert volume.acquisition[0].kernel == "HANN 1"
    assert volume.acquisition[0].slice_thickness_mm == 2.0
    assert volume.source.title == "SIMULATED small"


def test_rounding_to_whole_hu_is_all_a_volume_adds_to_its_slices():
    volume = simulate(RECIPE)
    for index in range(3):
        np.testing.assert_array_equal(
            volume.plane(index), np.rint(simulate_slice(RECIPE, index).hu)
        )


def test_the_same_recipe_gives_the_same_bits_and_another_seed_another_scan():
    first = simulate(RECIPE).hu
    np.testing.assert_array_equal(first, simulate(RECIPE, workers=1, memory={}).hu)
    repeat = simulate(replace(RECIPE, seed=5)).hu
    noise = (repeat.astype(float) - first)[:, 10:30, 10:30]
    assert noise.std() > 1.0
    # slices of one scan have noise of their own: 5 SD of some 100 independent areas
    assert abs(np.corrcoef(noise[0].ravel(), noise[1].ravel())[0, 1]) < 0.5


def test_another_kernel_sees_the_same_raw_data():
    """White noise through two kernels stays correlated; another seed does not."""
    plain = replace(RECIPE, phantom=Phantom(RECIPE.phantom.parts[:1]))
    quiet = replace(plain, detector=Detector())

    def noise(**change):
        return (
            simulate_slice(replace(plain, **change), 0).hu
            - simulate_slice(replace(quiet, **change), 0).hu
        )

    soft = noise(kernel=Kernel("hann", 0.8))
    same = np.corrcoef(noise().ravel(), soft.ravel())[0, 1]
    other = np.corrcoef(noise(seed=99).ravel(), soft.ravel())[0, 1]
    assert same > 0.9
    assert abs(other) < 0.2


def test_progress_counts_slices():
    seen = []
    simulate(RECIPE, progress=lambda done, total: seen.append((done, total)))
    assert seen == [(1, 3), (2, 3), (3, 3)]


def test_it_can_be_stopped_between_slices():
    seen = []
    with pytest.raises(Cancelled):
        simulate(
            RECIPE,
            progress=lambda done, _total: seen.append(done),
            cancel=lambda: len(seen) == 2,
        )
    assert seen == [1, 2]


def test_memory_spares_projections_that_are_the_same():
    """Two slices through the same rod share one, the third without it needs its own."""
    memory = {}
    simulate(RECIPE, memory=memory)
    assert len(memory) == 2
    simulate(replace(RECIPE, seed=9, kernel=Kernel("ramp", 0.7)), memory=memory)
    assert len(memory) == 2
    finer = replace(RECIPE, geometry=replace(RECIPE.geometry, views=91))
    simulate(finer, memory=memory)
    assert len(memory) == 4


def test_a_long_series_keeps_few_projections(monkeypatch):
    """A leaning wire looks new in every slice; what is held does not grow with the series."""
    sizes = []

    def counted(recipe, index, **given):
        sizes.append(len(given["memory"]))
        return simulate_slice(recipe, index, **given)

    monkeypatch.setattr(scanner, "simulate_slice", counted)
    wire = Part(tilted_wire((0.0, 0.0, 0.0), 1.0, tilt_deg=10.0), WATER)
    positions = tuple(float(z) for z in range(12))
    simulate(replace(RECIPE, phantom=Phantom((wire,)), positions_mm=positions))
    assert max(sizes) == scanner.KEPT


def test_a_starved_scan_still_makes_a_picture():
    """Starved rays are taken for one quantum: finite, and counted."""
    dim = replace(RECIPE, detector=Detector(quanta_per_mm2=3.0))
    found = simulate_slice(dim, 0)
    assert found.starved > 100
    assert np.all(np.isfinite(found.hu))


def test_a_digest_follows_everything_but_notes_and_last_bits():
    assert RECIPE.digest() != replace(RECIPE, seed=5).digest()
    assert RECIPE.digest() != replace(RECIPE, calibration_path_mm=201.0).digest()
    nearly = replace(RECIPE, calibration_path_mm=200.0 * (1 + 1e-15))
    assert nearly.calibration_path_mm != RECIPE.calibration_path_mm
    assert nearly.digest() == RECIPE.digest()
    noted = replace(material("PMMA"), note="another note")
    part = replace(RECIPE.phantom.parts[1], material=noted)
    phantom = replace(RECIPE.phantom, parts=(RECIPE.phantom.parts[0], part))
    assert replace(RECIPE, phantom=phantom).digest() == RECIPE.digest()


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"positions_mm": (1.0, 1.0)}, "'positions_mm' must increase"),
        ({"positions_mm": ()}, "'positions_mm' must increase"),
        ({"correction": "some"}, "'correction' must be 'water' or 'none'"),
        ({"seed": -1}, "'seed' must not be negative"),
        ({"calibration_path_mm": 0.0}, "'calibration_path_mm' must be greater than 0"),
        (
            {"geometry": ParallelBeam(views=9, channels=40, pitch_mm=0.5)},
            "'phantom' must lie within the 9.75 mm circle the detector sees",
        ),
    ],
)
def test_misuse_is_named(change, words):
    with pytest.raises(ArgumentError, match=words):
        replace(RECIPE, **change)
