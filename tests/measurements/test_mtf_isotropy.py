"""Isotropy of images whose oblong blur has a closed form, and of the sample volume's rods."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from scipy.special import ndtr
from truth_images import GAUSS, disc_profile

import ct_measure_plugin as ctm
from ct_measure_plugin.measurements import find
from ct_measure_plugin.physics.regions import Box, Disc
from ct_measure_plugin.virtual_scanner import bench_phantom as bench

#: f50 of a Gaussian times its SD; SDs of the blur along y, as GAUSS has it, and along x, mm.
F50_SIGMA = math.sqrt(math.log(2) / 2) / math.pi
ALONG_Y, ALONG_X = 0.6, 0.7

SAMPLE = Path(__file__).parents[2] / "sample_volumes/standard"


def volume_of(image, noise=0.0, seed=5):
    return ctm.Volume(
        image + np.random.default_rng(seed).normal(0, noise, image.shape), (2.0, 0.5, 0.5)
    )


def tiles(sigma_at, angles, side=64):
    """Tiles with one straight edge each; `sigma_at` gives the SD by direction and place.

    A Gaussian blur with covariance S makes a straight edge of normal n one of SD (n·S·n)^(1/2).
    """
    n = math.ceil(math.sqrt(len(angles)))
    image, regions = np.zeros((n * side, n * side)), []
    middle = (n * side - 1) / 2 * 0.5
    for k, angle in enumerate(angles):
        row, column = divmod(k, n)
        y, x = (np.mgrid[:side, :side] - (side - 1) / 2) * 0.5
        turn = math.radians(angle)
        center = tuple((place * side + (side - 1) / 2) * 0.5 for place in (row, column))
        sigma = sigma_at(turn, center[0] - middle, center[1] - middle)
        # counter-clockwise on the screen, where y points down
        d = math.cos(turn) * x - math.sin(turn) * y
        tile = 100.0 * ndtr(d / sigma)
        image[row * side : (row + 1) * side, column * side : (column + 1) * side] = tile
        regions.append(Box(center, (side * 0.5 - 1.0, side * 0.5 - 1.0)))
    return image, regions


def oblong(turn, _y=0.0, _x=0.0):
    return math.hypot(ALONG_X * math.cos(turn), ALONG_Y * math.sin(turn))


def oblong_rod(image, center, radius, contrast):
    """Add a disc blurred by GAUSS and once more along x, by Gauss-Hermite quadrature."""
    nodes, weights = np.polynomial.hermite_e.hermegauss(24)
    more = math.sqrt(ALONG_X**2 - ALONG_Y**2)
    y, x = np.mgrid[: image.shape[0], : image.shape[1]] * 0.5
    shifted = x - center[1] - more * nodes[:, None, None]
    discs = disc_profile(GAUSS, radius, np.hypot(y - center[0], shifted))
    image += contrast * np.tensordot(weights / weights.sum(), discs, 1)


def test_edges_in_many_directions_tell_an_oblong_blur():
    image, regions = tiles(oblong, (4, 41, 86, 131, 176, 49, 139, 94, 3))
    found = ctm.measure("mtf_isotropy", volume_of(image), regions)
    # the edge method's own bias without noise, 0.5 %
    assert found.isotropy.value == pytest.approx(ALONG_Y / ALONG_X, rel=0.005)
    assert found.sharpest_direction.value == pytest.approx(90.0, abs=1.0)
    for x, y in found.by_angle.samples():
        assert y.value == pytest.approx(F50_SIGMA / oblong(math.radians(x)), rel=0.005)


def test_noise_is_carried_into_the_uncertainties():
    image, regions = tiles(oblong, (4, 41, 86, 131, 176, 49, 139, 94, 3))
    found = ctm.measure("mtf_isotropy", volume_of(image, noise=5.0), regions)
    assert found.isotropy.uncertainty > 0.002
    assert found.isotropy.value == pytest.approx(
        ALONG_Y / ALONG_X, abs=3 * found.isotropy.uncertainty
    )
    assert found.sharpest_direction.value == pytest.approx(
        90.0, abs=3 * found.sharpest_direction.uncertainty
    )


def test_a_turning_gantry_is_told_from_an_oblong_blur():
    """Across the radius r the blur's SD is that at the isocentre and 0.008 r, in quadrature."""

    def sigma(turn, y, x):
        outwards = math.atan2(-y, x)
        return math.hypot(0.6, 0.008 * math.hypot(y, x) * math.sin(turn - outwards))

    angles = (4, 49, 94, 139, 41, 86, 131, 176, 50, 5, 140, 95, 87, 130, 40, 3)
    image, regions = tiles(sigma, angles, side=56)
    found = ctm.measure("mtf_isotropy", volume_of(image), regions)
    assert found.center.value == pytest.approx(F50_SIGMA / 0.6, rel=0.005)
    assert found.far_radial.value == pytest.approx(F50_SIGMA / 0.6, rel=0.01)
    far = F50_SIGMA / math.hypot(0.6, 0.008 * found.largest_distance.value)
    assert found.far_azimuthal.value == pytest.approx(far, rel=0.01)
    assert found.isotropy.value == pytest.approx(1.0, abs=0.01)


@pytest.mark.parametrize("sectors", [4, 6])
def test_the_sectors_of_one_rod_tell_an_oblong_blur(sectors):
    image = np.zeros((110, 110))
    oblong_rod(image, (27.3, 27.2), 14.0, 300.0)
    found = ctm.measure("mtf_isotropy", volume_of(image), Disc((27.3, 27.2), 23.0), sectors=sectors)
    # a mean over a sector is corrected to first order
    assert found.isotropy.value == pytest.approx(ALONG_Y / ALONG_X, rel=0.01)
    assert found.sharpest_direction.value == pytest.approx(90.0, abs=1.0)
    assert len(found.places) == sectors


def test_a_wires_spot_tells_an_oblong_blur():
    y, x = np.mgrid[:49, :49] * 0.4
    image = 800.0 * np.exp(-0.5 * ((y - 9.7) / ALONG_Y) ** 2 - 0.5 * ((x - 9.5) / ALONG_X) ** 2)
    volume = ctm.Volume(image, (2.0, 0.4, 0.4))
    found = ctm.measure(
        "mtf_isotropy", volume, Box((9.7, 9.5), (18.0, 18.0)), boxes="wire", object_diameter_mm=0.0
    )
    assert found.isotropy.value == pytest.approx(ALONG_Y / ALONG_X, rel=0.005)
    assert [one.direction.value for one in found.places] == [0.0, 45.0, 90.0, 135.0]


def test_the_sample_volumes_rods_are_isotropic():
    volume = ctm.read_series(SAMPLE)
    strong = {"PTFE", "POM", "air"}
    regions = [
        Disc(insert.centre_mm, 11.0, z_mm=31.25, name=insert.material.name)
        for insert in bench.material_rods()
        if insert.material.name in strong
    ]
    found = ctm.measure("mtf_isotropy", volume, regions)
    assert len(found.places) == 12
    assert found.isotropy.value + 3 * found.isotropy.uncertainty > 1.0
    # parallel beam, no rotation within a view: none of f50 depends on the place
    assert found.f50.value == pytest.approx(0.4683, abs=3 * found.f50.uncertainty + 0.006)
    assert {one.name for one in found.places} == strong
    radii = {round(one.distance.value, 1) for one in found.places}
    truth = {round(math.hypot(*i.centre_mm), 1) for i in bench.material_rods()[:4]} - {21.4}
    assert radii == truth


def test_a_place_that_does_not_measure_is_left_out_and_told():
    image, regions = tiles(oblong, (4, 41, 0, 131))
    found = ctm.measure("mtf_isotropy", volume_of(image, 2.0), regions)
    assert len(found.places) == 3
    [caution] = [one for one in found.cautions if one.code == "place-left-out"]
    assert "region 3 was left out: the edge leans" in caution.text
    alone = ctm.measure("mtf_isotropy", volume_of(image, 2.0), regions[2:3])
    assert "at least 2" in alone.reason


def test_strokes_show_where_and_along_what():
    image, regions = tiles(oblong, (4, 41, 86, 131))
    volume = volume_of(image, 2.0)
    measurement = find("mtf_isotropy")
    settings = measurement.settings_type()
    answer = measurement.measure(volume, regions, settings)
    strokes = measurement.marks(volume, regions, settings, answer)
    assert len(strokes) == 4
    for stroke, angle, region in zip(strokes, (4, 41, 86, 131), regions, strict=True):
        middle = np.mean([stroke.start_mm, stroke.end_mm], axis=0)
        assert math.dist(middle, region.center_mm) < 0.2
        down, right = np.subtract(stroke.end_mm, stroke.start_mm)
        assert math.degrees(math.atan2(-down, right)) == pytest.approx(angle, abs=0.5)
