"""A line of text for settings that hold several numbers, or several ranges of numbers."""

from __future__ import annotations

import re
import typing
from typing import Any

from magicgui.widgets import Container, LineEdit

__all__ = ["NumberList", "holds_numbers", "holds_ranges", "numbers_of", "ranges_of", "text_of"]

_RANGE = re.compile(r"^\s*(\S+?)\s*(?:to|…|\.\.)\s*(\S+)\s*$")


def holds_numbers(annotation: Any) -> bool:
    """Tell whether a type is a tuple of any number of numbers."""
    inside = typing.get_args(annotation)
    return typing.get_origin(annotation) is tuple and inside in ((float, ...), (int, ...))


def holds_ranges(annotation: Any) -> bool:
    """Tell whether a type is a tuple of any number of pairs of numbers."""
    inside = typing.get_args(annotation)
    if typing.get_origin(annotation) is not tuple or len(inside) != 2 or inside[1] is not ...:
        return False
    return typing.get_origin(inside[0]) is tuple and typing.get_args(inside[0]) == (float, float)


def numbers_of(text: str) -> tuple[float, ...]:
    """Return the numbers of a line, parted by commas, semicolons or blanks.

    Raises
    ------
    ValueError
        If something else stands there.

    Examples
    --------
    >>> numbers_of("0.5, 0.1"), numbers_of("")
    ((0.5, 0.1), ())
    """
    return tuple(_number(part) for part in re.split(r"[,;\s]+", text.strip()) if part)


def ranges_of(text: str) -> tuple[tuple[float, float], ...]:
    """Return the ranges of a line: "low to high", parted by commas or semicolons.

    Raises
    ------
    ValueError
        If something else stands there.

    Examples
    --------
    >>> ranges_of("-10 to 10, 30 to 60")
    ((-10.0, 10.0), (30.0, 60.0))
    """
    found = []
    for part in re.split(r"[,;]", text):
        if not part.strip():
            continue
        pair = _RANGE.match(part)
        if pair is None:
            raise ValueError(f"write a range as '0 to 100', not '{part.strip()}'")
        found.append((_number(pair[1]), _number(pair[2])))
    return tuple(found)


def text_of(value: tuple[Any, ...]) -> str:
    """Return numbers or ranges as a line that reads back the same.

    >>> text_of((0.5, 10.0)), text_of(((-10.0, 10.0),))
    ('0.5, 10', '-10 to 10')
    """
    return ", ".join(
        " to ".join(_text(end) for end in one) if isinstance(one, tuple) else _text(one)
        for one in value
    )


def _text(number: float) -> str:
    return repr(float(number)).removesuffix(".0")


def _number(text: str) -> float:
    try:
        return float(text.replace("−", "-"))
    except ValueError:
        raise ValueError(f"write numbers, not '{text}'") from None


class NumberList(Container[Any]):
    """A line edit whose value is a tuple; text that is no such tuple is its own value.

    So the settings refuse it, and say why, in one place for all controls.
    """

    def __init__(self, *, ranges: bool, **names: Any) -> None:
        self._read = ranges_of if ranges else numbers_of
        self._line = LineEdit(name="line", label="")
        super().__init__(widgets=[self._line], layout="horizontal", labels=False, **names)
        self.margins = (0, 0, 0, 0)
        hint = "such as −10 to 10, 30 to 60" if ranges else "such as 0.3, 0.05"
        self._line.native.setPlaceholderText(hint)
        self._line.native.setAccessibleName(self.label)
        self._line.tooltip = self.tooltip

    @property
    def value(self) -> Any:
        """The numbers; the text itself where it holds none."""
        try:
            return self._read(self._line.value)
        except ValueError:
            return self._line.value

    @value.setter
    def value(self, value: tuple[Any, ...]) -> None:
        self._line.value = text_of(value)
