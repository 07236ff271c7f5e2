"""A picture's SVG made fit to stand inside a page: own ids, named, coloured by the page's theme."""

from __future__ import annotations

import re
from html import escape

from mwdlink.figures import style

THEME = {
    style.INK: "ink",
    style.SOFT: "soft",
    style.PAPER: "paper",
    style.SHADE: "shade",
    style.GRID: "grid",
    style.HATCH: "hatch",
    style.BLUE: "blue",
    style.VERMILION: "vermilion",
    style.GREEN: "green",
    style.PURPLE: "purple",
    **{color: f"fill{i}" for i, color in enumerate(style.FILLS, start=1)},
}
"""Colours of the pictures and the page's variables that stand for them in light and dark."""

_ID = re.compile(r"(\bid=\"|href=\"#|url\(#)")
_HEX = re.compile(r"#[0-9a-fA-F]{6}\b")


def _themed(match: re.Match[str]) -> str:
    color = match[0].lower()
    name = THEME.get(color)
    return f"var(--c-{name}, {color})" if name else color


def inline_svg(svg: bytes, *, prefix: str, title: str, description: str) -> str:
    """The SVG as an element for a page.

    Parameters
    ----------
    svg : bytes
        A whole SVG file.
    prefix : str
        Put before every id, so that several pictures can share a page.
    title, description : str
        Its accessible name and description.
    """
    text = svg.decode("utf-8")
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.S)
    text = re.sub(r"<title>.*?</title>|<desc>.*?</desc>", "", text, count=2, flags=re.S)
    text = _ID.sub(lambda m: m[1] + prefix + "-", text.replace("xlink:href", "href"))
    opening = re.match(r"<svg\b[^>]*>", text)
    if opening is None:
        raise ValueError("not an SVG picture")
    box = re.search(r'viewBox="([^"]+)"', opening[0])
    head = (
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="{box[1] if box else "0 0 300 200"}" '
        f'role="img" aria-labelledby="{prefix}-t {prefix}-d" stroke-linejoin="round">'
        f'<title id="{prefix}-t">{escape(title)}</title>'
        f'<desc id="{prefix}-d">{escape(description)}</desc>'
    )
    body = _HEX.sub(_themed, text[opening.end() :])
    # trailing blanks and the line breaks between elements are dead weight in a page
    body = re.sub(r">\s*\n\s*<", "><", body).strip()
    return head + body
