"""The method page: equations, sources, and how well the method was measured to work."""

from __future__ import annotations

import json
from importlib import resources
from pathlib import Path
from typing import Any

from xrdmica.report.files import write_text
from xrdmica.report.page.render import render

__all__ = ["method_text", "validation", "write_method_page"]


def validation() -> dict[str, Any]:
    """Numbers of the last validation run, as ``xrdmica trial`` measured them."""
    text = (resources.files("xrdmica") / "docs" / "validation.json").read_text(encoding="utf-8")
    return dict(json.loads(text))


def method_text() -> str:
    """The method in Markdown, its validation numbers filled in."""
    from jinja2 import Environment, StrictUndefined

    text = (resources.files("xrdmica") / "docs" / "method.md").read_text(encoding="utf-8")
    return Environment(undefined=StrictUndefined, autoescape=False).from_string(text).render(v=validation())


def write_method_page(out: Path) -> Path:
    """Write the method page.

    Parameters
    ----------
    out : pathlib.Path
        A file ending in ``.html``, or a folder in which it is called ``method.html``.

    Returns
    -------
    pathlib.Path
        The page.
    """
    from markdown_it import MarkdownIt
    from markupsafe import Markup

    out = Path(out)
    target = out if out.suffix.lower() in (".html", ".htm") else out / "method.html"
    body = MarkdownIt("commonmark", {"html": False}).enable("table").render(method_text())
    return write_text(target, render("method.html.j2", body=Markup(body)))
