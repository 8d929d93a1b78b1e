"""The docks: one a file, the only room with ``plots`` that says Qt.

What belongs here: widgets that ask, wait and show. What they must not do: arithmetic on pixels or
results, work of more than 100 ms in the main thread, or growing napari's window.
"""

from __future__ import annotations

__all__: list[str] = []
