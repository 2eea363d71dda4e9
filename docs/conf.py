"""Sphinx settings."""

from importlib.metadata import version as installed_version

project = "fragkit"
author = "The fragkit developers"
release = installed_version("fragkit")
extensions = ["myst_nb", "sphinx.ext.autodoc", "sphinx.ext.napoleon"]
myst_enable_extensions = ["dollarmath", "amsmath"]
myst_heading_anchors = 3
# Pages show computed numbers with their machine and date; nothing is run while the pages are built.
nb_execution_mode = "off"
autodoc_typehints = "description"
html_theme = "furo"
html_title = "fragkit"
exclude_patterns = ["_build"]


def escape_bars(app, what, name, obj, options, lines):
    """Bars in docstrings are absolute values and kets, never reStructuredText substitutions."""
    lines[:] = [line if line.lstrip().startswith((">>>", "...")) else line.replace("|", r"\|") for line in lines]


def setup(app):
    """Hook for docstrings, after napoleon has read their sections."""
    app.connect("autodoc-process-docstring", escape_bars, priority=900)
