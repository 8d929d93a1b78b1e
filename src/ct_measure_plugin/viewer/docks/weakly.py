"""Calls from a part of a dock back to the dock, which do not keep the dock alive.

Qt holds the parts of a dock, and connections hold functions: a part that held its dock's method, or
a function around it, would hold a closed dock for good, and with it the viewer's layers.
"""

from __future__ import annotations

from types import MethodType
from typing import TYPE_CHECKING, Any
from weakref import WeakMethod

if TYPE_CHECKING:
    from collections.abc import Callable

__all__ = ["weakly"]


def weakly(method: Callable[..., Any], otherwise: Any = None) -> Callable[..., Any]:
    """Return a method that does not keep its object alive; other functions as they are.

    Parameters
    ----------
    method : callable
        Of a dock, or of something that a dock holds.
    otherwise : object
        What a call returns once the object is gone.

    Examples
    --------
    >>> class Dock:
    ...     def ask(self):
    ...         return "asked"
    >>> dock = Dock()
    >>> ask = weakly(dock.ask, "nobody is there")
    >>> ask()
    'asked'
    >>> del dock
    >>> ask()
    'nobody is there'
    """
    if not isinstance(method, MethodType):
        return method
    held = WeakMethod(method)

    def call(*args: Any, **words: Any) -> Any:
        found = held()
        return otherwise if found is None else found(*args, **words)

    return call
