"""Builds the documentation: `sphinx-build -W docs docs/_build/html`."""

from __future__ import annotations

import sys
from pathlib import Path

import napari_boutonrelease

HERE = Path(__file__).parent
sys.path.insert(0, str(HERE))

from generated import write_generated_pages  # noqa: E402

project = "napari-boutonrelease"
author = "the napari-boutonrelease authors"
copyright = author  # noqa: A001
release = version = napari_boutonrelease.__version__

extensions = ["myst_parser", "sphinx.ext.autodoc", "sphinx.ext.napoleon", "sphinx.ext.mathjax"]
myst_enable_extensions = ["colon_fence", "deflist", "dollarmath"]
myst_heading_anchors = 3
exclude_patterns = ["_build", "_generated"]

autodoc_typehints = "none"
autodoc_member_order = "bysource"
napoleon_google_docstring = False
napoleon_use_rtype = False
napoleon_use_ivar = True  # attributes of many classes share a name, and types name them: "(n_trials,) ndarray"

html_theme = "furo"
html_title = project

write_generated_pages(HERE / "_generated")
