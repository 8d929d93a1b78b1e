"""Label maps out of files: numpy arrays, TIFF, and DICOM Segmentation.

A map without a grid of its own lies on the voxels of the volume it was painted on, so it must have
its shape. An ``.npz`` may bring its grid: ``labels``, ``spacing_mm`` and ``origin_mm`` as z, y, x.
"""

from __future__ import annotations

import zipfile
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ct_measure_plugin.errors import ArgumentError, LabelFileError
from ct_measure_plugin.physics.regions import LONGEST_CODE, Labels

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.volume import Volume

__all__ = ["read_labels", "write_labels"]

_TIFF = (".tif", ".tiff")


def read_labels(path: str | Path, volume: Volume) -> Labels:
    """Read a label map.

    Parameters
    ----------
    path : path
        ``.npy``, ``.npz``, ``.tif`` or ``.tiff``; anything else is tried as DICOM Segmentation.
    volume : Volume
        On whose voxels the map lies unless it brings a grid of its own.

    Raises
    ------
    LabelFileError
        If the file cannot be read, holds something else, or has another shape than the volume and
        no grid.
    SeriesError
        If it is a DICOM Segmentation that is damaged or lies on another grid.

    Examples
    --------
    >>> import tempfile, ct_measure_plugin as ctm
    >>> volume = ctm.Volume(np.zeros((2, 3, 4)), (2.0, 0.5, 0.5))
    >>> place = Path(tempfile.mkdtemp()) / "organs.npz"
    >>> painted = np.zeros((2, 3, 4), np.uint8); painted[0, 1, 1:3] = 7
    >>> read_labels(write_labels(Labels(painted, (2.0, 0.5, 0.5)), place), volume).numbers()
    (7,)
    """
    file = Path(path)
    suffix = file.suffix.lower()
    try:
        if suffix == ".npy":
            return _on(volume, np.load(file, allow_pickle=False), file.name)
        if suffix == ".npz":
            return _archive(file, volume)
        if suffix in _TIFF:
            return _on(volume, _tiff(file), file.name)
    except OSError as error:
        why = error.strerror or "it is damaged"
        raise LabelFileError(f"{file.name} cannot be read ({why})") from None
    except (ValueError, EOFError, zipfile.BadZipFile, MemoryError) as error:
        if isinstance(error, ArgumentError):
            raise LabelFileError(f"{file.name}: {error}") from None
        raise LabelFileError(f"{file.name} is no {suffix} file of plain numbers") from None
    return _segmentation(file, volume)


def write_labels(labels: Labels, path: str | Path) -> Path:
    """Write a label map with its grid and names as ``.npz``, for :func:`read_labels`."""
    file = Path(path)
    if file.suffix.lower() != ".npz":
        raise ArgumentError("path", "must end in .npz, which can hold the grid", file.name)
    np.savez_compressed(
        file,
        labels=labels.labels,
        spacing_mm=np.asarray(labels.spacing_mm, float),
        origin_mm=np.asarray(labels.origin_mm, float),
        names=np.asarray([f"{number}\t{name}" for number, name in labels.names], dtype=str),
        codes=np.asarray([f"{number}\t{code}" for number, code in labels.codes], dtype=str),
        z_mm=np.asarray([] if labels.z_mm is None else labels.z_mm, float),
    )
    return file


def _archive(file: Path, volume: Volume) -> Labels:
    with np.load(file, allow_pickle=False) as archive:
        held = {name: archive[name] for name in archive.files}
    if "labels" not in held:
        raise LabelFileError(f"{file.name} holds no array called labels")
    numbers = _whole(held["labels"], file.name)
    more: dict[str, Any] = {
        name: _texts(held[name], file.name) for name in ("names", "codes") if name in held
    }
    if "spacing_mm" not in held:
        on = _on(volume, numbers, file.name)
        return Labels(on.labels, on.spacing_mm, on.origin_mm, z_mm=on.z_mm, **more)
    if "z_mm" in held and held["z_mm"].size:
        z = held["z_mm"].ravel()
        more["z_mm"] = float(z[0]) if z.size == 1 else tuple(z.tolist())
    spacing = _triple(held["spacing_mm"], "spacing_mm")
    origin = _triple(held.get("origin_mm", np.zeros(3)), "origin_mm")
    return Labels(numbers, spacing, origin, **more)


def _triple(given: NDArray[Any], name: str) -> tuple[float, float, float]:
    if given.shape != (3,) or given.dtype.kind not in "iuf":
        raise ArgumentError(name, "must hold three lengths z, y, x", given.shape)
    z, y, x = (float(length) for length in given)
    return z, y, x


def _texts(given: NDArray[Any], name: str) -> tuple[tuple[int, str], ...]:
    found = []
    for line in given.ravel().tolist():
        number, tab, text = str(line).partition("\t")
        if not tab or not number.lstrip("-").isdecimal():
            raise LabelFileError(f"{name} names labels otherwise than by number, tab and text")
        found.append((int(number), text))
    return tuple(found)


def _tiff(file: Path) -> NDArray[Any]:
    import tifffile

    try:
        found: NDArray[Any] = tifffile.imread(file)
    except (tifffile.TiffFileError, KeyError, IndexError, TypeError, RuntimeError):
        raise LabelFileError(f"{file.name} is no .tif file of plain numbers") from None
    if not found.size:
        raise LabelFileError(f"{file.name} is no .tif file of plain numbers")
    return found


def _whole(given: NDArray[Any], name: str) -> NDArray[Any]:
    """Return whole numbers; floats that hold nothing else are taken."""
    if given.dtype.kind == "b":
        return given.astype(np.uint8)
    if given.dtype.kind == "f" and bool(np.all(np.rint(given) == given)):
        return given.astype(np.int64)
    if given.dtype.kind not in "iu":
        raise LabelFileError(f"{name} holds no whole numbers, so it is no label map")
    return given


def _on(volume: Volume, given: NDArray[Any], name: str) -> Labels:
    """Return a map on the volume's voxels."""
    numbers = _whole(given, name)
    if numbers.ndim == 2 and volume.shape[0] == 1:
        numbers = numbers[None]
    if numbers.shape != volume.shape:
        shapes = (" × ".join(map(str, shape)) for shape in (numbers.shape, volume.shape))
        mine, theirs = shapes
        raise LabelFileError(
            f"{name} has {mine} voxels and the volume {theirs}; a map of another grid needs an .npz"
            " with labels, spacing_mm and origin_mm"
        )
    return Labels(numbers, volume.spacing_mm, volume.origin_mm)


def _segmentation(file: Path, volume: Volume) -> Labels:
    from ct_measure_plugin.dicom.segmentation import read_segmentation

    found = read_segmentation(file, volume)
    names = tuple((number, one.name) for number, one in sorted(found.classes.items()))
    codes = tuple(
        (number, one.kind.text)
        for number, one in sorted(found.classes.items())
        if one.kind is not None and len(one.kind.value) <= LONGEST_CODE
    )
    return Labels(found.labels, volume.spacing_mm, volume.origin_mm, names=names, codes=codes)
