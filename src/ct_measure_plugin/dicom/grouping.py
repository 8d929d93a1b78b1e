"""From images to stacks: which of them make one volume, and in which order they lie.

One series UID may hold several volumes (two orientations, two phases, two acquisitions). Images
are put together by plane size, pixel size, orientation and rescaled unit; where several then
share a position, by whatever tells them apart.
"""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass
from itertools import combinations
from typing import TYPE_CHECKING, Final

import numpy as np

from ct_measure_plugin.dicom.geometry import SAME_PLACE_MM, Frame, frame_of
from ct_measure_plugin.dicom.syntaxes import SYNTAXES

if TYPE_CHECKING:
    from collections.abc import Callable, Hashable, Iterable, Sequence

    from ct_measure_plugin.dicom.facts import ImageFacts

__all__ = ["Stack", "stacks_of"]

#: orientations nearer than this are one (0.06°, below the tilt that is reported)
_SAME_COSINE: Final = 1e-3
#: pixel sizes nearer than this, as a fraction, are one
_SAME_SPACING: Final = 1e-4


@dataclass(slots=True, eq=False)
class Stack:
    """Images of one volume, ordered along the normal.

    Attributes
    ----------
    images : list of ImageFacts
        Lowest position first.
    frame : Frame or None
        None if position or orientation is missing; the stack then is a single image.
    copies, rivals : int
        Images left out because another at their position is the same object (the same instance
        UID, perhaps in another encoding), or a different one that nothing tells apart.
    split_by : str
        What told this stack from others of its series UID; empty if nothing had to.
    """

    images: list[ImageFacts]
    frame: Frame | None
    copies: int = 0
    rivals: int = 0
    split_by: str = ""


def stacks_of(images: Iterable[ImageFacts]) -> list[Stack]:
    """Return the stacks of one series UID, in an order that does not depend on file names."""
    stacks: list[Stack] = []
    groups = _alike(images)
    for group in groups:
        frame = frame_of(group[0].orientation)
        if frame is None or any(image.position is None for image in group):
            stacks.extend(_alone(group, frame))
        else:
            stacks.extend(_ordered(group, frame))
    if len(groups) > 1:
        for stack in stacks:
            stack.split_by = stack.split_by or "orientation, plane size, pixel size or unit"
    stacks.sort(key=lambda stack: (-len(stack.images), stack.images[0].instance_uid))
    return stacks


def _alone(group: list[ImageFacts], frame: Frame | None) -> list[Stack]:
    """Images without a place are volumes of one slice: their order is unknown."""
    placed = [image for image in group if frame is not None and image.position is not None]
    lost = [image for image in group if frame is None or image.position is None]
    stacks = [Stack([image], None, split_by="missing positions") for image in lost]
    if placed and frame is not None:
        stacks.extend(_ordered(placed, frame))
    return stacks


def _alike(images: Iterable[ImageFacts]) -> list[list[ImageFacts]]:
    """Group by plane size, pixel size, orientation and unit, forgiving rounding."""
    exact: dict[tuple[object, ...], list[ImageFacts]] = defaultdict(list)
    for image in images:
        layout = image.layout
        exact[
            layout.rows,
            layout.columns,
            image.rescale_type,
            image.slope is None or image.intercept is None,
            image.orientation,
            image.pixel_spacing,
        ].append(image)
    merged: list[tuple[tuple[object, ...], list[ImageFacts]]] = []
    for key, group in sorted(exact.items(), key=lambda item: (-len(item[1]), repr(item[0]))):
        for other, target in merged:
            if key[:4] == other[:4] and _close(group[0], target[0]):
                target.extend(group)
                break
        else:
            merged.append((key, group))
    return [group for _, group in merged]


def _close(a: ImageFacts, b: ImageFacts) -> bool:
    if a.orientation is None or b.orientation is None or not a.pixel_spacing or not b.pixel_spacing:
        return a.orientation == b.orientation and a.pixel_spacing == b.pixel_spacing
    cosines = np.abs(np.subtract(a.orientation, b.orientation))
    steps = np.abs(np.divide(a.pixel_spacing, b.pixel_spacing) - 1)
    return bool(np.all(cosines <= _SAME_COSINE) and np.all(steps <= _SAME_SPACING))


def _ordered(group: list[ImageFacts], frame: Frame) -> list[Stack]:
    """Order along the normal; where positions are taken twice, split or leave out."""
    places, images = _by_place(group, frame)
    if len(places) == len(images):
        return [Stack(images, frame)]
    images, copies = _without_copies(places)
    places, images = _by_place(images, frame)
    if len(places) == len(images):
        return [Stack(images, frame, copies=copies)]
    split = _split(images, frame, several=len(places) > 1)
    if split is not None:
        name, parts = split
        stacks = [Stack(_by_place(part, frame)[1], frame, split_by=name) for part in parts]
        stacks[0].copies = copies
        return stacks
    kept = [min(place, key=_preference) for place in places]
    return [Stack(kept, frame, copies=copies, rivals=len(images) - len(kept))]


def _by_place(
    images: Sequence[ImageFacts], frame: Frame
) -> tuple[list[list[ImageFacts]], list[ImageFacts]]:
    """Return the images place by place along the normal, and in one row."""
    z = np.array([image.position for image in images], dtype=float) @ frame.n
    order = np.argsort(z, kind="stable")
    starts = np.concatenate([[True], np.diff(z[order]) >= SAME_PLACE_MM])
    places: list[list[ImageFacts]] = []
    for index, starts_here in zip(order.tolist(), starts.tolist(), strict=True):
        if starts_here:
            places.append([])
        places[-1].append(images[index])
    return places, [image for place in places for image in place]


def _preference(image: ImageFacts) -> tuple[bool, bool, str, int, str]:
    """Sort key: exact pixels before lossy ones, plain before compressed."""
    encapsulated = SYNTAXES[image.syntax_uid].encapsulated
    return image.lossy, encapsulated, image.instance_uid, image.frame, image.path


def _without_copies(places: list[list[ImageFacts]]) -> tuple[list[ImageFacts], int]:
    """Keep one image of each instance UID at each place."""
    kept: list[ImageFacts] = []
    copies = 0
    for place in places:
        best: dict[tuple[str, int], ImageFacts] = {}
        for image in sorted(place, key=_preference):
            name = (image.instance_uid, image.frame)
            if image.instance_uid and name in best:
                copies += 1
                continue
            best.setdefault(name if image.instance_uid else (image.path, image.frame), image)
        kept.extend(best.values())
    return kept, copies


_TELLERS: Final[tuple[tuple[str, Callable[[ImageFacts], Hashable]], ...]] = (
    ("acquisition number", lambda image: image.moments[0]),
    ("acquisition number", lambda image: image.moments[1]),
    ("temporal position", lambda image: image.moments[2]),
    ("temporal position", lambda image: image.moments[3]),
    ("echo number", lambda image: image.moments[4]),
    ("trigger time", lambda image: image.moments[5]),
    ("kernel", lambda image: image.acquisition.kernel),
    ("slice thickness", lambda image: image.acquisition.slice_thickness_mm),
    ("reconstruction diameter", lambda image: image.acquisition.reconstruction_diameter_mm),
    ("kVp", lambda image: image.acquisition.kvp),
    ("image type", lambda image: image.image_type),
    ("acquisition time", lambda image: image.moments[6]),
)


def _split(
    images: list[ImageFacts], frame: Frame, *, several: bool
) -> tuple[str, list[list[ImageFacts]]] | None:
    """Return what tells apart images that share positions, and the parts."""
    tellers = [*_TELLERS, ("position across the stack", _sideways(images, frame))]
    values = [[teller(image) for image in images] for _, teller in tellers]
    useful = [index for index, column in enumerate(values) if len(set(column)) > 1]
    choices = [(index,) for index in useful]
    for choice in [*choices, *combinations(useful, 2)]:
        parts: dict[tuple[Hashable, ...], list[ImageFacts]] = defaultdict(list)
        for position, image in enumerate(images):
            parts[tuple(values[index][position] for index in choice)].append(image)
        if _holds(parts.values(), frame, several=several):
            ordered = sorted(parts.items(), key=lambda item: repr(item[0]))
            return " and ".join(tellers[index][0] for index in choice), [p for _, p in ordered]
    return None


def _holds(parts: Iterable[list[ImageFacts]], frame: Frame, *, several: bool) -> bool:
    """Return True if every part is a stack: no position taken twice, not a lone slice."""
    for part in parts:
        if several and len(part) < 2:
            return False
        places, _ = _by_place(part, frame)
        if len(places) != len(part):
            return False
    return True


def _sideways(images: list[ImageFacts], frame: Frame) -> Callable[[ImageFacts], Hashable]:
    """Return a key of the position across the stacking direction, to 0.1 mm.

    The lean of a tilted stack is taken out first: a straight line through the mean place at each
    position, which constant offsets do not bend.
    """
    places = np.array([image.position for image in images], dtype=float)
    local = places @ np.stack([frame.n, frame.y, frame.x]).T
    z = local[:, 0] - local[:, 0].mean()
    spread = float(z @ z)
    slopes = (z @ local[:, 1:]) / spread if spread > SAME_PLACE_MM else np.zeros(2)
    offsets = np.rint((local[:, 1:] - np.outer(z, slopes)) * 10).astype(np.int64)
    keys = {id(image): (int(o[0]), int(o[1])) for image, o in zip(images, offsets, strict=True)}
    return lambda image: keys[id(image)]
