"""Configuration of the documentation."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

from docutils import nodes
from docutils.statemachine import StringList
from sphinx.application import Sphinx
from sphinx.util.docutils import SphinxDirective
from sphinx.util.nodes import nested_parse_with_titles

HERE = Path(__file__).resolve().parent
sys.path[:0] = [str(HERE), str(HERE.parent)]

import generate  # noqa: E402  beside this file

from realize import __version__  # noqa: E402

project = "realize"
author = "The realize authors"
copyright = "the realize authors"
release = version = __version__

extensions = ["sphinx.ext.autodoc", "sphinx.ext.mathjax", "numpydoc"]
exclude_patterns = ["_build"]
default_role = "literal"
nitpicky = False
numpydoc_show_class_members = False
numpydoc_validation_checks: set[str] = set()
autodoc_typehints = "none"
autodoc_member_order = "bysource"

html_theme = "pydata_sphinx_theme"
html_title = "realize"
html_theme_options = {"show_nav_level": 2, "navigation_with_keys": False, "show_prev_next": False}
html_show_sourcelink = False


class Generated(SphinxDirective):
    """``.. generated:: NAME``: text of docs/generate.py in this place."""

    required_arguments = 1

    def run(self) -> list[nodes.Node]:
        self.env.note_reread()
        name = self.arguments[0]
        lines = StringList(generate.text_of(name).splitlines(), source=f"generate.py:{name}")
        place = nodes.section()
        place.document = self.state.document
        nested_parse_with_titles(self.state, lines, place)
        return place.children


def setup(app: Sphinx) -> dict[str, Any]:
    """Register the directive."""
    app.add_directive("generated", Generated)
    return {"parallel_read_safe": True}
