"""How the documentation is built: ``sphinx-build -W docs docs/_build/html``."""

from importlib.metadata import version as _version

project = "ct_measure_plugin"
author = "the ct_measure_plugin contributors"
copyright = "2026, the ct_measure_plugin contributors"
release = _version("ct-measure-plugin")

extensions = [
    "myst_parser",
    "numpydoc",
    "sphinx.ext.autodoc",
    "sphinx.ext.autosummary",
    "sphinx.ext.mathjax",
    "sphinx.ext.viewcode",
]
exclude_patterns = ["_build"]
templates_path: list[str] = []
html_theme = "furo"
html_title = "ct_measure_plugin"
html_static_path: list[str] = []
myst_enable_extensions = ["dollarmath", "deflist"]
myst_heading_anchors = 3
autosummary_generate = True
autodoc_typehints = "none"
autodoc_member_order = "bysource"
numpydoc_show_class_members = False
numpydoc_class_members_toctree = False
