"""The functions that napari.yaml points to. They import what they need when they are called."""

from __future__ import annotations

import os
from functools import partial
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Sequence

    import napari.viewer

    from ct_measure_plugin.dicom import SeriesEntry
    from ct_measure_plugin.viewer.layers import LayerTuple

    Paths = str | os.PathLike[str] | Sequence[str | os.PathLike[str]]

__all__ = [
    "get_reader",
    "new_regions",
    "read",
    "sample_cup",
    "sample_enhanced",
    "sample_low_dose",
    "sample_repeat",
    "sample_rings",
    "sample_sharp",
    "sample_standard",
    "sample_thin_steps",
]

#: napari's word for "handled, and nothing to add".
_NOTHING: list[Any] = [(None,)]

#: Files looked at in a folder before it is called no DICOM folder; a look takes about 0.03 ms.
_LOOKS = 500

#: First elements of a DICOM file without preamble, little endian: group 0008 or 0002, a low
#: element number.
_BARE_GROUPS = (b"\x08\x00", b"\x02\x00")
_BARE_ELEMENTS = (b"\x00\x00", b"\x01\x00", b"\x05\x00", b"\x08\x00", b"\x12\x00", b"\x16\x00")


# --- reading --------------------------------------------------------------------------


def get_reader(path: Paths) -> Callable[[Paths], list[Any]] | None:
    """Return the reader if a path looks like DICOM; napari asks this about every path it opens.

    A file is looked at for its first 132 bytes, a folder for its first files.
    """
    paths = _as_paths(path)
    if paths and all(_looks_right(one) for one in paths[:3]):
        return read
    return None


def read(path: Paths) -> list[Any]:
    """Return the layers of the CT series under a folder, or that a file belongs to.

    Raises
    ------
    SeriesError
        If there is none, or it cannot be read.
    """
    from ct_measure_plugin.errors import Cancelled

    try:
        return _read(_as_paths(path))
    except Cancelled:
        _tell("Opening was cancelled; nothing was loaded.")
        return _NOTHING


def _read(paths: Sequence[Path]) -> list[Any]:
    from ct_measure_plugin.viewer import loading

    entries = loading.entries_at(paths)
    single = len(paths) == 1 and not paths[0].is_dir() and len(entries) == 1
    if single:
        return _read_around(paths[0], entries[0])
    chosen = _choose(entries) if len(entries) > 1 else entries
    if not chosen:
        return _NOTHING
    layers = loading.layers_of(chosen)
    _tell_cautions(layers)
    return layers


def _read_around(path: Path, entry: SeriesEntry) -> list[Any]:
    """Open the series that one file belongs to, or that file alone, as the settings say."""
    from ct_measure_plugin.viewer import loading

    if entry.slice_count == 1 or len(entry.places_of(path)) == entry.slice_count:
        layers = loading.layers_of([entry])
    elif _setting("single_file", "whole series") == "that file only":
        layers = loading.layers_of([entry], only=path)
    else:
        if loading.is_open(entry, _open_layers()):
            return _NOTHING  # napari hands over a selection of files one by one
        layers = loading.layers_of([entry])
        _tell(
            f"Opened the whole series of {entry.slice_count} slices that the file belongs to."
            " Preferences can change that."
        )
    _tell_cautions(layers)
    return layers


def _choose(entries: Sequence[SeriesEntry]) -> Sequence[SeriesEntry]:
    """Return the series to open: asked for where someone can answer, else all of them."""
    from ct_measure_plugin.viewer.loading import MOST_AT_ONCE

    if _setting("several_series", "ask") == "ask":
        answer = _ask(entries)
        if answer is not None:
            return answer
    if len(entries) > MOST_AT_ONCE:
        _warn(f"{len(entries)} series were found; the first {MOST_AT_ONCE} were opened.")
    return entries[:MOST_AT_ONCE]


def _ask(entries: Sequence[SeriesEntry]) -> Sequence[SeriesEntry] | None:
    """Return what someone chose, None if there is no window to ask in."""
    import sys

    if not any(name in sys.modules for name in ("qtpy", "PySide6", "PyQt6")):
        return None
    from ct_measure_plugin.viewer.docks.series_chooser import ask_which

    return ask_which(entries)


def _as_paths(path: Paths) -> list[Path]:
    several = isinstance(path, (list, tuple))
    return [Path(one) for one in path] if several else [Path(path)]  # type: ignore[arg-type, union-attr]


def _looks_right(path: Path) -> bool:
    try:
        if path.is_dir():
            return any(_looks_like_dicom(one) for one in islice(_files_below(path), _LOOKS))
        return _looks_like_dicom(path)
    except OSError:
        return False


def _files_below(folder: Path) -> Iterator[Path]:
    for where, folders, names in os.walk(folder):
        folders.sort()
        for name in sorted(names):
            yield Path(where) / name


def _looks_like_dicom(path: Path) -> bool:
    """Tell from a file's first bytes whether it is DICOM: by its mark, or a bare first element."""
    try:
        if not path.is_file():
            return False
        with path.open("rb") as file:
            head = file.read(132)
    except OSError:
        return False
    bare = head[:2] in _BARE_GROUPS and head[2:4] in _BARE_ELEMENTS
    return head[128:132] == b"DICM" or bare


# --- sample data ----------------------------------------------------------------------


def _sample(name: str) -> list[LayerTuple]:
    """Return a sample volume's layer."""
    from ct_measure_plugin.viewer import loading
    from ct_measure_plugin.virtual_scanner import samples

    sample = samples.sample(name)
    entries = loading.entries_at([samples.folder(name)])
    return loading.layers_of(entries[:1], names=[sample.title])


sample_standard = partial(_sample, "standard")
sample_sharp = partial(_sample, "sharp")
sample_low_dose = partial(_sample, "low-dose")
sample_repeat = partial(_sample, "repeat")
sample_rings = partial(_sample, "rings")
sample_cup = partial(_sample, "cup")
sample_thin_steps = partial(_sample, "thin-steps")
sample_enhanced = partial(_sample, "enhanced")


# --- commands -------------------------------------------------------------------------


def new_regions(viewer: napari.viewer.Viewer) -> None:
    """Add an empty layer for regions that lies just where the image does, ready to draw discs."""
    from ct_measure_plugin.viewer.session import Session
    from ct_measure_plugin.viewer.shapes import new_regions_layer

    session = Session.of(viewer)
    images = session.chosen_images()
    if not images:
        _warn("There is no image layer to draw regions on.")
        return
    layer = new_regions_layer(session.viewer, images[0])
    layer.mode = "add_ellipse"


# --- telling --------------------------------------------------------------------------


def _tell_cautions(layers: Sequence[LayerTuple]) -> None:
    """Show each series' warnings once, when it is opened; every result carries them as well."""
    from ct_measure_plugin.viewer.layers import KEY

    for _, attributes, _ in layers:
        cautions = attributes["metadata"][KEY].cautions
        warnings = [str(one) for one in cautions if one.kind.level == "warning"]
        if warnings:
            _warn(f"{attributes['name']}: " + " ".join(warnings))


def _tell(text: str) -> None:
    from napari.utils.notifications import show_info

    show_info(text)


def _warn(text: str) -> None:
    from napari.utils.notifications import show_warning

    show_warning(text)


def _open_layers() -> tuple[Any, ...]:
    from napari import current_viewer

    viewer = current_viewer()
    return () if viewer is None else tuple(viewer.layers)


def _setting(name: str, default: str) -> str:
    """Return one of the plugin's settings in napari's preferences."""
    from napari.settings import get_plugin_settings

    try:
        return str(getattr(get_plugin_settings("ct-measure-plugin").reading, name))
    except (KeyError, AttributeError):  # the plugin is used without being discovered
        return default
