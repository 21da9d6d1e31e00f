"""The sheet as one HTML page without any outside address; the same view as the PDF."""

import base64
from typing import Any

from django.template.loader import render_to_string
from django.utils.html import format_html, format_html_join
from django.utils.safestring import SafeString, mark_safe

from labplan.procedures.sheet.pictograms import PICTOGRAMS
from labplan.procedures.sheet.typography import NO_BREAK, Rich

_TAGS = {"sub": "sub", "sup": "sup", "i": "i", "small": "small", "code": "code"}


def sheet_html(view: dict[str, Any]) -> str:
    """Render the view; every text is escaped, drawings come as images that run nothing."""
    used = {p["code"] for line in view["hazards"]["classified"] for p in line["pictograms"]}
    pictograms = [
        # our own geometry, no text of anybody
        {"code": code, "inner": mark_safe(PICTOGRAMS[code].inner)}
        for code in sorted(used)
    ]
    return render_to_string(
        "procedures/sheet.html", {"sheet": _marked(view), "pictograms": pictograms}
    )


def _marked(value: Any) -> Any:
    """Typeset text becomes HTML, an SVG text becomes the address of an image."""
    if isinstance(value, Rich):
        return _html(value)
    if isinstance(value, dict):
        return {
            key: _data_address(item) if key == "svg" else _marked(item)
            for key, item in value.items()
        }
    if isinstance(value, list | tuple):
        return [_marked(item) for item in value]
    return value


def _html(runs: Rich) -> SafeString:
    return format_html_join("", "{}", ((_run(style, text),) for style, text in runs))


def _run(style: str, text: str) -> SafeString:
    tag = _TAGS.get(style)
    text = text.replace(NO_BREAK, " ")  # whoever searches the page's source finds "6.249 g"
    return format_html(f"<{tag}>{{}}</{tag}>", text) if tag else format_html("{}", text)


def _data_address(svg: str) -> str:
    return "data:image/svg+xml;base64," + base64.b64encode(svg.encode()).decode("ascii")
