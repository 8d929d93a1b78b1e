"""Keeps back what the DICOM libraries log and warn of: they quote the file's text."""

from __future__ import annotations

import logging
import threading
import warnings
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any, Final

from ct_measure_plugin.errors import CtMeasureError, SeriesError

if TYPE_CHECKING:
    from collections.abc import Iterator

__all__ = ["contained", "silenced", "unwarned"]

#: where the DICOM libraries and their decoders log from
_LOUD: Final = (
    "pydicom",
    "pydicom.misc",
    "pydicom.encaps",
    "pydicom.pixels.common",
    "pydicom.pixels.utils",
    "pydicom.pixels.decoders.base",
    "jpeg_ls",
    "pylibjpeg",
    "pylibjpeg.utils",
    "openjpeg.utils",
    "libjpeg.utils",
    "highdicom.base",
    "highdicom.frame",
    "highdicom.image",
    "highdicom.io",
    "highdicom.seg.sop",
    "highdicom.spatial",
    "highdicom.sr.coding",
    "highdicom.sr.content",
    "highdicom.sr.sop",
    "highdicom.sr.templates",
    "highdicom.uid",
)
_RLE_NOTE: Final = "The decoded RLE segment contains non-conformant padding"


class _Quiet(logging.Filter):
    """Keeps back what the DICOM library logs while this thread is in it."""

    def __init__(self) -> None:
        super().__init__()
        self.here = threading.local()

    def filter(self, record: logging.LogRecord) -> bool:  # noqa: ARG002 - the base class names it
        return not getattr(self.here, "on", False)


_quiet = _Quiet()


@contextmanager
def silenced() -> Iterator[None]:
    """Keep the DICOM library's log lines and its one possible warning on decoding from the user.

    Thread-safe: the log filter looks at a flag of this thread only. The warning is refused by an
    entry that names its text; `warnings.catch_warnings` would change the filters of all threads.
    """
    for name in _LOUD:
        logging.getLogger(name).addFilter(_quiet)  # adding it again does nothing
    if not any(entry[0] == "ignore" and _names_rle(entry) for entry in warnings.filters):
        warnings.filterwarnings("ignore", message=_RLE_NOTE)
    before = getattr(_quiet.here, "on", False)
    _quiet.here.on = True
    try:
        yield
    finally:
        _quiet.here.on = before


def _names_rle(entry: tuple[Any, ...]) -> bool:
    pattern = entry[1]
    return pattern is not None and getattr(pattern, "pattern", "") == _RLE_NOTE


_one_at_a_time = threading.RLock()


@contextmanager
def unwarned() -> Iterator[None]:
    """Keep every log line and every warning back, for the reading and writing of whole objects.

    The filters of warnings belong to the process, not to a thread: a warning that another thread
    raises meanwhile is lost. So this is for short work that a person asked for; decoding takes
    :func:`silenced`.
    """
    with _one_at_a_time, warnings.catch_warnings(), silenced():
        warnings.simplefilter("ignore")
        yield


@contextmanager
def contained(sentence: str, *, nameless: bool = False) -> Iterator[None]:
    """Let whatever the DICOM libraries raise become one sentence.

    Parameters
    ----------
    sentence : str
        What to say instead of their own text, which may quote the file.
    nameless : bool
        True if what they see holds nothing of a patient; their error is then kept as the cause.

    Raises
    ------
    SeriesError
        With that sentence.
    """
    with unwarned():
        try:
            yield
        except (CtMeasureError, MemoryError):
            raise
        except Exception as problem:  # noqa: BLE001 - they raise what they like
            raise SeriesError(sentence) from problem if nameless else None
