"""Settings in words, as `--set NAME=VALUE` takes them, and the list of what can be set."""

from __future__ import annotations

import argparse
import json
import textwrap
from typing import TYPE_CHECKING, Any, get_args, get_origin

from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from ct_measure_plugin.measurements.base import Measurement, Settings

__all__ = ["SETTING_HELP", "ListMeasurements", "setting_from_words"]

SETTING_HELP = (
    "a setting of the measurement; several values are joined by commas, the two ends of a range by"
    " a colon (--set percentiles=5,95 --set ranges=-100:0,0:100)"
)
#: From the outermost collection inwards.
SEPARATORS = (",", ":")


def setting_from_words(words: str, kind: type[Settings]) -> tuple[str, Any]:
    """Return the name and value that ``NAME=VALUE`` means to a kind of settings.

    Raises
    ------
    ArgumentError
        If there is no equals sign, or JSON that is none.
    """
    name, equals, text = words.partition("=")
    if not equals:
        raise ArgumentError("set", "must be NAME=VALUE", words)
    field = kind.model_fields.get(name)
    if text.lstrip().startswith(("[", "{")):
        try:
            return name, json.loads(text)
        except ValueError:
            raise ArgumentError(name, "must be valid JSON if it starts like it", text) from None
    return name, text if field is None else _taken_apart(text, field.annotation, SEPARATORS)


def _taken_apart(text: str, annotation: Any, separators: tuple[str, ...]) -> Any:
    """Return a text, or the tuple of texts that a tuple's annotation asks for."""
    kinds = (annotation, *get_args(annotation))  # also the tuple of "tuple or None"
    wanted = next((kind for kind in kinds if get_origin(kind) is tuple), None)
    if wanted is None or not separators:
        return text
    inner = get_args(wanted)[0]
    return tuple(
        _taken_apart(part.strip(), inner, separators[1:])
        for part in text.split(separators[0])
        if part.strip()
    )


class ListMeasurements(argparse.Action):
    """`--measurements`: print every measurement with its settings, and stop."""

    def __init__(self, option_strings: Sequence[str], dest: str, help: str | None = None) -> None:  # noqa: A002
        super().__init__(option_strings, dest, nargs=0, help=help)

    def __call__(
        self,
        parser: argparse.ArgumentParser,
        *_: Any,
        option_string: str | None = None,  # noqa: ARG002
    ) -> None:
        """Print and leave."""
        from ct_measure_plugin.measurements import NAMES, find

        for measurement in map(find, NAMES):
            print(f"{measurement.name}: {measurement.summary}")
            for line in _lines(measurement):
                print(line)
        parser.exit()


def _lines(measurement: Measurement) -> Iterator[str]:
    for name, field in measurement.settings_type.model_fields.items():
        words = f"{name}={_default(field.default)}: {field.description or field.title or ''}"
        yield from textwrap.wrap(words, width=96, initial_indent="    ", subsequent_indent=" " * 8)


def _default(value: Any) -> str:
    if isinstance(value, tuple):
        return ",".join(str(part) for part in value)
    return "" if value is None else str(value)
