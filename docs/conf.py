"""Settings of the documentation: ``python -m sphinx -W -b html docs docs/_build``."""

from importlib.metadata import version as installed_version

import mixbridge
from mixbridge.reconcile.crosswalk import FIELDS
from mixbridge.routes import AXES, ROUTES

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

myst_enable_extensions = ["deflist", "dollarmath", "substitution"]


def conventions() -> str:
    """Write the package's table of conventions as a list, one entry per convention and group of routes."""
    entries = []
    for axis in AXES:
        values = axis.allowed or ", ".join(f"`{value}`" for value in axis.values[1:])
        every = set(axis.routes) == set(ROUTES)
        routes = "every route" if every else ", ".join(f"`{route}`" for route in axis.routes)
        entries.append(
            f"`{axis.name}`\n: {axis.meaning[0].upper()}{axis.meaning[1:]}. Default `{axis.values[0]}`; "
            f"else {values}. For {routes}. Source: {axis.source}."
        )
    return "\n\n".join(entries)


def crosswalk() -> str:
    """Write the words of four fields for each quantity, as a table."""
    study = mixbridge.crosscheck(
        "honey ~ forage + feeding + altitude", mixbridge.demo.apiaries(), unit="apiary", routes=["reml"]
    )
    table = mixbridge.crosswalk(study.fit("reml")).drop_duplicates("quantity")
    table = table[~table["quantity"].str.startswith("coefficient of ")]
    lines = [
        "| quantity | here | economics | biostatistics | education | psychology |",
        "|---|---|---|---|---|---|",
    ]
    for row in table.to_dict("records"):
        fields = [f"{row[field]}: {row[field + '_symbol']}" for field in FIELDS]
        cells = [row["quantity"], f"{row['symbol']} = {row['formula']}", *fields]
        lines.append("| " + " | ".join(str(cell).replace("|", "\\|") for cell in cells) + " |")
    return "\n".join(lines)


myst_substitutions = {"conventions": conventions(), "crosswalk": crosswalk()}


def formulas_as_literals(app, what, name, obj, options, lines):
    """Show the indented formulas at the head of a module as they stand in the source."""
    if what != "module":
        return
    shown: list[str] = []
    for at, line in enumerate(lines):
        opens = line.startswith("    ") and (at == 0 or not lines[at - 1].strip())
        before = next((text for text in reversed(shown) if text.strip()), "")
        if opens and not before.startswith("    ") and not before.rstrip().endswith("::"):
            shown += ["::", ""]
        shown.append(line)
    lines[:] = shown


def setup(app):
    """Register what this file adds."""
    app.connect("autodoc-process-docstring", formulas_as_literals, priority=900)
