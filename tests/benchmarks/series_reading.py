"""Opening 300 slices of 512 × 512: this package against two plain ways, in the same run.

Run it by ``python tests/benchmarks/series_reading.py``. It writes a series (about 160 MB) into a
temporary folder, reads it several times by each way in turn and compares the shortest times
(other work only ever adds to them), so that the figures are ratios of this machine at this hour:

(a)  a loop of ``pydicom.dcmread(file).pixel_array`` with rescale to float32;
(b)  SimpleITK's ImageSeriesReader on file names that are given to it in order, and
(b+) the same with SimpleITK finding and ordering the files of the folder first, which is what
     this package does in the same call.

Peak memory is that of a fresh process that does nothing but read the series, less what the
process held before, over the size of the int16 array (Linux only: from /proc/self/status).
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "dicom"))

SLICES, SIZE, REPEATS = 300, 512, 7

PEAK = """
import sys
from ct_measure_plugin.dicom import read_series

def status(name):
    with open("/proc/self/status") as file:
        return next(int(line.split()[1]) for line in file if line.startswith(name)) * 1024

read_series(sys.argv[2])
before = status("VmRSS")
volume = read_series(sys.argv[1])
print((status("VmHWM") - before) / volume.hu.nbytes)
"""


def write(folder: Path, count: int) -> None:
    """Write an axial series of 12 bit noise, with the header of a usual export."""
    import series_writer

    rng = np.random.default_rng(1)
    for k in range(count):
        stored = rng.integers(0, 4096, (SIZE, SIZE), dtype=np.uint16)
        ds = series_writer.ct_slice(stored, position=(-128.0, -128.0, 0.7 * k))
        ds.BitsStored, ds.HighBit = 12, 11
        block = ds.private_block(0x0019, "CT MEASURE TEST", create=True)
        for element in range(60):
            block.add_new(element, "LO", f"private value {element}")
        series_writer.save(ds, folder / f"{k:04d}.dcm")


def by_this_package(folder: Path) -> object:
    """Return the series as a Volume."""
    from ct_measure_plugin.dicom import read_series

    return read_series(folder)


def by_loop(folder: Path) -> object:
    """Return the series as a list of float32 planes."""
    import pydicom

    planes = []
    for file in sorted(folder.iterdir()):
        ds = pydicom.dcmread(file)
        plane = ds.pixel_array.astype(np.float32)
        planes.append(plane * np.float32(ds.RescaleSlope) + np.float32(ds.RescaleIntercept))
    return planes


def by_series_reader(folder: Path) -> object:
    """Return the series as a SimpleITK image, the file names given in order."""
    import SimpleITK

    reader = SimpleITK.ImageSeriesReader()
    reader.SetFileNames([str(file) for file in sorted(folder.iterdir())])
    return reader.Execute()


def by_series_reader_from_folder(folder: Path) -> object:
    """Return the series as a SimpleITK image, the files found and ordered by it."""
    import SimpleITK

    reader = SimpleITK.ImageSeriesReader()
    reader.SetFileNames(reader.GetGDCMSeriesFileNames(str(folder)))
    return reader.Execute()


WAYS: dict[str, Callable[[Path], object]] = {
    "this package": by_this_package,
    "(a) loop": by_loop,
    "(b) series reader": by_series_reader,
    "(b+) series reader from folder": by_series_reader_from_folder,
}


def seconds(folder: Path) -> dict[str, float]:
    """Return the shortest time of each way, the ways taken in turn."""
    times: dict[str, list[float]] = {name: [] for name in WAYS}
    for way in WAYS.values():
        way(folder)  # files and code are warm for all
    for _ in range(REPEATS):
        for name, way in WAYS.items():
            start = time.perf_counter()
            way(folder)
            times[name].append(time.perf_counter() - start)
    return {name: min(values) for name, values in times.items()}


def peak_ratio(folder: Path, small: Path) -> float:
    """Return the peak memory of reading over the size of the int16 array."""
    command = [sys.executable, "-c", PEAK, str(folder), str(small)]
    return float(subprocess.run(command, check=True, capture_output=True, text=True).stdout)


def main() -> None:
    """Print the figures."""
    with tempfile.TemporaryDirectory() as name:
        folder, small = Path(name) / "series", Path(name) / "small"
        write(folder, SLICES)
        write(small, 4)
        shortest = seconds(folder)
        ours = shortest["this package"]
        for way, time_taken in shortest.items():
            print(f"{way:32s} {1000 * time_taken:7.0f} ms   ratio {ours / time_taken:.3f}")
        print(f"{'peak memory / int16 array':32s} {peak_ratio(folder, small):7.2f}")


if __name__ == "__main__":
    main()
