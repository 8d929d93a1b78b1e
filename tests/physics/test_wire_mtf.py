"""The MTF of wires and beads against spots blurred exactly, by Hankel transform."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from truth_images import EDGE, GAUSS, HANN, KERNELS, Kernel, disc_image, disc_profile, noise

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.psf_basis import radial_dictionary
from ct_measure_plugin.physics.results import NotMeasured
from ct_measure_plugin.physics.wire_mtf import wire_mtf
from ct_measure_plugin.physics.wire_transform import object_transfer

METHODS = ("fitted", "transform", "rings")


def percent(found, kernel, level=0.5):
    name = {0.5: "f50", 0.1: "f10"}[level]
    return 100 * (getattr(found, name).value / kernel.level(level) - 1)


@cache
def wires(kernel: Kernel, pixel: float, count: int, diameter=0.2, step=(0.13, 0.3)) -> np.ndarray:
    """Slices of a leaning wire whose integral is the same in each; the highest pixel is about 400.

    The wire is normalised by its true integral: a wire does not get denser between two pixels.
    """
    size = int(24 / pixel)
    index = np.arange(count) - (count - 1) / 2
    planes = [
        disc_image(
            kernel,
            diameter / 2,
            contrast=1.0,
            shape=(size, size),
            spacing=(pixel, pixel),
            center=(0.11 + step[0] * k, -0.07 + step[1] * k),
        )
        for k in index
    ]
    stack = np.stack(planes)
    stack *= 400 / stack.max()
    stack.setflags(write=False)
    return stack


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("pixel", [0.3, 0.5, 0.7])
@pytest.mark.parametrize("kernel", KERNELS, ids=lambda k: k.name)
def test_a_leaning_wire_has_no_bias_even_beyond_nyquist(kernel, pixel, method):
    """Twelve slices. At 0.7 mm Nyquist is 0.714 mm⁻¹; the edge-enhancing kernel reaches to 1."""
    found = wire_mtf(
        wires(kernel, pixel, 12),
        spacing_mm=(pixel, pixel),
        method=method,
        object_diameter_mm=0.2,
        slice_gap_mm=2.0,
    )
    assert abs(percent(found, kernel)) < 0.5
    assert abs(percent(found, kernel, 0.1)) < 0.5
    truth = np.degrees(np.arctan(np.hypot(0.13, 0.3) / 2))
    assert found.lean.value == pytest.approx(truth, abs=0.02)
    middle = (int(24 / pixel) - 1) / 2 * pixel
    assert found.center_mm == pytest.approx((middle + 0.11, middle - 0.07), abs=2e-3)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize(
    ("kernel", "pixel"),
    [(GAUSS, 0.3), (GAUSS, 0.5), (HANN, 0.3), (HANN, 0.5), (EDGE, 0.3)],
    ids=lambda v: getattr(v, "name", str(v)),
)
def test_one_slice_has_no_bias_where_the_spot_is_wide_enough(kernel, pixel, method):
    found = wire_mtf(
        wires(kernel, pixel, 1)[0],
        spacing_mm=(pixel, pixel),
        method=method,
        object_diameter_mm=0.2,
    )
    if method == "rings" and pixel == 0.5:  # 2.8 and 2.7 pixels a FWHM
        assert isinstance(found, NotMeasured)
        assert "at one place of the pixel grid the method 'rings' needs 2.9" in found.reason
        return
    assert abs(percent(found, kernel)) < 0.5
    assert abs(percent(found, kernel, 0.1)) < 0.5


@pytest.mark.parametrize("pixel", [0.5, 0.7])
@pytest.mark.parametrize("kernel", KERNELS, ids=lambda k: k.name)
def test_a_narrow_spots_height_is_right_or_not_measured(kernel, pixel):
    """The true top by the Hankel transform at radius 0; at 0.7 mm the enhancing kernel's spot is
    1.3 pixels wide, and a polynomial through its few pixels was 72 % too high."""
    top = float(disc_profile(kernel, 0.1, np.array([0.0, 0.1]))[0])
    for center in ((0.11, -0.07), (0.25, 0.25), (0.0, 0.31)):
        size = int(24 / pixel)
        image = disc_image(
            kernel, 0.1, contrast=1.0, shape=(size, size), spacing=(pixel, pixel), center=center
        )
        found = wire_mtf(300 / top * image, spacing_mm=(pixel, pixel), method="transform")
        if kernel is EDGE and pixel == 0.7:
            for quantity in (found.height, found.width, found.contrast_to_noise):
                assert isinstance(quantity, NotMeasured)
                assert "top may lie between the pixels" in quantity.reason
        else:
            narrow = pixel == 0.7 or kernel is EDGE  # 1.8 to 2 pixels a FWHM
            # two percent is what the caution says
            assert found.height.value == pytest.approx(300, rel=0.02 if narrow else 0.003)
            said = [c.text for c in found.cautions if "width and height may be off" in c.text]
            assert len(said) == narrow


def test_pixels_too_coarse_for_one_slice_are_refused_and_slices_help():
    """0.7 mm under a kernel that reaches to 1 mm⁻¹: 1.1 pixels a FWHM."""
    one = wires(EDGE, 0.7, 1)[0]
    for method, words in (("fitted", "1.1 pixels"), ("rings", "1.1 pixels")):
        found = wire_mtf(one, spacing_mm=(0.7, 0.7), method=method)
        assert isinstance(found, NotMeasured)
        assert words in found.reason
    folded = wire_mtf(one, spacing_mm=(0.7, 0.7), method="transform")
    assert isinstance(folded.f50, NotMeasured)
    assert "fold" in folded.f50.reason
    # straight slices repeat one place of the grid and do not help
    straight = wires(EDGE, 0.7, 12, step=(0.0, 0.0))
    assert "1.1 pixels" in wire_mtf(straight, spacing_mm=(0.7, 0.7)).reason
    again = wire_mtf(straight, spacing_mm=(0.7, 0.7), method="transform")
    assert isinstance(again.f50, NotMeasured)


def test_pixels_need_not_be_square():
    y = (np.arange(60) - 29.5) * 0.5 - 0.13
    x = (np.arange(90) - 44.5) * 0.3 + 0.08
    image = 300 * np.exp(-(y[:, None] ** 2 + x[None, :] ** 2) / (2 * 0.6**2))
    for method in ("fitted", "transform"):
        found = wire_mtf(image, spacing_mm=(0.5, 0.3), method=method, object_diameter_mm=0.0)
        assert abs(percent(found, GAUSS)) < 0.1
        # an even polynomial of eighth degree over one FWHM is not quite a Gaussian
        assert found.width.value == pytest.approx(2.354820 * 0.6, rel=3e-3)
        assert found.height.value == pytest.approx(300, rel=3e-3)


@pytest.mark.parametrize(
    ("diameter", "shape", "frequency", "value"),
    [
        # 2 J1(x)/x and 3 (sin x - x cos x)/x³, x = πDf, from an independent calculation
        (0.05, "wire", 1.0, 0.9969),
        (0.1, "wire", 1.0, 0.9877),
        (0.2, "wire", 1.0, 0.9515),
        (0.28, "wire", 1.0, 0.9063),
        (0.2, "wire", 2.0, 0.8152),
        (0.28, "wire", 2.0, 0.6599),
        (0.28, "bead", 0.5, 0.9808),
        (0.28, "bead", 1.0, 0.9247),
        (0.28, "bead", 2.0, 0.7228),
    ],
)
def test_the_objects_own_transfer(diameter, shape, frequency, value):
    assert object_transfer(np.array([frequency]), diameter, shape)[0] == pytest.approx(
        value, abs=5e-5
    )


def test_the_bead_is_the_projection_of_a_sphere():
    """Numerically: the transform of 2 sqrt(R² - r²), by quadrature over the disc."""
    from scipy import integrate, special

    for f in (0.4, 1.3):
        top = integrate.quad(
            lambda r, f=f: np.sqrt(0.15**2 - r**2) * special.j0(2 * np.pi * f * r) * r, 0, 0.15
        )[0]
        whole = integrate.quad(lambda r: np.sqrt(0.15**2 - r**2) * r, 0, 0.15)[0]
        assert object_transfer(np.array([f]), 0.3, "bead")[0] == pytest.approx(top / whole, 1e-6)


@pytest.mark.parametrize("diameter", [0.1, 0.4, 0.7])
def test_the_size_of_the_object_is_divided_out(diameter):
    image = wires(HANN, 0.4, 1, diameter)[0]
    known = wire_mtf(image, spacing_mm=(0.4, 0.4), object_diameter_mm=diameter)
    assert abs(percent(known, HANN)) < 0.5
    assert "object-size" in {c.code for c in known.cautions}
    unknown = wire_mtf(image, spacing_mm=(0.4, 0.4))
    assert "object-size-unknown" in {c.code for c in unknown.cautions}
    assert unknown.f50.value < known.f50.value


def test_directions_tell_an_elongated_spot():
    y, x = (np.mgrid[:60, :60] - 29.5) * 0.4
    image = 500 * np.exp(-(x**2) / (2 * 0.9**2) - y**2 / (2 * 0.5**2))
    found = wire_mtf(image, spacing_mm=(0.4, 0.4), object_diameter_mm=0.0)
    turn = np.radians(found.directions.x)
    sigma = np.sqrt((0.9 * np.cos(turn)) ** 2 + (0.5 * np.sin(turn)) ** 2)
    np.testing.assert_allclose(found.directions.y, 0.187391 / sigma, rtol=3e-3)
    along = wire_mtf(
        image,
        spacing_mm=(0.4, 0.4),
        object_diameter_mm=0.0,
        method="transform",
        direction_deg=90.0,
    )
    assert along.f50.value == pytest.approx(0.187391 / 0.5, rel=3e-3)


@pytest.mark.parametrize("method", METHODS)
def test_sign_of_contrast_and_mirroring_do_not_matter(method):
    rng = np.random.default_rng(4)
    image = wires(HANN, 0.4, 1)[0] + rng.normal(0, 4, (60, 60))
    first = wire_mtf(image, spacing_mm=(0.4, 0.4), method=method, object_diameter_mm=0.2)
    for other, sign in ((-image, -1), (image[:, ::-1], 1), (image.T, 1), (50 - image[::-1], -1)):
        found = wire_mtf(other, spacing_mm=(0.4, 0.4), method=method, object_diameter_mm=0.2)
        assert found.f50.value == pytest.approx(first.f50.value, rel=1e-5)
        assert found.height.value == pytest.approx(sign * first.height.value, rel=1e-5)
        assert found.width.value == pytest.approx(first.width.value, rel=1e-5)


def test_a_sloping_background_is_taken_out():
    y, x = np.mgrid[:60, :60]
    image = wires(HANN, 0.4, 1)[0] + 3.0 * x - 1.5 * y + 900
    for method in METHODS:
        found = wire_mtf(image, spacing_mm=(0.4, 0.4), method=method, object_diameter_mm=0.2)
        assert abs(percent(found, HANN)) < 0.5


def test_the_radial_profile_and_the_width_are_the_spots():
    found = wire_mtf(wires(GAUSS, 0.3, 1)[0], spacing_mm=(0.3, 0.3), object_diameter_mm=0.2)
    truth = np.exp(-(found.psf.x**2) / (2 * (0.36 + 0.0025)))  # the wire adds D²/16
    np.testing.assert_allclose(found.psf.y, truth, atol=0.01)
    assert found.width.value == pytest.approx(2.354820 * np.sqrt(0.3625), rel=2e-3)


def test_shapes_of_spots_have_the_transfer_that_edges_have():
    """Each tabulated spot is the Hankel transform of its member's MTF, by a finer quadrature."""
    from scipy import integrate, special

    from ct_measure_plugin.physics.esf_basis import RATIOS, dictionary

    shapes = radial_dictionary()
    for member in (5, 20, 33, 60, 75, 90):
        columns = shapes.columns[:, member, :]
        v = np.linspace(0, dictionary().end(member) / RATIOS[member % len(RATIOS)], 40001)
        transfer = shapes.transfer(member, v) * (v / (2 * np.pi))[:, None]
        height = np.abs(integrate.simpson(transfer, x=v, axis=0)).max()
        for x in (0.0, 0.83, 2.5, 11.0):
            truth = integrate.simpson(transfer * special.j0(v * x)[:, None], x=v, axis=0)
            found = (shapes.spreads(np.array([x])) @ columns)[0]
            # cubic splines through the narrowest spots every 0.04 leave 2e-5 of their height
            np.testing.assert_allclose(found, truth, atol=3e-5 * height)


@cache
def repeats(kernel, coloured, slices):
    rng = np.random.default_rng(21)
    clean = 2 * wires(kernel, 0.4, slices)
    rows = {m: [] for m in ("fitted", "transform")}
    for _ in range(30):
        colour = kernel if coloured else None
        image = clean + np.stack([noise(rng, p.shape, (0.4, 0.4), 10, colour) for p in clean])
        for method, kept in rows.items():
            found = wire_mtf(image, spacing_mm=(0.4, 0.4), method=method, object_diameter_mm=0.2)
            kept.append(
                [(q.value, q.uncertainty) for q in (found.f50, found.f10, found.width, found.noise)]
            )
    return {m: np.array(r) for m, r in rows.items()}


@pytest.mark.parametrize(
    ("kernel", "coloured"),
    [
        (HANN, False),
        (EDGE, True),
        pytest.param(HANN, True, marks=pytest.mark.long),
        pytest.param(EDGE, False, marks=pytest.mark.long),
    ],
    ids=["hann-white", "edge-coloured", "hann-coloured", "edge-white"],
)
def test_in_noise_the_fit_beats_the_transform_and_states_its_doubt(kernel, coloured):
    """Height 80 times the noise on one slice. 30 repeats fix a scatter to 13 %, and the ratio of
    two correlated ones to about 15 %."""
    found = repeats(kernel, coloured, 1)
    truth = kernel.level(0.5)
    rms = {m: np.sqrt(np.mean((r[:, 0, 0] / truth - 1) ** 2)) for m, r in found.items()}
    assert rms["fitted"] < 0.85 * rms["transform"]
    fitted = found["fitted"][:, 0]
    ratio = np.median(fitted[:, 1]) / np.std(fitted[:, 0], ddof=1)
    # averaging over models states up to a half too much
    assert 0.7 < ratio < 1.8
    # fewer than 25 of 30 intervals at 93 % hold the truth once in 80 runs
    assert np.sum(np.abs(fitted[:, 0] - truth) < 1.96 * fitted[:, 1]) >= 25
    noise_found = found["fitted"][:, 3]
    assert noise_found[:, 0].mean() == pytest.approx(10, rel=0.02)


def box(**changes):
    image = wires(HANN, 0.4, 1)[0].copy()
    image += np.random.default_rng(3).normal(0, 5, image.shape)
    if "clip" in changes:
        image = np.minimum(image, changes["clip"])
    if "blob" in changes:
        image[8:16, 40:50] += 200
    if "crop" in changes:
        image = image[20:, 22:38]
    if "weak" in changes:
        image += np.random.default_rng(4).normal(0, 150, image.shape)
    return image


def told(image, **options):
    options = {"spacing_mm": (0.4, 0.4), "object_diameter_mm": 0.2} | options
    return {c.code for c in wire_mtf(image, **options).cautions} - {"object-size", "noise-floor"}


def test_what_a_reader_must_know_is_told_and_nothing_else():
    y, x = (np.mgrid[:60, :60] - 29.5) * 0.4
    assert told(box()) == set()
    # 400 high; about 5 FWHM of 1.3 mm to either side are transformed
    assert told(box() + 3.0 * x) == {"background-gradient"}
    assert "another-object" in told(box() + 18.0 * ((np.abs(y - 7.2) < 2.3) & (np.abs(x) < 2.3)))
    assert told(box()[20:40, 20:40]) == {"tail-truncation"}
    assert "low-contrast" in told(box() + np.random.default_rng(4).normal(0, 25, x.shape))
    assert told(box(), object_diameter_mm=None) == {"object-size-unknown"}
    coarse = wires(HANN, 0.7, 1)[0] + np.random.default_rng(4).normal(0, 2, (34, 34))
    assert "aliasing" in told(coarse, spacing_mm=(0.7, 0.7))


def test_a_background_plane_does_not_move_the_curve():
    y, x = (np.mgrid[:60, :60] - 29.5) * 0.4
    plain = wires(HANN, 0.4, 1)[0]
    for method in METHODS:
        found = wire_mtf(
            plain + 5.0 * x - 2.0 * y,
            spacing_mm=(0.4, 0.4),
            method=method,
            object_diameter_mm=0.2,
        )
        assert abs(percent(found, HANN)) < 0.5
        assert abs(percent(found, HANN, 0.1)) < 0.5


REFUSALS = {
    "all pixels": (lambda: np.zeros((40, 40)), {}),
    "clipped": (lambda: box(clip=250), {}),
    "something else": (lambda: box(blob=True), {}),
    "clear of the border": (lambda: box(crop=True), {}),
    "times the noise": (lambda: box(weak=True), {}),
    "thicker than the resolution": (box, {"object_diameter_mm": 3.0}),
}


@pytest.mark.parametrize("words", REFUSALS)
def test_what_cannot_be_measured_is_refused_in_words(words):
    make, options = REFUSALS[words]
    found = wire_mtf(make(), spacing_mm=(0.4, 0.4), **options)
    assert isinstance(found, NotMeasured), found
    assert words in found.reason or (words == "times the noise" and "noise" in found.reason)
    assert found.remedy


def test_stored_limits_are_clipping_too():
    image = box(clip=390.0)
    found = wire_mtf(image, spacing_mm=(0.4, 0.4), limits=(-1024.0, 390.0))
    assert isinstance(found, NotMeasured)
    assert "clipped" in found.reason


def test_a_strong_lean_is_cautioned():
    found = wire_mtf(
        wires(HANN, 0.5, 6, step=(0.4, 0.3)),
        spacing_mm=(0.5, 0.5),
        slice_gap_mm=2.0,
        slice_thickness_mm=2.5,
    )
    assert "leaning-object" in {c.code for c in found.cautions}


def test_misuse_is_named():
    image = wires(HANN, 0.4, 1)[0]
    for changes, words in (
        ({"method": "best"}, "'method' must be"),
        ({"shape": "rod"}, "'shape' must be"),
        ({"object_diameter_mm": -1.0}, "'object_diameter_mm' must not"),
        ({"direction_deg": 3.0}, "'direction_deg' must be left out"),
        ({"spacing_mm": (0.4, 0.0)}, "'spacing_mm' must be"),
        ({"levels": (2.0,)}, "'levels' must"),
    ):
        with pytest.raises(ArgumentError, match=words):
            wire_mtf(image, **({"spacing_mm": (0.4, 0.4)} | changes))
