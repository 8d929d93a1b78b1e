"""Every exception this package raises on purpose.

The tree::

    CtMeasureError
    ├── ArgumentError      (ValueError)   an argument breaks a rule
    │   └── RegionError                   a region cannot be measured as it is drawn
    ├── UnknownNameError   (LookupError)  no measurement, preset or series of that name
    ├── FaultsError        (ValueError)   a file that people write is wrong; all faults at once
    │   ├── PlanError                     a plan
    │   ├── MaterialsError                a list of materials or a layout of rods
    │   └── RegionFileError               a file of regions
    ├── SeriesError                       a DICOM series cannot be read
    │   ├── NoSeriesError                 nothing readable under the folder
    │   ├── SeriesChoiceError             several series; one must be chosen
    │   └── DecoderMissingError           the pixel encoding needs a package that is not installed
    ├── LabelFileError                    a file of labels cannot be read
    ├── RecordError                       a record or logbook cannot be read or written
    └── Cancelled                         the user stopped the work

An *expected* failure of a measurement is not here: it is a value,
:class:`ct_measure_plugin.physics.results.NotMeasured`.

Messages never carry DICOM text that could identify a patient.
"""

from __future__ import annotations

__all__ = [
    "ArgumentError",
    "Cancelled",
    "CtMeasureError",
    "DecoderMissingError",
    "FaultsError",
    "LabelFileError",
    "MaterialsError",
    "NoSeriesError",
    "PlanError",
    "RecordError",
    "RegionError",
    "RegionFileError",
    "SeriesChoiceError",
    "SeriesError",
    "UnknownNameError",
]


class CtMeasureError(Exception):
    """Parent of every error raised on purpose; its text is one sentence for the user."""


class ArgumentError(CtMeasureError, ValueError):
    """An argument breaks a rule.

    Parameters
    ----------
    argument : str
        The name of the argument.
    rule : str
        What it must be, starting with "must".
    got : object
        What arrived; shown with ``repr``, shortened.

    Examples
    --------
    >>> str(ArgumentError("radius_mm", "must be greater than 0", -4.0))
    "'radius_mm' must be greater than 0, got -4.0"
    """

    def __init__(self, argument: str, rule: str, got: object) -> None:
        super().__init__(argument, rule, got)
        self.argument = argument
        self.rule = rule
        self.got = got

    def __str__(self) -> str:
        shown = repr(self.got)
        if len(shown) > 80:
            shown = shown[:77] + "..."
        return f"'{self.argument}' {self.rule}, got {shown}"


class RegionError(ArgumentError):
    """A region cannot be measured as it is drawn."""


class UnknownNameError(CtMeasureError, LookupError):
    """No such name; the message lists the names there are.

    Examples
    --------
    >>> str(UnknownNameError("measurement", "edge", ("edge_mtf", "disc_mtf")))
    "no measurement is called 'edge'; there are: edge_mtf, disc_mtf"
    """

    def __init__(self, kind: str, name: str, known: tuple[str, ...]) -> None:
        super().__init__(kind, name, known)
        self.kind = kind
        self.name = name
        self.known = known

    def __str__(self) -> str:
        return f"no {self.kind} is called '{self.name}'; there are: {', '.join(self.known)}"


class FaultsError(CtMeasureError, ValueError):
    """A file that people write is wrong; `problems` maps each place in it to what is wrong there.

    Examples
    --------
    >>> print(PlanError({"steps[2].region.radius_mm": "must be greater than 0, got -4.0"}))
    steps[2].region.radius_mm: must be greater than 0, got -4.0
    """

    def __init__(self, problems: dict[str, str]) -> None:
        super().__init__(problems)
        self.problems = problems

    def __str__(self) -> str:
        return "\n".join(f"{where}: {what}" for where, what in self.problems.items())


class PlanError(FaultsError):
    """A plan is wrong."""


class MaterialsError(FaultsError):
    """A list of materials, or a layout of rods, is wrong."""


class RegionFileError(FaultsError):
    """A file of regions is wrong."""


class SeriesError(CtMeasureError):
    """A DICOM series cannot be read."""


class NoSeriesError(SeriesError):
    """There is nothing under the folder that can be read as a CT series."""


class SeriesChoiceError(SeriesError):
    """The folder holds several series and none was chosen."""


class DecoderMissingError(SeriesError):
    """The pixel encoding needs a package that is not installed; the text names its pip command."""


class LabelFileError(CtMeasureError):
    """A file of labels cannot be read, or does not fit the volume."""


class RecordError(CtMeasureError):
    """A record or the logbook cannot be read or written."""


class Cancelled(CtMeasureError):  # noqa: N818 - a wish fulfilled, not an error
    """The user stopped the work; nothing was kept of it."""
