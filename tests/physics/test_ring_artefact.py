"""Rings that are known, in noise of filtered backprojection, and noise without any."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from noise_fields import SPECTRA, field
from scipy.stats import norm

import ct_measure_plugin as ctm
from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import ring_artefact
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.ring_layers import CORES, Deviations, Layer
from ct_measure_plugin.physics.ring_polar import Sight, to_polar
from ct_measure_plugin.virtual_scanner import samples
from ct_measure_plugin.virtual_scanner.truth import Truth

SPACING = (0.5, 0.5)
SIDE, CENTER = 176, (43.4, 44.1)
Y, X = np.mgrid[:SIDE, :SIDE] * 0.5
R = np.hypot(Y - CENTER[0], X - CENTER[1])
TURN = np.mod(np.arctan2(CENTER[0] - Y, X - CENTER[1]) / (2 * np.pi), 1)
INSIDE = R < 40


def backprojection(f: np.ndarray) -> np.ndarray:
    """Return the spectrum of filtered backprojection with a Hann window to 1 mm⁻¹."""
    return 100 * f * (0.5 * (1 + np.cos(np.pi * np.minimum(f, 1)))) ** 2


@cache
def _wave() -> tuple[np.ndarray, np.ndarray]:
    f = np.arange(1, 401) / 400
    t = np.linspace(-30, 30, 3001)
    window = 0.5 * (1 + np.cos(np.pi * f))
    wave = (np.sqrt(f) * window) @ np.cos(2 * np.pi * np.outer(f, t) - np.pi / 4)
    return t, wave / np.abs(wave).max()


def channel_ring(radius: float) -> np.ndarray:
    """Return what one channel's error becomes, its largest value 1: far from the centre the ramp
    times the window over √f, an eighth of a turn out of phase (stationary phase of the
    backprojection of a delta)."""
    t, wave = _wave()
    return np.interp(R - radius, t, wave)


def noise(rng, spectrum=backprojection, slices=1):
    return np.array(
        [field(rng, (224, 224), SPACING, spectrum)[:SIDE, :SIDE] for _ in range(slices)]
    )


def measured(image, **more):
    return ring_artefact(image, spacing_mm=SPACING, center_mm=CENTER, inside=INSIDE, **more)


# --- false alarms and detection ------------------------------------------------------------------


def alarms(spectrum, repeats: int) -> int:
    rng = np.random.default_rng(51)
    return sum(measured(noise(rng, spectrum)).rings_found.value > 0 for _ in range(repeats))


def detected(radius: float, slices: int, repeats: int) -> int:
    """Count the scans that show a ring of half the pixel SD over 60 % of the circle at its
    place, to 1.5 mm."""
    rng = np.random.default_rng(52)
    found = 0
    for _ in range(repeats):
        image = noise(rng, slices=slices)
        place = radius + rng.uniform(-0.5, 0.5)
        arc = np.mod(TURN - rng.uniform(), 1) < 0.6
        result = measured(image + 0.5 * image.std() * channel_ring(place) * arc)
        found += any(abs(ring.radius.value - place) <= 1.5 for ring in result.rings)
    return found


def most_detected(radius: float, slices: int, threshold: float) -> float:
    """Return how often an observer finds the same ring who knows its shape and arc, the noise's
    spectrum, and all but its radius: the matched filter, whose signal-to-noise ratio d' is
    d'² = 0.6 · 2πr · slices · 2 ∫ |W|²/S df on a circle that is long against the correlation of
    the noise. A threshold t against false alarms leaves Φ(d' − t) (signal detection theory; H. H.
    Barrett and K. J. Myers, Foundations of Image Science, 2004)."""
    f = (np.arange(2000) + 0.5) / 2000  # up to the pixels' Nyquist frequency
    shape = np.sqrt(f) * 0.5 * (1 + np.cos(np.pi * f))
    t = np.linspace(-2, 2, 801)
    top = np.abs(np.cos(2 * np.pi * np.outer(t, f) - np.pi / 4) @ shape * 2 / 2000).max()
    power = backprojection(f)
    pixel = np.sum(2 * np.pi * f * power) / 2000
    ratio = 2 * np.sum((shape / top) ** 2 / power) / 2000
    d = 0.5 * np.sqrt(pixel * ratio * 0.6 * 2 * np.pi * radius * slices)
    return float(norm.cdf(d - threshold))


def test_noise_is_called_a_ring_at_most_once_in_twenty():
    """More than 3 of 16 come once in 140 times at 5 %."""
    assert alarms(backprojection, 16) <= 3


def test_a_ring_of_half_the_sd_over_most_of_the_circle_is_found():
    """At 20 mm in two slices."""
    assert detected(20.0, slices=2, repeats=12) >= 11


@pytest.mark.long
@pytest.mark.parametrize("name", [*SPECTRA, "backprojection"])
def test_false_alarms_for_every_texture(name):
    """Of 200 at most 17: at 5 % more come once in 50 times."""
    assert alarms(SPECTRA.get(name, backprojection), 200) <= 17


@pytest.mark.long
@pytest.mark.parametrize(("radius", "slices"), [(10, 4), (18, 2)])
def test_detection_at_every_radius(radius, slices):
    assert detected(radius, slices, 60) >= 57  # 95 %


@pytest.mark.long
@pytest.mark.parametrize("radius", [15, 25, 33])
def test_detection_is_near_what_the_noise_allows(radius):
    """In a single slice; 80 scans fix a share to 5 %. The ring's place, arc, width and the
    noise's spectrum are unknown here and known to the bound, which is worth a fifth of d'."""
    bound = most_detected(radius, 1, threshold=4.6)
    assert bound - 0.30 < detected(radius, 1, 80) / 80 < bound + 0.05


# --- what is found -------------------------------------------------------------------------------


def test_a_ring_has_its_radius_arc_and_amplitude():
    image = noise(np.random.default_rng(53), slices=4)
    arc = np.mod(TURN - 0.25, 1) < 14 / 24
    found = measured(image + 8.0 * ((R >= 28.0) & (R < 29.5)) * arc)  # three radial steps
    ring = found.rings[0]
    assert ring.radius.value == pytest.approx(28.75, abs=0.5)
    assert ring.arc.value == pytest.approx(58, abs=10)
    assert ring.first_azimuth.value == pytest.approx(90, abs=20)
    assert abs(ring.amplitude.value - 8.0) < 3 * ring.amplitude.uncertainty
    assert ring.chance.value < 0.1
    assert {c.code for c in found.cautions} == {"rings-found"}
    assert found.worst_along_z.y == pytest.approx(8.0, abs=2.0)
    assert len(found.worst_along_z.x) == 4


def _over_a_pixel(truth: Truth, r: float) -> float:
    """Mean over 0.5 mm across a ring less that of 2 mm on either side."""
    core, *flanks = (
        truth.rings(np.linspace(r + low, r + low + width, 41)).mean()
        for low, width in ((-0.25, 0.5), (-2.25, 2.0), (0.25, 2.0))
    )
    return float(core - np.mean(flanks))


def test_the_amplitudes_of_a_simulated_scan_with_bad_channels():
    """Three channels of wrong gain; the rings' closed form (backprojection of a delta), seen
    through the same pixels and steps, is the answer. 90 steps of which neighbours share noise."""
    volume = ctm.read_series(samples.folder("rings"))
    truth = Truth(samples.sample("rings").recipe)
    y = volume.origin_mm[1] + 0.5 * np.arange(256)
    r = np.hypot(y[:, None], y[None, :])
    inside = r < 50
    center = (-float(volume.origin_mm[1]), -float(volume.origin_mm[2]))
    found = ring_artefact(volume.hu, spacing_mm=SPACING, center_mm=center, inside=inside)
    grid = np.linspace(0, 52, 2081)
    image = np.interp(r, grid, truth.rings(grid))
    polar = to_polar(image, Sight(inside, SPACING, center))
    plain = Deviations(Layer(polar, CORES[0]), polar.means[None])
    weight = plain.layer.weight.sum(axis=1)
    expected = plain.sums[0].sum(axis=1)[weight > 0] / weight[weight > 0]
    z = (found.amplitude.y - expected) / found.amplitude.y_uncertainty
    assert np.sqrt(np.mean(z**2)) == pytest.approx(1.0, abs=0.3)
    assert np.abs(z).max() < 4
    index = np.sqrt(np.mean(expected**2))
    assert abs(found.ring_index.value - index) < 3 * found.ring_index.uncertainty
    rings = sorted(found.rings, key=lambda ring: ring.radius.value)
    for channel, ring in zip((10.25, 22.25, 38.25), rings, strict=True):  # and no side lobe of them
        near = np.linspace(channel - 1, channel + 1, 401)
        level = np.array([_over_a_pixel(truth, r) for r in near])
        place = near[np.abs(level).argmax()]
        assert abs(ring.radius.value - place) < 2.5 * ring.radius.uncertainty
        assert abs(ring.amplitude.value - level[np.abs(level).argmax()]) < (
            2.5 * ring.amplitude.uncertainty
        )
    assert {ring.arc.value for ring in found.rings} == {100.0}


@pytest.mark.parametrize("strength", [4.0, 25.0])
@pytest.mark.parametrize("radii", [(20.0,), (12.0, 20.3, 31.0)])
def test_a_strong_ring_is_one_ring(radii, strength):
    """Up to 25 times the SD of the pixels, of either sign: its side lobes are none."""
    image = noise(np.random.default_rng(59))
    wave = sum((-1) ** k * channel_ring(r) for k, r in enumerate(radii))
    found = measured(image + strength * image.std() * wave)
    places = sorted(ring.radius.value for ring in found.rings)
    assert places == pytest.approx(radii, abs=0.4)
    assert min(ring.significance.value for ring in found.rings) > 10


def test_a_weak_ring_beside_a_strong_one_is_as_strong_as_alone():
    image = noise(np.random.default_rng(60))
    wave = image.std() * 1.5 * channel_ring(24.0)
    (alone,) = measured(image + wave).rings
    strong, weak = measured(image + wave + 5.0 * image.std() * channel_ring(30.0)).rings
    assert strong.radius.value == pytest.approx(30.0, abs=0.5)
    assert weak.radius.value == pytest.approx(24.0, abs=1.0)
    assert weak.significance.value == pytest.approx(alone.significance.value, rel=0.15)


def test_the_uncertainty_of_the_amplitude_is_its_scatter_without_rings():
    rng = np.random.default_rng(54)
    found = [measured(noise(rng)) for _ in range(8)]
    z = np.array([f.amplitude.y / f.amplitude.y_uncertainty for f in found])
    # 8 times about 120 half steps, a sixth of them independent: their spread to 6 %
    assert z.std() == pytest.approx(1.0, abs=0.12)
    assert found[0].amplitude.x[0] == pytest.approx(
        6.375, abs=0.01
    )  # the inner four pixels are sides


def test_a_cup_and_a_shading_are_no_rings():
    image = noise(np.random.default_rng(55)) + 40 * (R / 40) ** 4 + 0.2 * (X - CENTER[1])
    plain = measured(noise(np.random.default_rng(55)))
    found = measured(image)
    assert found.rings_found.value == plain.rings_found.value
    assert abs(found.ring_index.value - plain.ring_index.value) < plain.ring_index.uncertainty


def test_the_rotation_centre_is_found():
    image = noise(np.random.default_rng(56), slices=2) + 6.0 * (np.abs(R - 30.0) < 0.6)
    off = (CENTER[0] + 1.0, CENTER[1] - 0.5)
    found = ring_artefact(image, spacing_mm=SPACING, center_mm=off, inside=INSIDE, search_px=2)
    assert found.center_y.y[0] == pytest.approx(CENTER[0], abs=0.3)
    assert found.center_x.y[0] == pytest.approx(CENTER[1], abs=0.3)
    assert found.rings_found.value >= 1


def test_the_polar_pictures():
    found = measured(noise(np.random.default_rng(57)) + 30.0 * (np.abs(R - 30) < 0.5))
    picture = found.polar_deviation
    assert picture.values.shape[1] == 24
    row = picture.values[round((30.0 - picture.origin[0]) / picture.spacing[0])]
    assert row.mean() > 15
    assert picture.axis_units == ("mm", "°")


def test_the_map_shows_the_rings_that_were_found():
    """Where they lie and how high they are; away from them nothing. A ring's fit on 40 pixels of
    arc a sector is known to a tenth of 15 standard deviations."""
    image = noise(np.random.default_rng(61))
    ring = 15.0 * image.std() * channel_ring(26.0) * (TURN < 0.5)
    picture = measured(image + ring).ring_map
    rows, columns = picture.values.shape
    first = [round(o / s) for o, s in zip(picture.origin, picture.spacing, strict=True)]
    here = (slice(first[0], first[0] + rows), slice(first[1], first[1] + columns))
    expected = np.where(INSIDE, ring, 0.0)[here]
    well = (np.abs(np.mod(TURN - 0.25, 0.5) - 0.25) < 0.2)[here]  # off the ends of the arc
    off = (picture.values - expected)[well & (np.abs(R[here] - 26.0) < 3)]
    assert np.sqrt(np.mean(off**2)) < 0.1 * np.abs(expected).max()
    assert np.corrcoef(picture.values.ravel(), expected.ravel())[0, 1] > 0.97
    assert np.abs(picture.values[R[here] > 39.9]).max() < 0.02 * np.abs(expected).max()
    nothing = measured(noise(np.random.default_rng(53)))
    assert nothing.rings_found.value == 0
    assert np.abs(nothing.ring_map.values).max() == 0


# --- refusals ------------------------------------------------------------------------------------


def test_objects_and_narrow_regions_are_refused():
    image = noise(np.random.default_rng(58))
    rod = 300.0 * (np.hypot(Y - 70, X - 60) < 5)
    assert isinstance(measured(image + rod), NotMeasured)
    thin = ring_artefact(image, spacing_mm=SPACING, center_mm=CENTER, inside=(R > 30) & (R < 33))
    assert "too few radial steps" in thin.reason
    nothing = ring_artefact(
        image, spacing_mm=SPACING, center_mm=CENTER, inside=np.zeros_like(INSIDE)
    )
    assert "no pixel" in nothing.reason


def test_misuse_names_the_argument():
    with pytest.raises(ArgumentError, match="'image' must have shape"):
        ring_artefact(np.zeros(5), spacing_mm=SPACING)
    with pytest.raises(ArgumentError, match="'inside' must be of bool"):
        ring_artefact(np.zeros((64, 64)), spacing_mm=SPACING, inside=np.zeros((64, 64)))
    with pytest.raises(ArgumentError, match="'search_px' must be from 0 to 3"):
        ring_artefact(np.zeros((64, 64)), spacing_mm=SPACING, search_px=9)
    with pytest.raises(ArgumentError, match="'z_mm' must hold 1"):
        ring_artefact(np.zeros((64, 64)), spacing_mm=SPACING, z_mm=[1, 2])


def test_an_image_without_noise_is_refused():
    refused = measured(np.zeros((SIDE, SIDE)))
    assert isinstance(refused, NotMeasured)
    assert "one value only" in refused.reason
