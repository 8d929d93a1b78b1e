"""What the plugin adds to napari's start: fresh processes, as a ratio to napari's own import.

    python tests/benchmarks/import_cost.py [--rounds 9]

Three processes take turns, so that a slow moment of the machine falls on all of them, and the
shortest time of each counts, since other work only ever adds:

- *napari*: import napari and discover plugins, this one hidden from it;
- *with the plugin*: the same with this plugin discovered, and with whatever its manifest makes
  napari import at start (nothing but the manifest is read);
- *reader asked*: the same, and the plugin's reader asked about a file that is not its own, as
  happens whenever anything is opened.
"""

from __future__ import annotations

import argparse
import json
import os
import subprocess
import sys
import tempfile
from pathlib import Path

COMMON = """
import importlib.metadata, json, sys, time
real = importlib.metadata.distributions
hidden = {hidden}
def distributions(**given):
    return (one for one in real(**given) if one.metadata["Name"] != hidden)
importlib.metadata.distributions = distributions
begin = time.perf_counter()
import napari
import napari.plugins
from npe2 import PluginManager
manager = PluginManager.instance()
manager.discover()
assert ("ct-measure-plugin" in manager) == (hidden is None)
for each in (manager.iter_manifests(), manager.iter_widgets(), manager.iter_sample_data()):
    list(each)
list(manager.iter_menu("napari/layers/measure"))
"""

ASK = """
from ct_measure_plugin.viewer.hooks import get_reader
assert get_reader(__file__ if "__file__" in globals() else sys.executable) is None
"""

END = """
seconds = time.perf_counter() - begin
print(json.dumps([seconds, sorted(n for n in sys.modules if n.startswith("ct_measure"))]))
"""

PROGRAMS = {
    "napari": COMMON.format(hidden='"ct-measure-plugin"') + END,
    "with the plugin": COMMON.format(hidden=None) + END,
    "reader asked": COMMON.format(hidden=None) + ASK + END,
}


def once(program: str) -> tuple[float, list[str]]:
    with tempfile.TemporaryDirectory() as scratch:
        environment = {**os.environ, "NAPARI_CONFIG": str(Path(scratch) / "settings.yaml")}
        done = subprocess.run(
            [sys.executable, "-c", program],
            env=environment,
            capture_output=True,
            text=True,
            check=True,
        )
    seconds, modules = json.loads(done.stdout.splitlines()[-1])
    return seconds, modules


def measure(rounds: int = 9) -> dict[str, object]:
    """Return the shortest seconds of each program, and the modules of ours that each loaded."""
    times: dict[str, list[float]] = {name: [] for name in PROGRAMS}
    loaded: dict[str, list[str]] = {}
    for number in range(rounds + 1):
        for name, program in PROGRAMS.items():
            seconds, loaded[name] = once(program)
            if number:  # the first round warms the disk's cache
                times[name].append(seconds)
    return {"seconds": {n: min(t) for n, t in times.items()}, "loaded": loaded}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rounds", type=int, default=9)
    found = measure(parser.parse_args().rounds)
    base = found["seconds"]["napari"]
    print(f"napari alone: {1000 * base:.0f} ms")
    for name in ("with the plugin", "reader asked"):
        seconds = found["seconds"][name]
        print(f"{name}: +{1000 * (seconds - base):.0f} ms, ratio {seconds / base:.3f}")
        print(f"  modules of ours loaded: {', '.join(found['loaded'][name]) or 'none'}")


if __name__ == "__main__":
    main()
