"""Each caution code is explained in the docs, under a heading of its own name."""

from __future__ import annotations

import re
from pathlib import Path

from ct_measure_plugin.physics.cautions import KINDS

DOCS = Path(__file__).parents[2] / "docs"


def headings(text: str) -> list[str]:
    return re.findall(r"^## ([a-z0-9-]+)$", text, flags=re.MULTILINE)


def unexplained(text: str) -> set[str]:
    return set(KINDS) - set(headings(text))


def test_every_code_has_its_section():
    for kind in KINDS.values():
        assert (DOCS / kind.page).exists()
    text = (DOCS / "cautions.md").read_text(encoding="utf-8")
    assert unexplained(text) == set()
    assert len(headings(text)) == len(set(headings(text)))


def test_every_section_is_a_code():
    text = (DOCS / "cautions.md").read_text(encoding="utf-8")
    assert set(headings(text)) - set(KINDS) == set()


def test_no_section_is_empty():
    text = (DOCS / "cautions.md").read_text(encoding="utf-8")
    for part in re.split(r"^## ", text, flags=re.MULTILINE)[1:]:
        title, _, body = part.partition("\n")
        assert len(body.strip()) > 60, title


def test_a_missing_section_is_red():
    text = (DOCS / "cautions.md").read_text(encoding="utf-8")
    code = next(iter(KINDS))
    assert unexplained(text.replace(f"## {code}\n", f"## {code}-gone\n")) == {code}
