"""What the demo measures, against what is true of the sample it measures."""

from __future__ import annotations

import numpy as np
from known_answers import along_z, edge_width, series, spectrum_numbers, truth_of

from ct_measure_plugin.physics.attenuation import material
from ct_measure_plugin.physics.results import quantities_of
from ct_measure_plugin.records import load_plan
from ct_measure_plugin.run import run_plan
from ct_measure_plugin.virtual_scanner import bench_phantom as bench
from ct_measure_plugin.virtual_scanner import samples


def _promises(truth):
    """Return the true values of the demo's answers, by measurement and first region."""
    ptfe = truth.hu(material("PTFE"))
    mtf = {"f50": truth.frequency_at(0.5), "f10": truth.frequency_at(0.1)}
    mtf["f2"] = truth.frequency_at(0.02)
    flat = dict.fromkeys(("water", "centre", "edge", "cupping", "cup_depth", "tilt"), 0.0)
    line = {"scale_factor": 1.0, "water_offset": 0.0, "intercept": -1000.0}
    ramp = truth.slice_fwhm_mm / np.tan(np.radians(bench.RAMP_DEG))
    beside = truth.noise_sd((-8.0, -4.0))
    return {
        ("region_statistics", "water"): {"mean": 0.0, "sd": truth.noise_sd()},
        ("region_statistics", "water near the edge"): {
            "mean": 0.0,
            "sd": truth.noise_sd((-42.0, 0.0)),
        },
        ("region_statistics", "PTFE rod"): {"mean": ptfe},
        ("noise_power", "water"): spectrum_numbers(truth) | {"sd": truth.noise_sd()},
        ("edge_mtf", "PTFE block to the right"): mtf | {"angle": 3.0},
        ("edge_mtf", "PTFE block above"): mtf | {"angle": 3.0},
        ("ct_number_line", "PTFE"): line | {"effective_energy": truth.effective_energy},
        ("region_contrast", "faint disc"): {
            "difference": 10.0,
            "background_mean": 0.0,
            "cnr": 10.0 / beside,
        },
        ("uniformity", "water cylinder"): flat | {"sd": truth.noise_sd((0.0, 15.0))},
        ("ring_artefact", "water inside the rim"): {"ring_index": 0.0},
        ("noise_map", "water"): {"noise_sd": truth.noise_sd((0.0, 13.0))},
        ("disc_mtf", "PTFE rod"): mtf | {"radius": 5.5},
        ("wire_mtf", "copper wire"): mtf | {"lean": bench.WIRE_TILT_DEG},
        ("slice_profile", "aluminium ramp"): {"angle": bench.RAMP_DEG} | along_z(truth),
        ("line_profile", "edge of the PTFE block"): {
            "edge_width": edge_width(truth),
            "step": -ptfe,
        },
        ("line_profile", "ramp"): {"fwhm": ramp, "step": 0.0},
    }


def test_the_demo_measures_what_is_true():
    """Every number with a known answer, within 3 standard uncertainties.

    Added to them: for CT numbers the bound of the truth; for the noise 3 %, the bound of the
    truth at one place, since the regions reach to where there is less of it.
    """
    truth = truth_of("standard")
    records = run_plan(load_plan(samples.folder() / "demo_plan.yaml"), series("standard"))
    promises = _promises(truth)
    bound = truth.hu_bound(material("PTFE"))
    for record in records:
        answer = record.answer()
        assert answer, answer
        found = quantities_of(answer)
        for name, value in promises.pop((record.measurement, record.regions[0]["name"])).items():
            slack = {"mean": bound, "step": bound, "sd": 0.03 * value, "noise_sd": 0.03 * value}
            allowed = 3.0 * found[name].uncertainty + slack.get(name, 0.0)
            assert abs(found[name].value - value) < allowed, (record.regions, name)
    assert not promises  # the demo measures all of them
