"""The shipped samples as a user reads them, and answers that follow from their truth."""

from __future__ import annotations

from functools import cache

import numpy as np

import ct_measure_plugin as ctm
from ct_measure_plugin.virtual_scanner import Truth, samples

__all__ = ["along_z", "edge_width", "series", "spectrum_numbers", "truth_of"]


@cache
def series(name):
    """Return a sample, through the reader."""
    return ctm.read_series(samples.folder(name))


@cache
def truth_of(name):
    """Return the truth of its recipe."""
    return Truth(samples.sample(name).recipe)


def spectrum_numbers(truth):
    """Return peak, mean and half-power frequencies of the radial NPS in theory."""
    f = np.linspace(0.0, 1.0, 4001)
    power = truth.nps(f)
    peak = int(power.argmax())
    return {
        "peak_frequency": f[peak],
        "mean_frequency": np.sum(f * power) / np.sum(power),
        "half_power_low": np.interp(0.5, power[: peak + 1] / power[peak], f[: peak + 1]),
        "half_power_high": np.interp(0.5, power[peak:][::-1] / power[peak], f[peak:][::-1]),
    }


def edge_width(truth):
    """Return the 10 to 90 % width of an edge in mm: ½ + ∫ MTF sin(2πfx)/(πf) df at x."""
    f = (np.arange(4000) + 0.5) / 4000
    x = np.linspace(0.0, 1.5, 1501)
    rise = 0.5 + np.sinc(2.0 * np.outer(x, f)) @ truth.mtf(f) * 2.0 * x / 4000
    return 2.0 * float(np.interp(0.9, rise, x))


def along_z(truth):
    """Return widths and f50 of a slice profile of unit area, by its transform."""
    width = truth.slice_fwhm_mm
    z = (np.arange(4000) + 0.5) / 2000 * width - width
    profile = truth.slice_profile(z)
    f = np.linspace(0.0, 1.0 / width, 1001)
    transform = np.cos(2 * np.pi * np.outer(f, z)) @ profile / profile.sum()
    f50 = np.interp(-0.5, -transform, f)
    return {"fwhm": width, "equivalent_width": profile.sum() * width / 2000, "f50": f50}
