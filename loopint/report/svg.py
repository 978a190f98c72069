"""Figures as SVG elements that can stand side by side in one page and follow its colours."""

from __future__ import annotations

import hashlib
import html
import io
import re
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.figure import Figure

# Colours of the figures, and what the page puts in their place.
INK, RE, IM, MARK = "#123456", "#0b78b0", "#cf5b16", "#8a8f98"
_VARIABLES = {INK: "currentColor", RE: "var(--re)", IM: "var(--im)", MARK: "var(--soft)"}
STYLE: Any = {  # matplotlib types every key
    "svg.hashsalt": "loopint",  # the same file for the same run
    "svg.fonttype": "none",
    "font.family": "sans-serif",
    "font.size": 10.5,
    "text.color": INK,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.facecolor": "none",
    "figure.facecolor": "none",
    "legend.frameon": False,
    "legend.fontsize": 9,
    "legend.handlelength": 1.6,
    "legend.columnspacing": 1.2,
    "path.simplify": False,  # it would drop the dots
}


def as_svg(figure: Figure, title: str) -> str:
    """Return a figure as an `<svg>` element with a title."""
    stream = io.StringIO()
    figure.savefig(stream, format="svg", dpi=144, metadata={"Date": None, "Creator": None})
    text = stream.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>|<!--.*?-->", "", text, flags=re.DOTALL)
    text = re.sub(r"<style type=.text/css.>.*?</style>", "", text, flags=re.DOTALL)
    head, body = text.split(">", 1)
    head = re.sub(r' (width|height)="[\d.]+pt"', "", head)
    body = re.sub(r' d="[^"]*"', lambda path: _shortened(path[0]), body)
    for colour, variable in _VARIABLES.items():
        body = body.replace(colour, variable)
    name = html.escape(title)
    return f'{head} role="img" aria-label="{name}"><title>{name}</title>{_own_ids(body, title)}'


def _shortened(path: str) -> str:
    """Round coordinates to hundredths of a point."""
    return re.sub(r"(\.\d\d)\d+", r"\1", path).replace("\n", "")


def _own_ids(body: str, title: str) -> str:
    """Keep only the ids that are used, and make them differ from those of other figures."""
    used = set(re.findall(r'(?:url\(#|href="#)([^")]+)', body))
    own = hashlib.sha256(title.encode()).hexdigest()[:8]

    def renamed(found: re.Match[str]) -> str:
        return f' id="{own}{found[1]}"' if found[1] in used else ""

    body = re.sub(r' id="([^"]*)"', renamed, body)
    return re.sub(r'(url\(#|href="#)', rf"\g<1>{own}", body)
