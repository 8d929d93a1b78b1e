"""Figures for the page: vector graphics as text, drawn without pyplot and without a screen."""

from __future__ import annotations

import base64
import io
import re
import zlib
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib import rc_context
from matplotlib.figure import Figure
from matplotlib.patches import Ellipse as EllipsePatch
from matplotlib.patches import Polygon as PolygonPatch

from ct_measure_plugin.physics.regions import (
    Box,
    Disc,
    Ellipse,
    Ellipsoid,
    Labels,
    Mask,
    Path,
    Polygon,
    Region,
    Segment,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from matplotlib.axes import Axes

    from ct_measure_plugin.physics.results import Curve, Picture
    from ct_measure_plugin.records import Preview

__all__ = ["curve_svg", "picture_svg", "place_svg"]

_INK, _MARK, _BAND = "#1f2a33", "#b3261e", "#8fb3d9"
_STYLE: dict[Any, Any] = {
    "svg.fonttype": "none",
    "svg.hashsalt": "ct-measure-plugin",  # the same record gives the same page
    "font.family": "sans-serif",
    "font.size": 9,
    "axes.edgecolor": _INK,
    "axes.labelcolor": _INK,
    "xtick.color": _INK,
    "ytick.color": _INK,
    "axes.spines.top": False,
    "axes.spines.right": False,
}


def _svg(figure: Figure) -> str:
    stream = io.StringIO()
    figure.savefig(stream, format="svg", metadata={"Date": None, "Creator": None}, dpi=96)
    text = stream.getvalue()
    return re.sub(r"^.*?(?=<svg)", "", text, count=1, flags=re.DOTALL)


def _named(name: str, unit: str) -> str:
    return f"{name} ({unit})" if unit else name


def curve_svg(curve: Curve) -> str:
    """Return a curve with its one-sigma band as an SVG element."""
    with rc_context(_STYLE):
        figure = Figure(figsize=(3.6, 2.4), layout="constrained")
        axes = figure.add_subplot()
        if not curve.joined:
            axes.axhline(0.0, color=_BAND, linewidth=1.0)
            _points(axes, curve)
        else:
            if curve.y_uncertainty is not None:
                low, high = curve.y - curve.y_uncertainty, curve.y + curve.y_uncertainty
                axes.fill_between(curve.x, low, high, color=_BAND, alpha=0.5, linewidth=0)
            axes.plot(curve.x, curve.y, color=_INK, linewidth=1.2)
        if curve.data is not None:
            _points(axes, curve.data)
        axes.set_xlabel(_named(curve.x_name, curve.x_unit))
        axes.set_ylabel(_named(curve.y_name, curve.y_unit))
        return _svg(figure)


def _points(axes: Axes, curve: Curve) -> None:
    """Draw samples that stand for themselves, each with its one-sigma bar."""
    axes.errorbar(
        curve.x, curve.y, yerr=curve.y_uncertainty, fmt="o", color=_MARK, markersize=3.5,
        elinewidth=1.0, capsize=2.0,
    )  # fmt: skip


def picture_svg(picture: Picture) -> str:
    """Return a picture with its axes and a scale of its values as an SVG element."""
    rows, columns = picture.values.shape
    (y, x), (dy, dx) = picture.origin, picture.spacing
    extent = (x - dx / 2, x + dx * (columns - 0.5), y + dy * (rows - 0.5), y - dy / 2)
    with rc_context(_STYLE):
        figure = Figure(figsize=(3.6, 3.0), layout="constrained")
        axes = figure.add_subplot()
        shown = axes.imshow(picture.values, extent=extent, cmap="gray", interpolation="nearest")
        axes.set_xlabel(_named(picture.axis_names[1], picture.axis_units[1]))
        axes.set_ylabel(_named(picture.axis_names[0], picture.axis_units[0]))
        figure.colorbar(shown, ax=axes, label=picture.unit, shrink=0.8)
        return _svg(figure)


def place_svg(preview: Preview, regions: Sequence[Region]) -> str:
    """Return the measured slice with the regions drawn on it as an SVG element."""
    rows, columns = preview.shape
    data = zlib.decompressobj().decompress(base64.b64decode(preview.pixels), rows * columns)
    grey = np.frombuffer(data, np.uint8).reshape(rows, columns)
    top, bottom, left, right = preview.extent_mm
    with rc_context(_STYLE):
        figure = Figure(figsize=(3.3, 3.3), layout="constrained")
        axes = figure.add_subplot()
        axes.imshow(
            grey, cmap="gray", vmin=0, vmax=255, extent=(left, right, bottom, top),
            interpolation="nearest",
        )  # fmt: skip
        for number, region in enumerate(regions, start=1):
            y, x = _outline(axes, region)
            if len(regions) > 1:
                axes.annotate(
                    str(number), (x, y), color="white", fontsize=8, ha="center", va="center"
                )
        axes.set_xlim(left, right)
        axes.set_ylim(bottom, top)
        axes.set_xlabel("x (mm)")
        axes.set_ylabel("y (mm)")
        return _svg(figure)


def _outline(axes: Axes, region: Region) -> tuple[float, float]:
    """Draw a region's border; return where its number goes."""
    line: dict[str, Any] = {"edgecolor": _MARK, "facecolor": "none", "linewidth": 1.3}
    if isinstance(region, Disc | Ellipse | Ellipsoid):
        y, x = region.center_mm
        radii = (region.radius_mm,) * 2 if isinstance(region, Disc) else region.radii_mm
        turn = 0.0 if isinstance(region, Disc) else -region.angle_deg  # y points down
        axes.add_patch(EllipsePatch((x, y), 2 * radii[1], 2 * radii[0], angle=turn, **line))
        return y, x
    if isinstance(region, Box | Polygon):
        corners = np.asarray(region.vertices_mm)
        axes.add_patch(PolygonPatch(corners[:, ::-1], closed=True, **line))
        return float(corners[:, 0].mean()), float(corners[:, 1].mean())
    if isinstance(region, Segment):
        region = Path((region.start_mm, region.end_mm))
    if isinstance(region, Path):
        ends = np.asarray(region.vertices_mm)
        axes.plot(ends[:, 1], ends[:, 0], color=_MARK, linewidth=1.3)
        return float(ends[:, 0].mean()), float(ends[:, 1].mean())
    if isinstance(region, Mask | Labels):
        pixels = region.inside if isinstance(region, Mask) else region.labels != 0
        flat = pixels if pixels.ndim == 2 else pixels.any(axis=0)
        if not flat.any():
            return 0.0, 0.0
        rows = region.origin_mm[1] + region.spacing_mm[1] * np.arange(flat.shape[0])
        columns = region.origin_mm[2] + region.spacing_mm[2] * np.arange(flat.shape[1])
        if min(flat.shape) > 1:
            axes.contour(
                columns, rows, flat.astype(float), levels=[0.5], colors=_MARK, linewidths=1.0
            )
        inside = np.argwhere(flat).mean(axis=0)
        return (
            float(rows[0] + region.spacing_mm[1] * inside[0]),
            float(columns[0] + region.spacing_mm[2] * inside[1]),
        )
    return 0.0, 0.0
