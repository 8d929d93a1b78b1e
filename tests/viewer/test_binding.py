"""The Qt binding that is installed counts references: some releases do not, and abort in time."""

from __future__ import annotations

import sys

import pytest
from qtpy.QtCore import QTimer

CALLS = 2000


@pytest.mark.skipif(sys.version_info >= (3, 12), reason="None is immortal (PEP 683)")
def test_calls_into_qt_leave_none_as_it_was(qtbot):
    timer = QTimer()
    timer.setInterval(5)
    before = sys.getrefcount(None)
    for _ in range(CALLS):
        timer.setInterval(5)
    # other threads may take or drop a few; PySide6 6.12.0 loses one a call
    assert abs(sys.getrefcount(None) - before) < CALLS / 10
