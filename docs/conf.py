"""Settings of the documentation; built with `python -m sphinx -n -W docs docs/_build/html`."""

from __future__ import annotations

import svyrates

project = "svyrates"
author = "The svyrates maintainers"
copyright = f"2026 {author}"
release = version = svyrates.__version__

extensions = ["myst_parser", "numpydoc", "sphinx.ext.autodoc", "sphinx.ext.autosummary"]
exclude_patterns = ["_build", "_templates"]
templates_path = ["_templates"]

default_role = "code"  # a name or formula between single backticks in a docstring

html_theme = "furo"
html_title = f"svyrates {release}"
html_copy_source = False
html_show_sourcelink = False

myst_enable_extensions = ["deflist", "dollarmath"]
myst_heading_anchors = 3

autodoc_default_options = {"members": True, "inherited-members": False}
autodoc_member_order = "bysource"
# Signatures stay short: the docstring gives every parameter its type, in words.
autodoc_typehints = "none"
autosummary_generate = True
numpydoc_show_class_members = False  # the template lists them, in the order of the source

# Pages of other projects are not read, so that the build needs no network.
nitpick_ignore_regex = [("py:.*", r"(collections|matplotlib|narwhals|numpy|pandas|typing)\..*")]
