"""Write the page: one HTML file with style, script and data inside; nothing is fetched."""

from __future__ import annotations

import base64
import hashlib
import html
import json
from importlib.resources import files
from pathlib import Path

from recon.files import atomic_path
from recon.report.content import Content

SCRIPTS = ("common.js", "plan.js", "section.js", "spectrum.js", "page.js")


def write_page(path: Path | str, content: Content) -> Path:
    """Write the page; it opens from disk in any current browser.

    Raises
    ------
    InputError
        A value is not finite, or the file cannot be written.
    """
    path = Path(path)
    assets = files("recon.report") / "assets"
    style = (assets / "page.css").read_text(encoding="utf-8")
    scripts = [(assets / name).read_text(encoding="utf-8") for name in SCRIPTS]
    script = '"use strict";\n(() => {\n' + "\n".join(scripts) + "})();\n"
    parts = {
        "TITLE": html.escape(content.title),
        "STYLE-HASH": _hash(style),
        "SCRIPT-HASH": _hash(script),
        "STYLE": style,
        "SCRIPT": script,
        "FACTS": _inside_script(content.facts()),
        "ARRAYS": _inside_script(content.arrays()),
    }
    text = (assets / "page.html").read_text(encoding="utf-8")
    for name, part in parts.items():
        text = text.replace(f"<!--{name}-->", part)
    with atomic_path(path) as temporary:
        temporary.write_text(text, encoding="utf-8")
    return path


def _hash(text: str) -> str:
    """Source expression of an inline element (W3C Content Security Policy Level 3)."""
    return "sha256-" + base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()


def _inside_script(value: object) -> str:
    """JSON that cannot end the script element that holds it."""
    return json.dumps(value, ensure_ascii=False, allow_nan=False).replace("<", "\\u003c")
