"""The fit behind the CT-number line: how often its stated intervals hold the truth."""

from __future__ import annotations

import numpy as np
import pytest

from ct_measure_plugin.physics.attenuation import MATERIALS
from ct_measure_plugin.physics.ct_number_line import ct_number_line
from ct_measure_plugin.physics.rod_fit import best_line, best_scale, energy_interval, line_at
from ct_measure_plugin.physics.rod_table import Rods

NAMES = ("air", "LDPE", "polystyrene", "PMMA", "POM", "PTFE", "polycarbonate", "nylon-6")
RODS = [MATERIALS[name] for name in NAMES]
DENSITIES = np.array([rod.density_g_cm3 for rod in RODS])
REPEATS = 1500


def drawn(energy: float, noise: float, density: float, seed: int):
    """Readings of rods at one energy whose noise and true densities are drawn."""
    exact = np.array([float(rod.hu(energy)) for rod in RODS])
    rng = np.random.default_rng(seed)
    u_density = np.where(np.arange(len(RODS)) == 0, 0.0, density)  # air's is known
    for _ in range(REPEATS):
        share = 1 + u_density * rng.standard_normal(len(RODS)) / DENSITIES
        hu = (exact + 1000) * share - 1000 + noise * rng.standard_normal(len(RODS))
        yield Rods.checked(hu, RODS, noise, u_density)


@pytest.mark.parametrize(
    ("energy", "noise", "density"),
    [(45.0, 3.0, 0.0), (70.0, 1.0, 0.0), (70.0, 1.0, 0.01), (70.0, 15.0, 0.0), (100.0, 1.0, 0.0)],
)
def test_intervals_hold_the_truth(energy, noise, density):
    """1,500 repeats fix a share of 95 % to 0.6 % (one sigma), so 93 to 97 % is beyond three.

    Each end is missed as often as the other, to three sigma of their 2.5 %.
    """
    too_high, too_low, scale = [], [], []
    for rods in drawn(energy, noise, density, seed=7):
        low, high = energy_interval(best_line(rods))
        too_high.append(low is not None and low > energy)
        too_low.append(high is not None and high < energy)
        found = best_scale(rods)
        scale.append(abs(found.energy - energy) < 1.96 * found.u_energy)
    assert 0.93 < 1 - np.mean(too_high) - np.mean(too_low) < 0.97
    assert 0.93 < np.mean(scale) < 0.97
    assert 0.013 < np.mean(too_high) < 0.037
    assert 0.013 < np.mean(too_low) < 0.037


def test_the_line_is_that_of_a_plain_least_squares():
    """numpy's solver on the same weighted problem."""
    rods = next(drawn(60.0, 2.0, 0.01, seed=1))
    line, residual, sigma = line_at(rods, 64.0)
    mu = np.array([float(rod.mu(64.0)) for rod in RODS])
    design = np.stack([np.ones_like(mu), mu], axis=1)
    slow = np.linalg.lstsq(design / sigma[:, None], rods.hu / sigma, rcond=None)[0]
    np.testing.assert_allclose(line, slow, rtol=1e-5)  # μ is interpolated to 2e-6
    np.testing.assert_allclose(residual, rods.hu - design @ slow, atol=0.02)


def test_uncertainties_are_those_of_the_scatter():
    """SD of 1,500 energies against the mean stated uncertainty: 5 % is 2.7 sigma of an SD."""
    fits = [best_line(rods) for rods in drawn(70.0, 1.0, 0.0, seed=3)]
    stated = np.mean([fit.u_energy for fit in fits])
    assert np.std([fit.energy for fit in fits]) == pytest.approx(stated, rel=0.05)
    for k in (0, 1):
        spread = np.std([fit.parameters[k] for fit in fits])
        assert spread == pytest.approx(np.sqrt(fits[0].covariance[k, k]), rel=0.05)


def test_derived_numbers_scatter_as_they_say():
    """Factors derived from the line, over 200 repeats: an SD is known to 5 %, 15 % is three."""
    found = []
    for rods, _ in zip(drawn(70.0, 2.0, 0.0, seed=5), range(200), strict=False):
        found.append(
            ct_number_line(rods.hu, RODS, hu_uncertainty=2.0, density_uncertainty_g_cm3=0.0)
        )
    # the square root is of a quantity near its upper bound: only its size can be asked for
    for name in (
        *("effective_energy", "correlation_energy", "scale_factor", "water_equivalent_factor"),
        *("water_offset", "contrast_scale"),
    ):
        values = [getattr(one, name) for one in found]
        stated = np.mean([value.uncertainty for value in values])
        assert np.std([value.value for value in values]) == pytest.approx(stated, rel=0.15), name


def test_more_scatter_than_stated_widens_every_uncertainty_alike():
    """The root of the reduced chi-squared multiplies all of them (the docs page says so).

    Readings that scatter by a pattern k times as large have a chi-squared k² times as large: from
    where it exceeds its degrees of freedom, uncertainties grow in proportion to k. The pattern is
    orthogonal to a line's own columns, so that the fit stays where it is.
    """
    energy = 70.0
    exact = np.array([float(rod.hu(energy)) for rod in RODS])
    mu = np.array([float(rod.mu(energy)) for rod in RODS])
    own = np.stack([np.ones_like(mu), mu, mu**2], axis=1)
    pattern = np.random.default_rng(3).standard_normal(len(RODS))
    pattern -= own @ np.linalg.lstsq(own, pattern, rcond=None)[0]
    pattern *= 10.0 / np.abs(pattern).max()
    few, many = (
        ct_number_line(exact + k * pattern, RODS, hu_uncertainty=1.0, density_uncertainty_g_cm3=0.0)
        for k in (1.0, 2.0)
    )
    for name in ("effective_energy", "slope", "intercept"):
        ratio = getattr(many, name).uncertainty / getattr(few, name).uncertainty
        assert ratio == pytest.approx(2.0, rel=0.05), name  # the energy moves a little with k
