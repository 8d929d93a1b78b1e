"""A line of text for settings that hold several numbers, ranges of numbers, words, or a file."""

from __future__ import annotations

import re
import typing
from typing import TYPE_CHECKING, Any

from magicgui.types import FileDialogMode
from magicgui.widgets import Container, FileEdit, LineEdit, PushButton

if TYPE_CHECKING:
    from collections.abc import Callable

__all__ = [
    "FileChoice",
    "LineList",
    "holds_numbers",
    "holds_ranges",
    "holds_words",
    "numbers_of",
    "ranges_of",
    "text_of",
    "words_of",
]

#: What the button beside a file says.
_TAKE, _FORGET = "Newest of the docks", "Forget what is taken"

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


def holds_words(annotation: Any) -> bool:
    """Tell whether a type is a tuple of any number of texts."""
    return typing.get_origin(annotation) is tuple and typing.get_args(annotation) == (str, ...)


def words_of(text: str) -> tuple[str, ...]:
    """Return the words of a line, parted by commas or semicolons.

    >>> words_of("PTFE, LDPE; water")
    ('PTFE', 'LDPE', 'water')
    """
    return tuple(part.strip() for part in re.split(r"[,;]", text) if part.strip())


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
    """Return numbers, ranges or words as a line that reads back the same.

    >>> text_of((0.5, 10.0)), text_of(((-10.0, 10.0),))
    ('0.5, 10', '-10 to 10')
    """
    return ", ".join(
        " to ".join(_text(end) for end in one) if isinstance(one, tuple) else _text(one)
        for one in value
    )


def _text(one: float | str) -> str:
    return one if isinstance(one, str) else repr(float(one)).removesuffix(".0")


def _number(text: str) -> float:
    try:
        return float(text.replace("−", "-"))
    except ValueError:
        raise ValueError(f"write numbers, not '{text}'") from None


class LineList(Container[Any]):
    """A line edit whose value is a tuple; text that is no such tuple is its own value.

    So the settings refuse it, and say why, in one place for all controls.
    """

    def __init__(self, read: Callable[[str], tuple[Any, ...]], **names: Any) -> None:
        self._read = read
        self._line = LineEdit(name="line", label="")
        super().__init__(widgets=[self._line], layout="horizontal", labels=False, **names)
        self.margins = (0, 0, 0, 0)
        self._line.native.setPlaceholderText(_HINTS[read])
        self._line.native.setAccessibleName(self.label)
        self._line.tooltip = self.tooltip

    @property
    def value(self) -> Any:
        """What the line holds; the text itself where it cannot be read."""
        try:
            return self._read(self._line.value)
        except ValueError:
            return self._line.value

    @value.setter
    def value(self, value: tuple[Any, ...]) -> None:
        self._line.value = text_of(value)


#: What stands in an empty line.
_HINTS: dict[Any, str] = {
    numbers_of: "such as 0.3, 0.05",
    ranges_of: "such as −10 to 10, 30 to 60",
    words_of: "such as one, another",
}


class FileChoice(Container[Any]):
    """A file whose content is the setting; the settings read it. Empty for none.

    Parameters
    ----------
    offer : callable, optional
        Returns what a dock measured last that would do, None if nothing: it can then be taken
        without a file.
    """

    def __init__(self, offer: Callable[[], Any] | None = None, **names: Any) -> None:
        self._file = FileEdit(
            mode=FileDialogMode.EXISTING_FILE, name="file", label="", nullable=True
        )
        self._content: Any = None
        self._offer = offer
        self._take = PushButton(name="take", text=_TAKE)
        self._take.changed.connect(self._taken)
        widgets = [self._file] if offer is None else [self._file, self._take]
        super().__init__(widgets=widgets, layout="vertical", labels=False, **names)
        self.margins = (0, 0, 0, 0)
        self._file.line_edit.native.setAccessibleName(self.label)
        self._take.tooltip = f"Take the {self.label} that a dock measured last, without a file."
        self._say()

    def _taken(self, *_: Any) -> None:
        """Take what a dock measured last, or let go of what is held."""
        held = self._content is not None and self._content != ()
        found = None if held or self._offer is None else self._offer()
        self._content = found
        self._file.line_edit.value = ""
        self._say("none was measured yet" if found is None and not held else "")

    def _say(self, words: str = "") -> None:
        held = self._content is not None and self._content != ()
        text = words or ("taken; no file is needed" if held else "none")
        self._file.line_edit.native.setPlaceholderText(text)
        self._take.text = _FORGET if held else _TAKE

    @property
    def value(self) -> Any:
        """The path as text, for the settings to read; else what was shown last."""
        path = self._file.line_edit.value.strip()
        return path or self._content

    @value.setter
    def value(self, value: Any) -> None:
        self._content = value
        self._file.line_edit.value = ""
        self._say()
