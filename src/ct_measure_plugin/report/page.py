"""The page: one HTML file that needs nothing else, safe against whatever text a header holds."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from jinja2 import Environment, PackageLoader
from markupsafe import Markup

import ct_measure_plugin
from ct_measure_plugin.measurements import find
from ct_measure_plugin.physics.results import (
    Caution,
    NotMeasured,
    Quantity,
    curves_of,
    label_of,
    pictures_of,
    quantities_of,
)
from ct_measure_plugin.report.figures import curve_svg, picture_svg, place_svg

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.records import Record

__all__ = ["write_report"]


@dataclass(frozen=True, slots=True)
class _Row:
    name: str
    value: str
    uncertainty: str
    unit: str


@dataclass(frozen=True, slots=True)
class _Section:
    """One record, ready to be set."""

    record: Record
    title: str
    summary: str
    rows: tuple[_Row, ...]
    refusal: NotMeasured | None
    cautions: tuple[Caution, ...]
    place: Markup | None
    figures: tuple[tuple[str, Markup], ...]


def write_report(records: Sequence[Record], path: str | Path, *, title: str = "") -> Path:
    """Write records as one self-contained HTML page.

    Parameters
    ----------
    records : sequence of Record
        What to show, in order. Nothing is measured again.
    path : path
        The file to write.
    title : str
        The page's heading.

    Returns
    -------
    Path
        The file written.
    """
    sections = tuple(_section(record) for record in records)
    environment = Environment(
        loader=PackageLoader("ct_measure_plugin.report", "."),
        autoescape=True,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters["short"] = _short
    text = environment.get_template("page.html.j2").render(
        title=title or "Measurement report",
        sections=sections,
        software=f"ct-measure-plugin {ct_measure_plugin.__version__}",
        simulated=any(c.code == "simulated" for s in sections for c in s.cautions),
    )
    file = Path(path)
    file.write_text(text, encoding="utf-8")
    return file.resolve()


def _section(record: Record) -> _Section:
    measurement = find(record.measurement)
    answer = record.answer()
    place = None
    if record.preview is not None:
        place = Markup(place_svg(record.preview, record.typed_regions()))  # noqa: S704 - our own SVG
    if isinstance(answer, NotMeasured):
        rows: tuple[_Row, ...] = ()
        figures: list[tuple[str, Markup]] = []
    else:
        found = quantities_of(answer)
        order = [name for name in measurement.columns if name in found]
        order += [name for name in found if name not in order]
        rows = tuple(_row(name, found[name]) for name in order)
        figures = [
            (label_of(name), Markup(curve_svg(curve)))  # noqa: S704 - our own SVG
            for name, curve in curves_of(answer).items()
        ]
        figures += [
            (label_of(name), Markup(picture_svg(picture)))  # noqa: S704 - our own SVG
            for name, picture in pictures_of(answer).items()
        ]
    return _Section(
        record,
        measurement.title,
        measurement.summary,
        rows,
        answer if isinstance(answer, NotMeasured) else None,
        tuple(dict.fromkeys(answer.cautions)),
        place,
        tuple(figures),
    )


def _short(value: object) -> str:
    """Return a setting or a region's value as text, numbers to a thousandth of a millimetre."""
    if isinstance(value, float):
        return f"{value:.3f}".rstrip("0").rstrip(".")
    if isinstance(value, list | tuple):
        return ", ".join(_short(part) for part in value)
    return str(value)


def _row(name: str, quantity: Quantity) -> _Row:
    value, doubt = quantity.rounded()
    if not doubt:
        doubt = "not stated" if quantity.uncertainty is None else "exact"
    return _Row(label_of(name), value, doubt, quantity.unit)
