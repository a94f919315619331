"""How the pages of this folder become a site: ``python -m sphinx -W -b html docs OUT``, warnings as errors."""

from __future__ import annotations

project = "stresskit"
author = "the stresskit authors"
copyright = "the stresskit authors, Apache License 2.0"
extensions = ["myst_parser"]
source_suffix = {".md": "markdown"}
exclude_patterns = ["images/*"]
myst_enable_extensions = ["dollarmath"]
myst_heading_anchors = 4
# A search of one's own and no fonts or scripts from elsewhere: the site can be read without a network.
html_theme = "alabaster"
html_theme_options = {
    "description": "Stressed PD, LGD and expected loss",
    "fixed_sidebar": True,
    "show_powered_by": False,
}
html_show_sphinx = False
html_copy_source = False
language = "en"
highlight_language = "text"
nitpicky = True
