"""Matrix arithmetic on one thread while something is measured."""

from __future__ import annotations

from contextlib import contextmanager
from functools import cache
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from collections.abc import Iterator

__all__ = ["one_thread"]


@cache
def _controller() -> Any:
    # the libraries are looked for once; those that measurements use must be there by then
    import numpy as np  # noqa: F401
    import scipy.linalg  # noqa: F401
    from threadpoolctl import ThreadpoolController

    return ThreadpoolController()


@contextmanager
def one_thread() -> Iterator[None]:
    """Hold the linear algebra libraries to one thread.

    The matrices of a measurement are small: threads cost them several times the arithmetic, and
    how many there are can change the last bits of a sum. Where calls from several threads overlap,
    a library that counts threads for the whole process may have them back when the first ends.

    Examples
    --------
    >>> from threadpoolctl import threadpool_info
    >>> with one_thread():
    ...     {one["num_threads"] for one in threadpool_info() if one["user_api"] == "blas"}
    {1}
    """
    with _controller().limit(limits=1, user_api="blas"):
        yield
