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
    Curve,
    NotMeasured,
    Quantity,
    curves_of,
    label_of,
    pictures_of,
    quantities_of,
)
from ct_measure_plugin.physics.tables import Table, tables_of
from ct_measure_plugin.report.figures import curve_svg, picture_svg, place_svg

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ct_measure_plugin.records import Record

__all__ = ["write_report"]


#: A longer text, or list of numbers, of the settings is told and not written out.
_LONGEST, _MANY = 400, 16


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
    further: tuple[_Row, ...]
    refusal: NotMeasured | None
    cautions: tuple[Caution, ...]
    place: Markup | None
    figures: tuple[tuple[str, Markup], ...]
    tables: tuple[tuple[str, Table], ...]


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
    rows: tuple[_Row, ...]
    further: tuple[_Row, ...]
    if record.preview is not None:
        place = Markup(place_svg(record.preview, record.typed_regions()))  # noqa: S704 - our own SVG
    if isinstance(answer, NotMeasured):
        rows, further = (), ()
        figures: list[tuple[str, Markup]] = []
    else:
        found = quantities_of(answer)
        curves = curves_of(answer)
        chief = [name for name in measurement.columns if name in found]
        lists = [name for name in measurement.lists if name in curves]
        rows = tuple(_row(label_of(name), found[name]) for name in chief)
        rows += tuple(row for name in lists for row in _rows_of(label_of(name), curves[name]))
        rest = [name for name in found if name not in chief]
        further = tuple(_row(label_of(name), found[name]) for name in rest)
        figures = [
            (label_of(name), Markup(curve_svg(curve)))  # noqa: S704 - our own SVG
            for name, curve in curves.items()
            if name not in lists
        ]
        figures += [
            (label_of(name), Markup(picture_svg(picture)))  # noqa: S704 - our own SVG
            for name, picture in pictures_of(answer).items()
        ]
    tables = {} if isinstance(answer, NotMeasured) else tables_of(answer)
    return _Section(
        record,
        measurement.title,
        measurement.summary,
        rows,
        further,
        answer if isinstance(answer, NotMeasured) else None,
        tuple(dict.fromkeys(answer.cautions)),
        place,
        tuple(figures),
        tuple((label_of(name), table) for name, table in tables.items()),
    )


def _short(value: object) -> str:
    """Return a setting or a region's value as text, numbers to a thousandth of a millimetre."""
    if value is None:
        return "none"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return f"{value:.3f}".rstrip("0").rstrip(".")
    if isinstance(value, dict):
        told = {k: f"{v:g}" if isinstance(v, float) else _short(v) for k, v in value.items() if v}
        return "(" + ", ".join(f"{key} {text}" for key, text in told.items()) + ")"
    if isinstance(value, list | tuple):
        if len(value) > _MANY and all(isinstance(part, float) for part in value):
            return f"{len(value)} numbers from {min(value):.4g} to {max(value):.4g}"
        return ", ".join(_short(part) for part in value) or "none"
    text = str(value)
    return text if len(text) <= _LONGEST else f"{text[:12]}… ({len(text)} characters)"


def _rows_of(label: str, curve: Curve) -> tuple[_Row, ...]:
    """Return the rows of a curve that is rather a list of numbers, such as percentiles."""
    unit = f" {curve.x_unit}".rstrip()
    return tuple(_row(f"{label}: {x:g}{unit}", y) for x, y in curve.samples())


def _row(label: str, quantity: Quantity) -> _Row:
    value, doubt = quantity.rounded()
    if not doubt:
        doubt = "not stated" if quantity.uncertainty is None else "exact"
    return _Row(label, value, doubt, quantity.unit)
