"""Detectability against closed forms."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from noise_fields import SPECTRA, cut, field

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics import noise_power
from ct_measure_plugin.physics.detectability import Eye, Task, detectability
from ct_measure_plugin.physics.detection_task import EYES
from ct_measure_plugin.physics.results import Curve, NotMeasured

F = np.linspace(0.005, 4.0, 1600)
PERFECT = Curve(F, np.ones(len(F)))
GAUSS = Task(contrast_hu=10, size_mm=2, shape="gaussian")


def nps(values) -> Curve:
    return Curve(F, np.broadcast_to(values, F.shape).astype(float), None, "", "mm⁻¹", "", "HU² mm²")


def mtf(sigma: float) -> Curve:
    return Curve(F, np.exp(-2 * (np.pi * sigma * F) ** 2))


def test_white_noise_makes_no_difference_between_observers():
    """d′² = π C² s²/S0 = 25.133; behind an MTF of σ 0.6 mm π C² s⁴/((s² + σ²) S0) = 23.058."""
    found = detectability(nps(50.0), PERFECT, task=GAUSS)
    assert found.npw.value == pytest.approx(math.sqrt(25.133), rel=1e-3)
    assert found.prewhitening.value == pytest.approx(math.sqrt(25.133), rel=1e-3)
    blurred = detectability(nps(50.0), mtf(0.6), task=GAUSS)
    assert blurred.npw.value == pytest.approx(math.sqrt(23.058), rel=1e-3)
    # Φ(d′/√2) = ½ (1 + erf(d′/2))
    assert found.npw_auc.value == pytest.approx(0.5 * (1 + math.erf(5.0133 / 2)), rel=1e-4)
    assert found.npwe is None
    assert {c.code for c in detectability(nps(50.0), None, task=GAUSS).cautions} == {"no-transfer"}


@pytest.mark.parametrize(("end", "expected"), [(1.0, 37.728), (4.0, 38.88)])
def test_a_disc_to_a_finite_frequency(end, expected):
    """R 2.5 mm: C² π R²/S0 = 39.270 over all frequencies, 37.728 up to 1 mm⁻¹ (computed
    independently); about 1/(π² R F) is missing, 1 % at 4 mm⁻¹."""
    kept = end + 1e-9 >= F
    curve = Curve(F[kept], np.full(int(kept.sum()), 50.0), None, "", "", "", "HU² mm²")
    found = detectability(curve, PERFECT, task=Task(contrast_hu=10, size_mm=2.5))
    assert found.npw.value**2 == pytest.approx(expected, rel=5e-3)


def test_noise_of_falling_power():
    """S0 exp(−4π²b²f²), b = 0.5 mm, MTF σ 0.6 mm: NPW² 24.380, PW² 24.460 (closed forms)."""
    found = detectability(nps(50 * np.exp(-4 * (np.pi * 0.5 * F) ** 2)), mtf(0.6), task=GAUSS)
    assert found.npw.value**2 == pytest.approx(24.380, rel=5e-3)
    assert found.prewhitening.value**2 == pytest.approx(24.460, rel=5e-3)


def test_ramp_noise():
    """S = a f, a = 100: PW² = 2π^(5/2) C² s³/a = 279.89, NPW² = 4π^(3/2) C² s³/a = 178.19. Near 0
    the prewhitening observer gains most; there S is too small to divide by."""
    found = detectability(nps(100 * F), PERFECT, task=GAUSS)
    assert found.npw.value**2 == pytest.approx(178.19, rel=2e-3)
    assert found.prewhitening.value**2 == pytest.approx(279.89, rel=5e-3)
    assert found.prewhitening.value > found.npw.value


def test_behind_an_eye():
    """White noise S0 = 50: with ρ^1.5 exp(−0.68 ρ^0.98) at 500 mm, 3.7008 at zoom 1
    and 3.0827 at zoom 3 (computed independently)."""
    for zoom, expected in ((1.0, 3.7008), (3.0, 3.0827)):
        eye = replace(EYES["Eckstein"], zoom=zoom)
        found = detectability(nps(50.0), PERFECT, task=GAUSS, eye=eye)
        assert found.npwe.value == pytest.approx(expected, rel=5e-3)
        assert found.npwe.value < found.npw.value


def test_contrast_scales_and_its_sign_does_not_matter():
    once = detectability(nps(50.0), mtf(0.6), task=GAUSS)
    twice = detectability(
        nps(50.0), mtf(0.6), task=Task(contrast_hu=-20, size_mm=2, shape="gaussian")
    )
    assert twice.npw.value == pytest.approx(2 * once.npw.value, rel=1e-12)


def test_designer_profiles_run_from_the_disc_to_the_smooth():
    f = np.linspace(0, 1, 50)
    disc = Task(contrast_hu=5, size_mm=3).spectrum(f)
    same = Task(contrast_hu=5, size_mm=3, shape="designer", exponent=0).spectrum(f)
    assert same == pytest.approx(disc, rel=1e-12)
    assert disc[0] == pytest.approx(5 * math.pi * 9)
    soft = Task(contrast_hu=5, size_mm=3, shape="designer", exponent=2).spectrum(f)
    assert soft[0] == pytest.approx(5 * math.pi * 9 / 3)


def ramp_noise(f):
    return 400 * f * np.exp(-((2.0 * f) ** 2))


def test_observers_at_work_score_what_the_index_says():
    """Monte Carlo: templates of the three observers laid at every place of 12 fields of ramp noise,
    lifted at 0 as aliasing does. The mean response to the signal, over the scatter of the responses
    to noise alone, is d′; about 12,000 separate places fix the scatter to 0.7 %."""

    def lifted(f):
        return ramp_noise(f) + 5.0

    rng, n, pixel = np.random.default_rng(62), 512, 0.5
    y, x = (np.arange(n) - n // 2) * pixel, (np.arange(n) - n // 2)[:, None] * pixel
    wide = math.hypot(2.0, 0.6)  # a Gaussian of 2 mm through a Gaussian of 0.6 mm
    signal = 10 * (2.0 / wide) ** 2 * np.exp(-(x**2 + y**2) / (2 * wide**2))
    f = np.hypot(*np.meshgrid(*[np.fft.fftfreq(n, pixel)] * 2))
    eye = EYES["Burgess"]
    seen = np.fft.fft2(np.fft.ifftshift(signal))
    templates = [seen, seen * eye.response(f) ** 2, seen / lifted(f)]
    responses = [[] for _ in templates]
    for _ in range(12):
        noise = np.fft.fft2(field(rng, (n, n), (pixel, pixel), lifted))
        for kept, template in zip(responses, templates, strict=True):
            kept.append(np.fft.ifft2(noise * template.conj()).real.ravel())
    found = detectability(nps(lifted(F)), mtf(0.6), task=GAUSS, eye=eye)
    for index, template, kept in zip(
        (found.npw, found.npwe, found.prewhitening), templates, responses, strict=True
    ):
        mean = np.fft.ifft2(seen * template.conj()).real[0, 0]
        assert mean / np.std(kept) == pytest.approx(index.value, rel=0.025)


def hits_of(spectrum, repeats: int) -> np.ndarray:
    """Return how often ±1.96 uncertainties hold each index of the true spectrum."""
    rng = np.random.default_rng(61)
    eye = EYES["Burgess"]
    true = detectability(nps(spectrum(F)), mtf(0.6), task=GAUSS, eye=eye)
    hits = []
    for _ in range(repeats):
        image = field(rng, (384, 384), (0.5, 0.5), spectrum)[:320, :320]
        patches, corners = cut(image, 64, 64)
        measured = noise_power(patches, spacing_mm=(0.5, 0.5), corners=corners)
        found = detectability(measured, mtf(0.6), task=GAUSS, eye=eye)
        hits.append(
            [
                abs(one.value - other.value) < 1.96 * one.uncertainty
                for one, other in (
                    (found.npw, true.npw),
                    (found.npwe, true.npwe),
                    (found.prewhitening, true.prewhitening),
                    (found.npw_auc, true.npw_auc),
                )
            ]
        )
        assert found.npw.uncertainty < 0.25 * found.npw.value
    return np.mean(hits, axis=0)


def test_its_uncertainty_holds_the_truth():
    """From measured spectra: 20 sets of 25 patches of ramp noise; nominal 95 % hold the indices of
    the true spectrum; 20 fix the share to 5 %."""
    assert np.all(hits_of(ramp_noise, 20) >= 0.85)


@pytest.mark.long
@pytest.mark.parametrize("name", SPECTRA)
def test_its_uncertainty_holds_the_truth_for_every_texture(name):
    """200 fix the share to 1.5 %."""
    hits = hits_of(SPECTRA[name], 200)
    assert np.all(hits >= 0.91)


def test_an_uncertain_transfer_makes_an_uncertain_index():
    """5 % at every frequency is 5 % of every index; an MTF below its own uncertainty is none."""
    blur = mtf(0.6)
    unsure = Curve(F, blur.y, 0.05 * blur.y)
    found = detectability(nps(50.0), unsure, task=GAUSS)
    assert found.npw.uncertainty == pytest.approx(0.05 * found.npw.value, rel=0.01)
    assert found.prewhitening.uncertainty == pytest.approx(0.05 * found.npw.value, rel=0.01)
    floor = Curve(F, np.maximum(blur.y, 0.02), np.full(len(F), 0.02))
    cut_off = detectability(nps(50.0), floor, task=replace(GAUSS, size_mm=0.4))
    first = F[blur.y <= 0.02][0]
    assert np.all(cut_off.task.y[cut_off.task.x > first + 0.01] == 0)
    assert np.all(cut_off.task.y[cut_off.task.x < first - 0.01] > 0)


def test_a_signal_beyond_the_measured_frequencies_is_noted_or_refused():
    short = Curve(F[:200], np.full(200, 50.0), None, "", "", "", "HU² mm²")  # to 0.5 mm⁻¹
    noted = detectability(short, PERFECT, task=Task(contrast_hu=10, size_mm=1.0))
    assert {c.code for c in noted.cautions} == {"signal-beyond"}
    assert noted.unseen.value > 5
    refused = detectability(short, PERFECT, task=Task(contrast_hu=10, size_mm=0.2))
    assert isinstance(refused, NotMeasured)
    assert "beyond 0.5 mm⁻¹" in refused.reason


def test_misuse_names_the_argument():
    with pytest.raises(ArgumentError, match="'contrast_hu' must be finite"):
        Task(contrast_hu=0, size_mm=1)
    with pytest.raises(ArgumentError, match="'size_mm' must be"):
        Task(contrast_hu=1, size_mm=0)
    with pytest.raises(ArgumentError, match="'shape' must be one of"):
        Task(contrast_hu=1, size_mm=1, shape="cube")
    with pytest.raises(ArgumentError, match="'zoom' must be"):
        Eye(zoom=0)
    deep = Curve(F, np.ones(len(F)), None, "", "", "", "HU² mm³")
    with pytest.raises(ArgumentError, match="single slices"):
        detectability(deep, PERFECT, task=GAUSS)
    with pytest.raises(ArgumentError, match="'transfer' must hold 4"):
        detectability(nps(50.0), Curve(F[:2], F[:2]), task=GAUSS)
    with pytest.raises(ArgumentError, match="'noise' must be the spectrum of single slices in HU"):
        detectability(replace(nps(50.0), y_unit="counts² mm²"), PERFECT, task=GAUSS)
    with pytest.raises(ArgumentError, match="'noise' must run over frequencies in mm⁻¹"):
        detectability(replace(nps(50.0), x_unit="cm⁻¹"), PERFECT, task=GAUSS)
    with pytest.raises(ArgumentError, match="'transfer' must hold finite"):
        detectability(nps(50.0), replace(PERFECT, y=np.full(len(F), np.nan)), task=GAUSS)
    with pytest.raises(ArgumentError, match="'transfer' must run over rising"):
        detectability(nps(50.0), Curve(F[::-1], PERFECT.y), task=GAUSS)


def test_a_ring_without_power_still_has_its_doubt():
    empty = nps(np.where(np.arange(len(F)) % 20 == 10, 0.0, 50.0))
    sure = detectability(replace(empty, y_uncertainty=0.01 * empty.y), PERFECT, task=GAUSS)
    unsure = detectability(
        replace(empty, y_uncertainty=np.where(empty.y > 0, 0.01 * empty.y, 20.0)),
        PERFECT,
        task=GAUSS,
    )
    assert unsure.npw.uncertainty > 1.5 * sure.npw.uncertainty
