"""Enhanced multi-frame files: every frame's own elements from the functional groups.

PS3.3, C.7.6.16: a frame's attributes are in its item of the per-frame groups, or in the shared
groups where they are the same for all frames.
"""

from __future__ import annotations

from typing import Final

from ct_measure_plugin.dicom import tags
from ct_measure_plugin.dicom.elements import Elements
from ct_measure_plugin.dicom.header import UnreadableFileError

__all__ = ["frame_items"]

_MACROS: Final = (
    tags.CT_FRAME_TYPE,
    tags.FRAME_CONTENT,
    tags.PLANE_POSITION,
    tags.PLANE_ORIENTATION,
    tags.PIXEL_MEASURES,
    tags.VALUE_TRANSFORMATION,
    tags.FRAME_WINDOWS,
    tags.CT_EXPOSURE,
    tags.CT_X_RAY,
    tags.CT_RECONSTRUCTION,
    tags.CT_POSITION,
)


def frame_items(elements: Elements, count: int) -> list[Elements] | None:
    """Return one set of elements a frame, or None for a single image without groups.

    Raises
    ------
    UnreadableFileError
        If a file of several frames does not say where each of them lies.
    """
    frames = elements.items.get(tags.FRAME_GROUPS, [])
    shared = elements.first_item(tags.SHARED_GROUPS)
    if not frames:
        if count > 1:
            raise UnreadableFileError("several frames without a position of their own")
        return None if shared is None else [_flat(elements, shared, shared)]
    if len(frames) != count:
        raise UnreadableFileError(f"{count} frames are declared and {len(frames)} are described")
    return [_flat(elements, shared, frame) for frame in frames]


def _flat(whole: Elements, shared: Elements | None, frame: Elements) -> Elements:
    """Return the frame's elements as if it were a classic image."""
    flat = Elements(whole.data, whole.encoding)
    for macro in _MACROS:
        item = frame.first_item(macro)
        if item is None and shared is not None:
            item = shared.first_item(macro)
        if item is not None:
            flat.found.update(item.found)
    return flat
