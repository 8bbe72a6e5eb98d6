"""Documentation: Sphinx with MyST. Build with ``python -m sphinx -W -b html docs docs/_build``."""

from __future__ import annotations

import re
from typing import Any

import tfm

project = "tfm"
author = "tugtensor maintainers"
copyright = "tugtensor maintainers, GPL-3.0-or-later"
version = release = tfm.__version__

extensions = ["myst_parser", "sphinx.ext.autodoc", "sphinx.ext.napoleon", "sphinx.ext.mathjax"]
myst_enable_extensions = ["dollarmath", "deflist"]
myst_heading_anchors = 3
exclude_patterns = ["_build"]
suppress_warnings = ["epub.duplicated_toc_entry"]
autodoc_typehints = "none"
autodoc_member_order = "bysource"
napoleon_numpy_docstring = True
napoleon_use_ivar = True

html_theme = "furo"
html_title = f"tfm {release}"
html_theme_options = {
    "light_css_variables": {"color-brand-primary": "#0b5a6b", "color-brand-content": "#0b5a6b"},
    "dark_css_variables": {"color-brand-primary": "#7cc4d2", "color-brand-content": "#7cc4d2"},
}


def _plain_bars(app: Any, what: str, name: str, obj: Any, options: Any, lines: list[str]) -> None:
    """``|T|`` in a docstring is a magnitude, and not the name of a substitution."""
    lines[:] = [re.sub(r"(?<![`|])\|([^|`\s]+)\|(?!`)", r"\\|\1\\|", line) for line in lines]


def setup(app: Any) -> None:
    """Hook for docstrings."""
    app.connect("autodoc-process-docstring", _plain_bars, priority=900)
