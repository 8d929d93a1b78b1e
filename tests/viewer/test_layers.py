"""Layers and Volumes: whatever a layer's units, axes and place, millimetres mean the same."""

from __future__ import annotations

import copy
from dataclasses import replace

import dask.array as da
import numpy as np
import pytest
from napari.layers import Image

from ct_measure_plugin.errors import ArgumentError
from ct_measure_plugin.physics.volume import HeaderWindow, Volume
from ct_measure_plugin.viewer.layers import (
    KEY,
    Asked,
    contrast_limits_for,
    is_ct,
    layer_of,
    placement_of,
    questions_for,
    shows_slab,
    volume_of,
)

VALUES = np.arange(4 * 5 * 6, dtype=np.int16).reshape(4, 5, 6)
EXACT = 1e-9  # a few products of doubles


def own_layer(volume, **changes):
    data, attributes, _ = layer_of(volume)
    return Image(data, **{**attributes, **changes})


def foreign(data=VALUES, **attributes):
    return Image(data, rgb=False, **attributes)


def test_own_layer_gives_back_the_very_volume(volume):
    layer = own_layer(volume)
    assert volume_of(layer) is volume
    assert is_ct(layer)
    assert questions_for(layer) == ()


def test_world_and_frame_are_the_same_millimetres(volume):
    layer = own_layer(volume)
    world = (-13.7, -9.1, 20.4)
    assert placement_of(layer).frame_of(world) == pytest.approx(world, abs=EXACT)
    assert [f"{unit:~P}" for unit in layer.units] == ["mm"] * 3
    assert tuple(layer.axis_labels) == ("z", "y", "x")


def test_contrast_limits_come_from_the_header(volume):
    assert tuple(own_layer(volume).contrast_limits) == (-160, 239)  # LINEAR 40/400


def test_contrast_limits_without_a_linear_header_window():
    plain = Volume(VALUES, spacing_mm=(1, 1, 1), windows=(HeaderWindow(1, 9, "", "SIGMOID"),))
    assert contrast_limits_for(plain) == (-150, 249)  # LINEAR 50/400
    other = Volume(VALUES, spacing_mm=(1, 1, 1), unit="US")
    assert contrast_limits_for(other) == (60, 89)  # lowest and highest of the middle slice


def test_unevenly_spaced_slices_keep_their_own_z():
    volume = Volume(
        VALUES, spacing_mm=(1, 1, 1), slice_positions_mm=[10, 11, 14, 15], origin_mm=(10, 0, 0)
    )
    place = placement_of(own_layer(volume))
    assert place.frame_of((12.0, 0, 0))[0] == pytest.approx(14.0, abs=EXACT)
    assert place.frame_of((12.5, 0, 0))[0] == pytest.approx(14.5, abs=EXACT)
    assert place.frame_of((9.0, 0, 0))[0] == pytest.approx(9.0, abs=EXACT)
    for z in (8.0, 10.5, 13.0, 15.0, 16.5):
        assert place.frame_of(place.world_of((z, 2, 3))) == pytest.approx((z, 2, 3), abs=EXACT)


def test_a_layer_moved_by_hand_is_measured_where_it_is(volume):
    layer = own_layer(volume)
    layer.scale = (2.5, 1.4, 1.4)
    found = volume_of(layer)
    assert found.spacing_mm == pytest.approx((2.5, 1.4, 1.4))
    assert found.source == replace(volume.source, spacing_source="napari layer")
    assert found.windows == volume.windows


def test_changed_data_do_not_pass_for_the_old(volume):
    layer = own_layer(volume)
    layer.data = volume.hu * 2
    assert np.array_equal(volume_of(layer).hu, volume.hu * 2)


def test_a_duplicate_still_knows_its_volume(volume):
    data, attributes, _ = copy.deepcopy(own_layer(volume).as_layer_data_tuple())
    twin = Image(data, **attributes)
    found = volume_of(twin)
    assert found.unit == "HU"
    assert found.spacing_mm == volume.spacing_mm
    assert not any(one.code == "hu-assumed" for one in found.cautions)


def test_pixels_must_be_asked_for():
    layer = foreign()
    assert questions_for(layer) == ("spacing", "unit")
    with pytest.raises(ArgumentError, match="'layer' must be in a unit of length, or its pixel"):
        volume_of(layer)


def test_a_spacing_entered_by_hand_is_stated():
    layer = foreign(scale=(3.0, 0.5, 0.5), translate=(6.0, 1.0, 2.0))
    place = placement_of(layer, Asked(spacing_mm=(5.0, 0.8, 0.9)))
    found = place.volume
    assert found.spacing_mm == (5.0, 0.8, 0.9)
    assert found.source.spacing_source == "entered by hand"
    codes = [one.code for one in found.cautions]
    assert codes == ["spacing-assumed", "hu-assumed"]
    assert "5 × 0.8 × 0.9 mm" in found.cautions[0].text
    # voxel (1, 2, 3) stands at world (9, 2, 3.5) and, in mm, one spacing a step further on
    first, one = place.frame_of((6.0, 1.0, 2.0)), place.frame_of((9.0, 2.0, 3.5))
    assert np.subtract(one, first) == pytest.approx((5.0, 1.6, 2.7), abs=EXACT)


def test_another_unit_is_no_hu():
    layer = foreign(units="mm")
    found = volume_of(layer, Asked(unit="1/cm"))
    assert found.unit == "1/cm"
    assert [one.code for one in found.cautions] == ["not-hu"]


def test_micrometres_become_millimetres():
    layer = foreign(units="um", scale=(2500, 700, 600), translate=(0, 0, 1000))
    found = volume_of(layer)
    assert found.spacing_mm == pytest.approx((2.5, 0.7, 0.6))
    assert found.origin_mm == pytest.approx((0, 0, 1.0))


def test_geometry_in_the_affine_counts():
    affine = np.diag([2.0, 0.5, 0.25, 1.0])
    affine[:3, 3] = (7, 8, 9)
    found = volume_of(foreign(units="mm", affine=affine))
    assert found.spacing_mm == pytest.approx((2, 0.5, 0.25))
    assert found.origin_mm == pytest.approx((7, 8, 9))


@pytest.mark.parametrize("axis", [0, 1, 2])
def test_a_mirrored_axis_still_meets_its_voxels(axis):
    scale = [2.0, 0.5, 0.5]
    scale[axis] *= -1
    layer = foreign(units="mm", scale=scale, translate=(10, 20, 30))
    place = placement_of(layer)
    assert place.volume.spacing_mm == pytest.approx((2.0, 0.5, 0.5))
    for index in ((0, 0, 0), (3, 1, 4)):
        z, y, x = place.frame_of(layer.data_to_world(index))
        dz, dy, dx = place.volume.spacing_mm
        z_0, y_0, x_0 = place.volume.origin_mm
        assert ((z - z_0) / dz, (y - y_0) / dy, (x - x_0) / dx) == pytest.approx(index, abs=EXACT)
        assert place.plane_of(layer.data_to_world(index)) == index[0]
        assert place.world_of((z, y, x)) == pytest.approx(layer.data_to_world(index), abs=EXACT)


def test_a_layer_turned_in_plane_keeps_its_pixel_size():
    turn = np.deg2rad(30)
    affine = np.eye(4)
    affine[1:3, 1:3] = [[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]]
    found = volume_of(foreign(units="mm", affine=affine, scale=(3, 0.5, 0.5)))
    assert found.spacing_mm == pytest.approx((3, 0.5, 0.5))
    assert found.tilt_deg == pytest.approx(0, abs=1e-5)  # acos near 1 keeps half the digits


@pytest.mark.filterwarnings("ignore:Non-orthogonal slicing")  # napari, of its own drawing
def test_a_leaning_stack_gives_its_tilt_and_perpendicular_gap():
    affine = np.eye(4)
    affine[1, 0] = np.tan(np.deg2rad(15)) * 2.0
    affine[0, 0] = 2.0
    found = volume_of(foreign(units="mm", affine=affine))
    assert found.tilt_deg == pytest.approx(15)
    assert found.spacing_mm[0] == pytest.approx(2.0)
    assert [one.code for one in found.cautions] == ["gantry-tilt", "hu-assumed"]


def test_rows_and_columns_askew_are_refused():
    with pytest.raises(ArgumentError, match="rows and columns at right angles"):
        volume_of(foreign(units="mm", shear=[0, 0, 0.3]))


def test_a_flat_layer_is_one_slice():
    place = placement_of(foreign(VALUES[0], units="mm", scale=(0.5, 0.25), translate=(3, 4)))
    assert place.volume.shape == (1, 5, 6)
    assert place.volume.spacing_mm == (1.0, 0.5, 0.25)
    assert place.frame_of((3.5, 4.25)) == pytest.approx((0.0, 3.5, 4.25))
    assert place.frame_of((99.0, 3.5, 4.25)) == pytest.approx((0.0, 3.5, 4.25))  # a deep viewer
    assert place.world_of((0.0, 3.5, 4.25)) == pytest.approx((3.5, 4.25))


def test_the_finest_level_is_measured():
    layer = Image([VALUES, VALUES[:, ::2, ::2]], multiscale=True, units="mm", scale=(2, 0.5, 0.5))
    found = volume_of(layer)
    assert found.shape == VALUES.shape
    assert found.spacing_mm == pytest.approx((2, 0.5, 0.5))


def test_lazy_data_stay_lazy():
    lazy = da.from_array(VALUES, chunks=(1, 5, 6))
    found = volume_of(foreign(lazy, units="mm", contrast_limits=(0, 1)))
    assert isinstance(found.hu, da.Array)
    assert np.array_equal(found.plane(2), VALUES[2])


def test_colours_are_refused():
    with pytest.raises(ArgumentError, match="'layer' must hold CT numbers, not colours"):
        volume_of(Image(np.zeros((8, 8, 3), np.uint8), rgb=True))


def test_a_fourth_axis_is_held_where_the_viewer_stands():
    deep = np.stack([VALUES, VALUES + 1000])
    layer = foreign(deep, units="mm", scale=(10, 2, 1, 1))
    with pytest.raises(ArgumentError, match="must have three axes, or the viewer must say"):
        volume_of(layer)
    place = placement_of(layer, point=(10.0, 2.0, 0, 0))
    assert place.leading == (1,)
    assert np.array_equal(place.volume.hu, VALUES + 1000)
    assert place.plane_of((10.0, 2.0, 0, 0)) == 1
    assert place.world_of((2.0, 1.0, 1.0)) == pytest.approx((10, 2, 1, 1))


def test_a_slab_on_the_canvas_is_noticed(viewer_model):
    viewer_model.add_layer(foreign(units="mm"))
    layer, dims = viewer_model.layers[0], viewer_model.dims
    assert not shows_slab(layer, dims)
    dims.margin_left = (1.0, 0, 0)
    assert shows_slab(layer, dims)
    layer.projection_mode = "none"
    assert not shows_slab(layer, dims)


def test_our_layers_never_show_a_slab(volume):
    assert str(own_layer(volume).projection_mode) == "none"


def test_the_plane_is_the_one_napari_draws(viewer_model, volume):
    viewer_model.add_layer(own_layer(volume))
    layer = viewer_model.layers[0]
    for step in range(6):
        viewer_model.dims.set_current_step(0, step)
        k = placement_of(layer).plane_of(viewer_model.dims.point)
        assert np.array_equal(np.asarray(layer._slice.image.raw), volume.plane(k))


def test_metadata_hold_nothing_but_the_volume(volume):
    assert own_layer(volume).metadata == {KEY: volume}
