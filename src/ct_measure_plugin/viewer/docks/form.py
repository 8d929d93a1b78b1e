"""A form from a measurement's settings: their types make the controls, for every dock alike."""

from __future__ import annotations

import types
import typing
from functools import partial
from typing import TYPE_CHECKING, Any

from magicgui.widgets import CheckBox, Container, create_widget
from psygnal import Signal
from pydantic import ValidationError

from ct_measure_plugin.viewer.docks.setting_lines import (
    FileChoice,
    LineList,
    holds_numbers,
    holds_ranges,
    holds_words,
    numbers_of,
    ranges_of,
    words_of,
)
from ct_measure_plugin.viewer.session import MEASURED

if TYPE_CHECKING:
    from collections.abc import Callable

    from pydantic.fields import FieldInfo

    from ct_measure_plugin.measurements import Settings

__all__ = ["SettingsForm"]


class SettingsForm:
    """Controls for one settings type.

    Parameters
    ----------
    settings_type : type of Settings
        Field types make the controls, titles the labels, descriptions the tooltips, bounds the
        ranges.
    settings : Settings, optional
        What to show first; the defaults otherwise.
    offers : callable, optional
        Told what a file is to hold, returns the newest answer of a dock that would do, or None.

    Attributes
    ----------
    native : QWidget
        To be put into a layout.
    settings : Settings
        The last settings that were valid.
    problem : str
        Why the controls as they stand are not valid; "" if they are.

    Signals
    -------
    changed(settings)
        New valid settings.
    told(problem)
        The controls became invalid, and why; or valid again: "".
    """

    changed = Signal(object)
    told = Signal(str)

    def __init__(
        self,
        settings_type: type[Settings],
        settings: Settings | None = None,
        offers: Callable[[str], Any] | None = None,
    ) -> None:
        self._type = settings_type
        self.settings = settings_type() if settings is None else settings
        self.problem = ""
        self._controls: dict[str, Any] = {
            name: _control(name, field, getattr(self.settings, name), offers)
            for name, field in settings_type.model_fields.items()
        }
        self._container = Container(widgets=list(self._controls.values()), labels=True)
        self._container.margins = (0, 0, 0, 0)
        self.native = self._container.native
        for name, control in self._controls.items():
            native = getattr(control, "native", None)
            if native is not None:
                native.setAccessibleName(control.label)
            control.changed.connect(lambda _value, _name=name: self._take())

    def __len__(self) -> int:
        return len(self._controls)

    def show(self, settings: Settings) -> None:
        """Show other settings; tells `changed` once if they differ."""
        if settings == self.settings:
            return
        with self.changed.blocked():
            for name, control in self._controls.items():
                control.value = getattr(settings, name)
        self.settings, self.problem = settings, ""
        self.changed.emit(settings)

    def _take(self) -> None:
        before = self.problem
        self._read()
        if self.problem != before:
            self.told.emit(self.problem)

    def _read(self) -> None:
        try:
            found = self._type(**{name: one.value for name, one in self._controls.items()})
        except ValidationError as error:
            first = error.errors()[0]
            where = self._controls.get(str(first["loc"][0])) if first["loc"] else None
            why = first["msg"].removeprefix("Value error, ")
            self.problem = f"{where.label if where is not None else 'settings'}: {why}"
            return
        self.problem = ""
        if found != self.settings:
            self.settings = found
            self.changed.emit(found)


class _Optional(Container[Any]):
    """A control that can be left to the measurement: a tick and, if ticked, a value."""

    def __init__(self, inner: Any, **names: Any) -> None:
        self._tick = CheckBox(text="set", tooltip="Tick to set it; otherwise it is chosen for you.")
        self._inner = inner
        super().__init__(widgets=[self._tick, inner], layout="horizontal", labels=False, **names)
        self.margins = (0, 0, 0, 0)
        inner.enabled = False
        self._tick.changed.connect(lambda ticked: setattr(inner, "enabled", bool(ticked)))

    @property
    def value(self) -> Any:
        """The value, or None if it is not set."""
        return self._inner.value if self._tick.value else None

    @value.setter
    def value(self, value: Any) -> None:
        self._tick.value = value is not None
        if value is not None:
            self._inner.value = value


#: What a line of text can hold, and how it is read.
_LINES = ((holds_numbers, numbers_of), (holds_ranges, ranges_of), (holds_words, words_of))


def _control(
    name: str, field: FieldInfo, value: Any, offers: Callable[[str], Any] | None = None
) -> Any:
    """Return the control of one field."""
    label = field.title or name.replace("_", " ").capitalize()
    names = {"name": name, "label": label, "tooltip": field.description or ""}
    annotation, optional = _without_none(field.annotation)
    for holds, read in _LINES:
        if holds(annotation):
            line: Any = LineList(read, **names)
            line.value = value
            return line
    if isinstance(field.json_schema_extra, dict) and "file" in field.json_schema_extra:
        kind = str(field.json_schema_extra["file"])
        offer = None if offers is None or kind not in MEASURED else partial(offers, kind)
        file: Any = FileChoice(offer, **names)
        file.value = value
        return file
    options = {**_bounds(field), **_steps_of(annotation, field)}
    if not optional:
        control: Any = create_widget(
            value=value, annotation=annotation, options=options, name=name, label=label
        )
        control.tooltip = names["tooltip"]
        return control
    inner = create_widget(annotation=annotation, options=options, name="amount", label="")
    inner.tooltip = names["tooltip"]
    control = _Optional(inner, **names)
    control.value = value
    return control


def _without_none(annotation: Any) -> tuple[Any, bool]:
    """Return a type without its None, and whether it had one."""
    if typing.get_origin(annotation) in (typing.Union, types.UnionType):
        rest = [one for one in typing.get_args(annotation) if one is not type(None)]
        if len(rest) == 1:
            return rest[0], True
    return annotation, False


def _bounds(field: FieldInfo) -> dict[str, Any]:
    """Return the range of a number from its field's constraints."""
    if _without_none(field.annotation)[0] not in (int, float):
        return {}
    found: dict[str, Any] = {"min": -1_000_000, "max": 1_000_000}
    for rule in field.metadata:
        for attribute, key in (("ge", "min"), ("gt", "min"), ("le", "max"), ("lt", "max")):
            limit = getattr(rule, attribute, None)
            if limit is not None:
                found[key] = limit
    return found


def _steps_of(annotation: Any, field: FieldInfo) -> dict[str, Any]:
    """Return the step of a number; settings may name one as ``json_schema_extra={"step": ...}``."""
    extra = field.json_schema_extra
    if annotation in (int, float) and isinstance(extra, dict) and "step" in extra:
        return {"step": extra["step"]}
    return {}
