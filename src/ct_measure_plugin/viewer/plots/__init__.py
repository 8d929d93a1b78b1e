"""Live curves and pictures of results, drawn with pyqtgraph in napari's own colours.

What belongs here: widgets that draw a Curve or a Picture. What they must not do: compute one.
"""

from __future__ import annotations

__all__: list[str] = []
