"""The display windows a header offers (PS3.3, C.11.2.1.2)."""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING, Literal, cast

from ct_measure_plugin.dicom import tags
from ct_measure_plugin.dicom.texts import shown_text
from ct_measure_plugin.physics.volume import HeaderWindow

if TYPE_CHECKING:
    from ct_measure_plugin.dicom.elements import Elements

__all__ = ["windows_of"]

_FUNCTIONS = ("LINEAR", "LINEAR_EXACT", "SIGMOID")


def windows_of(own: Elements, whole: Elements) -> tuple[HeaderWindow, ...]:
    """Return the windows of one image; those its function forbids are left out.

    Parameters
    ----------
    own : Elements
        The image's elements.
    whole : Elements
        The file's elements, for its character set.
    """
    if tags.WINDOW_CENTRE not in own:
        return ()
    return _windows(
        own.numbers(tags.WINDOW_CENTRE),
        own.numbers(tags.WINDOW_WIDTH),
        own.raw(tags.WINDOW_EXPLANATION),
        own.text(tags.WINDOW_FUNCTION) or "LINEAR",
        whole.text(tags.CHARACTER_SET),
    )


@lru_cache(maxsize=512)
def _windows(
    centres: tuple[float | None, ...],
    widths: tuple[float | None, ...],
    explanations: bytes,
    function: str,
    charset: str,
) -> tuple[HeaderWindow, ...]:
    if function not in _FUNCTIONS:
        return ()
    names = explanations.split(b"\\")
    narrowest = 1.0 if function == "LINEAR" else 1e-9
    found = []
    for index, (centre, width) in enumerate(zip(centres, widths, strict=False)):
        if centre is None or width is None or width < narrowest:
            continue
        name = shown_text(names[index], charset) if index < len(names) else ""
        kind = cast("Literal['LINEAR', 'LINEAR_EXACT', 'SIGMOID']", function)
        found.append(HeaderWindow(centre, width, name, kind))
    return tuple(found)
