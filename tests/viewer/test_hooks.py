"""What napari calls: the reader, its choices, the samples, the commands."""

from __future__ import annotations

import os
import threading
import time

import numpy as np
import pytest
from napari.layers import Image
from series_writer import bare_bytes, ct_slice, line, noise, uid, write_series

from ct_measure_plugin.dicom import scan_series
from ct_measure_plugin.errors import ArgumentError, Cancelled, NoSeriesError
from ct_measure_plugin.physics.volume import Volume
from ct_measure_plugin.viewer import hooks, loading
from ct_measure_plugin.viewer.layers import KEY, own_volume
from ct_measure_plugin.viewer.loading import is_open, name_of, one_slice
from ct_measure_plugin.virtual_scanner import samples

MARK = "ZQXMARK"
SETTING = hooks._setting


@pytest.fixture(autouse=True)
def told(monkeypatch):
    """Collect what would be shown in the corner of the window; forget what was seen before."""
    heard = []
    monkeypatch.setattr(hooks, "_tell", heard.append)
    monkeypatch.setattr(hooks, "_warn", heard.append)
    monkeypatch.setattr(loading, "_seen", loading._Seen())
    return heard


@pytest.fixture
def settings(monkeypatch):
    """Set the plugin's preferences."""
    values = {}
    monkeypatch.setattr(hooks, "_setting", values.get)
    return values


@pytest.fixture
def folder(tmp_path):
    """Five slices of one series, files named without suffix."""
    write_series(tmp_path / "a", noise((5, 16, 18)), line(5))
    return tmp_path / "a"


@pytest.fixture
def two(folder):
    """Two series in one folder tree."""
    write_series(
        folder.parent / "b",
        noise((3, 16, 18), 2),
        line(3),
        SeriesInstanceUID=uid("other series"),
        SeriesNumber=9,
        ConvolutionKernel="SHARP",
    )
    return folder.parent


# --- which paths are ours -------------------------------------------------------------


def test_dicom_files_and_folders_are_taken(folder, tmp_path):
    assert hooks.get_reader(str(folder)) is hooks.read
    assert hooks.get_reader(str(next(folder.iterdir()))) is hooks.read
    assert hooks.get_reader([str(path) for path in folder.iterdir()]) is hooks.read
    bare = bare_bytes(ct_slice(noise((8, 8))), tmp_path / "bare", implicit=True)
    assert hooks.get_reader(bare) is hooks.read


@pytest.mark.parametrize("content", [b"", b"\x89PNG\r\n\x1a\n", b"x" * 200, b"\x08\x00\x77\x33"])
def test_other_files_are_left_to_others(tmp_path, content):
    file = tmp_path / "some file"
    file.write_bytes(content)
    assert hooks.get_reader(str(file)) is None
    assert hooks.get_reader(str(tmp_path)) is None
    assert hooks.get_reader(str(tmp_path / "gone")) is None
    assert hooks.get_reader([]) is None


def test_a_pipe_does_not_make_napari_wait(tmp_path):
    os.mkfifo(tmp_path / "pipe")
    assert hooks.get_reader(str(tmp_path / "pipe")) is None
    assert hooks.get_reader(str(tmp_path)) is None


def test_a_look_stops_after_so_many_files(tmp_path, monkeypatch):
    looked = []
    monkeypatch.setattr(hooks, "_looks_like_dicom", looked.append)
    for number in range(520):
        (tmp_path / f"{number}").touch()
    assert hooks.get_reader(tmp_path) is None
    assert len(looked) == hooks._LOOKS


# --- reading --------------------------------------------------------------------------


def test_a_folder_gives_its_series(folder, told):
    [(data, attributes, kind)] = hooks.read(folder)
    volume = attributes["metadata"][KEY]
    assert kind == "image"
    assert data is volume.hu
    assert data.shape == (5, 16, 18)
    assert attributes["units"] == "mm"
    assert attributes["scale"] == volume.spacing_mm
    assert attributes["translate"] == volume.origin_mm
    assert told == []


def test_a_file_stands_for_its_whole_series_and_says_so(folder, told, settings):
    [(data, _, _)] = hooks.read(next(folder.iterdir()))
    assert data.shape[0] == 5
    assert told == [
        "Opened the whole series of 5 slices that the file belongs to. Preferences can change that."
    ]


def test_one_slice_if_that_is_what_is_wanted(folder, settings, told):
    settings["single_file"] = "that file only"
    whole = hooks.read(folder)[0][1]["metadata"][KEY]
    shown = set()
    for path in folder.iterdir():
        [(data, attributes, _)] = hooks.read(path)
        volume = attributes["metadata"][KEY]
        k = int(np.argmin(abs(whole.positions_mm - volume.origin_mm[0])))
        assert np.array_equal(data[0], whole.plane(k))
        voxel = np.array([0, 3, 4, 1])
        same = np.array([k, 3, 4, 1])
        # positions are stored as decimal text
        assert volume.affine_lps @ voxel == pytest.approx(whole.affine_lps @ same, abs=1e-6)
        shown.add(k)
    assert shown == set(range(5))
    assert told == []


def test_a_selection_of_files_opens_their_series_once(folder, monkeypatch, settings):
    """napari hands a selection over file by file."""
    opened = []
    scans = []
    real = loading.scan_folder
    monkeypatch.setattr(loading, "scan_folder", lambda *a, **k: scans.append(a) or real(*a, **k))
    monkeypatch.setattr(hooks, "_open_layers", lambda: tuple(opened))
    hour_ago = time.time() - 3600
    for path in folder.iterdir():
        os.utime(path, (hour_ago, hour_ago))  # not just written, as nobody's series is
    for path in folder.iterdir():
        for layer in hooks.read(path):
            if len(layer) > 1:  # (None,) means that there is nothing to add
                opened.append(Image(layer[0], **layer[1]))
    assert len(opened) == 1
    assert len(scans) == 1


def test_a_stack_of_files_is_their_series(two, settings):
    files = sorted(path for path in two.rglob("*") if path.is_file())
    layers = hooks.read(files)
    assert sorted(layer[0].shape[0] for layer in layers) == [3, 5]


def test_a_file_that_was_written_over_is_looked_at_anew(folder, settings):
    hooks.read(next(folder.iterdir()))
    write_series(folder, noise((2, 16, 18), 3), line(2, start=50), SeriesInstanceUID=uid("late"))
    late = [entry for entry in scan_series(folder) if entry.slice_count == 2]
    file = next(path for path in folder.iterdir() if late[0].holds(path))
    assert hooks.read(file)[0][0].shape[0] == 2


def test_several_series_without_a_window_are_all_opened(two, settings, monkeypatch):
    monkeypatch.setattr(hooks, "_ask", lambda _entries: None)
    layers = hooks.read(two)
    assert [layer[0].shape[0] for layer in layers] == [5, 3]
    assert layers[1][1]["name"].startswith("CT 9, SHARP")


def test_more_series_than_sensible_are_capped_and_said(two, settings, monkeypatch, told):
    monkeypatch.setattr(hooks, "_ask", lambda _entries: None)
    monkeypatch.setattr(loading, "MOST_AT_ONCE", 1)
    assert len(hooks.read(two)) == 1
    assert told == ["2 series were found; the first 1 were opened."]


def test_someone_may_choose_or_choose_nothing(two, settings, monkeypatch):
    monkeypatch.setattr(hooks, "_ask", lambda entries: entries[1:])
    assert [layer[0].shape[0] for layer in hooks.read(two)] == [3]
    monkeypatch.setattr(hooks, "_ask", lambda _entries: ())
    assert hooks.read(two) == [(None,)]
    settings["several_series"] = "all"
    assert len(hooks.read(two)) == 2


def test_a_folder_without_ct_is_an_error_that_counts(tmp_path):
    (tmp_path / "letter.txt").write_text("Dear colleague")
    with pytest.raises(NoSeriesError, match=r"there is no CT series here; files passed over: 1 ×"):
        hooks.read(tmp_path)


def test_cancelling_loads_nothing(folder, monkeypatch, told):
    from napari.utils.progress import progress

    began = threading.Event()

    def slow(*_args, cancel, **_more):
        began.set()
        while not cancel():
            threading.Event().wait(0.01)
        raise Cancelled("reading was stopped")

    monkeypatch.setattr(loading, "read_series", slow)

    def press_cancel():
        began.wait(5)
        while progress._all_instances:
            for bar in list(progress._all_instances):
                bar.cancel()
            threading.Event().wait(0.01)

    presser = threading.Thread(target=press_cancel)
    presser.start()
    assert hooks.read(folder) == [(None,)]
    presser.join(5)
    assert told == ["Opening was cancelled; nothing was loaded."]


def test_warnings_of_a_series_are_shown_once(tmp_path, told):
    positions = [*line(3), (-10.0, -10.0, 8.0)]
    write_series(tmp_path, noise((4, 16, 18)), positions)
    hooks.read(tmp_path)
    [warning] = told
    assert warning.startswith("CT ")
    assert "leave room for 1 more slice" in warning


def test_no_name_of_a_patient_reaches_a_layer(tmp_path, told):
    """A layer's name and all that hangs on it find their way into tables and file names."""
    write_series(
        tmp_path,
        noise((3, 16, 18)),
        line(3),
        PatientName=MARK,
        PatientID=MARK,
        SeriesDescription=f"Head {MARK}",
        InstitutionName=MARK,
    )
    [(_, attributes, _)] = hooks.read(tmp_path)
    assert MARK not in repr(attributes)
    assert MARK not in repr(told)


# --- pieces ---------------------------------------------------------------------------


def test_a_layer_s_name_tells_series_apart(two):
    names = [name_of(entry) for entry in scan_series(two)]
    assert len(set(names)) == 2
    assert names[1].startswith("CT 9, SHARP")


def test_one_slice_of_an_uneven_stack_keeps_its_place():
    affine = np.eye(4)
    affine[:3, 0] = (0, 0, 2.0)
    volume = Volume(
        np.arange(4 * 6).reshape(4, 2, 3),
        spacing_mm=(2, 1, 1),
        slice_positions_mm=[0, 2, 7, 9],
        affine_lps=affine,
        padding_hu=np.array([[-1, -1], [-2, -2], [-3, -3], [-4, -4]], float),
    )
    found = one_slice(volume, 2)
    assert found.origin_mm[0] == 7
    assert found.affine_lps[:3, 3] == pytest.approx((0, 0, 7))
    assert found.padding_hu.tolist() == [[-3, -3]]
    assert np.array_equal(found.hu[0], volume.hu[2])
    with pytest.raises(ArgumentError, match="'index' must be 0 to 3, got 4"):
        one_slice(volume, 4)


def test_an_open_series_is_recognised(two):
    first, second = scan_series(two)
    [(data, attributes, _)] = loading.layers_of([first])
    layers = [Image(np.zeros((2, 2))), Image(data, **attributes)]
    assert is_open(first, layers)
    assert not is_open(second, layers)


# --- samples and commands -------------------------------------------------------------


@pytest.mark.parametrize("name", samples.names())
def test_every_sample_opens_under_its_title(name):
    command = getattr(hooks, f"sample_{name.replace('-', '_')}")
    [(data, attributes, _)] = command()
    assert attributes["name"] == samples.sample(name).title
    assert data.shape[0] == len(samples.sample(name).recipe.positions_mm)


def test_new_regions_lie_where_the_image_lies(viewer_model, volume, told):
    hooks.new_regions(viewer_model)
    assert told == ["There is no image layer to draw regions on."]
    data, attributes, _ = loading.layer_of(volume)
    image = viewer_model.add_image(data, **attributes)
    hooks.new_regions(viewer_model)
    regions = viewer_model.layers[-1]
    assert regions.units == image.units
    assert tuple(regions.translate) == tuple(image.translate)
    assert regions.mode == "add_ellipse"


# --- inside napari --------------------------------------------------------------------


@pytest.mark.canvas
def test_napari_opens_folder_file_and_sample(make_napari_viewer, folder):
    viewer = make_napari_viewer()
    [layer] = viewer.open(str(folder), plugin="ct-measure-plugin")
    assert layer.source.reader_plugin == "ct-measure-plugin"
    assert own_volume(layer).shape == (5, 16, 18)
    assert f"{layer.units[0]:~P}" == "mm"
    viewer.layers.clear()
    [layer] = viewer.open(str(next(folder.iterdir())), plugin="ct-measure-plugin")
    assert layer.data.shape[0] == 5
    [layer] = viewer.open_sample("ct-measure-plugin", "enhanced")
    assert layer.name == samples.sample("enhanced").title


@pytest.mark.canvas
def test_the_settings_are_napari_s_own(make_napari_viewer, folder, monkeypatch):
    make_napari_viewer()
    monkeypatch.setattr(hooks, "_setting", SETTING)
    from napari.settings import get_plugin_settings

    reading = get_plugin_settings("ct-measure-plugin").reading
    assert (reading.several_series, reading.single_file) == ("ask", "whole series")
    reading.single_file = "that file only"
    try:
        [(data, _, _)] = hooks.read(next(folder.iterdir()))
    finally:
        reading.single_file = "whole series"
    assert data.shape[0] == 1
