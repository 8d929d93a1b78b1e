"""What the README promises holds: its example, its list of measurements, its links."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from ct_measure_plugin.measurements import NAMES

ROOT = Path(__file__).parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")


def test_the_example_prints_what_it_says(monkeypatch, capsys):
    monkeypatch.chdir(ROOT)
    [code] = re.findall(r"^```python\n(.*?)^```", README, re.MULTILINE | re.DOTALL)
    [said] = re.findall(r"  # (.*)$", code, re.MULTILINE)
    exec(compile(code, "README.md", "exec"), {})  # noqa: S102 - our own text
    assert capsys.readouterr().out.strip() == said


@pytest.mark.parametrize("name", NAMES)
def test_every_measurement_has_one_row_and_a_page(name):
    page = f"docs/measurements/{name}.md"
    assert README.count(f"| [`{name}`]({page}) |") == 1
    assert (ROOT / page).exists()
    assert f"measurements/{name}" in (ROOT / "docs/index.md").read_text(encoding="utf-8").split()


def test_every_link_of_the_readme_leads_somewhere():
    for target in re.findall(r"\]\((?!http)([^)#]+)", README):
        assert (ROOT / target).exists(), target
