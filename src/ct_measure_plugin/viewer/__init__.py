"""The tools inside napari: layers, docks, plots. Everything napari is told stands in napari.yaml.

What belongs here: the functions that napari calls, the meeting of napari layers with Volumes and
Regions, shared state without Qt, docks and live plots. What it may import: napari, every room
below, and Qt through qtpy in ``docks`` and ``plots`` only. What it must not do: arithmetic. A dock
asks a measurement and shows the answer.
"""

from __future__ import annotations

__all__: list[str] = []
