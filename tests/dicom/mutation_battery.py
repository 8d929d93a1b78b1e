"""Puts mutated files through scan and read; run as a program, so that a crash is seen as one.

``python mutation_battery.py COUNT SEED FOLDER`` prints what came of it as JSON. Each mutated file
lies beside two whole slices of its series. What must hold is in :func:`examine`.
"""

from __future__ import annotations

import faulthandler
import json
import logging
import resource
import sys
import time
import traceback
import warnings
from collections import Counter
from pathlib import Path
from typing import Any

import lossless_jpeg
import numpy as np
import series_writer as sw
from mutations import Sample, mutated, sample_of
from pydicom.uid import (
    JPEG2000Lossless,
    JPEGLosslessSV1,
    JPEGLSLossless,
    RLELossless,
)

from ct_measure_plugin.dicom import SeriesEntry, read_series, scan_folder
from ct_measure_plugin.errors import CtMeasureError

MARK = "XMARKX"
#: no file of a few kilobytes may hold the scan up for longer; a busy machine is allowed for
LONGEST_S = 20
STORED = sw.noise((3, 32, 32)).view(np.uint16)
TRUTH = STORED.astype(int) - 1024


def slice_of(k: int) -> Any:
    ds = sw.ct_slice(STORED[k], position=(0.0, 0.0, 2.0 * k), BitsStored=12, HighBit=11)
    ds.SOPInstanceUID = sw.uid("mutation", k)
    ds.PatientName, ds.PatientID, ds.InstitutionName = f"{MARK}^A", f"{MARK}1", MARK
    ds.WindowCenter, ds.WindowWidth, ds.RescaleType = "40", "400", "HU"
    return ds


def samples(folder: Path) -> dict[str, Sample]:
    """Return one whole file of each kind."""
    made: dict[str, Path] = {}
    for name, syntax in sw.NATIVE.items():
        made[name] = sw.save(slice_of(1), folder / name, syntax)
    for name, syntax in {
        "rle": RLELossless,
        "jpeg-ls": JPEGLSLossless,
        "jpeg 2000": JPEG2000Lossless,
    }.items():
        made[name] = sw.save_compressed(slice_of(1), folder / name, syntax)
    frame = lossless_jpeg.encode(STORED[1], precision=12, predictor=1)
    made["jpeg"] = sw.save_frames(slice_of(1), folder / "jpeg", JPEGLosslessSV1, [frame])
    enhanced = sw.enhanced(STORED, sw.line(3))
    enhanced.PatientName = f"{MARK}^A"
    made["enhanced"] = sw.save(enhanced, folder / "enhanced")
    made["enhanced rle"] = sw.save_compressed(enhanced, folder / "enhanced rle", RLELossless)
    return {name: sample_of(file.read_bytes()) for name, file in made.items()}


def one_sentence(text: str) -> None:
    assert 5 < len(text) < 300, "a reason is a sentence"
    assert text.isprintable(), "it is one line"
    assert MARK not in text, "it names nobody"


def examine(folder: Path, whole: dict[Path, int]) -> str:
    """Check what scan and read make of a folder; return what became of the mutated file."""
    scan = scan_folder(folder)
    skipped = {item.path for item in scan.skipped}
    for item in scan.skipped:
        one_sentence(item.reason)
    assert not skipped & set(whole), "whole files are never passed over"
    left_out = any(c.code == "duplicate-slice" for entry in scan for c in entry.cautions)
    for file in whole:
        assert left_out or any(entry.holds(file) for entry in scan), "whole files are kept"
    mine = folder / "mutated"
    if mine in skipped:
        for entry in scan:
            examine_entry(entry, whole, mine)
        return "refused"
    fates = [examine_entry(entry, whole, mine) for entry in scan]
    return next((fate for entry, fate in zip(scan, fates, strict=True) if entry.holds(mine)), "out")


def examine_entry(entry: SeriesEntry, whole: dict[Path, int], mine: Path) -> str:
    one_sentence(entry.label)
    assert MARK not in repr(entry)
    try:
        volume = read_series(entry)
    except CtMeasureError as problem:
        one_sentence(str(problem))
        assert entry.holds(mine), "whole files can be read"
        return "failed"
    assert volume.shape == (entry.slice_count, *entry.matrix)
    assert np.all(np.isfinite(volume.hu))
    assert volume.affine_lps is None or np.all(np.isfinite(volume.affine_lps))
    for caution in volume.cautions:
        one_sentence(caution.text)
    for file, k in whole.items():
        for place in entry.places_of(file):
            assert np.array_equal(volume.plane(place), TRUTH[k]), "whole slices keep their values"
    return "read"


def resident_mb() -> float:
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


class Loud(logging.Handler):
    """Counts what anything logs: text of files may stand in it."""

    lines = 0

    def emit(self, _record: logging.LogRecord) -> None:
        Loud.lines += 1


def main(count: int, seed: int, folder: Path) -> dict[str, Any]:
    warnings.simplefilter("error")
    logging.getLogger().addHandler(Loud())
    rng = np.random.default_rng(seed)
    kinds = samples(folder / "kinds")
    place = folder / "series"
    whole = {sw.save(slice_of(k), place / f"whole {k}"): k for k in (0, 2)}
    target = place / "mutated"
    for kind, sample in kinds.items():  # untouched files are read; and everything is imported
        target.write_bytes(sample.raw)
        assert examine(place, whole) == "read", kind
    before, slowest = resident_mb(), 0.0
    fates: Counter[str] = Counter()
    names: Counter[str] = Counter()
    failures: list[str] = []
    for number in range(count):
        kind = list(kinds)[number % len(kinds)]
        name, data = mutated(rng, kinds[kind])
        target.write_bytes(data)
        faulthandler.dump_traceback_later(LONGEST_S, exit=True)
        start = time.perf_counter()
        try:
            fates[examine(place, whole)] += 1
        except Exception:  # noqa: BLE001 - whatever comes is what is looked for
            failures.append(f"{number}: {kind}, {name}\n{traceback.format_exc(limit=-4)}")
            (folder / f"failure {number}").write_bytes(data)
        slowest = max(slowest, time.perf_counter() - start)
        names[name] += 1
    faulthandler.cancel_dump_traceback_later()
    return {
        "failures": failures[:5],
        "failed": len(failures),
        "fates": fates,
        "mutators": names,
        "grown_mb": resident_mb() - before,
        "slowest_s": slowest,
        "logged": Loud.lines,
    }


if __name__ == "__main__":
    sys.stdout.write(json.dumps(main(int(sys.argv[1]), int(sys.argv[2]), Path(sys.argv[3]))))
