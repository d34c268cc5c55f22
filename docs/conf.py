"""Configuration of the documentation; `make docs` builds it, no page needs a network."""

import importlib.util
import os
from pathlib import Path

import fockhull

project = "fockhull"
copyright = "the fockhull authors"
version = release = fockhull.__version__

extensions = [
    "sphinx.ext.autodoc",
    "sphinx.ext.autosummary",
    "sphinx.ext.mathjax",
    "numpydoc",
    "myst_nb",
]
exclude_patterns = ["_build"]
html_theme = "furo"
html_title = f"fockhull {release}"
html_copy_source = False
html_show_sphinx = False
nitpicky = True

# one file of MathJax with its glyphs inside, from a package on PyPI
_package = importlib.util.find_spec("sphinx-mathjax-offline")
_mathjax = Path(_package.origin).parent / "static" / "mathjax" / "tex-svg-full.js"
html_static_path = ["_static", str(_mathjax)]
html_css_files = ["wide.css"]
mathjax_path = _mathjax.name
mathjax3_config = {"svg": {"fontCache": "global"}}

myst_enable_extensions = ["dollarmath", "colon_fence", "deflist"]
myst_heading_anchors = 3
nb_execution_mode = "force"
nb_execution_timeout = 120
nb_execution_raise_on_error = True
nb_output_stderr = "severe"
nb_merge_streams = True
nb_ipywidgets_js = {}
os.environ.pop("MPLBACKEND", None)  # notebooks show their figures

default_role = "autolink"
autodoc_member_order = "bysource"
autodoc_typehints = "none"
numpydoc_show_class_members = False
# other projects' names stay unlinked, since no page may need a network
nitpick_ignore_regex = [("py:.*", r"(numpy|scipy|xarray|concurrent)\..*")]
nitpick_ignore = [("py:obj", "grid")]  # an argument with the name of a module


def hide_constructor(app, what, name, obj, options, signature, result):  # noqa: PLR0917
    """Hide the signature of classes that the package makes itself."""
    made_inside = what == "class" and "Parameters\n" not in (obj.__doc__ or "")
    return ("", None) if made_inside else None


def find_public_name(app, env, node, contnode):
    """Resolve names as users write them, from any module."""
    if node.get("reftarget") not in fockhull.__all__:
        return None
    python = env.get_domain("py")
    target = f"fockhull.{node['reftarget']}"
    return python.resolve_xref(env, node["refdoc"], app.builder, "obj", target, node, contnode)


def setup(app):
    """Connect the two."""
    app.connect("autodoc-process-signature", hide_constructor)
    app.connect("missing-reference", find_public_name)
