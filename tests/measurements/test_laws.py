"""The laws that every measurement in the catalogue obeys."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import fields, replace

import numpy as np
import pytest
from examples import EXAMPLES, Example

from ct_measure_plugin.errors import CtMeasureError
from ct_measure_plugin.measurements import DRAWN, NAMES, find, glance_each, measure
from ct_measure_plugin.measurements.base import Measurement, Settings
from ct_measure_plugin.physics.regions import (
    Box,
    Disc,
    Ellipse,
    Labels,
    Path,
    Polygon,
    Region,
    Segment,
)
from ct_measure_plugin.physics.results import Result, quantities_of
from ct_measure_plugin.physics.volume import Volume

# adding a constant moves sums of floats by their rounding
ROUNDING = 1e-9


def run(example: Example, volume: Volume | None = None, regions: tuple[Region, ...] = ()) -> Result:
    found = measure(
        NAME[id(example)], volume or example.volume, regions or example.regions, **example.settings
    )
    assert found, str(found)
    return found


NAME: dict[int, str] = {}


@pytest.fixture(params=NAMES)
def example(request) -> Example:
    made = EXAMPLES[request.param]()
    NAME[id(made)] = request.param
    return made


def test_every_measurement_has_an_example():
    assert set(EXAMPLES) == set(NAMES)


def test_what_is_not_drawn_takes_label_maps():
    assert set(NAMES) - set(DRAWN) == {n for n in NAMES if find(n).regions.kinds == ("labels",)}


def test_the_input_is_untouched(example):
    before = example.volume.hu.copy()
    run(example)
    np.testing.assert_array_equal(example.volume.hu, before)


def test_the_same_question_has_the_same_answer(example):
    first, second = quantities_of(run(example)), quantities_of(run(example))
    assert first == second


def test_a_glance_shows_the_same_numbers(example):
    """While a region moves, uncertainties may be missing; a number may not differ by a bit."""
    full = quantities_of(run(example))
    settings = find(NAME[id(example)]).settings_type(**example.settings)
    [seen] = glance_each(NAME[id(example)], example.volume, example.regions, settings=settings)
    found = quantities_of(seen)
    assert found
    for name, quantity in found.items():
        assert quantity.value == full[name].value, name
        assert quantity.uncertainty in (None, full[name].uncertainty), name
    if any(q.uncertainty is None and full[n].uncertainty is not None for n, q in found.items()):
        assert any(caution.code == "no-uncertainty" for caution in seen.cautions)


def test_threads_do_not_disturb_each_other(example):
    alone = quantities_of(run(example))
    with ThreadPoolExecutor(4) as pool:
        together = list(pool.map(lambda _: quantities_of(run(example)), range(8)))
    assert all(found == alone for found in together)


def test_a_shift_by_100_hu_moves_levels_only(example):
    plain = quantities_of(run(example))
    raised = quantities_of(run(example, replace(example.volume, hu=example.volume.hu + 100)))
    for name, quantity in plain.items():
        if name in example.rests_on_zero:
            continue
        expected = quantity.value + (100 if name in example.moves_with_level else 0)
        assert raised[name].value == pytest.approx(expected, abs=ROUNDING, rel=ROUNDING), name
        if quantity.uncertainty is not None:
            assert raised[name].uncertainty == pytest.approx(
                quantity.uncertainty, abs=ROUNDING, rel=1e-6
            ), name


def test_marks_are_regions_on_the_image(example):
    """What a dock draws over the image lies on it, in the frame of the regions asked for."""
    name, volume = NAME[id(example)], example.volume
    settings = find(name).settings_type(**example.settings)
    parts = [example.regions] if find(name).regions.together else [(r,) for r in example.regions]
    marks = []
    for regions in parts:
        answer = find(name).measure(volume, regions, settings)
        marks += find(name).marks(volume, regions, settings, answer)
    low = np.asarray(volume.origin_mm[1:]) - np.asarray(volume.spacing_mm[1:]) / 2
    high = low + np.asarray(volume.shape[1:]) * np.asarray(volume.spacing_mm[1:])
    for mark in marks:
        points = np.asarray(outline_of(mark))
        assert (points >= low - ROUNDING).all()
        assert (points <= high + ROUNDING).all()
    assert bool(marks) == (type(find(name)).marks is not Measurement.marks)


def outline_of(region: Region) -> list[tuple[float, float]]:
    """Return points on a region's outline."""
    if isinstance(region, Segment):
        return [region.start_mm, region.end_mm]
    if isinstance(region, Disc):
        (y, x), r = region.center_mm, region.radius_mm
        return [(y - r, x), (y + r, x), (y, x - r), (y, x + r)]
    assert isinstance(region, (Box, Polygon)), region.kind
    return list(region.vertices_mm)


def turned(region: Region, side_mm: float) -> Region:
    """Turn a region by a quarter, counter-clockwise on the screen, with its square image."""

    def point(p):
        return side_mm - p[1], p[0]

    if isinstance(region, Disc):
        return replace(region, center_mm=point(region.center_mm))
    if isinstance(region, Ellipse | Box):
        return replace(region, center_mm=point(region.center_mm), angle_deg=region.angle_deg + 90)
    if isinstance(region, Segment):
        ends = {"start_mm": point(region.start_mm), "end_mm": point(region.end_mm)}
        return replace(region, **ends)
    if isinstance(region, Path | Polygon):
        return replace(region, vertices_mm=tuple(point(p) for p in region.vertices_mm))
    if isinstance(region, Labels):
        return replace(region, labels=np.rot90(region.labels, axes=(1, 2)).copy())
    raise NotImplementedError(region.kind)


def test_a_quarter_turn_changes_nothing(example):
    plain = quantities_of(run(example))
    hu = np.rot90(example.volume.hu, axes=(1, 2)).copy()
    side = (example.volume.shape[1] - 1) * example.volume.spacing_mm[1]
    regions = tuple(turned(region, side) for region in example.regions)
    after = quantities_of(run(example, replace(example.volume, hu=hu), regions))
    # an offset near 0 is the difference of numbers as large as the image's, rounded 1e-9 of that
    rounding = 1e-9 * max(1.0, float(np.ptp(example.volume.hu)))
    for name, quantity in plain.items():
        expected = quantity.value
        if name in example.turns_with_image:
            expected = (expected + 90) % 180
        assert after[name].value == pytest.approx(expected, rel=1e-6, abs=rounding), name


def doubled(region: Region) -> Region:
    """Stretch a region to twice its size about the origin."""
    if isinstance(region, Labels):
        dz, dy, dx = region.spacing_mm
        return replace(region, spacing_mm=(dz, 2 * dy, 2 * dx))
    names = {"center_mm", "radius_mm", "size_mm", "start_mm", "end_mm", "width_mm"}
    names |= {"vertices_mm"} if isinstance(region, Path) else set()
    held = {f.name: getattr(region, f.name) for f in fields(region) if f.name in names}
    assert held
    return replace(region, **{name: _twice(value) for name, value in held.items()})


def _twice(value):
    return tuple(map(_twice, value)) if isinstance(value, tuple) else 2 * value


def test_larger_pixels_scale_lengths_only(example):
    if example.keeps_pixel_size:
        pytest.skip("its frequencies are a setting in mm⁻¹")
    plain = quantities_of(run(example))
    dz, dy, dx = example.volume.spacing_mm
    volume = replace(example.volume, spacing_mm=(dz, 2 * dy, 2 * dx), slice_positions_mm=None)
    after = quantities_of(run(example, volume, tuple(map(doubled, example.regions))))
    for name, quantity in plain.items():
        power = example.scales_with_spacing.get(name, 0)
        assert after[name].value == pytest.approx(quantity.value * 2.0**power, rel=1e-9), name


def test_the_settings_name_themselves_completely(example):
    kind = find(NAME[id(example)]).settings_type
    settings = kind(**example.settings)
    assert isinstance(settings, Settings)
    assert kind.model_validate_json(settings.model_dump_json()) == settings
    with pytest.raises(CtMeasureError, match="no setting of"):
        measure(NAME[id(example)], example.volume, example.regions, no_such_setting=1)


def test_every_setting_has_words_for_its_control(example):
    for name, field in find(NAME[id(example)]).settings_type.model_fields.items():
        assert field.description, name


def test_every_column_is_a_field_of_the_result(example):
    found = run(example)
    for name in find(NAME[id(example)]).columns:
        assert hasattr(found, name), name
