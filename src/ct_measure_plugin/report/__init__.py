"""A record in words, tables and pictures.

What belongs here: the HTML page and its figures. What it may import: run, records, measurements,
physics, jinja2, matplotlib. What it must not do: measure or compute a number again.
"""

from __future__ import annotations

from ct_measure_plugin.report.page import write_report

__all__ = ["write_report"]
