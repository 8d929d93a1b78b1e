"""What measured numbers are called in a structured report: names, statistics and units as codes.

CT numbers are named as PS3.16, CID 7469 has it: the attenuation coefficient, with the statistic as
its derivation (CID 7464). What no standard names has a code of this package's own scheme.
"""

from __future__ import annotations

import re
from typing import Final

from ct_measure_plugin.dicom.codes import Code, own_code
from ct_measure_plugin.physics.results import label_of

__all__ = ["name_codes", "unit_code"]

ATTENUATION: Final = Code("112031", "DCM", "Attenuation Coefficient")
#: statistics of CT numbers (PS3.16, CID 7464)
_DERIVATIONS: Final = {
    "mean": Code("373098007", "SCT", "Mean"),
    "sd": Code("386136009", "SCT", "Standard Deviation"),
    "median": Code("373099004", "SCT", "Median"),
    "minimum": Code("255605001", "SCT", "Minimum"),
    "maximum": Code("56851009", "SCT", "Maximum"),
}
#: sizes (PS3.16, CID 7469)
_SIZES: Final = {
    ("area", "mm²"): Code("42798000", "SCT", "Area"),
    ("volume", "mm³"): Code("118565006", "SCT", "Volume"),
}


def name_codes(name: str, unit: str) -> tuple[Code, Code | None]:
    """Return the concept that a quantity is of, and the statistic of it, if it is one.

    Examples
    --------
    >>> [code.meaning for code in name_codes("mean", "HU")]
    ['Attenuation Coefficient', 'Mean']
    >>> name_codes("f50", "mm⁻¹")
    (Code(value='f50', scheme='99CTMEASURE', meaning='f50'), None)
    """
    if unit == "HU" and name in _DERIVATIONS:
        return ATTENUATION, _DERIVATIONS[name]
    if (name, unit) in _SIZES:
        return _SIZES[name, unit], None
    return own_code(name, label_of(name)), None


#: unit atoms as this package writes them -> UCUM
_ATOMS: Final = {
    "HU": "[hnsf'U]",
    "mm": "mm",
    "cm": "cm",
    "°": "deg",
    "%": "%",
    "px": "{pixels}",
    "keV": "keV",
    "mGy": "mGy",
    "kV": "kV",
    "g": "g",
    "bit": "bit",
    "bits": "bit",
    "s": "s",
}
_NAMES: Final = {"1": "no units", "[hnsf'U]": "Hounsfield unit", "%": "percent", "deg": "degree"}
_RAISED: Final = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")
_ATOM: Final = re.compile(r"([^⁻⁰¹²³⁴⁵⁶⁷⁸⁹]+)([⁻⁰¹²³⁴⁵⁶⁷⁸⁹]*)")


def unit_code(unit: str) -> Code:
    """Return a unit in UCUM; one that is not known becomes an annotation of a pure number.

    Examples
    --------
    >>> unit_code("HU²·mm²").value, unit_code("mm⁻¹").value, unit_code("g/cm³").value
    ("[hnsf'U]2.mm2", 'mm-1', 'g/cm3')
    >>> unit_code("").value, unit_code("rescaled units (US)").value
    ('1', '{rescaled units (US)}')
    """
    text = _ucum(unit) if unit else "1"
    if text is None:
        kept = "".join(c for c in unit if c.isascii() and c.isprintable() and c not in "{}\\")
        text = f"{{{kept[:60] or 'unit'}}}"
    return Code(text, "UCUM", _NAMES.get(text, text))


def _ucum(unit: str) -> str | None:
    parts = []
    for part in re.split(r"([·/])", unit):
        if part in ("·", "/"):
            parts.append("." if part == "·" else "/")
            continue
        match = _ATOM.fullmatch(part.strip())
        if match is None or match[1] not in _ATOMS:
            return None
        parts.append(_ATOMS[match[1]] + match[2].translate(_RAISED))
    return "".join(parts)
