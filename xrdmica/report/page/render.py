"""Templates, and the rules that keep a page from loading or running anything that is not its own."""

from __future__ import annotations

import base64
import hashlib
import json
import re
from functools import lru_cache
from importlib import resources
from typing import TYPE_CHECKING, Any

from xrdmica.errors import XrdmicaError
from xrdmica.report.tables import plain

if TYPE_CHECKING:
    from jinja2 import Environment

__all__ = ["asset", "plotting_script", "render", "safe_json", "source_hash"]

# plotly puts an empty <style> into the page and fills it through the object model: the hash of the empty text allows
# exactly that one; the style attributes that it sets on text need 'unsafe-inline' for attributes only
_EMPTY = "'sha256-47DEQpj8HBSa+/TImW+5JCeuQeRkm5NMpJWZG3hSuFU='"


@lru_cache(maxsize=16)
def asset(name: str) -> str:
    """A style sheet or script of the folder ``report/templates``."""
    return (resources.files("xrdmica.report") / "templates" / name).read_text(encoding="utf-8")


@lru_cache(maxsize=1)
def plotting_script() -> str:
    """The plotting library as one script, from the installed plotly.

    Raises
    ------
    XrdmicaError
        If the installation of plotly lacks it.
    """
    from plotly.offline import get_plotlyjs

    try:
        text = str(get_plotlyjs())
    except OSError as error:
        raise XrdmicaError("the plotting script of plotly is missing", fix="install plotly again") from error
    # the style of map charts, which no page has, would be refused by the policy of the page and told as an error
    text = re.sub(r"\.textContent='\.(maplibregl|mapboxgl)-map\{[^']*'", '.textContent=""', text)
    # inside a page a script ends at the first of these, wherever it stands
    return text.replace("</script", "<\\/script").replace("<!--", "<\\!--")


def source_hash(text: str) -> str:
    """Hash of a script or style as a content-security policy writes it."""
    digest = hashlib.sha256(text.encode("utf-8")).digest()
    return f"'sha256-{base64.b64encode(digest).decode()}'"


def safe_json(data: Any) -> str:
    """Compact JSON that no text in it can end the element it stands in: ``<``, ``>`` and ``&`` are written as escapes."""
    text = json.dumps(data, ensure_ascii=False, separators=(",", ":"), allow_nan=False)
    for letter in "<>&\u2028\u2029":
        text = text.replace(letter, f"\\u{ord(letter):04x}")
    return text


@lru_cache(maxsize=1)
def _environment() -> Environment:
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader("xrdmica.report", "templates"), autoescape=True, undefined=StrictUndefined, trim_blocks=True,
        lstrip_blocks=True,
    )  # fmt: skip
    environment.filters["plain"] = plain
    environment.filters["percent"] = lambda value: "" if value is None else f"{value:.1f}"
    environment.filters["fixed"] = lambda value, digits: "" if value is None else f"{value:.{digits}f}"
    environment.filters["signed"] = lambda value, digits: "" if value is None else f"{value:+.{digits}f}"
    environment.filters["general"] = lambda value: "" if value is None else f"{value:.4g}"
    return environment


def render(template: str, *, scripts: tuple[str, ...] = (), plotting: str = "", **values: Any) -> str:
    """Fill a template and lock the page: only the scripts and the style written into it may act.

    Parameters
    ----------
    template : str
        File name in the folder of templates.
    scripts : tuple of str
        Own scripts, by file name, in order.
    plotting : str
        ``""`` none, ``"inline"`` the plotting library inside the page, else the file beside the page that holds it.
    **values
        What the template shows; escaped there.

    Returns
    -------
    str
        The page. A script beside the page is fetched by the page's own script, which passes its trust on
        (``strict-dynamic``): from ``file://`` a browser has no origin that ``'self'`` could mean and checks no
        integrity, so that this is the narrowest rule that works there.
    """
    from markupsafe import Markup

    style = asset("page.css")
    inline = [plotting_script()] if plotting == "inline" else []
    inline += [asset(name) for name in scripts]
    allowed = " ".join(source_hash(text) for text in inline) or "'none'"
    beside = plotting if plotting not in ("", "inline") else ""
    policy = "; ".join(
        (
            "default-src 'none'",
            f"script-src {allowed}" + (" 'strict-dynamic'" if beside else ""),
            f"style-src-elem {source_hash(style)} {_EMPTY}",
            "style-src-attr 'unsafe-inline'" if plotting else "style-src-attr 'none'",
            "img-src data:",
            "connect-src 'none'",
            "base-uri 'none'",
            "form-action 'none'",
        )
    )
    return _environment().get_template(template).render(
        policy=policy, style=Markup(style), scripts=[Markup(text) for text in inline], beside=beside, **values
    )
