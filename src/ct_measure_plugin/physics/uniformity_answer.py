"""What a measurement of uniformity answers, put together from its sums."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ct_measure_plugin.physics.results import Caution, Curve, Picture, Quantity, Result
from ct_measure_plugin.physics.uniformity_differences import differences
from ct_measure_plugin.physics.uniformity_field import cell_fit
from ct_measure_plugin.physics.uniformity_samples import WATER, scatter, student

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ct_measure_plugin.physics.cylinder import Cylinder
    from ct_measure_plugin.physics.uniformity_field import Field, FieldFit
    from ct_measure_plugin.physics.uniformity_samples import Cells, DiscMeans, Places

    Floats = NDArray[np.float64]

__all__ = ["Assembly", "Uniformity"]

#: Steeper axes are cautioned, degrees: the slices cut an ellipse and mix places along z.
STEEP = 1.0

#: Where the level just inside the edge is read, in radii; a wall reads so much else, HU.
RIM, WALL = 0.98, 20.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Uniformity(Result):
    """How far a cylinder is from reading the same everywhere.

    Attributes
    ----------
    water, sd : Quantity
        Mean and SD of the pixels within 40 % of the diameter.
    centre, edge : Quantity
        Mean of the centre region; mean over the edge regions.
    deviation : Quantity
        Largest absolute difference of an edge region from the centre region.
    deviation_by_chance : Quantity
        What noise alone would make of it on the average; its uncertainty is the spread of that.
    cupping : Quantity
        Mean of the edge regions minus the centre region: positive for a cup.
    cupping_percent, integral_non_uniformity : Quantity or None
        Cupping over the edge's attenuation; (max − min)/(max + min) of the regions' attenuation.
        Both in percent, on the scale HU + 1000; None unless the values are HU.
    cup_depth : Quantity
        Rise of the fitted radial profile from the axis to the border of the field.
    shading : Quantity
        Fitted difference across the diameter of the field, along its steepest direction.
    radius, slices : Quantity
        Of the cylinder; how many slices show it.
    tilt, ellipticity : Quantity or None
        Of its axis against the slices' normal; longest minus shortest radius. None where they
        were not looked for.
    radial_profile, radial_fit : Curve
        Mean over rings, and the fit, see the notes.
    edges, edge_differences : Curve
        Mean of each edge region against its azimuth; the same minus the centre region.
    centre_along_z, edge_along_z, deviation_along_z, cupping_along_z, cup_along_z : Curve
        The same figures slice by slice.
    shading_along_z, sd_along_z : Curve
        The same.
    integral_along_z : Curve or None
        Integral non-uniformity slice by slice; None unless the values are HU.
    center_y, center_x : Curve
        The axis, in mm, slice by slice.
    deviation_map : Picture
        The field, averaged over z and over discs of 10 mm, minus the centre region.
    """

    water: Quantity
    sd: Quantity
    centre: Quantity
    edge: Quantity
    deviation: Quantity
    deviation_by_chance: Quantity
    cupping: Quantity
    cupping_percent: Quantity | None
    integral_non_uniformity: Quantity | None
    cup_depth: Quantity
    shading: Quantity
    radius: Quantity
    slices: Quantity
    tilt: Quantity | None
    ellipticity: Quantity | None
    radial_profile: Curve
    radial_fit: Curve
    edges: Curve
    edge_differences: Curve
    centre_along_z: Curve
    edge_along_z: Curve
    deviation_along_z: Curve
    cupping_along_z: Curve
    integral_along_z: Curve | None
    cup_along_z: Curve
    shading_along_z: Curve
    sd_along_z: Curve
    center_y: Curve
    center_x: Curve
    deviation_map: Picture


class Assembly:
    """One measurement, its sums done, on the way to the result."""

    def __init__(
        self,
        found: Cylinder,
        places: Places,
        cells: Cells,
        sums: Field,
        discs: DiscMeans,
        unit: str,
    ) -> None:
        self.found, self.places, self.cells, self.sums = found, places, cells, sums
        self.discs, self.unit = discs, unit
        self.within = cells.within(WATER)
        clean = sums.clean
        self.fit = cell_fit(clean.means.mean(axis=0), clean.basis.mean(axis=0), clean.blocks)
        self.rest = sums.means.mean(axis=0) - sums.basis.mean(axis=0) @ self.fit.terms

    def result(self, picture: Picture) -> Uniformity:
        """Return the answer with its map."""
        discs, found, unit = self.discs, self.found, self.unit
        edges = discs.edges.mean(axis=0)
        edge_error, centre_error = float(discs.edge_error[-1]), float(discs.centre_error[-1])
        centre = float(discs.centre.mean())
        whole = differences(edges, centre, edge_error, centre_error, unit)
        water, sd, sd_along_z = self._water()
        cup, cup_doubt = self.fit.cup(self.cells.field)
        shading, shading_doubt = self.fit.shading(self.cells.field)
        profile, fit = self._profile()
        along, integral_along_z = self._along_z()
        return Uniformity(
            water=water,
            sd=sd,
            centre=Quantity(centre, unit, centre_error),
            edge=Quantity(float(edges.mean()), unit, edge_error / math.sqrt(len(edges))),
            deviation=whole.deviation,
            deviation_by_chance=whole.by_chance,
            cupping=whole.cupping,
            cupping_percent=whole.cupping_percent,
            integral_non_uniformity=whole.integral,
            cup_depth=Quantity(cup, unit, cup_doubt),
            shading=Quantity(shading, unit, shading_doubt),
            radius=found.radius,
            slices=Quantity(float(len(found.z_mm)), "", 0.0),
            tilt=found.tilt,
            ellipticity=found.ellipticity,
            edges=self._edges("mean", edges, edge_error),
            edge_differences=self._edges(
                "difference from the centre", edges - centre, math.hypot(edge_error, centre_error)
            ),
            radial_profile=profile,
            radial_fit=fit,
            **along,
            integral_along_z=integral_along_z,
            sd_along_z=sd_along_z,
            center_y=self._axis("y", 0),
            center_x=self._axis("x", 1),
            deviation_map=picture,
            cautions=_cautions(found, self.fit),
        )

    def _water(self) -> tuple[Quantity, Quantity, Curve]:
        """Return mean and SD of the water region; their errors from the scatter of its cells."""
        count = math.sqrt(int(self.within.sum()))
        rest = float(np.sqrt(np.sum(self.rest[self.within] ** 2) / (count**2 - 3)))
        error = rest * student(int(count**2) - 3) / count
        inner = self.sums.inner_sd[:, self.within]
        sds = np.sqrt(np.mean(inner**2, axis=1))
        sd = math.sqrt(float(np.mean(inner**2)))
        sd_error = float(np.sqrt(np.mean(inner**2, axis=0)).std(ddof=1)) / count
        return (
            Quantity(float(self.discs.water.mean()), self.unit, error),
            Quantity(sd, self.unit, sd_error),
            self._along("SD", sds, inner.std(axis=1, ddof=1) / count),
        )

    def _edges(self, name: str, means: Floats, error: float) -> Curve:
        y, x = self.places.ring()[self.places.chosen()].T
        degrees = np.round(np.mod(np.degrees(np.arctan2(-y, x)), 360.0), 9)
        order = np.argsort(degrees)
        doubt = np.full(len(means), error)
        return Curve(degrees[order], means[order], doubt, "azimuth", "°", name, self.unit)

    def _profile(self) -> tuple[Curve, Curve]:
        r, mean, doubt = _rings(self.sums)
        axis, fit, fit_doubt = (
            r * self.found.radius_mm,
            self.fit.radial(r),
            self.fit.radial_doubt(r),
        )
        name = "distance from the axis"
        return (
            Curve(axis, mean, doubt, name, "mm", "mean", self.unit),
            Curve(axis, fit, fit_doubt, name, "mm", "fit", self.unit),
        )

    def _along_z(self) -> tuple[dict[str, Curve], Curve | None]:
        """Return every figure slice by slice by the name of its field, and the integral."""
        discs, clean, field = self.discs, self.sums.clean, self.cells.field
        edge_error, centre_error = discs.edge_error[:-1], discs.centre_error[:-1]
        whole = [
            differences(edges, float(centre), float(of_edge), float(of_centre), self.unit)
            for edges, centre, of_edge, of_centre in zip(
                discs.edges, discs.centre, edge_error, centre_error, strict=True
            )
        ]
        fits = [
            cell_fit(means, basis, clean.blocks)
            for means, basis in zip(clean.means, clean.basis, strict=True)
        ]
        cups = np.array([fit.cup(field) for fit in fits])
        shadings = np.array([fit.shading(field) for fit in fits])
        count = math.sqrt(discs.edges.shape[1])
        integral = [one.integral for one in whole if one.integral is not None]
        along = {
            "centre_along_z": self._along("centre", discs.centre, centre_error),
            "edge_along_z": self._along("edge", discs.edges.mean(axis=1), edge_error / count),
            "deviation_along_z": self._stacked("deviation", [one.deviation for one in whole]),
            "cupping_along_z": self._stacked("cupping", [one.cupping for one in whole]),
            "cup_along_z": self._along("cup depth", cups[:, 0], cups[:, 1]),
            "shading_along_z": self._along("shading", shadings[:, 0], shadings[:, 1]),
        }
        kept = self._stacked("integral non-uniformity", integral) if integral else None
        return along, kept

    def _stacked(self, name: str, figures: list[Quantity]) -> Curve:
        """Return a figure of every slice against z."""
        y = np.array([one.value for one in figures])
        doubt = np.array([one.uncertainty or 0.0 for one in figures])
        return Curve(self.found.z_mm, y, doubt, "z", "mm", name, figures[0].unit)

    def _axis(self, name: str, column: int) -> Curve:
        found = self.found
        doubt = np.full(len(found.z_mm), found.center_doubt_mm)
        return Curve(found.z_mm, found.centers_mm[:, column], doubt, "z", "mm", name, "mm")

    def _along(self, name: str, y: Floats, doubt: Floats) -> Curve:
        return Curve(self.found.z_mm, y, doubt, "z", "mm", name, self.unit)


def _rings(sums: Field) -> tuple[Floats, Floats, Floats]:
    """Return distance, mean and uncertainty of the rings: from the scatter of their sectors.

    The first wave around the axis, a shading, is taken out of the scatter; it averages out.
    """
    each = sums.profile.mean(axis=0)
    mean, doubt = np.zeros(len(each)), np.zeros(len(each))
    for k, row in enumerate(each):
        held = row[np.isfinite(row)]
        turn = 2 * np.pi * (np.arange(len(held)) + 0.5) / len(held)
        sd, freedom = scatter(held, np.stack([np.ones(len(turn)), np.cos(turn), np.sin(turn)], 1))
        mean[k] = held.mean()
        doubt[k] = float(sd) / math.sqrt(len(held)) * student(freedom)
    return sums.distance, mean, doubt


def _cautions(found: Cylinder, fit: FieldFit) -> tuple[Caution, ...]:
    notes = []
    expected = float(fit.radial(np.array([RIM]))[0])
    if found.rim is not None and abs(found.rim - expected) > WALL:
        notes.append(
            Caution(
                "walled-object",
                f"The cylinder's rim reads {found.rim:.0f}, what it holds would read"
                f" {expected:.0f} there: it has a wall, which counts to its radius.",
                "Choose field and edge_position so that the wall and its blur stay outside.",
            )
        )
    if found.left_out:
        notes.append(
            Caution(
                "slices-left-out",
                f"{len(found.left_out)} of {len(found.left_out) + len(found.slices)} slices do not"
                " show the cylinder's body and were left out.",
                "Choose slices through the body.",
            )
        )
    if found.tilt is not None and found.tilt.value > STEEP:
        notes.append(
            Caution(
                "leaning-object",
                f"The cylinder's axis leans {found.tilt.value:.1f}° from the slices' normal.",
                "Regions follow the axis; align the phantom for a fair comparison.",
            )
        )
    return tuple(notes)
