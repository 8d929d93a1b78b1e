"""Plans are read whole or refused whole, every fault named by its place."""

from __future__ import annotations

import pytest

from ct_measure_plugin.errors import PlanError
from ct_measure_plugin.records import load_plan, save_plan
from ct_measure_plugin.records.plan import plan_from_dict

GOOD = """
title: Weekly water
steps:
  - measurement: region_statistics
    settings: {coverage: center}
    regions:
      - {kind: disc, center_mm: [0, 0], radius_mm: 20, z_mm: 40, name: water}
    tolerances:
      - {quantity: mean, low: -4, high: 4}
"""


@pytest.mark.parametrize("suffix", [".yaml", ".json"])
def test_a_plan_survives_the_file(tmp_path, suffix):
    (tmp_path / "plan.yaml").write_text(GOOD, encoding="utf-8")
    plan = load_plan(tmp_path / "plan.yaml")
    assert plan.steps[0].typed_regions()[0].name == "water"
    again = load_plan(save_plan(plan, tmp_path / f"copy{suffix}"))
    assert again == plan


def test_all_faults_are_told_at_once():
    steps = [
        {"measurement": "region_statistics", "regions": []},
        {"measurement": "edge"},
        {"measurement": "region_statistics", "settings": {"coverage": "half"},
         "regions": [{"kind": "disc", "center_mm": [0, 0], "radius_mm": -4}]},
    ]  # fmt: skip
    with pytest.raises(PlanError) as caught:
        plan_from_dict({"steps": steps})
    problems = caught.value.problems
    assert set(problems) == {
        "steps[0].regions", "steps[1].measurement", "steps[2].settings", "steps[2].regions[0]",
    }  # fmt: skip
    assert "must be greater than 0, got -4" in problems["steps[2].regions[0]"]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("steps: [", "is not valid YAML or JSON"),
        ("just words", "plan: Input should be"),
        ("steps: []", "steps: Tuple should have at least 1"),
        ("steps: [{measurement: region_statistics, colour: red}]", r"steps\[0\].colour"),
        ("!!python/object/apply:os.system ['true']", "is not valid YAML or JSON"),
    ],
)
def test_a_bad_file_says_what_is_wrong(tmp_path, text, message):
    (tmp_path / "plan.yaml").write_text(text, encoding="utf-8")
    with pytest.raises(PlanError, match=message):
        load_plan(tmp_path / "plan.yaml")


def test_a_missing_file_says_so(tmp_path):
    with pytest.raises(PlanError, match=r"gone.yaml: cannot be read"):
        load_plan(tmp_path / "gone.yaml")
