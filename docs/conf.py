"""Settings of the documentation: ``python -m sphinx -W -b html docs docs/_build``."""

from importlib.metadata import version as installed_version

project = "mixbridge"
author = "The mixbridge developers"
copyright = author
version = release = installed_version("mixbridge")

extensions = ["sphinx.ext.autodoc", "sphinx.ext.mathjax", "numpydoc", "myst_parser"]
source_suffix = {".md": "markdown", ".rst": "restructuredtext"}
exclude_patterns = ["_build"]
default_role = "py:obj"

html_theme = "furo"
html_title = "mixbridge"

autodoc_member_order = "bysource"
autodoc_typehints = "none"  # types stand in the docstrings
numpydoc_show_class_members = False  # autodoc lists the members already
numpydoc_class_members_toctree = False
autosummary_generate = False  # nothing is written into docs/

myst_enable_extensions = ["dollarmath"]
