"""The standard error of a region's mean from a noise spectrum measured before, by every door."""

from __future__ import annotations

import json
from statistics import median

import numpy as np
import pytest
from noise_fields import SPECTRA, field

import ct_measure_plugin as ctm
from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.measurements import find
from ct_measure_plugin.measurements.noise_spectrum import NoiseSpectrum
from ct_measure_plugin.physics.coverage import plane_coverage
from ct_measure_plugin.physics.regions import Box, Disc
from ct_measure_plugin.records import Record, write_json
from ct_measure_plugin.run import run_measurement

WATER = Box((79.75, 79.75), (158.0, 158.0))


def stack(name: str, slices: int, seed: int, side: int = 320, share: float = 0.0) -> ctm.Volume:
    """Return slices of a known noise, `share` of each taken over from the one before."""
    rng = np.random.default_rng(seed)
    planes = []
    for _ in range(slices):
        own = field(rng, (2 * side, side + 64), (0.5, 0.5), SPECTRA[name])[:side, :side]
        before = planes[-1] if planes else own
        planes.append(share * before + np.sqrt(1 - share**2) * own)
    return ctm.Volume(np.stack(planes).astype(np.float32), (1.0, 0.5, 0.5))


@pytest.fixture(scope="module")
def ramp():
    volume = stack("ramp", 10, seed=51)
    return volume, ctm.measure("noise_power", volume, WATER, patch_px=64, slice_step=1)


def means_of(image: np.ndarray, radius_mm: float) -> np.ndarray:
    """Return the means of many equal discs of a slice, by their coverage."""
    side = int(4 * radius_mm)  # two diameters, in pixels of 0.5 mm
    middle = (side - 1) / 4
    cover = plane_coverage(Disc((middle, middle), radius_mm), (side, side), spacing_mm=(0.5, 0.5))
    weights = np.zeros((side, side))
    weights[cover.rows, cover.columns] = cover.weights / cover.weights.sum()
    many = image.shape[0] // side
    tiles = image[: many * side, : many * side].reshape(many, side, many, side)
    return np.einsum("aibj,ij->ab", tiles, weights).ravel()


@pytest.mark.parametrize(("radius_mm", "slices"), [(2.5, 4), (6.0, 20)])
def test_it_foretells_how_means_scatter_where_the_pixels_themselves_cannot(ramp, radius_mm, slices):
    """Means of equal discs in ramp noise, on other slices than the spectrum was measured on. The
    region's own pixels cannot show that the noise falls to nothing at frequency 0: their standard
    error reads too large, which keeps this test from passing without a spectrum."""
    _, spectrum = ramp
    image = stack("ramp", slices, seed=52)
    means = np.concatenate([means_of(plane, radius_mm) for plane in image.hu])
    side = 2 * radius_mm
    middles = [(np.array((a, b)) + 0.5) * side - 0.25 for a in (0, 3) for b in range(5)]
    some = [Disc(tuple(at.tolist()), radius_mm, z_mm=0.0) for at in middles]
    found = ctm.measure("region_statistics", image, some, noise_spectrum=spectrum)
    errors = np.array([one.mean.uncertainty for one in found])
    assert found[0].mean.value == pytest.approx(means[0], abs=1e-4)
    assert np.ptp(errors) < 1e-9  # equal regions: one error, whatever noise they hold
    known = 1 / np.sqrt(2 * len(means))  # relative, of the scatter itself
    assert errors[0] == pytest.approx(np.std(means), rel=3 * known + 0.02)  # 2 %: the spectrum's
    hits = np.mean(np.abs(means) < 1.96 * errors[0])
    assert hits == pytest.approx(0.95, abs=3 * np.sqrt(0.95 * 0.05 / len(means)) + 0.005)
    alone = ctm.measure("region_statistics", image, some)
    assert median(one.mean.uncertainty for one in alone) > 1.15 * np.std(means)


def test_over_slices_that_share_noise(ramp):
    """Each slice holds 0.6 of the one before: cylinders of 6 slices scatter as it is stated. That
    they share noise makes the scatter 1.7 times what 6 separate slices would have."""
    _, spectrum = ramp
    places = [(y, x) for y in (14.0, 40.0, 66.0) for x in (14.0, 40.0, 66.0)]
    means, errors = [], []
    for seed in range(10):
        volume = stack("ramp", 6, seed=100 + seed, side=160, share=0.6)
        for at in places:
            found = ctm.measure("region_statistics", volume, Disc(at, 6.0), **whole(spectrum))
            means.append(found.mean.value)
            errors.append(found.mean.uncertainty)
    known = 1 / np.sqrt(2 * len(means))
    # the correlation of slices is judged cylinder by cylinder and cut off where it is lost in
    # its own noise, so that errors scatter; their root mean square is what must be right
    assert np.sqrt(np.mean(np.square(errors))) == pytest.approx(np.std(means), rel=3 * known + 0.05)


def whole(spectrum) -> dict[str, object]:
    return {"noise_spectrum": spectrum, "along_z": False}


def test_a_spectrum_survives_as_a_setting_to_the_last_figure(ramp):
    _, spectrum = ramp
    kept = NoiseSpectrum.of(spectrum)
    again = NoiseSpectrum.model_validate_json(kept.model_dump_json())
    assert again == kept
    back = again.spectrum()
    assert back.spectrum.values == pytest.approx(spectrum.spectrum.values, rel=1e-6)  # 32 bits
    assert back.spectrum.origin == spectrum.spectrum.origin
    assert back.radial.y.tolist() == spectrum.radial.y.tolist()
    odd = np.random.default_rng(3).normal(0, 5, (40, 33, 27))
    unequal = ctm.physics.noise_power(odd, spacing_mm=(0.4, 0.7))
    turned = NoiseSpectrum.of(unequal).spectrum()
    assert turned.spectrum.values == pytest.approx(unequal.spectrum.values, rel=1e-6)
    assert turned.spacing_mm == (0.4, 0.7)


def test_result_file_and_record_give_one_answer(ramp, tmp_path):
    """Python takes the result, the command and the dock its file, and a record holds it whole."""
    volume, spectrum = ramp
    settings = find("noise_power").settings_type()
    file = write_json(
        run_measurement("noise_power", volume, (WATER,), settings), tmp_path / "n.json"
    )
    disc = Disc((40, 40), 8.0, z_mm=2.0)
    by_result = ctm.measure("region_statistics", volume, disc, noise_spectrum=spectrum)
    by_file = ctm.measure("region_statistics", volume, disc, noise_spectrum=str(file))
    assert by_file.mean == by_result.mean
    wanted = find("region_statistics").settings_type(noise_spectrum=spectrum)
    [record] = run_measurement("region_statistics", volume, (disc,), wanted)
    assert record.answer().mean == by_result.mean
    again = Record.model_validate_json(record.model_dump_json()).typed_settings()
    assert again == wanted
    assert {c.code for c in by_result.cautions} >= {"spectrum-used"}
    assert "spectrum-used" not in {
        c.code for c in ctm.measure("region_statistics", volume, disc).cautions
    }


def test_a_spectrum_of_other_pixels_or_other_noise_is_told(ramp):
    _, spectrum = ramp
    rng = np.random.default_rng(5)
    coarse = ctm.Volume(rng.normal(0, 5, (1, 64, 64)), (1.0, 0.7, 0.7))
    disc = Disc((22, 22), 15.0)
    found = ctm.measure("region_statistics", coarse, disc, noise_spectrum=spectrum)
    assert "spectrum-not-used" in {c.code for c in found.cautions}
    assert found.mean == ctm.measure("region_statistics", coarse, disc).mean
    loud = ctm.Volume(rng.normal(0, 50, (1, 64, 64)), (1.0, 0.5, 0.5))
    other = ctm.measure("region_statistics", loud, Disc((16, 16), 12.0), noise_spectrum=spectrum)
    assert "spectrum-of-other-noise" in {c.code for c in other.cautions}


def test_what_is_no_spectrum_is_refused_in_words(ramp, tmp_path):
    volume, _ = ramp
    disc = Disc((40, 40), 8.0)

    def ask(given):
        return ctm.measure("region_statistics", volume, disc, noise_spectrum=given)

    with pytest.raises(ArgumentError, match="cannot be read"):
        ask(str(tmp_path / "none.json"))
    text = tmp_path / "text.json"
    text.write_text("water")
    with pytest.raises(ArgumentError, match="is not JSON"):
        ask(str(text))
    text.write_text(json.dumps([{"measurement": "uniformity", "result": {}, "measured": True}]))
    with pytest.raises(ArgumentError, match="holds no measured noise power spectra; one is wanted"):
        ask(str(text))
    broken = {"measurement": "noise_power", "measured": True, "result": {"radial": {"is": "Curve"}}}
    text.write_text(json.dumps([broken]))
    with pytest.raises(ArgumentError, match="holds no 'spectrum' that can be read"):
        ask(str(text))
    for shape in ([10**30, 4], [-1, 4], ["a"]):
        picture = {"is": "Picture", "values": {"is": "array", "dtype": "<f8", "shape": shape}}
        picture["values"]["packed"] = "eJxjYBgFAAEAAAE="
        hostile = broken | {"result": {"spectrum": picture}}
        text.write_text(json.dumps([hostile]))
        with pytest.raises(ArgumentError, match="holds no 'spectrum' that can be read"):
            ask(str(text))
    deep = ctm.physics.noise_power(
        np.random.default_rng(1).normal(size=(8, 8, 16, 16)), spacing_mm=(1.0, 0.5, 0.5)
    )
    with pytest.raises(ArgumentError, match="not deep ones"):
        ask(deep)
