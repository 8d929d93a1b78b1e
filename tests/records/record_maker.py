"""Records of the measurements' examples, for the tests of this room."""

from __future__ import annotations

from examples import EXAMPLES

from ct_measure_plugin.measurements import find, measure
from ct_measure_plugin.records import Record


def record_of(name: str) -> tuple[Record, object]:
    example = EXAMPLES[name]()
    settings = find(name).settings_type(**example.settings)
    answer = measure(name, example.volume, example.regions, **example.settings)
    return Record.of(name, settings, example.regions, example.volume, answer), answer
