"""`ct-measure convert`: HU to μ and back, HU at another energy, and water at its temperature."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING

from ct_measure_plugin.cli import DONE
from ct_measure_plugin.errors import ArgumentError

if TYPE_CHECKING:
    import argparse

    from ct_measure_plugin.physics.results import Quantity

__all__ = ["add_parser", "run"]


def add_parser(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the subcommand."""
    parser = commands.add_parser("convert", help="convert HU and attenuation")
    parser.add_argument("--hu", help="a CT number in HU, with its uncertainty as 126:2")
    parser.add_argument("--mu", help="an attenuation coefficient in cm⁻¹, as 0.21 or 0.21:0.001")
    parser.add_argument("--energy", metavar="KEV", help="effective energy, as 70 or 70:1.5")
    parser.add_argument("--to-energy", metavar="KEV", help="another scanner's, for a material")
    parser.add_argument("--material", help="a material of the list, for HU at another energy")
    parser.add_argument("--materials", metavar="FILE", help="a list of materials of your own")
    parser.add_argument(
        "--water-temperature", type=float, metavar="C", help="density and HU of water, 0 to 40 °C"
    )
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.set_defaults(run=run)


def run(arguments: argparse.Namespace) -> int:
    """Convert what was given."""
    found = _converted(arguments)
    if arguments.json:
        told = {
            name: {"value": one.value, "uncertainty": one.uncertainty, "unit": one.unit}
            for name, one in found.items()
        }
        print(json.dumps(told, ensure_ascii=False))
        return DONE
    for name, one in found.items():
        print(f"{name:<12} {one}")
    return DONE


def _converted(arguments: argparse.Namespace) -> dict[str, Quantity]:
    from ct_measure_plugin.physics.hu_conversion import hu_quantity, mu_quantity
    from ct_measure_plugin.physics.water import water_density, water_hu

    if arguments.water_temperature is not None:
        at = arguments.water_temperature
        return {"density": water_density(at), "HU": water_hu(at)}
    if arguments.energy is None:
        raise ArgumentError("energy", "must be given, or else --water-temperature", None)
    energy = _quantity("energy", arguments.energy, "keV")
    if arguments.material:
        return _elsewhere(arguments, energy)
    if arguments.mu is not None:
        return {"HU": hu_quantity(_quantity("mu", arguments.mu, "cm⁻¹"), energy)}
    if arguments.hu is None:
        raise ArgumentError("hu", "must be given, or --mu, or --material", None)
    return {"μ": mu_quantity(_quantity("hu", arguments.hu, "HU"), energy)}


def _elsewhere(arguments: argparse.Namespace, energy: Quantity) -> dict[str, Quantity]:
    from ct_measure_plugin.measurements.materials import SHIPPED, find_material, load_materials
    from ct_measure_plugin.physics.hu_conversion import hu_at_energy

    if arguments.to_energy is None:
        raise ArgumentError("to_energy", "must be given with a material", None)
    material = find_material(arguments.material, load_materials(arguments.materials or SHIPPED))
    read = None if arguments.hu is None else _quantity("hu", arguments.hu, "HU")
    to_energy = _quantity("to_energy", arguments.to_energy, "keV")
    moved = hu_at_energy(material, energy, to_energy, hu=read)
    return {"HU here": moved.here, "HU there": moved.there, "difference": moved.difference}


def _quantity(name: str, words: str, unit: str) -> Quantity:
    """Return VALUE or VALUE:UNCERTAINTY as a Quantity."""
    from ct_measure_plugin.physics.results import Quantity

    value, _, doubt = words.partition(":")
    try:
        return Quantity(float(value), unit, float(doubt) if doubt else 0.0)
    except ValueError:
        raise ArgumentError(name, "must be VALUE or VALUE:UNCERTAINTY", words) from None
