"""How `make docs` builds the pages: Markdown through Sphinx, formulas as MathML, nothing fetched from anywhere."""

from typing import Any

from docutils import nodes
from latex2mathml.converter import convert
from sphinx.application import Sphinx

project = "tieline"
author = "the tieline contributors"
extensions = ["myst_parser"]
exclude_patterns = ["measured"]
html_theme = "furo"
html_title = "tieline"
html_static_path = ["_static"]
html_css_files = ["formulas.css"]
html_copy_source = False
html_show_copyright = False
html_math_renderer = "mathml"
myst_enable_extensions = ["dollarmath", "colon_fence"]
myst_heading_anchors = 3
# Console transcripts hold table-like output that no lexer should judge.
highlight_language = "none"
nitpicky = True


def _inline(self: Any, node: nodes.math) -> None:
    self.body.append(convert(node.astext(), display="inline"))
    raise nodes.SkipNode


def _block(self: Any, node: nodes.math_block) -> None:
    self.body.append(convert(node.astext(), display="block"))
    raise nodes.SkipNode


def setup(app: Sphinx) -> None:
    """MathML, which browsers show without a script and without a network."""
    app.add_html_math_renderer("mathml", inline_renderers=(_inline, None), block_renderers=(_block, None))
