"""Figures as SVG that stands inside a page: small, the same every time, without ids that clash or links outside."""

from __future__ import annotations

import io
import re
from html import escape

import matplotlib
from matplotlib.figure import Figure

from .tables import safe

INK = "#1d2b36"
PALE = "#9fb0bc"
ACCENT = "#b3400f"
COLOURS = ("#2f5d8a", "#b3400f", "#3c7d4f", "#7a4a9e", "#8a6d1a", "#0f7f86", "#a02c5a", "#5a5f66")
MARKERS = ("o", "s", "^", "D", "v", "P", "X", "p", "*", "<", ">", "h", "d", "H")

WIDEST = 1.35
"""Pixels of the page that a point of a figure takes at most: its words are then a little smaller than the page's."""

_STYLE = {"svg.fonttype": "none", "font.family": "sans-serif", "font.size": 9, "axes.spines.top": False,
          "axes.spines.right": False, "axes.edgecolor": INK, "axes.labelcolor": INK, "xtick.color": INK,
          "ytick.color": INK, "legend.frameon": False, "path.simplify": True,
          "axes.formatter.useoffset": False}  # fmt: skip


def style() -> dict[str, object]:
    """Settings that figures are made under (matplotlib.rc_context)."""
    return dict(_STYLE)


def raw_svg(figure: Figure, name: str) -> str:
    """The figure as matplotlib writes it, without date; equal figures of one name give equal text."""
    out = io.StringIO()
    with matplotlib.rc_context({**_STYLE, "svg.hashsalt": name}):  # type: ignore[dict-item]
        figure.savefig(out, format="svg", metadata={"Date": None}, transparent=True)
    return out.getvalue()


def inline_svg(figure: Figure, name: str, title: str, description: str) -> str:
    """The figure as an <svg> element with a name for readers that do not see it; title and description are escaped.

    `name` is the prefix of its ids: two figures of a page need two names.
    """
    return inline(raw_svg(figure, name), name, title, description)


def inline(text: str, name: str, title: str, description: str) -> str:
    """As `inline_svg`, from the text of an SVG file."""
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    text = text[text.index("<svg") :]
    text = re.sub(r'\s(?:xmlns(?::\w+)?|version)="[^"]*"', "", text)
    text = text.replace("xlink:href=", "href=")
    text = re.sub(r"<style.*?</style>", "", text, flags=re.DOTALL)  # would hold for the whole page
    text = re.sub(r"<!--.*?-->", "", text, flags=re.DOTALL)
    used = set(re.findall(r'(?:href="#|url\(#)([^")]+)', text))
    text = re.sub(r'\sid="([^"]*)"', lambda m: f' id="{name}-{m[1]}"' if m[1] in used else "", text)
    text = re.sub(r'(href="#|url\(#)', rf"\g<1>{name}-", text)
    text = re.sub(r"\n\s*", "\n", text).strip()
    head = text.index(">") + 1
    opening = re.sub(r'\s(width|height)="[^"]*"', "", text[:head])
    box = re.search(r'viewBox="\S+ \S+ (\S+)', opening)
    width = float(box[1]) if box else 480.0
    named = f'aria-labelledby="{name}-title {name}-desc"'
    opening = opening.replace("<svg", f'<svg role="img" {named} style="max-width:{width * WIDEST:.0f}px"', 1)
    title, description = escape(safe(title)), escape(safe(description))
    inside = f'<title id="{name}-title">{title}</title><desc id="{name}-desc">{description}</desc>'
    return opening + inside + text[head:]
