"""Sphinx settings; the build treats warnings as errors in .ci/run."""

project = "localgain"
author = "the localgain authors"
copyright = "2026, the localgain authors"
extensions = ["myst_parser", "sphinx.ext.autodoc", "sphinx.ext.mathjax"]
myst_enable_extensions = ["dollarmath", "colon_fence", "deflist"]
myst_heading_anchors = 3
exclude_patterns = ["_build"]
html_theme = "furo"
html_title = "localgain"
autodoc_typehints = "description"
autodoc_member_order = "bysource"
# The pages must be readable without a network: formulas degrade to their source text, nothing is fetched at build time.


def _escape_bars(app, what, name, obj, options, lines):
    """Docstrings write |x| for absolute values; to reStructuredText a bar would start a substitution."""
    lines[:] = [line.replace("|", r"\|") for line in lines]


def setup(app):
    """Register the escape."""
    app.connect("autodoc-process-docstring", _escape_bars)
